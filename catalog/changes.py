"""Snapshot against snapshot: every published value that differs, each with one cause.

Between the old publication and the new one the same market is built again in steps: with today's code, then
with the keys of the desk that changed, then with what arrived for sessions there were, and then with the
sessions that came. A value's cause is the step that moved it, so that nothing is guessed.

Belongs here: which steps lie between two snapshots, building them, telling the result. Does not belong here:
the kind of each change (`causes.py`), lining rows up (`contracts/lined_up.py`).
"""

import datetime
import hashlib
from collections.abc import Iterator
from dataclasses import dataclass, field, replace

import pyarrow as pa
import pyarrow.parquet as pq

from catalog.archive import Intake, read_register
from catalog.assignment import Assignment, assign_files, code_digest, gather_inputs, package_versions
from catalog.causes import CAUSES, Cause, Marked, Step, mark_changes
from catalog.changed_rows import Group, Row, groups_of, reasons_of, rows_of
from catalog.declarations import Desk
from catalog.kept_desk import changed_keys, desk_of, market_file
from catalog.manifest import Manifest
from catalog.places import Places, table_path
from catalog.standing import find_snapshot, origin_of, read_manifest
from catalog.wishes import until_of
from contracts.build import build_market
from contracts.errors import RopewalkError, StoreUnsound, UsageError
from contracts.tables import BARS, FILES, FINDINGS, MARKET_TABLES, REJECTS, ROLLS, SERIES, TERMS

_PRICE_TABLES = (BARS, SERIES, ROLLS, TERMS)
_TOLD_TABLES = (FINDINGS, REJECTS, FILES)
# A step, the version of the tables it leads to (None: the new publication itself), and what was changed.
_MadeStep = tuple[Step, dict[str, pa.Table] | None, tuple[str, ...]]


@dataclass(frozen=True, eq=False)
class MarketChanges:
    """What differs of one market. `because` says by cause what was changed: keys, raw rows, rolls."""

    market: str
    groups: tuple[Group, ...]
    because: dict[str, tuple[str, ...]]
    marked: tuple[Marked, ...] = ()

    def rows(self, cause: Cause) -> Iterator[Row]:
        """Every value that differs for one cause, in order of table and key."""
        for marked in self.marked:
            yield from rows_of(self.market, marked, cause)


@dataclass(frozen=True)
class Changes:
    """What differs between two snapshots."""

    old: str
    new: str
    markets: tuple[MarketChanges, ...]
    states: tuple[str, ...] = field(default=())

    def rows(self) -> Iterator[Row]:
        """Every value that differs, those that rewrite history first."""
        for cause in CAUSES:
            for market in self.markets:
                yield from market.rows(cause)

    @property
    def groups(self) -> tuple[Group, ...]:
        """All groups, the gravest cause first."""
        groups = [group for market in self.markets for group in market.groups]
        return tuple(sorted(groups, key=lambda group: (CAUSES.index(Cause(group.cause)), group.market, group.table)))

    @property
    def is_explained(self) -> bool:
        """Whether every value has a cause."""
        return all(group.cause != Cause.UNEXPLAINED for group in self.groups)

    @property
    def counts(self) -> dict[str, int]:
        """Values by cause, the gravest first."""
        counts: dict[str, int] = {}
        for group in self.groups:
            counts[group.cause] = counts.get(group.cause, 0) + group.values
        return counts


def compare_snapshots(
    places: Places, old: str | None = None, new: str | None = None, market: str | None = None
) -> Changes:
    """What differs between two snapshots, given by name or number; by default the newest and its parent.

    With `market` only that one. Raises UsageError for a snapshot or market that is not there, StoreUnsound
    where files or archive do not hold together.
    """
    newer = read_manifest(places, find_snapshot(places, new) if new is not None else None)
    if old is None and newer.parent is None:
        raise UsageError(f"snapshot {newer.name} is the first one: there is none before it to compare with")
    older = read_manifest(places, find_snapshot(places, old) if old is not None else newer.parent)
    codes = sorted({*older.markets, *newer.markets})
    if market is not None and market not in codes:
        raise UsageError(f"no market {market} in {older.name} or {newer.name}; expected one of {', '.join(codes)}")
    comparison = _Comparison(places, older, newer)
    found = []
    for code in codes if market is None else [market]:
        changes = comparison.of_market(code)
        if changes is not None:
            found.append(changes)
    states = tuple(line for code in codes if (line := _state_line(code, older, newer)) is not None)
    return Changes(older.name, newer.name, tuple(found), states)


