"""One cause for every published value that differs between two versions of a market's tables.

Belongs here: which step between two versions made a value what it is, and of what kind that step was. Does
not belong here: how the versions in between are made (`changes.py`).
"""

import math
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import pyarrow as pa

from contracts.layouts import BAR_FIELDS
from contracts.lined_up import LinedUp
from contracts.tables import BARS, FILES, FINDINGS, MARKET_TABLES, REJECTS, ROLLS, SERIES, Table

_TOLERANCE = 1e-9
# Where a row came from, and not what it says.
_ORIGIN = ("file", "line", "offset")


class Cause(StrEnum):
    """Why a published value differs; the gravest first. All but the last four rewrite history."""

    UNEXPLAINED = "unexplained"
    CODE = "code version"
    DESK = "desk change"
    RESTATED = "restated raw row"
    LATE = "late raw row"
    WITHDRAWN = "withdrawn raw row"
    REPAIR = "repair made or withdrawn"
    WAIVER = "waiver"
    ROLL = "roll"
    NEW_SESSION = "new session"
    NEWER_FILE = "same row in a newer file"
    FILE = "file taken in"


CAUSES = tuple(Cause)
REWRITES_HISTORY = CAUSES[: CAUSES.index(Cause.ROLL)]


class Step(StrEnum):
    """What was changed between one version and the next."""

    CODE = "code"
    DESK = "desk"
    REPAIRS = "declared repairs"
    WAIVERS = "waivers"
    RAW = "raw rows of sessions there were"
    SESSIONS = "new sessions"
    FIRST = "the market's first publication"
    TONIGHT = "what is told of tonight's files of a market held back"
    NOTHING = "nothing"


_PLAIN = {
    Step.CODE: Cause.CODE, Step.DESK: Cause.DESK, Step.REPAIRS: Cause.REPAIR, Step.WAIVERS: Cause.WAIVER,
    Step.FIRST: Cause.NEW_SESSION, Step.TONIGHT: Cause.FILE, Step.NOTHING: Cause.UNEXPLAINED,
}  # fmt: skip


@dataclass(frozen=True, eq=False)
class Marked:
    """One table of a market, its versions lined up, with a cause for each value that differs.

    `causes` holds by column (and under "" for rows that came or went) an index into CAUSES, (rows,), -1 where
    nothing differs. The first version is the old publication, the last the new one.
    """

    lined: LinedUp
    causes: dict[str, np.ndarray]

    @property
    def table(self) -> Table:
        """The table it is of."""
        return self.lined.table


def mark_changes(
    versions: list[dict[str, pa.Table]], steps: list[Step], tables: tuple[Table, ...] = MARKET_TABLES
) -> list[Marked]:
    """A cause for every value that differs between the first and the last version of a market's tables.

    `steps[i]` says what was changed from version i to i + 1. Where several steps moved one value, the gravest
    is its cause.
    """
    lined = {table.name: LinedUp(table, [version[table.name] for version in versions]) for table in MARKET_TABLES}
    raised = {at: Raised(lined, at) for at, step in enumerate(steps) if step not in _PLAIN}
    made = [Marked(lined[table.name], _mark(lined[table.name], steps, raised)) for table in tables]
    return [marked for marked in made if any((codes >= 0).any() for codes in marked.causes.values())]


def _mark(side: LinedUp, steps: list[Step], raised: dict[int, "Raised"]) -> dict[str, np.ndarray]:
    table, last = side.table, len(steps)
    came_or_went = side.has(0) != side.has(last)
    causes: dict[str, np.ndarray] = {}
    for name in ("", *(column for column in table.columns if column not in table.key)):
        total = came_or_went if name == "" else side.differs(0, last, name)
        code = np.full(side.rows, -1, dtype=np.int64)
        if total.any():
            for at, step in enumerate(steps):
                moved = side.has(at) != side.has(at + 1) if name == "" else side.differs(at, at + 1, name)
                moved &= total
                if moved.any():
                    cause = _cause_of_step(side, name, step, raised.get(at))
                    code = np.where(moved & ((code < 0) | (cause < code)), cause, code)
            # Two steps that undo each other leave no difference; one that no step made cannot be told.
            code[total & (code < 0)] = CAUSES.index(Cause.UNEXPLAINED)
        causes[name] = code
    return causes


def _cause_of_step(side: LinedUp, column: str, step: Step, raised: "Raised | None") -> np.ndarray:
    """Index into CAUSES of what one step did to each row in one column, (rows,)."""
    table = side.table
    if raised is None:
        cause = _PLAIN[step]
    elif table in (FILES, REJECTS):
        cause = Cause.FILE
    elif table is BARS:
        return raised.of_bars(column, step)
    elif step is Step.RAW:
        # Without a changed bar nothing that is made of bars can change.
        cause = raised.raw or (Cause.FILE if table is FINDINGS else Cause.UNEXPLAINED)
    elif table is SERIES:
        return raised.of_series(column)
    elif table is ROLLS:
        return raised.of_rolls(column)
    else:
        cause = Cause.NEW_SESSION
    return np.full(side.rows, CAUSES.index(cause), dtype=np.int64)


