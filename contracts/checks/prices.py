"""Settles that stand alone against the curve.

Belongs here: weighing a settle against the other contracts of its market, its own neighbours in time and its
own bar. Does not belong here: what is put in its place (`repairs.py`).

The statistic. With p the contract's last clean session before t, and m the median change from p to t of the
nearest contracts that have both, the settle's distance is r = P(t) - (P(p) + m). Its scale is the largest of:
the scaled MAD of those contracts' changes, the scaled MAD of the contract's own past 40 distances, and half a
tick. A newly listed contract is given three times the curve's usual distance in place of its own. Contracts of
one market move together, so a wrong price stands alone and a true shock does not: common practice, no source.
"""

import heapq
import math
from dataclasses import dataclass
from enum import StrEnum

import numpy as np

from contracts.checks.robust import MAD_SCALE, row_medians, scaled_mad
from contracts.findings import Kind
from contracts.panel import Panel
from contracts.quality import Quality

_LONGEST_LOOK_BACK = 5
_LONGEST_LOOK_AHEAD = 3
_HISTORY = 40
_LEAST_HISTORY = 20
_NEWLY_LISTED = 3.0
# A distance that shrinks to this share of itself has come back.
_CAME_BACK = 0.35
# log10 distance from a whole power of ten that still counts as one (about 15%).
_POWER_TOLERANCE = 0.06
_LEAST_TICKS_FOR_POWER = 20


class Ruling(StrEnum):
    """What the evidence says of a settle that stands alone."""

    REFUTED = "refuted"
    KEPT = "kept"


@dataclass(frozen=True)
class Verdict:
    """One settle that stands alone: where, of what form, how strongly, and what the curve expects.

    `expected` is NaN where the curve cannot say, or where the bar itself speaks for a price that cannot be
    (`is_borne_out`); `power` is the power of ten by which the settle is too large (negative: too small), 0 for
    none.
    """

    session: int
    contract: int
    kind: Kind
    ruling: Ruling
    expected: float
    score: float
    power: int = 0
    is_borne_out: bool = False


class _Curve:
    """Settles of the sessions that have any, and what the rest of the curve says of each."""

    def __init__(self, panel: Panel, settle: np.ndarray, quality: Quality) -> None:
        self.panel, self.quality, self.tick = panel, quality, panel.market.tick_size
        self.rows = np.flatnonzero(~np.isnan(settle).all(axis=1))
        self.reported = settle[self.rows]
        self.clean = self.reported.copy()
        # Cells that stand alone and were kept: what follows them may be their return.
        self.kept: set[tuple[int, int]] = set()
        change = np.full(self.reported.shape, np.nan)
        change[1:] = self.reported[1:] - self.reported[:-1]
        # One or two contracts are no curve: there a change is measured against none at all.
        is_curve = np.count_nonzero(~np.isnan(change), axis=1) >= 3
        common = np.where(is_curve, row_medians(_compact(change)), 0.0)
        self.distance = change - common[:, None]
        self.is_curve = is_curve
        self.spread = MAD_SCALE * row_medians(_compact(np.abs(self.distance)))

    def candidates(self) -> np.ndarray:
        """Cells far enough from the common change to be worth a closer look, in order of session."""
        least = 0.8 * self.quality.refuted_ticks * self.tick
        size = np.abs(self.distance)
        with np.errstate(invalid="ignore"):
            far = (size > least) & ((size > 2.5 * self.spread[:, None]) | ~self.is_curve[:, None])
        return np.argwhere(far)

    def last_clean(self, row: int, contract: int) -> int:
        """The contract's last clean row before one, at most five rows back; -1 for none."""
        for back in range(1, min(row, _LONGEST_LOOK_BACK) + 1):
            if not math.isnan(self.clean[row - back, contract]):
                return row - back
        return -1

    def moves(self, contract: int, since: int, row: int) -> np.ndarray:
        """Changes from one row to another of the nearest contracts that have both."""
        both = ~np.isnan(self.clean[since]) & ~np.isnan(self.clean[row])
        both[contract] = False
        others = np.flatnonzero(both)
        if len(others) > self.quality.nearest_contracts:
            nearest = np.argsort(np.abs(others - contract), kind="stable")[: self.quality.nearest_contracts]
            others = others[nearest]
        return self.clean[row, others] - self.clean[since, others]

    def own_noise(self, row: int, contract: int) -> float:
        """Scaled MAD about zero of the contract's past distances.

        A newly listed contract has no past; it is given three times the curve's own, for its first settles are the
        least certain.
        """
        past = self.distance[max(0, row - _HISTORY) : row, contract]
        past = past[~np.isnan(past)]
        if len(past) >= _LEAST_HISTORY:
            return float(MAD_SCALE * np.median(np.abs(past)))
        curve = self.spread[max(0, row - _HISTORY) : row + 1]
        curve = curve[~np.isnan(curve)]
        return float(_NEWLY_LISTED * np.median(curve)) if len(curve) else 0.0


