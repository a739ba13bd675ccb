"""Published price -> arithmetic, rolls, repair, raw line.

Belongs here: telling where one price comes from, from what is published and the archive alone. Does not
belong here: computing a price anew (`deep.py`), finding raw rows and declared keys again (`traced_rows.py`),
the words (`trace_text.py`).
"""

import datetime
import difflib
import math
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from catalog.declarations import Desk
from catalog.kept_desk import desk_of
from catalog.places import Places, table_path
from catalog.standing import find_snapshot, origin_of, read_manifest
from catalog.traced_rows import RawRows, RawVersion, Rule, repair_rule, rules_behind
from contracts.errors import StoreUnsound, UsageError
from contracts.findings import Kind

# Findings that name another row for the same contract and session.
_OTHER_ROWS = frozenset({Kind.RESTATED, Kind.CONFLICTING_ROWS})


@dataclass(frozen=True)
class Leg:
    """One held contract on the session: its weight, its clean settle, and the raw row it comes from.

    `session` is the session of the settle, earlier than the one asked for where it is carried; `rejected` then
    holds the rows of its file that could not be read since. `versions` are all texts the raw row ever had;
    `repair` is the key that declares a person's repair of it, `scale` what its prices were declared to be multiplied
    by to stand on the market's present scale.
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
    versions: tuple[RawVersion, ...] = ()
    repair: Rule | None = None
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
    """Where one published price comes from. `rules` are the keys of the desk that set how it is made."""

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
    rules: tuple[Rule, ...] = ()

    def as_json(self) -> dict[str, Any]:
        """The trace as plain values."""
        legs = [
            {
                **_plain(vars(leg)),
                "versions": [vars(version) for version in leg.versions],
                "repair": vars(leg.repair) if leg.repair is not None else None,
            }
            for leg in self.legs
        ]
        return {
            "market": self.market, "plan": self.plan, "nearby": self.nearby, "session": self.session.isoformat(),
            "snapshot": self.snapshot, "desk": self.desk, "code": self.code, "row": _plain(self.row),
            "legs": legs,
            "later_rolls": [_plain(vars(roll)) for roll in self.later],
            "rolled_here": [_plain(vars(roll)) for roll in self.decided_here],
            "rules": [vars(rule) for rule in self.rules],
        }  # fmt: skip


def _plain(values: dict[str, Any]) -> dict[str, Any]:
    return {name: value.isoformat() if isinstance(value, datetime.date) else value for name, value in values.items()}


def trace_price(
    places: Places, market: str, session: datetime.date, plan: str | None = None, nearby: int = 1,
    snapshot: str | None = None,
) -> Trace:  # fmt: skip
    """Tell where the price of a market on a session comes from.

    Without a plan the first that the market declares is taken; `snapshot` is a name or number. Raises
    UsageError for a market, plan, nearby, session or snapshot that is not there, naming what is;
    StoreUnsound where the archive does not hold what the snapshot names.
    """
    return Tracer(places, market, snapshot).trace(session, plan, nearby)


class Tracer:
    """Traces prices of one market of one snapshot; what it has read it keeps."""

    def __init__(self, places: Places, market: str, snapshot: str | None = None) -> None:
        self.places, self.market = places, market
        self.manifest = read_manifest(places, find_snapshot(places, snapshot) if snapshot is not None else None)
        if table_path("series", market) not in self.manifest.files:
            known = list(self.manifest.markets)
            raise UsageError(f"no market {market!r} in snapshot {self.manifest.name}; {_nearest(market, known)}")

    def trace(self, session: datetime.date, plan: str | None = None, nearby: int = 1) -> Trace:
        """Tell where one price comes from; raises UsageError for a plan, nearby or session that is not there."""
        plans = sorted(set(self._series["plan"].unique().to_pylist()))
        name = plan if plan is not None else self.manifest.markets[self.market].facts.get("first_plan", plans[0])
        if name not in plans:
            raise UsageError(f"{self.market} has no plan {name!r}; {_nearest(name, plans)}")
        ours = self._series.filter((pc.field("plan") == name) & (pc.field("nearby") == nearby))
        if not ours.num_rows:
            known = sorted(set(self._series.filter(pc.field("plan") == name)["nearby"].to_pylist()))
            raise UsageError(f"{self.market}, plan {name}, has no nearby {nearby}; it has {known}")
        row = _row_of(ours, session, self.market)
        rolls = self._rolls.filter((pc.field("plan") == name) & (pc.field("nearby") == nearby))
        ledger = [_later_roll(entry) for entry in rolls.to_pylist()]
        weights = [(row["contract"], 1.0 - row["incoming_weight"])]
        if row["incoming"] is not None:
            weights.append((row["incoming"], row["incoming_weight"]))
        legs = tuple(self._leg(contract, weight, session) for contract, weight in weights)
        return Trace(
            self.market, name, nearby, session, self.manifest.name, self.manifest.desk, self.manifest.code, row, legs,
            tuple(roll for roll in ledger if roll.effective_on > session),
            tuple(roll for roll in ledger if roll.effective_on == session),
            self._rules(name, session, legs),
        )  # fmt: skip

    def _table(self, name: str) -> pa.Table:
        return pq.read_table(self.places.snapshot(self.manifest.name) / table_path(name, self.market))

    @cached_property
    def _series(self) -> pa.Table:
        return self._table("series")

    @cached_property
    def _rolls(self) -> pa.Table:
        return self._table("rolls")

    @cached_property
    def _bars(self) -> dict[str, list[dict[str, Any]]]:
        """Bars by contract, in order of session."""
        bars: dict[str, list[dict[str, Any]]] = {}
        for row in self._table("bars").to_pylist():
            bars.setdefault(row["contract"], []).append(row)
        return bars

    @cached_property
    def _findings(self) -> dict[str | None, list[dict[str, Any]]]:
        findings: dict[str | None, list[dict[str, Any]]] = {}
        for row in self._table("findings").to_pylist():
            findings.setdefault(row["contract"], []).append(row)
        return findings

    @cached_property
    def _rejects(self) -> list[dict[str, Any]]:
        rows: list[dict[str, Any]] = self._table("rejects").to_pylist()
        return rows

    @cached_property
    def _files(self) -> pa.Table:
        """Every version of every file that may hold rows of the market; those of several are told by one of them."""
        folder = self.places.snapshot(self.manifest.name)
        tables = [pq.read_table(folder / path) for path in self.manifest.files if path.startswith("files/")]
        files = pa.concat_tables(tables)
        return files.filter(pc.field("market").is_null() | (pc.field("market") == self.market))

    @cached_property
    def _desk(self) -> Desk | None:
        """The desk that made the market's tables; None for snapshots from before desks were kept."""
        made = origin_of(self.places, self.manifest, self.market)
        return desk_of(self.places, made) if made.desk_files else None

    @cached_property
    def _raw(self) -> RawRows | None:
        return RawRows(self.places, self._desk, self.market, self._files) if self._desk is not None else None

    def _rules(self, plan: str, session: datetime.date, legs: tuple[Leg, ...]) -> tuple[Rule, ...]:
        if self._desk is None:
            return ()
        used = {leg.file for leg in legs}
        layouts = {row["layout"] for row in self._files.to_pylist() if row["file"] in used and row["layout"]}
        return rules_behind(self._desk, self.market, plan, layouts, session)

    def _leg(self, contract: str, weight: float, session: datetime.date) -> Leg:
        rows = [
            row
            for row in self._bars.get(contract, ())
            if row["session"] <= session and row["status"] != "not a session"
        ]
        priced = [row for row in rows if row["clean_settle"] is not None]
        on_day = [row for row in rows if row["session"] == session]
        # What arrived on the day itself comes first, even where it was masked and an earlier settle is carried.
        row = priced[-1] if priced else (on_day[-1] if on_day else None)
        if row is None:
            return Leg(contract, weight, None, None, None, "missing", None, None, None, None, ())
        days = {row["session"], session}
        about = [
            entry["message"]
            for entry in self._findings.get(contract, ())
            if entry["session"] in days and (entry["field"] in ("settle", None) or entry["kind"] in _OTHER_ROWS)
        ]
        path = text = None
        versions: tuple[RawVersion, ...] = ()
        if self._raw is not None:
            found = self._raw.text_at(row["file"], contract, row["session"], row["line"])
            if found is None:
                place = f"{contract} {row['session']}"
                raise StoreUnsound(
                    f"{place}: line {row['line']} of {row['file']} does not hold it; run ropewalk verify"
                )
            path, text = found
            versions = self._raw.versions(contract, row["session"])
        status = row["status"] if row["session"] == session else f"carried from {row['session']}"
        return Leg(
            contract, weight, row["clean_settle"], row["session"], row["settle"], status, path, row["file"],
            row["line"], text, tuple(about), self._rejected_since(row, path) if row["session"] < session else (),
            versions, repair_rule(self._desk, contract, row["session"]) if self._desk is not None else None,
            self._scale_on(row["session"]),
        )  # fmt: skip

    def _scale_on(self, session: datetime.date) -> float:
        if self._desk is None:
            return 1.0
        changes = self._desk.markets[self.market].rescaled
        return math.prod(change.multiply for change in changes if session < change.before)

    def _rejected_since(self, row: dict[str, Any], path: str | None) -> tuple[str, ...]:
        """Rows of the bar's file that could not be read, between it and the file's next bar."""
        lines = [bar["line"] for bars in self._bars.values() for bar in bars if bar["file"] == row["file"]]
        following = min((line for line in lines if line > row["line"]), default=None)
        return tuple(
            f"{path}:{entry['line']}: {entry['reason']}: {entry['text'][:200]!r}"
            for entry in self._rejects
            if entry["file"] == row["file"]
            and entry["line"] > row["line"]
            and (following is None or entry["line"] < following)
        )


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
