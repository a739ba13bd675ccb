"""Prices that stand on another power of ten from a session on.

Belongs here: finding an undeclared change of scale, so that it is told once and not as thousands of shifted decimals.
Does not belong here: single misplaced decimals (`prices.py`), declared changes (`panel.py` has undone those).

A market is on another scale from the session on which the median ratio of its contracts' settles to those of the
session before lies within 40% of a power of ten (10 or 1/10 at least) and all but a fifth of them do: no market moves
nine tenths of its price in a session, all contracts alike. One contract is, where its own ratio lies within 15% of a
power while the rest of the curve does not, and it stays there for ten sessions, or to its end and at least five:
common practice, no source.
"""

from dataclasses import dataclass

import numpy as np

from contracts.checks.robust import row_medians
from contracts.findings import Action, Finding, Kind, Severity
from contracts.layouts import BAR_FIELDS, PRICE_FIELDS
from contracts.panel import Panel
from contracts.sessions import day_of

_MARKET_TOLERANCE = 0.15
_OWN_TOLERANCE = 0.06
_LEAST_SHARE = 0.8
_LEAST_RUN = 10
_LEAST_RUN_TO_END = 5
# A price of a few ticks may well double or halve; it says nothing of powers of ten.
_LEAST_TICKS = 20.0
# Rows a contract may lack before its next price says nothing of scale.
_LONGEST_GAP = 5


@dataclass(frozen=True)
class ScaleChange:
    """From session `first` to `last`, both included, prices are 10**power times those before.

    `contract` is None for the whole market; `last` is then the end of the data, for a change back is a change too.
    """

    first: int
    last: int
    contract: int | None
    power: int


def find_scale_changes(panel: Panel, settle: np.ndarray) -> list[ScaleChange]:
    """Changes of scale of the whole market, then those of single contracts; `settle` (T, N), NaN where absent."""
    rows = np.flatnonzero(~np.isnan(settle).all(axis=1))
    if len(rows) < 2:
        return []
    logs, before = _logs(settle[rows]), _carried(settle[rows])
    with np.errstate(invalid="ignore"):
        # Across nought there is no ratio.
        steps = np.where(settle[rows][1:] * before[:-1] > 0, logs[1:] - _logs(before[:-1]), np.nan)
        live = np.count_nonzero(~np.isnan(settle[rows][1:] + before[:-1]), axis=1)
    middle = row_medians(steps)
    power = np.round(np.nan_to_num(middle))
    with np.errstate(invalid="ignore"):
        alike = (np.abs(steps - power[:, None]) <= _MARKET_TOLERANCE).sum(axis=1)
    is_whole = (power != 0) & (alike >= _LEAST_SHARE * np.maximum(live, 1))
    back = -1
    for row in np.flatnonzero(is_whole & (live == 1)).tolist():
        # One contract is no market unless it stays.
        is_whole[row] = row > back and _stays(middle, row, int(power[row]))
        back = row if is_whole[row] else row + _LEAST_RUN
    end = int(len(settle) - 1)
    found = [ScaleChange(int(rows[row + 1]), end, None, int(power[row])) for row in np.flatnonzero(is_whole)]
    if panel.market.may_be_negative:
        # Near nought a contract of its own may well move tenfold.
        return found
    whole = np.where(is_whole, power, 0.0)
    return found + _own_changes(panel, rows, steps - whole[:, None], middle - whole, logs)


def lay_levels(shape: tuple[int, int], changes: list[ScaleChange]) -> np.ndarray:
    """What each price must be multiplied by to stand on the scale on which the market stood longest, (T, N)."""
    powers = np.zeros(shape)
    for change in changes:
        columns = slice(None) if change.contract is None else slice(change.contract, change.contract + 1)
        powers[change.first : change.last + 1, columns] += change.power
    market = np.zeros(shape[0])
    for change in changes:
        if change.contract is None:
            market[change.first :] += change.power
    values, counts = np.unique(market, return_counts=True)
    longest = values[counts.argmax()] if len(values) else 0.0
    return np.asarray(10.0 ** (longest - powers))


def put_on_one_scale(values: np.ndarray, levels: np.ndarray) -> np.ndarray:
    """The fields (6, T, N) with their prices multiplied by the levels; the same array where nothing changes."""
    if (levels == 1.0).all():
        return values
    scaled = values.copy()
    for place, name in enumerate(BAR_FIELDS):
        if name in PRICE_FIELDS:
            moved = levels != 1.0
            scaled[place][moved] = np.round(values[place][moved] * levels[moved], 10)
    return scaled


