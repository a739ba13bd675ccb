"""Settles that stand alone against the curve, and how the evidence for and against each is weighed.

Belongs here: weighing a settle against the other contracts of its market, its own neighbours in time and its own bar.
Does not belong here: what the curve expects (`curve.py`), what is put in its place (`repairs.py`).

The score. A settle's distance from what the curve expects, in scales (`curve.py`), times a factor for each further
witness, is held against `refuted_score`; the distance times the same factors against `refuted_ticks`:

- its own range stands where the curve puts the contract and the settle outside of it: 2.0
- it is back where the curve expects it within three sessions: 1.3
- it has the form of a slip (a power of ten, the other sign, another contract's row): 2.0;
  two digits changed about: up to 2.5, by how seldom chance would do it
- it moved by more than the daily limit: 1.3
- the contract follows the curve by fits and starts, standing still on many sessions: 0.5
- the refuted settle before it stood off as far: at least 2.0
- it lies in a range that reaches to where the curve puts it and is no wider than usual: 0.8
- its whole bar stands off as well, or nothing traded: 1.0

A settle whose range reaches to it from where the curve puts it is a fact, however strange, and so is what moved by
just the daily limit. Contracts of one market move together, so a wrong price stands alone and a true shock does not:
common practice, no source; the factors were chosen on the tuning seeds of the bench.
"""

import heapq
import math
from dataclasses import dataclass
from enum import StrEnum

import numpy as np

from contracts.checks.bars import Bar, hear_bar
from contracts.checks.court import Court, Standing
from contracts.checks.curve import LONGEST_LOOK_BACK, Curve
from contracts.checks.forms import digits_swapped_weight, is_sign_flipped, power_of_ten
from contracts.findings import Kind
from contracts.panel import Panel
from contracts.quality import Quality

_LONGEST_LOOK_AHEAD = 3
_OWN_BAR, _BACK, _FORM, _LIMIT, _BY_FITS, _INSIDE = 2.0, 1.3, 2.0, 1.3, 0.5, 0.8
_TELLING = 1.25
# Of the few digits that a price within the session's range can differ by, chance swaps some.
_FORM_INSIDE = 1.3
# After a lone move that was kept a contract finds its place; it takes so much more to refute what it does then.
_AFTER_KEPT = 3.0
# Into expiry contracts are squeezed; what cannot be refuted there is told as a fact.
_INTO_EXPIRY = 15
# What neither came back nor is refuted by its bar is told from so many times the threshold.
_KEPT_FROM = 2.5


class Ruling(StrEnum):
    """What the evidence says of a settle that stands alone."""

    REFUTED = "refuted"
    KEPT = "kept"


@dataclass(frozen=True)
class Verdict:
    """One settle that stands alone: where, of what form, how strongly, and what the curve expects.

    `expected` is NaN where the curve cannot say, or where the bar itself speaks for a price that cannot be
    (`is_borne_out`); `score` is held against `threshold`; `error` is the scale of the expected settle's error, in
    price units; `power` is the power of ten by which the settle is too large (negative: too small), 0 for none;
    `other` the contract whose row it is, -1 for none; `why_kept` says in words why a strange settle stands.
    """

    session: int
    contract: int
    kind: Kind
    ruling: Ruling
    expected: float
    score: float
    power: int = 0
    error: float = math.nan
    threshold: float = math.nan
    other: int = -1
    is_borne_out: bool = False
    why_kept: str = ""


@dataclass(frozen=True, eq=False)
class Judgment:
    """Verdicts in order of session and contract; the curve they rest on; (row, contract) refuted, and kept."""

    verdicts: tuple[Verdict, ...]
    curve: Curve
    refuted: frozenset[tuple[int, int]]
    kept: frozenset[tuple[int, int]]


def judge_settles(panel: Panel, settle: np.ndarray, exempt: np.ndarray, quality: Quality) -> Judgment:
    """Weigh every settle that stands alone.

    `settle` (T, N) on the present scale, NaN where absent; `exempt` (T, N) marks cells a person has spoken for.
    Sessions are taken in order, each against what is clean before it, so that a run of wrong prices is held against
    the last right one; within a session the strangest first.
    """
    court = Court(panel, settle, quality)
    curve = court.curve
    waiting = court.candidates() + court.find_copies()
    waiting += [(int(row), -math.inf, int(contract)) for row, contract in np.argwhere(curve.impossible)]
    heapq.heapify(waiting)
    verdicts: list[Verdict] = []
    seen: set[tuple[int, int]] = set()
    while waiting:
        row, _, contract = heapq.heappop(waiting)
        cell = (row, contract)
        if cell in seen or exempt[curve.rows[row], contract]:
            continue
        seen.add(cell)
        verdict = _judge(court, row, contract)
        if verdict is None:
            continue
        verdicts.append(verdict)
        if verdict.ruling is Ruling.KEPT:
            court.kept.add(cell)
        else:
            curve.clean[row, contract] = verdict.expected
            court.refuted[cell] = verdict.score
            following = np.flatnonzero(~np.isnan(curve.reported[row + 1 : row + 1 + LONGEST_LOOK_BACK, contract]))
            if len(following):
                heapq.heappush(waiting, (row + 1 + int(following[0]), -math.inf, contract))
    verdicts.sort(key=lambda verdict: (verdict.session, verdict.contract))
    return Judgment(tuple(verdicts), curve, frozenset(court.refuted), frozenset(court.kept))