def _state_line(market: str, old: Manifest, new: Manifest) -> str | None:
    before, after = old.markets.get(market), new.markets.get(market)
    one = before.state if before is not None else "not there"
    other = after.state if after is not None else "not there"
    if one == other and (after is None or before is None or before.reason == after.reason):
        return None
    reason = f": {after.reason}" if after is not None and after.reason else ""
    return f"{market}: {one} -> {other}{reason}"


class _Comparison:
    """Two snapshots, and what has to be known of both."""

    def __init__(self, places: Places, old: Manifest, new: Manifest) -> None:
        self.places, self.old, self.new = places, old, new
        self.arrivals = read_register(places)
        self._desks: dict[str, Desk] = {}
        self._assigned: dict[tuple[int, str], Assignment] = {}

    def of_market(self, market: str) -> MarketChanges | None:
        """What differs of one market; None where nothing does."""
        paths = [table_path(table.name, market) for table in MARKET_TABLES]
        first, last = ([manifest.files.get(path) for path in paths] for manifest in (self.old, self.new))
        if first == last:
            return None
        before, after = self._read(self.old, market), self._read(self.new, market)
        versions, steps, because = [before], [], {}
        for step, tables, reasons in self._steps(market):
            if tables is not None:
                versions.append(tables)
            steps.append(step)
            because[step] = reasons
        versions.append(after)
        marked = mark_changes(versions, steps, _PRICE_TABLES if self._is_held_back(market) else MARKET_TABLES)
        if self._is_held_back(market):
            # Prices are those of the last good night; findings, rejects and files are told anew every night.
            marked += mark_changes([before, after], [Step.TONIGHT], _TOLD_TABLES)
        groups = tuple(group for each in marked for group in groups_of(market, each))
        if not groups:
            # The same values in other bytes: the stamp of desk or code alone differs.
            return None
        return MarketChanges(market, groups, reasons_of(marked, because), tuple(marked))

    def _is_held_back(self, market: str) -> bool:
        verdicts = (self.old.markets.get(market), self.new.markets.get(market))
        return any(verdict is not None and verdict.state != "published" for verdict in verdicts)

    def _read(self, manifest: Manifest, market: str) -> dict[str, pa.Table]:
        """A market's published tables, checked against the manifest; empty ones where it was not there."""
        tables = {}
        for table in MARKET_TABLES:
            path = table_path(table.name, market)
            stored = manifest.files.get(path)
            if stored is None:
                tables[table.name] = table.schema.empty_table()
                continue
            content = (self.places.snapshot(manifest.name) / path).read_bytes()
            if hashlib.sha256(content).hexdigest() != stored.sha256:
                raise StoreUnsound(f"{manifest.name}/{path}: does not hash to what was recorded; run ropewalk verify")
            tables[table.name] = pq.read_table(pa.BufferReader(content))
        return tables

    def _desk(self, manifest: Manifest) -> Desk:
        if manifest.name not in self._desks:
            self._desks[manifest.name] = desk_of(self.places, manifest)
        return self._desks[manifest.name]

    def _assign(self, desk: Desk, intake: int) -> Assignment:
        key = (intake, desk.digest)
        if key not in self._assigned:
            arrivals = tuple(arrival for arrival in self.arrivals if arrival.taken_in <= intake)
            self._assigned[key] = assign_files(desk, Intake(intake, 0, arrivals, ()), self.places)
        return self._assigned[key]

    def _files(self, market: str, desk: Desk, intake: int) -> list[tuple[str, str]]:
        return [(entry.path, entry.file) for entry in self._assign(desk, intake).files[market]]

    def _build(self, market: str, desk: Desk, intake: int, until: datetime.date | None = None) -> dict[str, pa.Table]:
        inputs = gather_inputs(desk, market, self._assign(desk, intake).files[market], self.places)
        try:
            return build_market(replace(inputs, until=until)).tables
        except (RopewalkError, ValueError) as error:
            raise StoreUnsound(f"{market}: a step between the two snapshots cannot be built: {error}") from error

    def _steps(self, market: str) -> Iterator[_MadeStep]:
        """The steps between the two publications, the version each leads to (None: the new one), and why."""
        if market not in self.old.markets or market not in self.new.markets:
            yield Step.DESK, None, (f"{market} {'added' if market in self.new.markets else 'removed'}",)
            return
        old, new = (origin_of(self.places, manifest, market) for manifest in (self.old, self.new))
        if table_path("series", market) not in old.files:
            yield Step.FIRST, None, ()
            return
        if old.name == new.name:
            yield Step.NOTHING, None, ()
            return
        present, target = self._desk(old), self._desk(new)
        made_here = (code_digest(), package_versions())
        old_until, new_until = until_of(old, market), until_of(new, market)
        if (old.code, old.packages) != made_here:
            yield Step.CODE, self._build(market, present, old.intake, old_until), _code_reasons(old, *made_here)
        for step, desk, reasons in _desk_steps(present, target, market):
            yield step, self._build(market, desk, old.intake, old_until), reasons
        is_same = self._files(market, target, old.intake) == self._files(market, target, new.intake)
        if not is_same or old_until != new_until:
            end = datetime.date.fromisoformat(old.markets[market].facts["last_session"])
            yield Step.RAW, self._build(market, target, new.intake, until=end), ()
            if (new.code, new.packages) == made_here:
                yield Step.SESSIONS, None, ()
                return
            yield Step.SESSIONS, self._build(market, target, new.intake, new_until), ()
        is_ours = (new.code, new.packages) == made_here
        yield (Step.NOTHING, None, ()) if is_ours else (Step.CODE, None, _code_reasons(new, *made_here))


