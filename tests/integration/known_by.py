"""A market's raw files as they would be had no row after a session been written yet, and how a build of them differs.

Belongs here: cutting texts by session, comparing what was already decided. Does not belong here: any rule.
"""

import datetime
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pytest

import contracts.build
from contracts.build import Built, Inputs, Laid, build_market
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
    """What a build says: its tables by key, and every decision, whether or not it took effect."""

    sessions: list[datetime.date]
    bars: dict[tuple[str, datetime.date], Row]
    series: dict[tuple[str, int, datetime.date], Row]
    rolls: dict[tuple[Any, ...], Row]
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
        built = build_market(inputs)
    return Known(
        _priced_sessions(built),
        {(row["contract"], row["session"]): row for row in built.tables["bars"].to_pylist()},
        {(row["plan"], row["nearby"], row["session"]): row for row in built.tables["series"].to_pylist()},
        {
            (row["plan"], row["nearby"], row["decided_on"], row["outgoing"], row["step"]): row
            for row in built.tables["rolls"].to_pylist()
        },
        decisions,
    )


def _priced_sessions(built: Built) -> list[datetime.date]:
    bars = built.tables["bars"].select(["session", "status", "settle"]).to_pylist()
    return sorted({row["session"] for row in bars if row["status"] != "not a session" and row["settle"] is not None})


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
    wrong = [f"{code} cut at {day}: a bar of {key[1]}" for key in then.bars if key[1] > day]
    open_cells: set[tuple[str, datetime.date]] = set()
    for key, one, other in _pairs(then.bars, now.bars, end, 1):
        where = f"{code} cut at {day}: bar {key[0]} {key[1]}"
        if one is None or other is None:
            wrong.append(f"{where} is in one build only")
            continue
        different = _different(one, other, REPORTED)
        wrong += [f"{where}: {different}"] if different else []
        if (one["clean_settle"], one["status"]) != (other["clean_settle"], other["status"]):
            open_cells.add(key)
            if key[1] <= settled:
                stood = f"{one['clean_settle']} ({one['status']}), later {other['clean_settle']} ({other['status']})"
                wrong.append(f"{where}: {stood}")
    counted = open_rows = 0

    def is_open(contracts: set[Any], since: datetime.date, until: datetime.date) -> bool:
        return any(contract in contracts and since <= session <= until for contract, session in open_cells)

    for key, one, other in _pairs(then.series, now.series, end, 2):
        counted += 1
        different = _different(one, other, SERIES)
        if different:
            held = {row[name] for row in (one, other) if row for name in ("contract", "incoming")}
            if is_open(held, settled, key[2]):
                open_rows += 1
            else:
                wrong.append(f"{code} cut at {day}: series {key}: {different}")
    for key, one, other in _pairs(then.rolls, now.rolls, end, 2):
        if all(row is None or row["effective_on"] > end for row in (one, other)):
            continue
        counted += 1
        one, other = (None if row is None or row["effective_on"] > end else row for row in (one, other))
        different = _different(one, other, LEDGER)
        if different:
            pair = {row[name] for row in (one, other) if row for name in ("outgoing", "incoming")}
            if is_open(pair, settled, end):
                open_rows += 1
            else:
                wrong.append(f"{code} cut at {day}: ledger {key}: {different}")
    for chain, later in now.decisions.items():
        ours, theirs = (sorted(d for d in some if d[0] <= end) for some in (then.decisions.get(chain, []), later))
        counted += len(ours)
        for decision in set(ours) ^ set(theirs):
            if is_open(set(decision[1:3]), settled, end):
                open_rows += 1
            else:
                known = "only then" if decision in ours else "only later"
                wrong.append(f"{code} cut at {day}: plan {chain}: {decision} is decided {known}")
    return Compared(wrong, counted, len(open_cells), open_rows)


def _pairs(
    then: dict[Any, Row], now: dict[Any, Row], end: datetime.date, place: int
) -> Iterator[tuple[Any, Row | None, Row | None]]:
    """Rows of both builds by key, up to the last session of the earlier one; `place` is the date's in the key."""
    for key in sorted(then.keys() | now.keys(), key=str):
        if key[place] <= end:
            yield key, then.get(key), now.get(key)


def _different(one: Row | None, other: Row | None, columns: tuple[str, ...]) -> str:
    if one is None or other is None:
        return "only later" if one is None else "only then"
    parts = [f"{name} {one[name]!r}, later {other[name]!r}" for name in columns if one[name] != other[name]]
    return "; ".join(parts)
