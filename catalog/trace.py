"""Published price -> arithmetic, rolls, repair, raw line.

Belongs here: telling where one price comes from, from what is published and the archive alone. Does not
belong here: computing a price anew (`deep.py`).
"""

import datetime
import difflib
import re
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from catalog.archive import read_archived
from catalog.places import Places, table_path
from catalog.store import Manifest, current_snapshot, read_manifest
from contracts.errors import StoreUnsound, UsageError
from contracts.findings import Kind
from contracts.unpack import unpack

# Findings that name another row for the same contract and session.
_OTHER_ROWS = frozenset({Kind.RESTATED, Kind.CONFLICTING_ROWS})
_LINE_END = re.compile(rb"\r\n|\n|\r")


@dataclass(frozen=True)
class Leg:
    """One held contract on the session: its weight, its clean settle, and the raw row it comes from.

    `session` is the session of the settle, earlier than the one asked for where it is carried; `rejected` then
    holds the rows of its file that could not be read since. `scale` is the factor from the prices in the file to the
    market's present scale, 1 where that never changed.
    """

    contract: str
    weight: float
    settle: float | None
    session: datetime.date | None
    reported: float | None
    status: str
    path: str | None
    file: str | None
    line: int | None
    text: str | None
    findings: tuple[str, ...]
    rejected: tuple[str, ...] = ()
    scale: float = 1.0


@dataclass(frozen=True)
class LaterRoll:
    """A roll after the session: it shifts and scales the price."""

    effective_on: datetime.date
    measured_on: datetime.date | None
    decided_on: datetime.date
    trigger: str
    step: int
    outgoing: str
    incoming: str
    outgoing_settle: float | None
    incoming_settle: float | None
    weight_before: float
    weight_after: float
    gap: float | None
    ratio: float | None


@dataclass(frozen=True)
class Trace:
    """Where one published price comes from."""

    market: str
    plan: str
    nearby: int
    session: datetime.date
    snapshot: str
    desk: str
    code: str
    row: dict[str, Any]
    legs: tuple[Leg, ...]
    later: tuple[LaterRoll, ...]
    decided_here: tuple[LaterRoll, ...] = field(default=())

    def as_json(self) -> dict[str, Any]:
        """The trace as plain values."""
        return {
            "market": self.market, "plan": self.plan, "nearby": self.nearby, "session": self.session.isoformat(),
            "snapshot": self.snapshot, "desk": self.desk, "code": self.code, "row": _plain(self.row),
            "legs": [_plain(vars(leg)) for leg in self.legs],
            "later_rolls": [_plain(vars(roll)) for roll in self.later],
            "rolled_here": [_plain(vars(roll)) for roll in self.decided_here],
        }  # fmt: skip

    def lines(self) -> list[str]:
        """The trace as text: the sum first, then what made each part of it."""
        row = self.row
        told = [f"{self.market}, {self.session}, plan {self.plan}, nearby {self.nearby}: {row['status']}"]
        told += _settle_lines(row, self.legs)
        if row["settle"] is not None:
            told += _sum_lines(row, self.later)
        for roll in self.decided_here:
            told += ["", f"rolled on this session: {roll.outgoing} -> {roll.incoming}", *_roll_lines(roll)]
        if self.later:
            told += ["", f"{len(self.later)} later {'roll' if len(self.later) == 1 else 'rolls'}, the next first:"]
            told += [
                f"  {roll.effective_on}  {roll.outgoing} -> {roll.incoming}  measured {roll.measured_on}: "
                f"{_say(roll.incoming_settle)} - {_say(roll.outgoing_settle)}{_weights(roll)} = {_say(roll.gap)}  "
                f"ratio {_say(roll.ratio)}  ({roll.trigger}, decided {roll.decided_on})"
                for roll in self.later
            ]
        for leg in self.legs:
            told += ["", *_leg_lines(leg)]
        return [*told, "", f"snapshot {self.snapshot}, desk {self.desk[:12]}, code {self.code[:12]}"]


def _say(value: float | None) -> str:
    """A number as short as it is exact to ten decimals."""
    if value is None:
        return "none"
    text = f"{value:.10f}".rstrip("0").rstrip(".")
    return "0" if text == "-0" else text


def _settle_lines(row: dict[str, Any], legs: tuple[Leg, ...]) -> list[str]:
    if row["settle"] is None:
        return ["  settle          none: no price of the held contract for more than three sessions"]
    if len(legs) == 1:
        return [f"  settle          {_say(row['settle'])}  ({legs[0].contract})"]
    parts = " + ".join(f"{_say(leg.weight)} x {_say(leg.settle)} ({leg.contract})" for leg in legs)
    return [f"  settle          {parts} = {_say(row['settle'])}"]


