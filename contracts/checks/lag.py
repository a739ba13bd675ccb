"""Whether open interest belongs to the session it stands on.

Belongs here: holding a market's declared open interest lag against its data. Does not belong here: single values
(`volumes.py`), what a plan does with the lag (`rolls.py`).

A row holds the open interest at its own session's close. Each trade changes open interest by at most its quantity, so
on a session of much volume it changes much: common practice, no source. For every shift of the rows the statistic is
the correlation, over all contracts and sessions, of log(1 + |change|) with log(volume) so many sessions before; both
are first freed of what their contract's neighbouring sessions have in common (the life of a contract moves both
slowly). Rows that print the open interest of k sessions before show their correlation at k instead of 0. A feed that
prints a later session's open interest would show a trigger the future. Where no shift correlates, the data cannot say,
and nothing is told.

The newest sessions say something too: where more of them than the declared lag have no open interest in any contract,
a trigger would wait for values that are not there.
"""

import numpy as np

from contracts.findings import Finding, Kind, Severity
from contracts.panel import Panel
from contracts.sessions import day_of

_SHIFTS = tuple(range(-3, 6))
_LEAST_CELLS = 200
# A correlation between unrelated series of so many cells is below a few hundredths; true ones measured 0.04 to 0.4.
_LEAST_CORRELATION = 0.1
_LEAST_SCORE = 5.0
# Fewer trades than these say nothing of their own size.
_LEAST_VOLUME = 5.0
_DRIFT_SESSIONS = 7
_LIFE_SESSIONS = 11
_LONGEST_BLANK = 10


def check_lag(panel: Panel) -> list[Finding]:
    """At most one finding for the whole market: its open interest is of other sessions than it says."""
    market = panel.market
    lag = market.open_interest_lag
    day = day_of(panel.sessions[-1])
    blank = _blank_sessions(panel)
    if lag < blank <= _LONGEST_BLANK:
        message = (
            f"{market.code}, {day}: no contract has open interest on the newest {blank} sessions; open_interest_lag "
            f"says it is known after {lag}"
        )
        return [_tell(panel, message, float(lag), float(blank), float(blank), float(lag))]
    correlation, cells = correlate_shifts(panel.field("open_interest"), panel.field("volume"))
    if cells < _LEAST_CELLS:
        return []
    best = max(_SHIFTS, key=lambda shift: correlation[shift])
    apart = correlation[best] - correlation[0]
    score = apart * np.sqrt(cells)
    if best == 0 or correlation[best] < _LEAST_CORRELATION or apart < _LEAST_CORRELATION or score < _LEAST_SCORE:
        return []
    count = f"{abs(best)} session{'s' if abs(best) > 1 else ''}"
    where = f"{count} before" if best > 0 else f"{count} after, which a trigger could not know,"
    message = (
        f"{market.code}: the open interest of a row is that of {where} its own: its changes go with the volume there "
        f"(correlation {correlation[best]:.2f} over {cells:,} rows) and not with the row's own ({correlation[0]:.2f}); "
        f"open_interest_lag = {lag} counts from the row's session"
    )
    return [_tell(panel, message, 0.0, float(best), float(score), _LEAST_SCORE)]


def correlate_shifts(interest: np.ndarray, volume: np.ndarray) -> tuple[dict[int, float], int]:
    """Correlation of changes in open interest with volume so many sessions before, by shift, and the cells used.

    `interest`, `volume` (T, N), NaN where absent. Every shift is measured on the same cells.
    """
    change = np.full(interest.shape, np.nan)
    change[1:] = interest[1:] - interest[:-1]
    with np.errstate(invalid="ignore", divide="ignore"):
        moved = np.log1p(np.abs(change - _mean_around(change, _DRIFT_SESSIONS, False)))
        traded = np.where(volume >= _LEAST_VOLUME, np.log(volume), np.nan)
    moved -= _mean_around(moved, _LIFE_SESSIONS, True)
    traded -= _mean_around(traded, _LIFE_SESSIONS, True)
    shifted = {shift: _shift(traded, shift) for shift in _SHIFTS}
    known = ~np.isnan(moved)
    for series in shifted.values():
        known &= ~np.isnan(series)
    cells = int(known.sum())
    if cells < 3:
        return dict.fromkeys(_SHIFTS, 0.0), cells
    ours = moved[known]
    result = {}
    for shift, series in shifted.items():
        theirs = series[known]
        is_flat = ours.std() == 0 or theirs.std() == 0
        result[shift] = 0.0 if is_flat else float(np.corrcoef(ours, theirs)[0, 1])
    return result, cells


def _blank_sessions(panel: Panel) -> int:
    """How many of the newest sessions have no open interest in any contract; 0 where there never was any."""
    known = (~np.isnan(panel.field("open_interest"))).any(axis=1)
    return int(len(known) - 1 - np.flatnonzero(known)[-1]) if known.any() else 0


def _mean_around(values: np.ndarray, width: int, with_own: bool) -> np.ndarray:
    """Mean of the known values of a column in a window about each, NaN where more than half are unknown."""
    known = ~np.isnan(values)
    filled = np.where(known, values, 0.0)
    half = width // 2
    sums, counts = _window_sum(filled, half), _window_sum(known.astype(float), half)
    if not with_own:
        sums, counts = sums - filled, counts - known
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(counts > half, sums / counts, np.nan)


def _window_sum(values: np.ndarray, half: int) -> np.ndarray:
    """Sum of the window from `half` before to `half` after each, along the sessions."""
    padded = np.zeros((len(values) + 2 * half + 1, values.shape[1]))
    padded[half + 1 : half + 1 + len(values)] = values
    sums = padded.cumsum(axis=0)
    return np.asarray(sums[2 * half + 1 :] - sums[: -2 * half - 1])


def _shift(values: np.ndarray, shift: int) -> np.ndarray:
    """The values of `shift` sessions before."""
    result = np.full(values.shape, np.nan)
    if shift > 0:
        result[shift:] = values[:-shift]
    elif shift < 0:
        result[:shift] = values[-shift:]
    else:
        result[:] = values
    return result


def _tell(panel: Panel, message: str, expected: float, reported: float, score: float, threshold: float) -> Finding:
    return Finding(
        Kind.OPEN_INTEREST_LAG_WRONG, Severity.REVIEW, message, panel.market.code, None, day_of(panel.sessions[-1]),
        "open_interest", reported, expected, score, threshold,
    )  # fmt: skip