def _compact(values: np.ndarray) -> np.ndarray:
    """The values of each row moved to the left, as narrow as the fullest row: most contracts are not alive."""
    present = ~np.isnan(values)
    width = int(present.sum(axis=1).max(initial=0))
    packed = np.full((len(values), width), np.nan)
    rows, columns = np.nonzero(present)
    starts = np.concatenate(([0], np.cumsum(present.sum(axis=1))[:-1]))
    packed[rows, np.arange(len(rows)) - starts[rows]] = values[rows, columns]
    return packed


def judge_settles(panel: Panel, settle: np.ndarray, exempt: np.ndarray, quality: Quality) -> list[Verdict]:
    """Weigh every settle that stands alone.

    `settle` (T, N) on the present scale, NaN where absent; `exempt` (T, N) marks cells a person has spoken
    for. Sessions are taken in order, each against what is clean before it, so that a run of wrong prices is
    held against the last right one. Returns verdicts in order of session and contract.
    """
    curve = _Curve(panel, settle, quality)
    waiting = [(int(row), int(contract)) for row, contract in curve.candidates()]
    impossible = np.zeros(curve.reported.shape, dtype=bool)
    if not panel.market.may_be_negative:
        with np.errstate(invalid="ignore"):
            impossible = curve.reported <= 0
        waiting += [(int(row), int(contract)) for row, contract in np.argwhere(impossible)]
        curve.clean[impossible] = np.nan
    heapq.heapify(waiting)
    verdicts: list[Verdict] = []
    seen: set[tuple[int, int]] = set()
    while waiting:
        row, contract = cell = heapq.heappop(waiting)
        if cell in seen or exempt[curve.rows[row], contract]:
            continue
        seen.add(cell)
        verdict = _judge(curve, row, contract, bool(impossible[row, contract]))
        if verdict is None:
            continue
        verdicts.append(verdict)
        if verdict.ruling is Ruling.KEPT:
            curve.kept.add(cell)
        else:
            curve.clean[row, contract] = verdict.expected
            following = np.flatnonzero(~np.isnan(curve.reported[row + 1 : row + 1 + _LONGEST_LOOK_BACK, contract]))
            if len(following):
                heapq.heappush(waiting, (row + 1 + int(following[0]), contract))
    return verdicts


def _judge(curve: _Curve, row: int, contract: int, is_impossible: bool) -> Verdict | None:
    """Weigh one settle; None where it does not stand alone."""
    price, quality, session = curve.reported[row, contract], curve.quality, int(curve.rows[row])
    since = curve.last_clean(row, contract)
    if since < 0:
        return _judge_first(curve, row, contract, is_impossible)
    moves = curve.moves(contract, since, row)
    is_known = len(moves) >= 2
    expected = float(curve.clean[since, contract] + np.median(moves)) if is_known else math.nan
    if is_impossible:
        return _judge_impossible(curve, session, contract, _tidy(expected))
    level = expected if is_known else float(curve.clean[since, contract])
    distance = price - level
    scale = max(scaled_mad(moves) if is_known else 0.0, curve.own_noise(row, contract), 0.5 * curve.tick)
    score = abs(distance) / scale
    if score < quality.refuted_score or abs(distance) < quality.refuted_ticks * curve.tick:
        return None
    if _is_return(curve, row, contract, since, distance):
        return None
    if price <= 0 < level:
        # Only a market that may be negative comes here, and there it is a fact however strange.
        return Verdict(session, contract, Kind.LONE_MOVE, Ruling.KEPT, _tidy(expected), score)
    power = _power_of_ten(price, level, curve.tick)
    if power and _is_nearer(curve, row, contract, price, level):
        # The contract's last settle was the wrong one: this one stands where its neighbours do.
        return Verdict(session, contract, Kind.CURVE_BREAK, Ruling.KEPT, _tidy(level), score)
    if power and not _range_reaches(curve, session, contract, level):
        return Verdict(session, contract, Kind.DECIMAL_SHIFT, Ruling.REFUTED, _tidy(expected), score, power)
    if not is_known:
        return None
    if _is_borne_out(curve, session, contract, price, distance):
        return Verdict(session, contract, Kind.LONE_MOVE, Ruling.KEPT, _tidy(expected), score)
    came_back = _comes_back(curve, row, contract, since, distance)
    if came_back:
        return Verdict(session, contract, Kind.REVERTING_SPIKE, Ruling.REFUTED, _tidy(expected), score)
    is_open = came_back is None and session < curve.panel.last_trade[contract]
    ruling = Ruling.REFUTED if is_open else Ruling.KEPT
    return Verdict(session, contract, Kind.CURVE_BREAK, ruling, _tidy(expected), score)