def _judge(court: Court, row: int, contract: int) -> Verdict | None:
    """Weigh one settle; None where it does not stand alone."""
    curve, quality, tick = court.curve, court.quality, court.tick
    price, session = float(curve.reported[row, contract]), int(curve.rows[row])
    since = curve.last_clean(row, contract)
    is_impossible = bool(curve.impossible[row, contract])
    if since < 0:
        return _judge_first(court, row, contract, is_impossible)
    standing = court.stand(row, contract, since)
    expected = _on_tick(standing.expected, tick) if standing.is_known else math.nan
    level, scale = standing.expected, standing.scale

    def rule(
        kind: Kind, ruling: Ruling, factor: float = 1.0, power: int = 0, other: int = -1, why: str = ""
    ) -> Verdict:  # fmt: skip
        if ruling is Ruling.KEPT:
            court.remember(row, contract, standing.distance)
        score = factor * abs(price - level) / scale if is_impossible else factor * standing.off
        return Verdict(
            session, contract, kind, ruling, expected, score, power, scale, quality.refuted_score, other, why_kept=why
        )

    if is_impossible:
        if _is_borne_out(court.panel, session, contract):
            return _bear_out(session, contract)
        is_flipped = is_sign_flipped(price, level, scale, tick)
        return rule(Kind.SIGN_FLIPPED if is_flipped else Kind.NOT_POSITIVE, Ruling.REFUTED)
    distance = abs(standing.distance)
    twin = court.twins.get((row, contract), -1)
    if twin >= 0:
        is_off = distance >= max(scale, 2 * tick) and standing.is_known
        return rule(Kind.NEIGHBOURS_PRICE, Ruling.REFUTED if is_off else Ruling.KEPT, _FORM, other=twin)
    if not _suffices(court, standing, _OWN_BAR * _FORM * _BACK):
        return None
    before = float(curve.clean[since, contract])
    heard = hear_bar(court.panel, session, contract, price, level, before if since == row - 1 else math.nan)
    power = power_of_ten(price, level, tick)
    is_flipped = is_sign_flipped(price, level, scale, tick)
    swapped = digits_swapped_weight(price, level, scale, tick) if standing.is_known else 0.0
    if heard is Bar.INSIDE:
        swapped = min(swapped, _FORM_INSIDE)
    factor = _FORM if power or is_flipped else max(1.0, swapped)
    if curve.is_often_still(row, contract):
        factor *= _BY_FITS
    if heard is Bar.AGAINST:
        factor *= _OWN_BAR
    elif heard is Bar.INSIDE:
        factor *= _INSIDE
    goes_on = heard is not Bar.APART and heard is not Bar.BEHIND and court.goes_on(row, contract, standing)
    if goes_on:
        factor = max(factor, _FORM)
    limit = court.panel.market.daily_limit
    moved = abs(price - before)
    if limit is not None and since == row - 1 and moved > limit + 0.5 * tick:
        factor *= _LIMIT
    if not _suffices(court, standing, factor * _BACK):
        return None
    came_back = court.comes_back(row, contract, standing) if standing.is_known else None
    if came_back:
        factor *= _BACK
    if not _suffices(court, standing, factor):
        return None
    is_at_limit = limit is not None and abs(moved - limit) <= 0.5 * tick
    if heard is Bar.BEHIND or is_at_limit:
        why = "borne out by its own range and volume" if heard is Bar.BEHIND else "by just the daily limit"
        return rule(Kind.LONE_MOVE, Ruling.KEPT, why=why)
    if power:
        if _is_nearer(court, row, contract, price, level):
            # The contract's last settle was the wrong one: this one stands where its neighbours do.
            return rule(Kind.CURVE_BREAK, Ruling.KEPT, factor)
        return rule(Kind.DECIMAL_SHIFT, Ruling.REFUTED, factor, power)
    if is_flipped and came_back is not False:
        return rule(Kind.SIGN_FLIPPED, Ruling.REFUTED, factor)
    if price <= 0 < level and not (heard is Bar.AGAINST and came_back):
        # Only a market that may be negative comes here, and there it is a fact however strange.
        why = "at or below zero, as this market's price may be"
        return rule(Kind.CURVE_BREAK if heard is Bar.AGAINST else Kind.LONE_MOVE, Ruling.KEPT, factor, why=why)
    if not (standing.is_known or heard is Bar.AGAINST):
        return None
    left = int(court.panel.last_trade[contract]) - session
    is_final = left <= 1
    may_stand = heard is not Bar.AGAINST and (
        is_final
        or (came_back is None and (standing.is_late or heard is Bar.INSIDE))
        or (left <= _INTO_EXPIRY and (heard is Bar.INSIDE or standing.off * factor < 2 * quality.refuted_score))
    )
    if heard is not Bar.AGAINST and court.is_return(row, contract, standing):
        return None
    if (since, contract) in court.kept and standing.off * factor < _AFTER_KEPT * quality.refuted_score:
        may_stand = heard is not Bar.AGAINST
    if swapped > _TELLING and (came_back is not False or heard is Bar.AGAINST) and not may_stand:
        return rule(Kind.DIGITS_SWAPPED, Ruling.REFUTED, factor)
    if came_back and not may_stand:
        return rule(Kind.REVERTING_SPIKE, Ruling.REFUTED, factor)
    if heard is Bar.AGAINST or (came_back is None and not may_stand):
        return rule(Kind.CURVE_BREAK, Ruling.REFUTED, factor)
    if goes_on:
        return rule(Kind.CURVE_BREAK, Ruling.REFUTED, factor)
    if heard is Bar.INSIDE:
        return rule(Kind.LONE_MOVE, Ruling.KEPT, why="within its own ordinary range")
    if left <= _INTO_EXPIRY:
        return rule(Kind.LONE_MOVE, Ruling.KEPT, why="near its expiry")
    if (since, contract) in court.kept:
        return rule(Kind.LONE_MOVE, Ruling.KEPT, why="after a lone move that was kept")
    if standing.is_late or standing.off * factor < _KEPT_FROM * quality.refuted_score:
        return None
    return rule(Kind.CURVE_BREAK, Ruling.KEPT, factor)


