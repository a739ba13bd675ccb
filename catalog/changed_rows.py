"""Marked changes as people read them: in groups, row by row, and with what lies behind them.

Belongs here: counting, listing and wording. Does not belong here: what caused a change (`causes.py`).
"""

import datetime
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

from catalog.causes import CAUSES, Cause, Marked, Step, strands_of
from contracts.layouts import BAR_FIELDS
from contracts.lined_up import LinedUp
from contracts.tables import BARS, ROLLS

_TOLD = 5
_PRICES = ("settle", "clean_settle", "back_adjusted")
_EPOCH = datetime.date(1970, 1, 1)


@dataclass(frozen=True)
class Row:
    """One published value that differs; `column` is empty where the whole row came or went."""

    cause: str
    market: str
    table: str
    key: dict[str, Any]
    column: str
    old: Any
    new: Any


@dataclass(frozen=True)
class Group:
    """The values of one table that differ for one cause: how many, on which sessions, by how much at most.

    `largest` is the largest change of a price (settle, clean_settle or back_adjusted), None where none moved.
    """

    cause: str
    market: str
    table: str
    plan: str | None
    nearby: int | None
    columns: tuple[str, ...]
    rows: int
    values: int
    first_session: datetime.date | None
    last_session: datetime.date | None
    largest: float | None


def groups_of(market: str, marked: Marked) -> list[Group]:
    """The changes of one table by cause and, where it has them, plan and nearby."""
    lined = marked.lined
    last = len(lined.versions) - 1
    has_plans = "plan" in lined.table.key
    strands = np.array(strands_of(lined) if has_plans else [""] * lined.rows)
    days = _days(lined)
    groups = []
    for at, cause in enumerate(CAUSES):
        masks = {name: codes == at for name, codes in marked.causes.items()}
        touched = np.zeros(lined.rows, dtype=bool)
        for mask in masks.values():
            touched |= mask
        for strand in np.unique(strands[touched]):
            here = touched & (strands == strand)
            columns = tuple(name or "(row)" for name, mask in masks.items() if (mask & here).any())
            plan, _, nearby = str(strand).rpartition(" ")
            known = days[here & ~np.isnan(days)]
            groups.append(
                Group(
                    str(cause), market, lined.table.name, plan or None, int(nearby) if plan else None, columns,
                    int(here.sum()), int(sum((mask & here).sum() for mask in masks.values())),
                    _day(known.min()) if len(known) else None, _day(known.max()) if len(known) else None,
                    _largest(lined, last, masks, here),
                )
            )  # fmt: skip
    return groups


def _days(lined: LinedUp) -> np.ndarray:
    """The session of each row as a number, NaN where the table has none."""
    name = next((name for name in ("session", "effective_on") if name in lined.table.columns), None)
    if name is None:
        return np.full(lined.rows, np.nan)
    return np.where(
        lined.has(len(lined.versions) - 1), lined.numbers(len(lined.versions) - 1, name), lined.numbers(0, name)
    )


def _day(number: float) -> datetime.date:
    return _EPOCH + datetime.timedelta(days=int(number))


def _largest(lined: LinedUp, last: int, masks: dict[str, np.ndarray], here: np.ndarray) -> float | None:
    found = []
    for name in _PRICES:
        mask = masks.get(name)
        if mask is not None and (mask & here).any():
            moved = np.abs(lined.numbers(last, name) - lined.numbers(0, name))[mask & here]
            found += moved[~np.isnan(moved)].tolist()
    return max(found, default=None)


def rows_of(market: str, marked: Marked, cause: Cause) -> Iterator[Row]:
    """Every value of one table that differs for one cause, in order of key and column."""
    lined, at = marked.lined, CAUSES.index(cause)
    last = len(lined.versions) - 1
    touched = np.zeros(lined.rows, dtype=bool)
    for codes in marked.causes.values():
        touched |= codes == at
    for row in np.flatnonzero(touched):
        key = lined.key(int(row))
        for name, codes in marked.causes.items():
            if codes[row] != at:
                continue
            if name:
                old, new = lined.value(0, int(row), name), lined.value(last, int(row), name)
            else:
                old, new = (bool(lined.has(version)[row]) for version in (0, last))
            yield Row(str(cause), market, lined.table.name, key, name, old, new)


def reasons_of(marked: list[Marked], because: dict[Step, tuple[str, ...]]) -> dict[str, tuple[str, ...]]:
    """What was changed, by cause: keys of the desk, raw rows, repaired settles, rolls; the causes met alone."""
    met = {CAUSES[code] for each in marked for codes in each.causes.values() for code in np.unique(codes) if code >= 0}
    reasons: dict[Cause, list[str]] = {cause: [] for cause in CAUSES}
    for step, cause in ((Step.CODE, Cause.CODE), (Step.DESK, Cause.DESK), (Step.REPAIRS, Cause.REPAIR),
                        (Step.WAIVERS, Cause.WAIVER)):  # fmt: skip
        reasons[cause] += because.get(step, ())
    for each in marked:
        if each.table is BARS:
            for cause, text in _bar_reasons(each):
                reasons[cause].append(text)
        if each.table is ROLLS:
            reasons[Cause.ROLL] += _roll_reasons(each)
    return {str(cause): _shorten(texts) for cause, texts in reasons.items() if cause in met and texts}


def _bar_reasons(marked: Marked) -> Iterator[tuple[Cause, str]]:
    lined = marked.lined
    last = len(lined.versions) - 1
    for cause in (Cause.RESTATED, Cause.LATE, Cause.WITHDRAWN, Cause.REPAIR):
        at = CAUSES.index(cause)
        names = ("clean_settle",) if cause is Cause.REPAIR else BAR_FIELDS
        touched = marked.causes[""] == at
        for name in names:
            touched |= marked.causes[name] == at
        for row in np.flatnonzero(touched).tolist():
            key = lined.key(row)
            place = f"{key['contract']} {key['session']}"
            if marked.causes[""][row] == at:
                yield cause, f"{place}: {'row arrived' if lined.has(last)[row] else 'row gone'}"
                continue
            moved = [
                f"{name} {_say(lined.value(0, row, name))} -> {_say(lined.value(last, row, name))}"
                for name in names
                if marked.causes[name][row] == at
            ]
            yield cause, f"{place}: {', '.join(moved)}"


def _roll_reasons(marked: Marked) -> list[str]:
    lined = marked.lined
    last = len(lined.versions) - 1
    told = []
    for row in np.flatnonzero(marked.causes[""] == CAUSES.index(Cause.ROLL)).tolist():
        key = lined.key(row)
        part = {name: lined.value(last, row, name) for name in ("outgoing", "incoming", "measured_on", "gap")}
        told.append(
            f"plan {key['plan']}, nearby {key['nearby']}: {part['outgoing']} -> {part['incoming']} effective "
            f"{key['effective_on']}, measured {part['measured_on']}, gap {_say(part['gap'])}"
        )
    return told


def _say(value: Any) -> str:
    if value is None:
        return "none"
    return f"{value:.10g}" if isinstance(value, float) else str(value)


def _shorten(texts: list[str]) -> tuple[str, ...]:
    unique = list(dict.fromkeys(texts))
    more = len(unique) - _TOLD
    return (*unique[:_TOLD], *([f"and {more} more"] if more > 0 else []))