def _sum_lines(row: dict[str, Any], later: tuple[LaterRoll, ...]) -> list[str]:
    settle, shift, scale = row["settle"], row["shift"], row["scale"]
    told = []
    if shift is None:
        told.append("  back_adjusted   none: a later roll could not be measured")
    else:
        gaps = f"  (sum of {len(later)} gaps)" if later else "  (no later roll)"
        told.append(f"  shift           {_say(shift)}{gaps}")
        told.append(f"  back_adjusted   {_say(settle)} + {_say(shift)} = {_say(row['back_adjusted'])}")
    if scale is None:
        told.append("  ratio_adjusted  none: a later roll has no ratio")
    else:
        told.append(f"  ratio_adjusted  {_say(settle)} x {_say(scale)} = {_say(row['ratio_adjusted'])}")
    return told


def _weights(roll: LaterRoll) -> str:
    share = roll.weight_after - roll.weight_before
    return "" if share == 1.0 else f", x {_say(share)}"


def _roll_lines(roll: LaterRoll) -> list[str]:
    return [
        f"  decided {roll.decided_on} by {roll.trigger}, measured {roll.measured_on}, effective {roll.effective_on}",
        f"  gap {_say(roll.incoming_settle)} - {_say(roll.outgoing_settle)}{_weights(roll)} = {_say(roll.gap)}, "
        f"ratio {_say(roll.ratio)}",
    ]


def _leg_lines(leg: Leg) -> list[str]:
    if leg.session is None:
        return [f"{leg.contract}: no bar"]
    told = [f"{leg.contract} on {leg.session}: reported {_say(leg.reported)}, used {_say(leg.settle)} ({leg.status})"]
    if leg.scale != 1.0 and leg.reported is not None:
        on_scale = _say(leg.reported * leg.scale)
        told.append(f"  on the market's present scale: {_say(leg.reported)} x {_say(leg.scale)} = {on_scale}")
    told += [f"  {message}" for message in leg.findings]
    if leg.path is not None:
        told += [f"  {leg.path}:{leg.line}", f"  SHA-256 {leg.file}", f"  {leg.text}"]
    told += [f"  rejected since: {rejected}" for rejected in leg.rejected]
    return told


def _plain(values: dict[str, Any]) -> dict[str, Any]:
    return {name: value.isoformat() if isinstance(value, datetime.date) else value for name, value in values.items()}


def trace_price(
    places: Places, market: str, session: datetime.date, plan: str | None = None, nearby: int = 1,
    snapshot: str | None = None,
) -> Trace:  # fmt: skip
    """Tell where the price of a market on a session comes from.

    Without a plan the first that the market declares is taken. Raises UsageError for a market, plan,
    nearby, session or snapshot that is not there, naming what is.
    """
    manifest = _open(places, snapshot)
    folder = places.snapshot(manifest.name)
    if table_path("series", market) not in manifest.files:
        raise UsageError(
            f"no market {market!r} in snapshot {manifest.name}; {_nearest(market, list(manifest.markets))}"
        )
    series = pq.read_table(folder / table_path("series", market))
    plans = sorted(set(series["plan"].to_pylist()))
    name = plan if plan is not None else manifest.markets[market].facts.get("first_plan", plans[0])
    if name not in plans:
        raise UsageError(f"{market} has no plan {name!r}; {_nearest(name, plans)}")
    ours = series.filter((pc.field("plan") == name) & (pc.field("nearby") == nearby))
    if not ours.num_rows:
        known = sorted(set(series.filter(pc.field("plan") == name)["nearby"].to_pylist()))
        raise UsageError(f"{market}, plan {name}, has no nearby {nearby}; it has {known}")
    row = _row_of(ours, session, market)
    rolls = pq.read_table(folder / table_path("rolls", market))
    rolls = rolls.filter((pc.field("plan") == name) & (pc.field("nearby") == nearby))
    ledger = [_later_roll(entry) for entry in rolls.to_pylist()]
    bars = pq.read_table(folder / table_path("bars", market))
    findings = pq.read_table(folder / table_path("findings", market))
    paths = _paths(folder, manifest)
    weights = [(row["contract"], 1.0 - row["incoming_weight"])]
    if row["incoming"] is not None:
        weights.append((row["incoming"], row["incoming_weight"]))
    rejects = pq.read_table(folder / table_path("rejects", market))
    legs = tuple(
        _leg(places, bars, findings, rejects, paths, contract, weight, session) for contract, weight in weights
    )
    return Trace(
        market, name, nearby, session, manifest.name, manifest.desk, manifest.code, row, legs,
        tuple(roll for roll in ledger if roll.effective_on > session),
        tuple(roll for roll in ledger if roll.effective_on == session),
    )  # fmt: skip


def _open(places: Places, snapshot: str | None) -> Manifest:
    name = snapshot if snapshot is not None else current_snapshot(places)
    if name is None:
        raise UsageError(f"{places.store}: nothing is published here yet; run ropewalk build first")
    if not places.snapshot(name).is_dir():
        there = sorted(path.name for path in places.snapshots.iterdir() if not path.name.startswith("."))
        raise UsageError(f"no snapshot {name!r}; {_nearest(name, there)}")
    return read_manifest(places, name)


