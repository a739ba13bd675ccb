"""Contracts whose level drifts off the smooth curve of their neighbours without a leap.

Belongs here: what no single session shows. Does not belong here: single settles (`prices.py`); a kink is told and never
repaired, for no session of it is wrong by itself.

The statistic. A contract's distances from what its neighbours foretell (`curve.py`) are summed over its last 25
settles, less those that were refuted; the sum is divided by what chance would make of it, the distances' ordinary
scale before the window times the root of their number. It is a cumulative sum of the kind Page (1954, from memory)
made for slow changes. A sum that one session made for the most part is a leap, not a drift; one that a lone move within
the last 90 settles set off is the market finding its place again; near expiry contracts part company in earnest.
"""

from dataclasses import dataclass

import numpy as np

from contracts.checks.curve import Curve
from contracts.quality import Quality

_WINDOW = 25
_SET_OFF = 90
_LEAST_SETTLES = 10
_LEAP_SHARE = 0.2
# Where no settle of the window stands alone, chance may put more of the sum on one session.
_LEAP_SHARE_AMONG_QUIET = 0.35
_SET_OFF_SHARE = 0.5
_NEAR_EXPIRY = 16
_LEAST_MOVES = 2.0
_OF_NEIGHBOURS = 0.7
_PLAIN = 5.0
_NEIGHBOURS = 3
_TOLD_APART = 130
_TOLD_AGAIN = 2.0
# Settles of the window that stood still or alone, in the contract itself, in its neighbours, and in one of few.
_MOST_DISTURBED, _MOST_DISTURBED_AROUND = 3, 8
_FEW_CONTRACTS = 4


# (row, contract) of settles.
Cells = frozenset[tuple[int, int]]


@dataclass(frozen=True)
class Kink:
    """A drift: the session it is told on, contract, how far it went in price units, score, threshold.

    `is_plain`: five times the threshold, in a curve that is otherwise undisturbed.
    """

    session: int
    contract: int
    drift: float
    score: float
    threshold: float
    is_plain: bool


def find_kinks(curve: Curve, cells: Cells, strange: Cells, quality: Quality) -> list[Kink]:
    """Drifts of a contract against its neighbours, one finding each.

    `cells` are the (row, contract) of refuted settles, which do not count; `strange` those that stood alone and were
    kept. A drift is told on the first session its score reaches `kinked_score`, and not again within 130
    settles, or 25 where the score has doubled.
    """
    if not len(curve.row):
        return []
    order = curve.by_contract
    column, row, start = curve.column[order], curve.row[order], curve.start[order]
    distance = np.nan_to_num(curve.distance)[order]
    place = np.arange(len(order))
    is_strange = np.zeros(len(order), dtype=bool)
    for at, contract in cells:
        cell = curve.cell[at, contract]
        if cell >= 0:
            # The session after comes back from it.
            start_at = int(curve.place[cell])
            both = slice(start_at, start_at + 2)
            distance[both] = np.where(column[both] == contract, 0.0, distance[both])
    for at, contract in strange:
        if curve.cell[at, contract] >= 0:
            is_strange[curve.place[curve.cell[at, contract]]] = True
    summed = np.concatenate(([0.0], np.cumsum(distance)))
    counted = np.concatenate(([0], np.cumsum(is_strange)))
    since = np.maximum(place - _WINDOW + 1, start)
    drift, length = summed[place + 1] - summed[since], place + 1 - since
    is_quiet = counted[place + 1] == counted[since]
    before = np.maximum(since - 1, start)
    noise = np.maximum(curve.noise[order][before], 0.5 * curve.tick)
    score = np.abs(drift) / (noise * np.sqrt(length))
    usual = curve.usual[order]
    left = curve.panel.last_trade[column] - curve.rows[row]
    far = (score >= quality.kinked_score) & (np.abs(drift) >= _LEAST_MOVES * usual)
    far &= (length >= _LEAST_SETTLES) & (left >= _NEAR_EXPIRY)
    found: list[Kink] = []
    last_told: dict[int, tuple[int, float]] = {}
    dense = np.zeros(curve.cell.shape)
    dense[row, column] = np.abs(drift)
    disturbed = _count_disturbed(curve, cells | strange)
    live = np.bincount(curve.row, minlength=len(curve.rows))
    for at in np.flatnonzero(far).tolist():
        contract = int(column[at])
        told_at, told_score = last_told.get(contract, (at - _TOLD_APART, 0.0))
        apart = _WINDOW if score[at] >= _TOLD_AGAIN * told_score else _TOLD_APART
        if at - told_at < apart:
            continue
        sign = np.sign(drift[at])
        window = sign * distance[since[at] : at + 1]
        share = _LEAP_SHARE_AMONG_QUIET if is_quiet[at] else _LEAP_SHARE
        if window.max() > share * abs(drift[at]):
            continue
        earlier = sign * distance[max(start[at], at - _SET_OFF) : at + 1]
        if -earlier.min() > _SET_OFF_SHARE * abs(drift[at]):
            continue
        since_row = max(0, int(row[at]) - _WINDOW)
        near = slice(max(0, contract - _NEIGHBOURS), contract + _NEIGHBOURS + 1)
        counts = disturbed[row[at] + 1, near] - disturbed[since_row, near]
        own = int(disturbed[row[at] + 1, contract] - disturbed[since_row, contract])
        most = 0 if live[row[at]] <= _FEW_CONTRACTS else _MOST_DISTURBED_AROUND
        is_clear = own <= _MOST_DISTURBED and counts.sum() - own <= most
        if abs(drift[at]) < _OF_NEIGHBOURS * dense[row[at], near].max():
            continue
        last_told[contract] = (int(at), float(score[at]))
        found.append(
            Kink(
                int(curve.rows[row[at]]),
                contract,
                float(drift[at]),
                float(score[at]),
                quality.kinked_score,
                is_clear and score[at] >= _PLAIN * quality.kinked_score and row[at] >= _SET_OFF,
            )
        )
    return sorted(found, key=lambda kink: (kink.session, kink.contract))


def _count_disturbed(curve: Curve, cells: Cells) -> np.ndarray:
    """Settles before each row that stood alone or still, by contract, (R + 1, N)."""
    marked = np.zeros(curve.cell.shape, dtype=np.int32)
    marked[curve.row[curve.is_still], curve.column[curve.is_still]] = 1
    for row, contract in cells:
        marked[row, contract] = 1
    return np.vstack((np.zeros_like(marked[:1]), np.cumsum(marked, axis=0)))
