"""A market's raw files as they would be had no row after a session been written yet, and how a build of them differs.

Belongs here: cutting texts by session, comparing what was already decided. Does not belong here: any rule.
"""

import datetime
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pytest

import contracts.build
from contracts.build import Inputs, build_market
from contracts.impact import Laid
from contracts.intake import RawFile, parse_rows, split_file
from contracts.panel import Panel
from contracts.repairs import Clean
from contracts.sessions import day_number, day_of
from contracts.unpack import line_offsets, settle_codec

Row = dict[str, Any]
# Plan and nearby; decided on, outgoing, incoming, trigger.
Chain = tuple[str, int]
Decided = tuple[datetime.date, str, str, str]

# A settle that stands alone is weighed by what follows it, up to so many sessions (contracts/checks/prices.py): until
# then its verdict may change, and with it the clean price and a roll that waits for it. Nothing else may.
WEIGHED_FOR = 3

SERIES = (
    "contract", "incoming", "incoming_weight", "open", "high", "low", "settle", "volume", "open_interest", "change",
    "simple_return", "rolled", "status",
)  # fmt: skip
# What a later day may not change of a bar; its line moves where rows after it stood before it in the file.
REPORTED = ("open", "high", "low", "settle", "volume", "open_interest", "file")
CLEAN = ("clean_settle", "status")
# All of a ledger row but the impact, which counts sessions after it.
LEDGER = (
    "measured_on", "effective_on", "incoming", "weight_before", "weight_after", "outgoing_settle", "incoming_settle",
    "gap", "ratio", "trigger", "outgoing_volume", "incoming_volume", "outgoing_open_interest",
    "incoming_open_interest", "last_trade", "first_notice",
)  # fmt: skip


@dataclass(frozen=True, eq=False)
class Lines:
    """Where the lines of a text begin and end, and the session each belongs to; lines above the rows belong to none.

    A line that is no row, or cannot be read, goes with the row before it.
    """

    ends: np.ndarray
    session: np.ndarray

    def cut(self, text: bytes, day: int) -> bytes | None:
        """The text without the lines of later sessions; None where no row is left."""
        kept = self.session <= day
        if not (kept & (self.session > _NO_SESSION)).any():
            return None
        if kept.all():
            return text
        edges = np.flatnonzero(np.diff(np.concatenate(([False], kept, [False])).astype(np.int8)))
        begins = np.concatenate(([0], self.ends))
        pieces = zip(begins[edges[::2]], begins[edges[1::2]], strict=True)
        return b"".join(text[begin:end] for begin, end in pieces)


_NO_SESSION = -(1 << 40)


class CutMarket:
    """A market's inputs, cut at any session."""

    def __init__(self, inputs: Inputs) -> None:
        self.inputs = inputs
        files = [split_file(raw) for raw in inputs.files]
        rows = parse_rows(files, inputs.market)
        self.lines = [
            _lines(raw, rows.line[rows.source == number], rows.session[rows.source == number])
            for number, raw in enumerate(inputs.files)
        ]

    def until(self, day: datetime.date) -> Inputs:
        """The inputs without any row after a day; a file without a row was not there."""
        files, is_old = [], []
        for raw, old, lines in zip(self.inputs.files, self.inputs.is_old, self.lines, strict=True):
            text = lines.cut(raw.text, day_number(day))
            if text is not None:
                files.append(replace(raw, text=text))
                is_old.append(old)
        return replace(self.inputs, files=tuple(files), is_old=tuple(is_old))


def _lines(raw: RawFile, line: np.ndarray, session: np.ndarray) -> Lines:
    codec = settle_codec(raw.text, raw.layout.encoding)
    count = raw.text.count(b"\n") + raw.text.count(b"\r") + 1
    ends = np.array(line_offsets(raw.text, codec, list(range(2, count + 2))), dtype=np.int64)
    by_line = np.full(count, _NO_SESSION)
    order = np.argsort(line, kind="stable")
    for number, (first, day) in enumerate(zip(line[order], session[order], strict=True)):
        following = line[order][number + 1] if number + 1 < len(line) else count + 1
        by_line[first - 1 : following - 1] = day
    return Lines(ends, by_line)


@dataclass(frozen=True, eq=False)
class Known:
    """What a build says: the sessions with any settle, its tables, and every decision, in effect or not."""

    sessions: list[datetime.date]
    tables: dict[str, pa.Table]
    decisions: dict[Chain, list[Decided]]


