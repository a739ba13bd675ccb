"""What a bar's own range and volume say of its settle.

Belongs here: one bar, beside the bars of its contract's past and of its neighbours. Does not belong here: the curve
(`curve.py`), the judgment (`prices.py`).

A true lone move trades its way: its range is wide, or its volume large, and reaches from near where the curve puts the
contract to the settle. A wrong settle lies outside a range that stands where the curve puts it, or inside of one no
wider than usual. A wrong row stands off as a whole, no wider and no busier than usual; a bar that carries on from its
contract's last settle, while the curve moves away, does not: so a squeeze holds a contract up. Common practice, no
source; the limits below were chosen on the tuning seeds of the bench.
"""

import math
import statistics
from enum import Enum

import numpy as np

from contracts.panel import Panel

# Distances as shares of the settle's distance from what is expected.
_TOUCHES = 0.15
_LEFT_BEHIND = 0.5
_STAYED = 0.3
_TRADED_ACROSS = 0.6
_PERHAPS_ACROSS = 0.78
_CARRIES_ON = 0.2
_WELL_WITHIN = 0.5
# Against its own past 20 and its neighbours' ratio on the session; where it traded all the way, less will do.
_WIDER, _WIDER_AND_ACROSS = 1.8, 1.4
_BUSIER, _BUSIER_AND_ACROSS = 2.5, 2.0
_PAST = 20
_NEIGHBOURS = 3
# Fewer lots than these see too little of a session to speak against a settle.
_LEAST_LOTS = 10


class Bar(Enum):
    """What the bar says."""

    SILENT = "silent"  # no trade, no range, or something in between
    AGAINST = "against"  # the range stands where the curve puts the contract, the settle outside
    BEHIND = "behind"  # the range reaches from there, or from the last settle, to the settle
    INSIDE = "inside"  # the range reaches both, and is no wider and no busier than usual
    APART = "apart"  # the whole bar stands off with the settle


def hear_bar(panel: Panel, session: int, contract: int, price: float, expected: float, last: float) -> Bar:
    """What the bar says of a settle at `price` where the curve expects another.

    `last` is the clean settle of the session before, NaN for none.
    """
    low, high = (float(panel.field(name)[session, contract]) for name in ("low", "high"))
    if not panel.field("volume")[session, contract] > 0 or low > high:
        return Bar.SILENT
    half = 0.5 * panel.market.tick_size
    if np.isnan(low) or np.isnan(high):
        # One side alone bears a move out if it is the side moved to, and reaches the settle.
        reaches = low - half <= price if price < expected else price <= high + half
        return Bar.BEHIND if reaches else Bar.SILENT
    distance = abs(price - expected)
    outside = max(low - half - price, price - high - half, 0.0) / distance
    away = max(low - half - expected, expected - high - half, 0.0) / distance
    if outside > _TOUCHES:
        speaks = outside >= _LEFT_BEHIND and away <= _STAYED and panel.field("volume")[session, contract] >= _LEAST_LOTS
        return Bar.AGAINST if speaks else Bar.SILENT
    if away > _TRADED_ACROSS and max(low - last, last - high, 0.0) - half <= _CARRIES_ON * distance:
        return Bar.BEHIND
    shifted = _shift(panel, session, contract, "low" if price > expected else "high", last)
    # Ends of bars differ from contract to contract by more than a small distance within the range.
    is_small = away == 0.0 and distance <= _WELL_WITHIN * (high - low)
    if not np.isnan(shifted) and not is_small:
        away = shifted / (price - expected)
    across = away <= _TRADED_ACROSS
    if not across and away > _PERHAPS_ACROSS:
        return Bar.APART
    near = slice(max(0, contract - _NEIGHBOURS), contract + _NEIGHBOURS + 1)
    recent, own = slice(max(0, session - _PAST), session + 1), contract - near.start
    width = panel.field("high")[recent, near] - panel.field("low")[recent, near]
    if not _out_of_usual(width, own) <= (_WIDER_AND_ACROSS if across else _WIDER):
        return Bar.BEHIND
    if not _out_of_usual(panel.field("volume")[recent, near], own) <= (_BUSIER_AND_ACROSS if across else _BUSIER):
        return Bar.BEHIND
    return Bar.INSIDE if across else Bar.APART


def _shift(panel: Panel, session: int, contract: int, side: str, last: float) -> float:
    """How far the low or high stands from where its neighbours' stand, each seen from its last settle.

    The end of the bar that a true lone move leaves behind is where it is in the other contracts. NaN where fewer than
    two neighbours traded.
    """
    if session == 0:
        return float("nan")
    columns = slice(max(0, contract - _NEIGHBOURS), contract + _NEIGHBOURS + 1)
    reach = panel.field(side)[session, columns] - panel.field("settle")[session - 1, columns]
    reach = np.where(panel.field("volume")[session, columns] >= _LEAST_LOTS, reach, np.nan)
    others = np.delete(reach, contract - columns.start)
    others = others[~np.isnan(others)]
    if len(others) < 2:
        return float("nan")
    return float(panel.field(side)[session, contract] - last - np.median(others))


def _out_of_usual(values: np.ndarray, own: int) -> float:
    """The last value's ratio to the median before it in column `own`, over the median of the other columns' ratios.

    NaN where the contract has too little of a past to tell.
    """
    ratios: list[float] = []
    for column in range(values.shape[1]):
        past = [value for value in values[:-1, column].tolist() if value > 0]
        now = float(values[-1, column])
        is_known = len(past) >= _PAST // 4 and now > 0
        ratios.append(now / statistics.median(past) if is_known else math.nan)
    others = [ratio for place, ratio in enumerate(ratios) if place != own and not math.isnan(ratio)]
    return ratios[own] / statistics.median(others) if others else ratios[own]
