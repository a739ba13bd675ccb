"""The look-back sign score, and what a fault would have done to it.

Belongs here: how a trend signal reads a series, so that faults can be ranked by the position they would have
turned. Does not belong here: any position, size or order.
"""

import numpy as np


def sign_score(back_adjusted: np.ndarray, look_backs: tuple[int, ...]) -> np.ndarray:
    """Sum over look-backs of the sign of the change over each, (T,).

    NaN on sessions where any of the look-backs reaches before the first session or meets a missing price.
    Signs of price changes over look-backs, equally weighted: common practice, no source.
    """
    score = np.zeros(len(back_adjusted))
    for look_back in look_backs:
        moved = np.full(len(back_adjusted), np.nan)
        moved[look_back:] = back_adjusted[look_back:] - back_adjusted[:-look_back]
        # Differences of shifted prices carry rounding; a move far below any tick is none.
        moved[np.abs(moved) < 1e-9 * np.maximum(1.0, np.abs(back_adjusted))] = 0.0
        score += np.sign(moved)
    return score


def turned_sessions(before: np.ndarray, after: np.ndarray, look_backs: tuple[int, ...]) -> int:
    """Number of sessions on which the score of two versions of one series differs.

    A score that exists in one version only counts as different.
    """
    first, second = sign_score(before, look_backs), sign_score(after, look_backs)
    same = (first == second) | (np.isnan(first) & np.isnan(second))
    return int(np.count_nonzero(~same))


def impact_of_prices(
    back_adjusted: np.ndarray, at: np.ndarray, differences: np.ndarray, look_backs: tuple[int, ...]
) -> int:
    """Sessions whose score would differ had the prices of some sessions together stood so much higher."""
    low, high = _window(int(at[0]), int(at[-1] - at[0]) + 1, len(back_adjusted), look_backs)
    altered = back_adjusted[low:high].copy()
    altered[at - low] += differences
    return turned_sessions(back_adjusted[low:high], altered, look_backs)


def impact_of_gap(back_adjusted: np.ndarray, effective: int, gap: float, look_backs: tuple[int, ...]) -> int:
    """Sessions whose score would differ had a roll's gap been left in.

    The sessions before `effective` would then stand `gap` lower against those from it on.
    """
    low, high = _window(effective, 0, len(back_adjusted), look_backs)
    altered = back_adjusted[low:high].copy()
    altered[: effective - low] -= gap
    return turned_sessions(back_adjusted[low:high], altered, look_backs)


def _window(at: int, count: int, length: int, look_backs: tuple[int, ...]) -> tuple[int, int]:
    """The sessions whose score can feel a change at one of them, with what their look-backs reach."""
    reach = max(look_backs)
    return max(0, at - reach), min(length, at + count + reach)