def _suffices(court: Court, standing: Standing, factor: float) -> bool:
    """Whether the distance, times what speaks for it, reaches both thresholds."""
    return (
        standing.off * factor >= court.quality.refuted_score
        and abs(standing.distance) * factor >= court.quality.refuted_ticks * court.tick
    )


def _is_borne_out(panel: Panel, session: int, contract: int) -> bool:
    """Whether the bar traded down to a settle below zero from above, in a market where none can be.

    That is no slip of the pen: the declaration may be the one that is wrong. A bar of noughts speaks for nothing.
    """
    low, high, settle = (float(panel.field(name)[session, contract]) for name in ("low", "high", "settle"))
    return bool(panel.field("volume")[session, contract] > 0 and low <= settle < 0 < high)


def _bear_out(session: int, contract: int) -> Verdict:
    """The verdict on such a settle: nothing is put in its place."""
    return Verdict(session, contract, Kind.NOT_POSITIVE, Ruling.REFUTED, math.nan, math.nan, is_borne_out=True)


def _judge_first(court: Court, row: int, contract: int, is_impossible: bool) -> Verdict | None:
    """A settle with no clean one before it can only be held against the one after it."""
    curve, tick = court.curve, court.tick
    session = int(curve.rows[row])
    if is_impossible:
        if _is_borne_out(court.panel, session, contract):
            return _bear_out(session, contract)
        return Verdict(session, contract, Kind.NOT_POSITIVE, Ruling.REFUTED, math.nan, math.nan)
    later = curve.reported[row + 1 : row + 1 + _LONGEST_LOOK_AHEAD, contract]
    later = later[~np.isnan(later)]
    price = float(curve.reported[row, contract])
    if not len(later) or not power_of_ten(price, float(later[0]), tick):
        return None
    others = curve.clean[row]
    others = others[~np.isnan(others)]
    # Which of the two is wrong: the one further from the level of the whole curve.
    if len(others) < 3 or abs(price - np.median(others)) < abs(later[0] - np.median(others)):
        return None
    power = power_of_ten(price, float(later[0]), tick)
    return Verdict(session, contract, Kind.DECIMAL_SHIFT, Ruling.REFUTED, math.nan, math.nan, power)


def _is_nearer(court: Court, row: int, contract: int, price: float, level: float) -> bool:
    """Whether the neighbours stand nearer, in decades, to the settle than to what its own past expects."""
    others = court.curve.clean[row].copy()
    others[contract] = np.nan
    places = np.flatnonzero(others * price > 0)
    if len(places) < 2:
        return False
    nearest = places[np.argsort(np.abs(places - contract), kind="stable")[: court.quality.nearest_contracts]]
    around = float(np.median(others[nearest]))
    return abs(math.log10(price / around)) < abs(math.log10(level / around))


def _on_tick(value: float, tick: float) -> float:
    """The value on the nearest tick, without the last figures that sums of decimal prices leave behind."""
    return round(round(value / tick) * tick, 10)
