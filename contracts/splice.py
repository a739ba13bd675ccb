"""Held weights + panel -> unadjusted, back-adjusted and ratio-adjusted series.

Belongs here: the arithmetic of design section "Splice", and the two identities it must keep. Does not belong
here: which contract is held (`rolls.py`), which settle is clean (`repairs.py`).
"""

import math
from dataclasses import dataclass

import numpy as np

from contracts.errors import IdentityError
from contracts.rolls import NEVER, Held, RollStep

LONGEST_CARRY = 3
REPORTED, REPAIRED, CARRIED, MISSING = range(4)
STATUS_NAMES = np.array(["reported", "repaired", "carried", "missing"])
_TOLERANCE = 1e-9


@dataclass(frozen=True, eq=False)
class Series:
    """One nearby of one plan, from its first held session on; every array is (T - start,).

    `status` holds indices into STATUS_NAMES. NaN where a value does not exist.
    """

    start: int
    settle: np.ndarray
    shift: np.ndarray
    scale: np.ndarray
    back_adjusted: np.ndarray
    ratio_adjusted: np.ndarray
    change: np.ndarray
    simple_return: np.ndarray
    growth: np.ndarray
    rolled: np.ndarray
    status: np.ndarray


def carry_forward(settle: np.ndarray, is_repaired: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Carry each contract's settle over at most three sessions without one.

    Takes clean settles (T, N), NaN where absent or masked; returns the carried ones (T, N) and how each
    stands (T, N), an index into STATUS_NAMES.
    """
    length = len(settle)
    sessions = np.arange(length)[:, None]
    last = np.maximum.accumulate(np.where(np.isnan(settle), -1, sessions), axis=0)
    age = sessions - last
    is_carried = (last >= 0) & (age > 0) & (age <= LONGEST_CARRY)
    carried = np.where(is_carried, np.take_along_axis(settle, np.maximum(last, 0), axis=0), settle)
    status = np.where(np.isnan(settle), MISSING, np.where(is_repaired, REPAIRED, REPORTED))
    return carried, np.where(is_carried, CARRIED, status)


def mix(held: Held, values: np.ndarray) -> np.ndarray:
    """A field of the held contracts by their weights, (T - start,); NaN where a leg has none."""
    return _mix_on(held, values, np.arange(held.start, len(values)))


def _mix_on(held: Held, values: np.ndarray, rows: np.ndarray) -> np.ndarray:
    """What is held through each session from the start on, valued on another session each, (T - start,)."""
    contract, incoming, weight = (part[held.start :] for part in (held.contract, held.incoming, held.weight))
    outgoing_leg, incoming_leg = values[rows, contract], values[rows, incoming]
    return np.where(incoming == NEVER, outgoing_leg, (1 - weight) * outgoing_leg + weight * incoming_leg)


def splice(held: Held, carried: np.ndarray, status: np.ndarray) -> Series:
    """Lay the held contracts into one series.

    `carried` and `status` (T, N) come from `carry_forward`. Raises ValueError where nothing was ever held.
    """
    if held.start == NEVER:
        raise ValueError("nothing was held")
    start, length = held.start, len(carried)
    rows = np.arange(start, length)
    settle = mix(held, carried)
    row_status = status[rows, held.contract[start:]]
    second = np.where(held.incoming[start:] == NEVER, REPORTED, status[rows, held.incoming[start:]])
    row_status = np.maximum(row_status, second)
    shift, scale, first_whole = _later_rolls(held, start, length)
    base, base_of_return = _held_before(held, carried, settle)
    change = settle - base
    with np.errstate(invalid="ignore", divide="ignore"):
        is_positive = (settle > 0) & (base_of_return > 0)
        simple_return = np.where(is_positive, settle / base_of_return - 1.0, np.nan)
    growth = _growth(simple_return, settle, first_whole)
    rolled = np.zeros(length - start, dtype=bool)
    for step in held.steps:
        rolled[step.effective - start] = True
    return Series(
        start, settle, shift, scale, settle + shift, settle * scale, change, simple_return, growth, rolled, row_status
    )


def _later_rolls(held: Held, start: int, length: int) -> tuple[np.ndarray, np.ndarray, int]:
    """Shift and scale of every session, and the place from which on there is a scale."""
    shift, scale = np.zeros(length - start), np.ones(length - start)
    gaps: list[float] = []
    product, first_whole = 1.0, 0
    for step in reversed(held.steps):
        at = step.effective - start
        gaps.append(step.gap)
        product *= step.ratio
        # fsum is exact until its one rounding, so that the sum can be done again with a pencil.
        shift[:at], scale[:at] = math.fsum(gaps), product
        if math.isnan(product):
            first_whole = max(first_whole, at)
    return shift, scale, first_whole


def _held_before(held: Held, carried: np.ndarray, settle: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Value of each session's holding on the last earlier session that has a price, twice (T - start,).

    On the effective session of a roll measured too early the incoming has no settle of the session before.
    It is taken as the outgoing's plus their difference on the measuring session for the first, which changes
    are counted from, and as the outgoing's times their ratio, where there is one, for the second, which
    returns are.
    """
    start = held.start
    priced = np.maximum.accumulate(np.where(np.isnan(settle), -1, np.arange(len(settle))))
    before = np.concatenate(([-1], priced[:-1]))
    base = np.where(before < 0, np.nan, _mix_on(held, carried, before + start))
    base_of_return = base.copy()
    places = np.flatnonzero(~np.isnan(settle))
    since_last: dict[int, list[RollStep]] = {}
    for step in held.steps:
        # A roll takes effect in the series on the first session from it on that has a price.
        at_or_after = np.searchsorted(places, step.effective - start)
        if at_or_after < len(places):
            since_last.setdefault(int(places[at_or_after]), []).append(step)
    for place, steps in since_last.items():
        last = int(before[place])
        if last >= 0 and any(step.measured != last + start for step in steps):
            # A step that was never measured has no gap and no ratio, and leaves neither base.
            base[place] = settle[last] + math.fsum(step.gap for step in steps)
            ratio = math.prod(step.ratio for step in steps)
            base_of_return[place] = base[place] if math.isnan(ratio) else settle[last] * ratio
    return base, base_of_return


def _growth(simple_return: np.ndarray, settle: np.ndarray, first_whole: int) -> np.ndarray:
    """Compounded return, 100 on its first session; it begins after the last break."""
    priced = ~np.isnan(settle)
    breaks = np.flatnonzero(settle <= 0)
    first = max(first_whole, int(breaks[-1]) + 1) if len(breaks) else first_whole
    growth = np.full(len(settle), np.nan)
    places = np.flatnonzero(priced[first:]) + first
    if len(places):
        returns = simple_return[places]
        returns[0] = 0.0
        growth[places] = 100.0 * np.cumprod(1.0 + returns)
    return growth


def check_identities(series: Series, label: str) -> None:
    """Raise IdentityError unless the adjusted series move as the held position does.

    On every pair of neighbouring priced sessions the back-adjusted change is the held position's change and
    the ratio-adjusted return its return; both may differ by rounding only.
    """
    back = series.back_adjusted
    places = np.flatnonzero(~np.isnan(back))
    size = np.maximum(1.0, np.abs(back[places]))
    off = np.abs(np.diff(back[places]) - series.change[places][1:])
    _refuse(off > _TOLERANCE * size[1:], places[1:], label, "back-adjusted change is not the held position's change")
    places = np.flatnonzero(~np.isnan(series.ratio_adjusted))
    ratio_adjusted = series.ratio_adjusted[places]
    with np.errstate(divide="ignore", invalid="ignore"):
        moved = ratio_adjusted[1:] / ratio_adjusted[:-1] - 1.0
        # There is no return on or from a price at or below zero, and nothing to hold the quotient against.
        off = np.abs(moved - series.simple_return[places][1:])
    _refuse(
        off > _TOLERANCE * np.maximum(1.0, np.abs(moved)), places[1:], label, "ratio-adjusted return is not its return"
    )


def _refuse(wrong: np.ndarray, places: np.ndarray, label: str, text: str) -> None:
    found = np.flatnonzero(wrong)
    if len(found):
        at = int(places[found[0]])
        raise IdentityError(f"{label}, session {at} of the series: {text}; nothing of this market is published")