def _code_reasons(made: Manifest, code: str, packages: dict[str, str]) -> tuple[str, ...]:
    """Why code or packages of today make other values than those that made a snapshot."""
    reasons = [] if made.code == code else [f"code {made.code[:12]} of snapshot {made.name}, {code[:12]} today"]
    names = [name for name in packages if made.packages.get(name) != packages[name]]
    reasons += [f"{name} {made.packages.get(name)} in snapshot {made.name}, {packages[name]} today" for name in names]
    return tuple(reasons)


def _desk_steps(old: Desk, new: Desk, market: str) -> Iterator[tuple[Step, Desk, tuple[str, ...]]]:
    """The desks between two, one part after the other taken from the new one, with the keys that changed."""
    layouts = sorted(name for name in {**old.texts, **new.texts} if name.startswith("layouts/"))
    keys = [key for name in ("desk.toml", *layouts) for key in changed_keys(old, new, name)]
    desk = old
    if keys:
        desk = replace(
            desk, quality=new.quality, gates=new.gates, look_backs=new.look_backs, layouts=new.layouts,
            digest=f"{old.digest} {new.digest} 1",
        )  # fmt: skip
        yield Step.DESK, desk, tuple(keys)
    if old.markets[market] != new.markets[market] or list(old.markets[market].plans) != list(new.markets[market].plans):
        names = {name for name in (market_file(old, market), market_file(new, market)) if name is not None}
        keys = [key for name in sorted(names) for key in changed_keys(old, new, name)]
        desk = replace(
            desk, markets={**desk.markets, market: new.markets[market]}, digest=f"{old.digest} {new.digest} 2 {market}"
        )
        yield Step.DESK, desk, tuple(keys)
    parts = (
        (Step.REPAIRS, "repairs/", old.repairs_of(market) != new.repairs_of(market), {"repairs": new.repairs}),
        (Step.WAIVERS, "waivers", old.waivers_for(market) != new.waivers_for(market), {"waivers": new.waivers}),
    )
    for step, start, is_changed, part in parts:
        if is_changed:
            names = {name for name in {**old.texts, **new.texts} if name.startswith(start)}
            keys = [key for name in sorted(names) for key in changed_keys(old, new, name)]
            # Neither decides which file is whose, so that the assignment of the last desk is good for this one.
            desk = replace(desk, **part)
            yield step, desk, tuple(keys)
