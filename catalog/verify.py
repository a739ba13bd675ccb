"""Whether what is published is what was recorded of it, and whether it holds together.

Belongs here: hashes, the archive behind a snapshot, the catalog file, the soundness rules, and building the
catalog again. Does not belong here: deriving the numbers again (`deep.py`).
"""

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING

from catalog.archive import read_archived, read_register, register_digest
from catalog.manifest import MANIFEST, Manifest
from catalog.places import Places, hash_file, write_lock
from catalog.query import open_catalog, run_query
from catalog.standing import check_files, current_snapshot, find_snapshot, read_catalog_hashes, read_manifest
from catalog.store import rebuild_catalog
from contracts.errors import StoreError, StoreUnsound, UsageError
from contracts.tables import TABLES

if TYPE_CHECKING:
    import duckdb

RULES = Path(__file__).parent / "soundness"
_SHOWN = 3
_READERS = 4


@dataclass(frozen=True)
class Report:
    """The outcome: problems in words (none where the store is sound), files hashed, soundness rules run."""

    problems: tuple[str, ...]
    files_checked: int
    rules_run: int
    snapshot: str | None = None


def verify_store(places: Places, snapshot: str | None = None) -> Report:
    """Check a snapshot (by name or number; else the current one), the archive behind it, and a current catalog.

    Hashes every file of the snapshot and every raw file in the register, looks for what is missing or not listed,
    and runs each rule of `soundness/`, which returns the rows that offend. Whatever is wrong is a problem of
    the report; raises UsageError where nothing is published or the snapshot named is not there.
    """
    try:
        try:
            current = current_snapshot(places)
        except StoreUnsound:
            # An older snapshot can be asked for by name whatever CURRENT says.
            if snapshot is None:
                raise
            current = None
        if snapshot is None and current is None:
            raise UsageError(f"{places.store}: nothing is published here yet; run ropewalk build first")
        manifest = read_manifest(places, find_snapshot(places, snapshot) if snapshot is not None else current)
    except StoreUnsound as error:
        return Report((str(error),), 0, 0)
    folder = places.snapshot(manifest.name)
    problems = [f"{manifest.name}/{problem}" for problem in check_files(folder, manifest)]
    problems += _gather(partial(_check_records, places, manifest))
    named = _raw_files_named(folder, manifest)
    problems += _gather(partial(_check_archive, places, named))
    for sha in sorted(set(manifest.desk_files.values())):
        problems += _gather(partial(_read_only, places, sha))
    if manifest.name == current:
        problems += _gather(partial(_check_catalog, places, manifest))
    raw_files = {*manifest.desk_files.values(), *(file for _, file in named), *_registered(places)}
    files_checked = len(manifest.files) + len(raw_files)
    try:
        connection = open_catalog(places, manifest.name)
    except StoreUnsound as error:
        return Report((*problems, str(error)), files_checked, 0, manifest.name)
    with connection:
        problems += _gather(partial(_count_rows, connection, manifest))
        rules = sorted(RULES.glob("*.sql"))
        for rule in rules:
            problems += _gather(partial(run_rule, connection, rule))
    return Report(tuple(problems), files_checked, len(rules), manifest.name)


def run_rule(connection: "duckdb.DuckDBPyConnection", rule: Path) -> list[str]:
    """What one soundness rule finds, in a sentence; empty where it finds nothing. Raises StoreUnsound."""
    text = rule.read_text(encoding="utf-8")
    meaning = text.partition("\n")[0].removeprefix("--").strip()
    columns, rows = run_query(connection, text.rstrip().rstrip(";"))
    if not rows:
        return []
    shown = []
    for row in rows[:_SHOWN]:
        shown.append(", ".join(f"{name} {value}" for name, value in zip(columns, row, strict=True)))
    more = f" and {len(rows) - _SHOWN:,} more" if len(rows) > _SHOWN else ""
    noun = "row" if len(rows) == 1 else "rows"
    return [f"{rule.stem}: {meaning} {len(rows):,} {noun}: {'; '.join(shown)}{more}"]


def repoint(places: Places, snapshot: str | None = None) -> Manifest:
    """Build the catalog again for the current snapshot, where the store now lies; takes the store's lock.

    With the name or number of a snapshot, CURRENT is made to name it too: the way out where CURRENT or the newest
    manifest is damaged. Raises StoreBusy, UsageError where nothing is published or the snapshot is not there,
    StoreUnsound where the manifest is damaged, and where a snapshot asked for is not what was published.
    """
    with write_lock(places):
        manifest = read_manifest(places, find_snapshot(places, snapshot) if snapshot is not None else None)
        problems = check_files(places.snapshot(manifest.name), manifest) if snapshot is not None else []
        if problems:
            raise StoreUnsound(f"{manifest.name}/{problems[0]}; it was not pointed to, choose another snapshot")
        rebuild_catalog(places, manifest)
    return manifest


