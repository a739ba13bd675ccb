"""Every published number of a snapshot, derived again from archive, desk and code.

Belongs here: building each market anew in memory and comparing bytes. Does not belong here: hashing what is
there (`verify.py`).
"""

import tempfile
from dataclasses import replace
from pathlib import Path

import pyarrow.parquet as pq

from catalog.archive import Intake, read_register
from catalog.assignment import assign_files, code_digest, gather_inputs, table_stamp
from catalog.declarations import Desk
from catalog.kept_desk import changed_desk, desk_of
from catalog.places import Places, hash_file, table_path
from catalog.standing import current_snapshot, read_manifest
from catalog.store import write_table
from catalog.wishes import until_of
from contracts.build import build_market
from contracts.errors import RopewalkError
from contracts.tables import MARKET_TABLES

_SAME_ROWS = "the same rows in other bytes"


def rederive(places: Places, desk: Desk | None = None, snapshot: str | None = None) -> tuple[str, ...]:
    """Build every published market of a snapshot again and compare; returns what differs, in words.

    Without a desk the one the snapshot was made with is taken from the archive. With one, each of its keys
    that is another is told, and what the tables would then be. Only the code that made a snapshot can make it
    again; where it is another, that is the answer. Markets held back or not asked for are passed over: their
    tables are those of an older snapshot.
    """
    name = snapshot if snapshot is not None else current_snapshot(places)
    manifest = read_manifest(places, name)
    if manifest.code != code_digest():
        return (f"snapshot {manifest.name} was made with code {manifest.code[:12]}, this one is {code_digest()[:12]}",)
    problems: list[str] = []
    if desk is None or manifest.desk == desk.digest:
        desk = desk_of(places, manifest) if manifest.desk_files else desk
    elif manifest.desk_files:
        problems += [f"the desk is another: {key}" for key in changed_desk(desk_of(places, manifest), desk)]
    is_other_desk = bool(problems)
    if desk is None:
        return (f"snapshot {manifest.name} was made before desks were kept; name its desk with --desk",)
    arrivals = tuple(arrival for arrival in read_register(places) if arrival.taken_in <= manifest.intake)
    assignment = assign_files(desk, Intake(manifest.intake, 0, arrivals, ()), places)
    with tempfile.TemporaryDirectory() as folder:
        for market, verdict in manifest.markets.items():
            if verdict.state != "published" or verdict.last_good_snapshot is not None:
                continue
            if market not in desk.markets:
                problems.append(f"{market}: is published, and the desk does not declare it")
                continue
            try:
                inputs = gather_inputs(desk, market, assignment.files[market], places)
                built = build_market(replace(inputs, until=until_of(manifest, market)))
            except (RopewalkError, ValueError) as error:
                problems.append(f"{market}: cannot be built again: {error}")
                continue
            metadata = table_stamp(desk, market, assignment.files[market])
            for table in MARKET_TABLES:
                path = table_path(table.name, market)
                stored = write_table(Path(folder), table, market, built.tables[table.name], metadata)
                published = places.snapshot(manifest.name) / path
                if stored.sha256 != manifest.files[path].sha256 or stored.sha256 != _hash_of(published):
                    told = _difference(published, Path(folder) / path, path)
                    # The stamp of another desk makes other bytes of the same rows.
                    if not (is_other_desk and told.endswith(_SAME_ROWS)):
                        problems.append(told)
    return tuple(problems)


def _hash_of(path: Path) -> str | None:
    try:
        return hash_file(path)[1]
    except OSError:
        return None


def _difference(published: Path, derived: Path, path: str) -> str:
    """The first row in which a published table differs from the one derived again."""
    try:
        first, second = pq.read_table(published).to_pylist(), pq.read_table(derived).to_pylist()
    except (OSError, ValueError) as error:
        return f"{path}: cannot be read: {error}"
    if len(first) != len(second):
        return f"{path}: {len(first)} rows published, {len(second)} derived"
    for number, (one, other) in enumerate(zip(first, second, strict=True)):
        for column, value in one.items():
            if value != other[column]:
                return f"{path}, row {number}: {column} {value!r} published, {other[column]!r} derived ({_key(one)})"
    return f"{path}: {_SAME_ROWS}"


def _key(row: dict[str, object]) -> str:
    names = ("market", "plan", "nearby", "contract", "session")
    return ", ".join(str(row[name]) for name in names if row.get(name) is not None)