def _nearest(seen: str, known: list[str]) -> str:
    near = difflib.get_close_matches(seen, known, n=3, cutoff=0.4)
    return f"nearest: {', '.join(near)}" if near else f"there are: {', '.join(known[:20])}"


def _row_of(series: pa.Table, session: datetime.date, market: str) -> dict[str, Any]:
    found = series.filter(pc.field("session") == pa.scalar(session, pa.date32()))
    if found.num_rows:
        row: dict[str, Any] = found.to_pylist()[0]
        return row
    days: list[datetime.date] = series["session"].to_pylist()
    before = max((day for day in days if day < session), default=None)
    after = min((day for day in days if day > session), default=None)
    near = ", ".join(str(day) for day in (before, after) if day is not None)
    raise UsageError(f"{session} is no session of {market} in this series; the nearest are {near}")


def _later_roll(entry: dict[str, Any]) -> LaterRoll:
    return LaterRoll(**{name: entry[name] for name in LaterRoll.__dataclass_fields__})


def _paths(folder: Path, manifest: Manifest) -> dict[str, list[str]]:
    """Paths under which each content arrived."""
    paths: dict[str, list[str]] = {}
    for path in manifest.files:
        if path.startswith("files/"):
            table = pq.read_table(folder / path, columns=["file", "path"])
            for file, where in zip(table["file"].to_pylist(), table["path"].to_pylist(), strict=True):
                paths.setdefault(file, []).append(where)
    return paths


def _leg(
    places: Places, bars: pa.Table, findings: pa.Table, rejects: pa.Table, paths: dict[str, list[str]],
    contract: str, weight: float, session: datetime.date,
) -> Leg:  # fmt: skip
    ours = bars.filter((pc.field("contract") == contract) & (pc.field("session") <= pa.scalar(session, pa.date32())))
    rows = [row for row in ours.to_pylist() if row["status"] != "not a session"]
    priced = [row for row in rows if row["clean_settle"] is not None]
    on_day = [row for row in rows if row["session"] == session]
    # What arrived on the day itself comes first, even where it was masked and an earlier settle is carried.
    row = priced[-1] if priced else (on_day[-1] if on_day else None)
    if row is None:
        return Leg(contract, weight, None, None, None, "missing", None, None, None, None, ())
    days = {row["session"], session}
    about = [
        entry["message"]
        for entry in findings.filter(pc.field("contract") == contract).to_pylist()
        if entry["session"] in days and (entry["field"] in ("settle", None) or entry["kind"] in _OTHER_ROWS)
    ]
    path = paths.get(row["file"], [None])[0]
    text = None if path is None else read_raw_line(places, path, row["file"], row["line"])
    status = row["status"] if row["session"] == session else f"carried from {row['session']}"
    return Leg(
        contract, weight, row["clean_settle"], row["session"], row["settle"], status, path, row["file"], row["line"],
        text, tuple(about), _rejected_since(bars, rejects, row, path) if row["session"] < session else (),
        _scale_of(bars, row["session"]),
    )  # fmt: skip


def _scale_of(bars: pa.Table, session: datetime.date) -> float:
    """Present price over the price in the file, by a bar of the session that stands as reported."""
    same_day = bars.filter(
        (pc.field("session") == pa.scalar(session, pa.date32()))
        & (pc.field("status") == "reported")
        & (pc.field("settle") != 0.0)
    )
    if not same_day.num_rows:
        return 1.0
    return round(float(same_day["clean_settle"][0].as_py()) / float(same_day["settle"][0].as_py()), 12)


def _rejected_since(bars: pa.Table, rejects: pa.Table, row: dict[str, Any], path: str | None) -> tuple[str, ...]:
    """Rows of the bar's file that could not be read, between it and the file's next bar."""
    lines = [line for line in bars.filter(pc.field("file") == row["file"])["line"].to_pylist() if line > row["line"]]
    following = min(lines, default=None)
    return tuple(
        f"{path}:{entry['line']}: {entry['reason']}: {entry['text'][:200]!r}"
        for entry in rejects.filter(pc.field("file") == row["file"]).to_pylist()
        if entry["line"] > row["line"] and (following is None or entry["line"] < following)
    )


def read_raw_line(places: Places, path: str, file: str, line: int) -> str:
    """The physical line of a raw file, as it stands in the archive; raises StoreUnsound where it is not there."""
    text = unpack(read_archived(places, file), path)
    if text[:2] in (b"\xff\xfe", b"\xfe\xff"):
        text = text.decode("utf-16").encode("utf-8")
    lines = _LINE_END.split(text)
    if not 1 <= line <= len(lines):
        raise StoreUnsound(f"{path} ({file}): line {line} is not there, the file has {len(lines)}")
    raw = lines[line - 1]
    try:
        return raw.decode("utf-8-sig" if line == 1 else "utf-8")
    except UnicodeDecodeError:
        return raw.decode("cp1252", errors="replace")