def check_scale(panel: Panel, changes: list[ScaleChange]) -> list[Finding]:
    """A block finding a change: the market cannot be trusted until a person says which scale is right."""
    settle, market = panel.field("settle"), panel.market.code
    found = []
    for change in changes:
        day, times = day_of(panel.sessions[change.first]), _times(change.power)
        if change.contract is None:
            multiply = f"{10.0**change.power:.10g}"
            message = (
                f"{market}, {day}: from here on every price is {times} what it was, and nothing declares it; if the "
                f"market is quoted so now, declare [[rescaled]] before = {day}, multiply = {multiply}, and tick_size "
                "on the new scale; if only the files changed, give them a layout with price_scale"
            )
            found.append(
                Finding(
                    Kind.SCALE_CHANGED, Severity.BLOCK, message, market, None, day, "settle", score=10.0**change.power,
                    threshold=10.0,
                )
            )  # fmt: skip
            continue
        label = panel.contracts[change.contract]
        price = float(settle[change.first, change.contract])
        until = day_of(panel.sessions[change.last])
        message = (
            f"{label}, {day} to {until}: every price is {times} what the contract's own past and the curve say, on all "
            f"{change.last - change.first + 1} sessions; the decimal point is moved back; give its file a layout with "
            "price_scale, for [[rescaled]] speaks of whole markets"
        )
        right = round(price / 10.0**change.power, 10)
        found.append(
            Finding(
                Kind.SCALE_CHANGED, Severity.BLOCK, message, market, label, day, "settle", price, right,
                10.0**change.power, 10.0, Action.REPAIRED, right,
            )
        )  # fmt: skip
    return found


def _times(power: int) -> str:
    return f"{10**power:,} times" if power > 0 else f"1/{10**-power:,} of"


def _logs(settle: np.ndarray) -> np.ndarray:
    """log10 of the prices' sizes, NaN for nought."""
    size = np.abs(settle)
    return np.log10(np.where(size > 0, size, np.nan))


def _carried(settle: np.ndarray) -> np.ndarray:
    """The settles with gaps of a few rows filled by the last known one."""
    filled = settle.copy()
    for back in range(1, _LONGEST_GAP + 1):
        lacking = np.isnan(filled[back:])
        filled[back:][lacking] = settle[:-back][lacking]
    return filled


def _stays(middle: np.ndarray, row: int, power: int) -> bool:
    """Whether the next changes do not take the price back."""
    after = middle[row + 1 : row + _LEAST_RUN]
    return len(after) >= _LEAST_RUN_TO_END - 1 and not bool((np.abs(np.cumsum(after) + power) < 0.5).any())


def _own_changes(
    panel: Panel, rows: np.ndarray, steps: np.ndarray, middle: np.ndarray, logs: np.ndarray
) -> list[ScaleChange]:
    """Runs of one contract on another scale than its own past, while the curve stays where it was."""
    size = np.round(np.nan_to_num(steps))
    with np.errstate(invalid="ignore"):
        # The curve's own move is no part of a change of scale.
        is_step = (size != 0) & (np.abs(steps - np.nan_to_num(middle)[:, None] - size) <= _OWN_TOLERANCE)
        is_step &= logs[1:] - np.minimum(size, 0.0) >= np.log10(_LEAST_TICKS * panel.market.tick_size)
    found = []
    for contract in np.flatnonzero(is_step.any(axis=0)):
        places = np.flatnonzero(is_step[:, contract])
        last = int(np.flatnonzero(~np.isnan(logs[:, contract]))[-1])
        taken = -1
        for at in places:
            if at <= taken:
                continue
            power = int(size[at, contract])
            back = next((later for later in places if later > at and size[later, contract] == -power), None)
            end = last if back is None else int(back)
            count = int((~np.isnan(logs[at + 1 : end + 1, contract])).sum())
            # After a shorter run the step back is its end, and no change of its own.
            taken = end
            is_long = count >= (_LEAST_RUN_TO_END if back is None else _LEAST_RUN)
            if is_long and not _traded_all_the_way(panel, int(rows[at + 1]), int(contract), power):
                found.append(ScaleChange(int(rows[at + 1]), int(rows[end]), int(contract), power))
    return found


def _traded_all_the_way(panel: Panel, session: int, contract: int, power: int) -> bool:
    """Whether the bar reaches from the old scale to the new: then it is a move, however large."""
    price = float(panel.field("settle")[session, contract])
    old = price / 10.0**power
    low, high = float(panel.field("low")[session, contract]), float(panel.field("high")[session, contract])
    return low <= 1.2 * min(old, price) and high >= max(old, price) / 1.2