def _gather(check: Callable[[], list[str]]) -> list[str]:
    """A check's problems, or the one that kept it from finishing; no query of ours is wrong in itself."""
    try:
        return check()
    except (StoreUnsound, UsageError) as error:
        return [str(error)]


def _check_catalog(places: Places, manifest: Manifest) -> list[str]:
    """Whether the catalog file shows the current snapshot, whole."""
    with open_catalog(places) as connection:
        seen = run_query(connection, "select name, sequence, parent, desk, code from snapshot")[1]
        expected = (manifest.name, manifest.sequence, manifest.parent, manifest.desk, manifest.code)
        if seen != [expected]:
            return [f"{places.catalog}: seen the snapshot {seen}; expected {expected}; run verify --repoint"]
        problems = _count_rows(connection, manifest)
    # A store from before catalogs were recorded has no such file.
    is_recorded = places.catalog_hashes.exists()
    if is_recorded and hash_file(places.catalog)[1] != read_catalog_hashes(places).get(manifest.name):
        problems.append(f"{places.catalog}: is not the file that was built; run verify --repoint")
    return problems


def _check_records(places: Places, manifest: Manifest) -> list[str]:
    """Whether manifest and register are, to the byte, what was written."""
    path = places.snapshot(manifest.name) / MANIFEST
    problems = []
    if path.read_bytes() != manifest.as_bytes():
        problems.append(f"{path}: says what was published in other bytes than were written")
    if manifest.arrivals and register_digest(places, manifest.intake) != manifest.arrivals:
        problems.append(f"{places.register}: its lines up to intake {manifest.intake} are not those of the snapshot")
    return problems


def _count_rows(connection: "duckdb.DuckDBPyConnection", manifest: Manifest) -> list[str]:
    """Tables that do not have the rows the manifest counts."""
    problems = []
    for table in TABLES:
        listed = [file.rows for path, file in manifest.files.items() if path.startswith(f"{table.name}/")]
        seen = run_query(connection, f"select count(*) from {table.name}")[1][0][0]  # noqa: S608
        if seen != sum(listed):
            problems.append(f"{table.name}: seen {seen:,} rows; expected {sum(listed):,} by the manifest")
    return problems


def _raw_files_named(folder: Path, manifest: Manifest) -> list[tuple[str, str]]:
    """Path and SHA-256 of the raw files a snapshot was made from, as far as that can be read."""
    import pyarrow as pa
    import pyarrow.parquet as pq

    named: set[tuple[str, str]] = set()
    for path in manifest.files:
        if path.startswith("files/"):
            try:
                table = pq.read_table(folder / path, columns=["path", "file"])
            except (OSError, pa.ArrowException):
                continue  # its hash is wrong too, and has been told
            named |= set(zip(table["path"].to_pylist(), table["file"].to_pylist(), strict=True))
    return sorted(named)


def _registered(places: Places) -> set[str]:
    """SHA-256 of every raw file in the register; none where it is damaged, which has been told."""
    try:
        return {arrival.file for arrival in read_register(places)}
    except StoreError:
        return set()


def _check_archive(places: Places, named: list[tuple[str, str]]) -> list[str]:
    """What of a snapshot's raw files, given by path and SHA-256, and of all registered ones is not as it was."""
    arrivals = read_register(places)
    registered = {(arrival.path, arrival.file) for arrival in arrivals}
    problems = [
        f"{places.register}: {path} with SHA-256 {file} is in the snapshot and not in the register"
        for path, file in named
        if (path, file) not in registered
    ]
    of_snapshot = {file for _, file in named}
    others = {arrival.file for arrival in arrivals} - of_snapshot
    gone = sorted(file for file in others if not places.archived(file).is_file())
    problems += [f"{places.archived(file)}: is registered and not there" for file in gone]
    with ThreadPoolExecutor(_READERS) as pool:
        hashed = sorted((of_snapshot | others) - set(gone))
        for found in pool.map(lambda file: _gather(partial(_read_only, places, file)), hashed):
            problems += found
    return problems


def _read_only(places: Places, file: str) -> list[str]:
    read_archived(places, file)
    return []
