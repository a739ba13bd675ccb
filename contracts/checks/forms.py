"""Forms a slip of the pen or of a program takes, by which a wrong settle tells what it should have been.

Belongs here: one function a form, from a settle and what is expected of it. Does not belong here: what follows from it
(`prices.py`). Common practice, no source.
"""

import math

import numpy as np

from contracts.panel import Panel

# log10 distance from a whole power of ten that still counts as one (about 15%).
_POWER_TOLERANCE = 0.06
_LEAST_TICKS = 20
# A form must explain all but this share of the distance.
_LEFT_OVER = 0.2
_WITHIN_SCALES = 2.5
_WITHIN_TICKS = 1.5
_MOST_WEIGHT = 2.5
_LEAST_VOLUME = 5.0
_LEAST_INTEREST = 50.0
_REACH = 6
_LAST_FEW = 5
_LEAST_LEAP = 0.1
_LEAST_LEAP_OF_VOLUME = 1.5


def power_of_ten(price: float, level: float, tick: float) -> int:
    """The whole power of ten between a price and the level it should have; 0 for none."""
    if price * level <= 0 or max(abs(price), abs(level)) < _LEAST_TICKS * tick:
        return 0
    exponent = math.log10(price / level)
    power = round(exponent)
    return power if abs(exponent - power) <= _POWER_TOLERANCE else 0


def is_sign_flipped(price: float, level: float, scale: float, tick: float) -> bool:
    """Whether the price with the other sign is what is expected, and far enough from nought to tell."""
    return abs(level) >= _LEAST_TICKS * tick and price * level < 0 and _explains(-price, price, level, scale, tick)


def digits_swapped_weight(price: float, level: float, scale: float, tick: float) -> float:
    """How much it says that two neighbouring digits of the price, changed about, give what is expected; 0 if none do.

    1 where chance would do as much, one more for each tenth part of it.
    """
    decimals = len(f"{tick:.10f}".rstrip("0").partition(".")[2])
    text = f"{abs(price):.{decimals}f}"
    distance = abs(price - level)
    reached, is_explained = set(), False
    for place in range(len(text) - 1):
        pair = text[place : place + 2]
        if "." in pair or pair[0] == pair[1]:
            continue
        swapped = math.copysign(float(text[:place] + pair[::-1] + text[place + 2 :]), price)
        if abs(swapped - price) <= 2 * distance:
            reached.add(swapped)
        is_explained |= _explains(swapped, price, level, scale, tick)
    if not is_explained:
        return 0.0
    # Values that would have passed, among all those as far from the settle as twice the distance.
    chance = len(reached) * 2 * min(max(_WITHIN_SCALES * scale, _WITHIN_TICKS * tick), _LEFT_OVER * distance)
    return min(_MOST_WEIGHT, 1.0 + max(0.0, -math.log10(chance / (4 * distance))))


def _explains(meant: float, price: float, level: float, scale: float, tick: float) -> bool:
    off = abs(meant - level)
    return off <= max(_WITHIN_SCALES * scale, _WITHIN_TICKS * tick) and off <= _LEFT_OVER * abs(price - level)


def find_twins(panel: Panel) -> list[tuple[int, int, int]]:
    """Pairs of contracts with one and the same row on a session: (session, contract, contract), the earlier first.

    Alike are settle, range, volume and open interest, and so much was traded or held that it is no accident.
    """
    volume = panel.field("volume")
    with np.errstate(invalid="ignore"):
        session, contract = np.nonzero(volume > 0)
    traded, settle = volume[session, contract], panel.field("settle")[session, contract]
    found: list[tuple[int, int, int]] = []
    for step in range(1, _REACH + 1):
        same = (session[:-step] == session[step:]) & (traded[:-step] == traded[step:])
        for place in np.flatnonzero(same & (settle[:-step] == settle[step:])).tolist():
            at, pair = int(session[place]), (int(contract[place]), int(contract[place + step]))
            interest, *sides = (
                tuple(panel.field(name)[at, column] for column in pair) for name in ("open_interest", "high", "low")
            )
            is_much = traded[place] >= _LEAST_VOLUME or interest[0] >= _LEAST_INTEREST
            if is_much and all(a == b or (a != a and b != b) for a, b in (interest, *sides)):
                found.append((at, *pair))
    return found


def copy_of_twins(panel: Panel, session: int, contracts: tuple[int, int], off: tuple[float, float]) -> int:
    """Which of two contracts with one row it does not belong to: the one whose open interest leapt more.

    Where that is not known, volume speaks, if plainly; then the one whose settle is further off, `off` in scales.
    """
    for name, least in (("open_interest", _LEAST_LEAP), ("volume", _LEAST_LEAP_OF_VOLUME)):
        leaps = [_leap(panel.field(name), session, contract) for contract in contracts]
        if abs(leaps[0] - leaps[1]) > least:
            return contracts[int(leaps[1] > leaps[0])]
    return contracts[int(off[1] > off[0])]


def _leap(values: np.ndarray, session: int, contract: int) -> float:
    """Natural logarithm of how far a value leapt from its contract's last few, without sign; NaN where unknown."""
    past = values[max(0, session - _LAST_FEW) : session, contract]
    past = past[past > 0]
    now = float(values[session, contract])
    return abs(math.log(now / float(np.median(past)))) if len(past) and now > 0 else math.nan