def _judge_impossible(curve: _Curve, session: int, contract: int, expected: float) -> Verdict:
    """A settle at or below zero where none can be.

    One below zero that the bar traded down to from above is no slip of the pen: the declaration may be the one that
    is wrong, and nothing is put in its place. A bar of noughts speaks for nothing.
    """
    low, high = _bar_range(curve, session, contract)
    price = curve.panel.field("settle")[session, contract]
    is_borne_out = bool(curve.panel.field("volume")[session, contract] > 0 and low <= price < 0 < high)
    used = math.nan if is_borne_out else expected
    return Verdict(session, contract, Kind.NOT_POSITIVE, Ruling.REFUTED, used, math.nan, is_borne_out=is_borne_out)


def _judge_first(curve: _Curve, row: int, contract: int, is_impossible: bool) -> Verdict | None:
    """A settle with no clean one before it can only be held against the one after it."""
    session = int(curve.rows[row])
    if is_impossible:
        return _judge_impossible(curve, session, contract, math.nan)
    later = curve.reported[row + 1 : row + 1 + _LONGEST_LOOK_AHEAD, contract]
    later = later[~np.isnan(later)]
    price = curve.reported[row, contract]
    if not len(later) or not _power_of_ten(price, float(later[0]), curve.tick):
        return None
    others = curve.clean[row]
    others = others[~np.isnan(others)]
    # Which of the two is wrong: the one further from the level of the whole curve.
    if len(others) < 3 or abs(price - np.median(others)) < abs(later[0] - np.median(others)):
        return None
    power = _power_of_ten(price, float(later[0]), curve.tick)
    return Verdict(session, contract, Kind.DECIMAL_SHIFT, Ruling.REFUTED, math.nan, math.nan, power)


def _power_of_ten(price: float, level: float, tick: float) -> int:
    """The whole power of ten between a price and the level it should have; 0 for none."""
    if price * level <= 0 or max(abs(price), abs(level)) < _LEAST_TICKS_FOR_POWER * tick:
        return 0
    exponent = math.log10(price / level)
    power = round(exponent)
    return power if abs(exponent - power) <= _POWER_TOLERANCE else 0


def _is_nearer(curve: _Curve, row: int, contract: int, price: float, level: float) -> bool:
    """Whether the neighbours stand nearer, in decades, to the settle than to what its own past expects."""
    others = curve.clean[row].copy()
    others[contract] = np.nan
    places = np.flatnonzero(others * price > 0)
    if len(places) < 2:
        return False
    nearest = places[np.argsort(np.abs(places - contract), kind="stable")[: curve.quality.nearest_contracts]]
    around = float(np.median(others[nearest]))
    return abs(math.log10(price / around)) < abs(math.log10(level / around))


def _bar_range(curve: _Curve, session: int, contract: int) -> tuple[float, float]:
    panel = curve.panel
    return float(panel.field("low")[session, contract]), float(panel.field("high")[session, contract])


def _range_reaches(curve: _Curve, session: int, contract: int, level: float) -> bool:
    """Whether the bar traded from the expected level to the settle, as in a true fall of ninety percent."""
    low, high = _bar_range(curve, session, contract)
    price = curve.panel.field("settle")[session, contract]
    return low <= min(level, price) * 1.05 and high >= max(level, price) * 0.95 and low <= high


def _is_borne_out(curve: _Curve, session: int, contract: int, price: float, distance: float) -> bool:
    """Whether the bar's own range and volume agree with the settle.

    The side it moved to has to be known and to reach it; the other side only must not contradict it.
    """
    low, high = _bar_range(curve, session, contract)
    half = 0.5 * curve.tick
    reaches = low - half <= price if distance < 0 else price <= high + half
    contradicts = price > high + half or price < low - half
    return bool(curve.panel.field("volume")[session, contract] > 0 and reaches and not contradicts)


def _is_return(curve: _Curve, row: int, contract: int, since: int, distance: float) -> bool:
    """Whether the settle only comes back from a lone move that was kept: the curve, from before it, expects it."""
    before = since
    while (before, contract) in curve.kept:
        before = curve.last_clean(before, contract)
    if before in (since, -1):
        return False
    moves = curve.moves(contract, before, row)
    if len(moves) < 2:
        return False
    off = curve.reported[row, contract] - (curve.clean[before, contract] + np.median(moves))
    return bool(abs(off) <= _CAME_BACK * abs(distance))


def _comes_back(curve: _Curve, row: int, contract: int, since: int, distance: float) -> bool | None:
    """Whether the contract is back where the curve expects it within three sessions; None where none follows."""
    follows: bool | None = None
    for later in range(row + 1, min(len(curve.rows), row + 1 + _LONGEST_LOOK_AHEAD)):
        price = curve.reported[later, contract]
        if math.isnan(price):
            continue
        moves = curve.moves(contract, since, later)
        if len(moves) < 2:
            continue
        follows = False
        if abs(price - (curve.clean[since, contract] + np.median(moves))) <= _CAME_BACK * abs(distance):
            return True
    return follows


def _tidy(value: float) -> float:
    """The value without the last figures that sums of decimal prices leave behind."""
    return round(value, 10)