class Raised:
    """What one step that brought raw rows did to the bars, and what follows from it in series and rolls."""

    def __init__(self, lined: dict[str, LinedUp], at: int) -> None:
        self.lined, self.at = lined, at
        bars = lined["bars"]
        self.came = bars.has(at + 1) & ~bars.has(at)
        self.went = bars.has(at) & ~bars.has(at + 1)
        self.restated = np.zeros(bars.rows, dtype=bool)
        for name in BAR_FIELDS:
            self.restated |= bars.differs(at, at + 1, name)
        self.recleaned = bars.differs(at, at + 1, "clean_settle") | bars.differs(at, at + 1, "status")
        self.recleaned &= ~self.restated
        kinds = ((Cause.RESTATED, self.restated), (Cause.LATE, self.came), (Cause.WITHDRAWN, self.went))
        self.raw = next((kind for kind, rows in kinds if rows.any()), None)

    def of_bars(self, column: str, step: Step) -> np.ndarray:
        """The cause of changes in a column of the bars."""
        rows = len(self.came)
        cause = np.full(rows, CAUSES.index(Cause.REPAIR), dtype=np.int64)
        if column == "":
            came = Cause.LATE if step is Step.RAW else Cause.NEW_SESSION
            return np.where(self.came, CAUSES.index(came), CAUSES.index(Cause.WITHDRAWN))
        if column in _ORIGIN:
            cause[:] = CAUSES.index(Cause.NEWER_FILE)
        cause[self.restated] = CAUSES.index(Cause.RESTATED)
        return cause

    def of_series(self, column: str) -> np.ndarray:
        """The cause of changes that new sessions made in a column of the series."""
        series = self.lined["series"]
        cause = np.full(series.rows, CAUSES.index(self._otherwise()), dtype=np.int64)
        old, new = self.at, self.at + 1
        if column == "":
            ends = self._last_sessions(series, old)
            is_later = series.numbers(new, "session") > ends
            return np.where(is_later & series.has(new), CAUSES.index(Cause.NEW_SESSION), cause)
        if column == "findings":
            cause[:] = CAUSES.index(Cause.NEW_SESSION)
        if column in ("shift", "back_adjusted", "scale", "ratio_adjusted", "growth"):
            cause[self._is_rolled(series, column)] = CAUSES.index(Cause.ROLL)
        return cause

    def of_rolls(self, column: str) -> np.ndarray:
        """The cause of changes that new sessions made in a column of the ledger."""
        rolls = self.lined["rolls"]
        cause = np.full(rolls.rows, CAUSES.index(self._otherwise()), dtype=np.int64)
        if column == "impact_sessions":
            cause[:] = CAUSES.index(Cause.NEW_SESSION)
        if column == "":
            series = self.lined["series"]
            end = np.nanmax(series.numbers(self.at, "session"), initial=-np.inf)
            is_later = rolls.numbers(self.at + 1, "effective_on") > end
            cause[is_later & rolls.has(self.at + 1)] = CAUSES.index(Cause.ROLL)
        return cause

    def _otherwise(self) -> Cause:
        """What else than sessions that came can have changed a price of a session there was."""
        return Cause.REPAIR if self.recleaned.any() else Cause.UNEXPLAINED

    def _last_sessions(self, series: LinedUp, version: int) -> np.ndarray:
        """The last session of each row's series in a version, -inf where it has none."""
        strands, sessions = strands_of(series), series.numbers(version, "session")
        ends: dict[str, float] = {}
        for strand, session in zip(strands, sessions, strict=True):
            if not math.isnan(session):
                ends[strand] = max(ends.get(strand, -math.inf), session)
        return np.array([ends.get(strand, -math.inf) for strand in strands])

    def _is_rolled(self, series: LinedUp, column: str) -> np.ndarray:
        """Where a column moved by just what the ledger's new rows make of it."""
        old, new = self.at, self.at + 1
        rolls = self.lined["rolls"]
        fresh = np.flatnonzero(rolls.has(new) & ~rolls.has(old))
        gaps, ratios = rolls.numbers(new, "gap"), rolls.numbers(new, "ratio")
        of_rolls = strands_of(rolls)
        gap: dict[str, list[float]] = {}
        ratio: dict[str, list[float]] = {}
        for row in fresh:
            gap.setdefault(of_rolls[row], []).append(gaps[row])
            ratio.setdefault(of_rolls[row], []).append(ratios[row])
        strands = strands_of(series)
        sums = {strand: math.fsum(parts) for strand, parts in gap.items()}
        products = {strand: math.prod(parts) for strand, parts in ratio.items()}
        moved_by = np.array([sums.get(strand, 0.0) for strand in strands])
        scaled_by = np.array([products.get(strand, 1.0) for strand in strands])
        before, after = series.numbers(old, column), series.numbers(new, column)
        if column in ("shift", "back_adjusted"):
            expected = before + moved_by
        elif column == "growth":
            expected = np.where(np.isnan(scaled_by), np.nan, before)
        else:
            expected = before * scaled_by
        gone = np.isnan(expected) & np.isnan(after)
        with np.errstate(invalid="ignore"):
            near = np.abs(after - expected) <= _TOLERANCE * np.maximum(1.0, np.abs(expected))
        return (near | gone) & np.array([strand in sums for strand in strands], dtype=bool)


def strands_of(side: LinedUp) -> list[str]:
    """Plan and nearby of each row as one text."""
    names: list[str] = [""] * side.rows
    for version in range(len(side.versions)):
        has = side.has(version)
        plans, nearbys = side.column(version, "plan").to_pylist(), side.column(version, "nearby").to_pylist()
        for row in np.flatnonzero(has):
            names[row] = f"{plans[row]} {nearbys[row]}"
    return names