def build_known(inputs: Inputs) -> Known:
    """Build a market in memory and keep what the comparison needs."""
    decisions: dict[Chain, list[Decided]] = {}
    lay_plans = contracts.build.lay_plans

    def remember(panel: Panel, clean: Clean) -> list[Laid]:
        laid = lay_plans(panel, clean)
        for one in laid:
            decisions[(one.name, one.held.nearby)] = [
                (day_of(panel.sessions[d.decided]), panel.contracts[d.outgoing], panel.contracts[d.incoming], d.trigger)
                for d in one.held.decisions
            ]
        return laid

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(contracts.build, "lay_plans", remember)
        tables = build_market(inputs).tables
    bars = tables["bars"]
    priced = bars.filter((pc.field("status") != "not a session") & pc.field("settle").is_valid())
    sessions = sorted(priced["session"].unique().to_pylist())
    return Known(sessions, {name: tables[name] for name in ("bars", "series", "rolls")}, decisions)


@dataclass(frozen=True)
class Compared:
    """Differences that may not be, in words; and how many rows differ for a verdict that was still open."""

    wrong: list[str]
    rows: int
    open_cells: int
    open_rows: int

    def __add__(self, other: "Compared") -> "Compared":
        return Compared(
            self.wrong + other.wrong,
            self.rows + other.rows,
            self.open_cells + other.open_cells,
            self.open_rows + other.open_rows,
        )


def compare_known(code: str, day: datetime.date, then: Known, now: Known) -> Compared:
    """Hold what was known on a day against what the whole files say of the time up to it."""
    end = then.sessions[-1]
    settled = then.sessions[-1 - WEIGHED_FOR] if len(then.sessions) > WEIGHED_FOR else datetime.date.min
    wrong: list[str] = []
    newest = pc.max(then.tables["bars"]["session"]).as_py()
    if newest > day:
        wrong.append(f"{code} cut at {day}: a bar of {newest}")
    open_cells: set[tuple[str, datetime.date]] = set()
    rows, changed = _changed(then, now, "bars", ("contract", "session"), (*REPORTED, *CLEAN), "session", end)
    for key, one, other in changed:
        reported = _different(one, other, REPORTED)
        cleaned = _different(one, other, CLEAN)
        if not reported:
            open_cells.add(key)
        if reported or key[1] <= settled:
            wrong.append(f"{code} cut at {day}: bar {key[0]} {key[1]}: {reported or cleaned}")

    def is_open(contracts: set[Any], until: datetime.date) -> bool:
        return any(contract in contracts and settled <= session <= until for contract, session in open_cells)

    open_rows = 0
    for table, names, keys, columns, date in (
        ("series", ("contract", "incoming"), ("plan", "nearby", "session"), SERIES, "session"),
        (
            "rolls",
            ("outgoing", "incoming"),
            ("plan", "nearby", "decided_on", "outgoing", "step"),
            LEDGER,
            "effective_on",
        ),
    ):
        count, changed = _changed(then, now, table, keys, columns, date, end)
        rows += count
        for key, one, other in changed:
            both = [row for row in (one, other) if row is not None]
            if is_open({row[name] for row in both for name in names}, max(row[date] for row in both)):
                open_rows += 1
            else:
                wrong.append(f"{code} cut at {day}: {table} {key}: {_different(one, other, columns)}")
    for chain, later in now.decisions.items():
        ours, theirs = (sorted(d for d in some if d[0] <= end) for some in (then.decisions.get(chain, []), later))
        rows += len(ours)
        for decision in sorted(set(ours) ^ set(theirs)):
            if is_open(set(decision[1:3]), end):
                open_rows += 1
            else:
                known = "only then" if decision in ours else "only later"
                wrong.append(f"{code} cut at {day}: plan {chain}: {decision} is decided {known}")
    return Compared(wrong, rows, len(open_cells), open_rows)


def _changed(
    then: Known, now: Known, table: str, key: tuple[str, ...], columns: tuple[str, ...], date: str, end: datetime.date
) -> tuple[int, list[tuple[Any, Row | None, Row | None]]]:
    """Number of rows up to a session, and key and both versions (None where there is none) of those that differ."""
    names = list(dict.fromkeys((*key, *columns, date)))
    cut = [
        known.tables[table].select(names).filter(pc.field(date) <= pa.scalar(end, pa.date32())) for known in (then, now)
    ]
    if cut[0].equals(cut[1]):
        return cut[0].num_rows, []
    ours, theirs = ({tuple(row[name] for name in key): row for row in rows.to_pylist()} for rows in cut)
    pairs = [(name, ours.get(name), theirs.get(name)) for name in sorted(ours.keys() | theirs.keys(), key=str)]
    return cut[0].num_rows, [pair for pair in pairs if pair[1] != pair[2]]


def _different(one: Row | None, other: Row | None, columns: tuple[str, ...]) -> str:
    if one is None or other is None:
        return "only later" if one is None else "only then"
    parts = [f"{name} {one[name]!r}, later {other[name]!r}" for name in columns if one[name] != other[name]]
    return "; ".join(parts)
