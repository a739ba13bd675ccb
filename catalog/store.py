"""Snapshots: staged, read back, named, and only then pointed to.

Belongs here: the staging folder, the tables' files, the manifest and the switch. Does not belong here: which
tables a night publishes (`night.py`), the views on them (`catalog_file.py`).
"""

import errno
import hashlib
import json
import os
import shutil
import stat
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Annotated, Any, Literal

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from catalog.archive import sweep_arriving
from catalog.catalog_file import SnapshotFacts, build_catalog
from catalog.places import (
    DESK_WIDE,
    PART,
    Places,
    hash_file,
    prepare_part,
    sequence_of,
    store_errors,
    sync_folder,
    table_path,
    write_new,
    write_whole,
)
from catalog.places import write_lock as write_lock  # the writer's first step, so found here too
from contracts.errors import StoreError, StoreUnsound, UsageError
from contracts.tables import Table

MANIFEST = "manifest.json"
_STAGING = ".staging-"
# Few rows a group let a reader of one session pass over most of a file.
_ROWS_A_GROUP = 65_536
_READERS = 4
_PATH = r"[a-z_]{1,40}(/[A-Za-z0-9_][A-Za-z0-9_.-]{0,100}){1,6}"


class _Stored(BaseModel):
    """What the parts of a manifest have in common: nothing unknown, nothing changed later."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


class StoredFile(_Stored):
    """One file of a snapshot: path below it, SHA-256, rows (0 where it is no table), size in bytes."""

    path: Annotated[str, Field(pattern=f"^{_PATH}$")]
    sha256: Annotated[str, Field(pattern="^[0-9a-f]{64}$")]
    rows: Annotated[int, Field(ge=0)]
    bytes: Annotated[int, Field(ge=0)]


class Verdict(_Stored):
    """What became of one market: its state and why, the digest of its inputs, facts for the gates."""

    state: Literal["published", "held back"]
    reason: str = ""
    inputs: str
    last_good_snapshot: str | None = None
    facts: dict[str, Any] = Field(default_factory=dict)


class Manifest(_Stored):
    """`manifest.json`; the class is the format. The name holds the hash of all the rest of it.

    `publish` sets sequence, name and parent; desk and code are digests, intake the number of the newest one,
    desk_files the SHA-256 under which the archive keeps each file of the desk, arrivals that of the register of
    arrivals up to that intake.
    """

    format: Literal[1] = 1
    sequence: Annotated[int, Field(ge=0)] = 0
    name: str = ""
    parent: str | None = None
    files: dict[str, StoredFile]
    desk: str
    desk_files: dict[str, str] = Field(default_factory=dict)
    arrivals: str = ""
    code: str
    packages: dict[str, str]
    intake: int
    markets: dict[str, Verdict]
    summary: dict[str, Any] = Field(default_factory=dict)

    @model_validator(mode="after")
    def _keyed_by_path(self) -> "Manifest":
        for path, file in self.files.items():
            if path != file.path or ".." in path:
                raise ValueError(f"seen the file {file.path!r} under {path!r}; expected its own path")
        return self

    def proper_name(self) -> str:
        """The name this manifest's content gives it: sequence and hash."""
        content = self.model_dump(mode="json", exclude={"name", *self._absent()})
        text = json.dumps(content, sort_keys=True, separators=(",", ":"), allow_nan=False)
        return f"{self.sequence:06d}-{hashlib.sha256(text.encode()).hexdigest()[:12]}"

    def _absent(self) -> set[str]:
        # A snapshot from before desk and register were recorded keeps the name it got.
        return {name for name in ("desk_files", "arrivals") if not getattr(self, name)}

    def as_bytes(self) -> bytes:
        """The manifest as it is stored."""
        content = self.model_dump(mode="json", exclude=self._absent())
        return (json.dumps(content, sort_keys=True, indent=1, allow_nan=False) + "\n").encode()


# What stands.


def current_snapshot(places: Places) -> str | None:
    """Name of the newest snapshot; None before the first. Raises StoreUnsound where CURRENT names none."""
    try:
        text = places.current.read_bytes()
    except FileNotFoundError:
        return None
    except OSError as error:
        raise StoreUnsound(f"{places.current}: cannot be read: {error.strerror}") from error
    name = text.decode("ascii", "replace").removesuffix("\n")
    if sequence_of(name) is None or not places.snapshot(name).is_dir():
        raise StoreUnsound(
            f"{places.current}: seen {name[:80]!a}; expected the name of a snapshot that is there "
            f"(newest there: {_newest_names(places)})"
        )
    return name


def find_snapshot(places: Places, asked: str) -> str:
    """Name of the snapshot with this name, number or given name; raises UsageError where there is none."""
    given = named_snapshots(places)
    for number, name in _snapshots_there(places):
        if asked == name or (asked.isdecimal() and int(asked) == number) or given.get(asked) == name:
            return name
    names = f"; named: {', '.join(sorted(given))}" if given else ""
    expected = f"expected a snapshot that is there, by name or number (newest: {_newest_names(places)}{names})"
    raise UsageError(f"{places.store}: seen {asked!r}; {expected}")


def list_snapshots(places: Places) -> list[str]:
    """Names of all snapshots, oldest first."""
    return [name for _, name in _snapshots_there(places)]


def named_snapshots(places: Places) -> dict[str, str]:
    """Snapshots by the names people gave them; raises StoreUnsound where they cannot be read."""
    try:
        names = json.loads(places.names.read_bytes())
    except FileNotFoundError:
        return {}
    except (OSError, ValueError) as error:
        raise StoreUnsound(f"{places.names}: cannot be read: {error}; expected names of snapshots as JSON") from error
    if not isinstance(names, dict) or not all(isinstance(value, str) for value in names.values()):
        raise StoreUnsound(f"{places.names}: expected one JSON object of names and snapshots")
    return names


def origin_of(places: Places, manifest: Manifest, market: str) -> Manifest:
    """The snapshot in which a market's tables were made: an older one where it is held back."""
    while (good := manifest.markets[market].last_good_snapshot) is not None:
        manifest = read_manifest(places, good)
    return manifest


def next_sequence(places: Places) -> int:
    """The number the next snapshot will have."""
    return max((number for number, _ in _snapshots_there(places)), default=0) + 1


def read_manifest(places: Places, name: str | None = None) -> Manifest:
    """The manifest of a snapshot, the current one by default.

    Raises UsageError where there is no such snapshot, StoreUnsound where the manifest is damaged: its name
    holds the hash of its content.
    """
    if name is None:
        name = current_snapshot(places)
        if name is None:
            raise UsageError(f"{places.store}: nothing is published here yet; run ropewalk build first")
    if sequence_of(name) is None or not places.snapshot(name).is_dir():
        expected = f"expected a snapshot that is there (newest: {_newest_names(places)})"
        raise UsageError(f"{places.store}: seen {name!r}; {expected}")
    path = places.snapshot(name) / MANIFEST
    try:
        manifest = Manifest.model_validate_json(path.read_bytes())
    except OSError as error:
        raise StoreUnsound(f"{path}: cannot be read: {error.strerror}") from error
    except ValidationError as error:
        first = error.errors(include_url=False)[0]
        place = ".".join(map(str, first["loc"])) or "the file"
        raise StoreUnsound(f"{path}: {place}: {first['msg']}; expected a manifest as published") from None
    if not manifest.name == manifest.proper_name() == name:
        seen = f"seen the name {manifest.name!r} and content that makes {manifest.proper_name()!r}"
        raise StoreUnsound(f"{path}: {seen}; expected both to be {name!r}, as the folder")
    return manifest


def _snapshots_there(places: Places) -> list[tuple[int, str]]:
    """Number and name of every snapshot, oldest first."""
    try:
        names = os.listdir(places.snapshots)
    except FileNotFoundError:
        return []
    except OSError as error:
        raise StoreError(f"{places.snapshots}: cannot be read: {error.strerror}") from error
    return sorted((number, name) for name in names if (number := sequence_of(name)) is not None)


def _newest_names(places: Places) -> str:
    return ", ".join(name for _, name in _snapshots_there(places)[-3:]) or "none"


# Staging.


def open_staging(places: Places) -> Path:
    """A new folder to lay a snapshot out in; the caller holds the lock."""
    with store_errors("no staging folder could be made"):
        places.snapshots.mkdir(parents=True, exist_ok=True)
        for count in range(1000):
            staging = places.snapshots / f"{_STAGING}{os.getpid()}-{count}"
            try:
                staging.mkdir()
                return staging
            except FileExistsError:
                continue
    raise StoreError(f"{places.snapshots}: seen a thousand staging folders of this process; remove them")


def write_table(
    staging: Path, table: Table, market: str | None, data: pa.Table, metadata: dict[str, str]
) -> StoredFile:
    """Write one table's file, read it back, and force it to the disk; a file there before is replaced.

    `data` has the table's schema, its rows in the table's order with unique keys, no number that is not
    finite, and of a market only its own rows; raises StoreError where it does not, or where what is read
    back differs. The bytes depend on `data` and `metadata` alone.
    """
    path = table_path(table.name, market)
    _check_table(table, market, data, path)
    stamped = data.combine_chunks().replace_schema_metadata(dict(sorted(metadata.items())))
    order = [(name, "ascending") for name in table.order or table.key]
    sink = pa.BufferOutputStream()
    try:
        pq.write_table(
            stamped, sink, compression="zstd", row_group_size=_ROWS_A_GROUP,
            write_statistics=True, write_page_index=True, write_page_checksum=True, store_schema=True,
            sorting_columns=pq.SortingColumn.from_ordering(stamped.schema, order),
        )  # fmt: skip
    except pa.ArrowException as error:
        raise StoreError(f"{path}: cannot be written as Parquet: {error}") from error
    content = sink.getvalue().to_pybytes()
    target = staging / path
    with store_errors(f"{path} could not be written"):
        target.parent.mkdir(parents=True, exist_ok=True)
        target.unlink(missing_ok=True)
        write_new(target, content)
        read = target.read_bytes()
    if read != content:
        raise StoreError(f"{target}: what is read back differs from what was written; is the disk sound?")
    back = pq.read_table(pa.BufferReader(read), page_checksum_verification=True, use_threads=False)
    if not back.equals(stamped, check_metadata=True):
        raise StoreError(f"{target}: the table read back differs from the one written")
    digest = hashlib.sha256(content).hexdigest()
    return StoredFile(path=path, sha256=digest, rows=data.num_rows, bytes=len(content))


def link_table(staging: Path, source_snapshot: Path, relative: str) -> None:
    """Let a file of an older snapshot be part of the staged one: a hard link, or a copy where none can be."""
    source, target = source_snapshot / relative, staging / relative
    with store_errors(f"{relative} of {source_snapshot.name} could not be linked"):
        if not stat.S_ISREG(source.lstat().st_mode):
            raise StoreUnsound(f"{source}: expected a regular file")
        target.parent.mkdir(parents=True, exist_ok=True)
        target.unlink(missing_ok=True)
        try:
            os.link(source, target, follow_symlinks=False)
        except OSError as error:
            if error.errno not in (errno.EPERM, errno.EXDEV, errno.EMLINK, errno.ENOTSUP, errno.EACCES):
                raise
            write_new(target, source.read_bytes())


def _check_table(table: Table, market: str | None, data: pa.Table, path: str) -> None:
    """Refuse a table that is not what its definition says."""
    if not data.schema.equals(table.schema):
        raise StoreError(f"{path}: seen the columns {_show(data.schema)}; expected {_show(table.schema)}")
    if not data.schema.remove_metadata().equals(table.schema, check_metadata=True):
        raise StoreError(f"{path}: seen columns without their unit and meaning; expected those of the table")
    for field in table.schema:
        column = data[field.name]
        if not field.nullable and column.null_count:
            raise StoreError(f"{path}: {field.name} is part of the key and null in {column.null_count} rows")
        if pa.types.is_floating(field.type) and pc.all(pc.is_finite(column)).as_py() is False:
            raise StoreError(f"{path}: {field.name} holds a number that is not finite; expected null instead")
    # A raw file of several markets is told in the table of one of them, without a market.
    owned = pc.fill_null(pc.equal(data["market"], market), True) if market not in (None, DESK_WIDE) else None
    if owned is not None and pc.all(owned).as_py() is False:
        raise StoreError(f"{path}: holds rows of another market")
    repeated = _tied_rows(data, table.order or table.key, path)
    if table.order:
        repeated = data.num_rows - data.group_by(list(table.key)).aggregate([]).num_rows
    if repeated:
        seen = f"seen repeated keys, {repeated} of {data.num_rows} rows"
        raise StoreError(f"{path}: {seen}; expected {', '.join(table.key)} to be unique")


def _show(schema: pa.Schema) -> str:
    return ", ".join(f"{field.name} {field.type}{'' if field.nullable else ' not null'}" for field in schema)


def _tied_rows(data: pa.Table, order: tuple[str, ...], path: str) -> int:
    """How many rows equal the one before in these columns; raises StoreError where one sorts before it."""
    count = data.num_rows - 1
    if count < 1:
        return 0
    tied = pa.chunked_array([pa.repeat(True, count)])
    for name in order:
        column = data[name]
        upper, lower = column.slice(0, count), column.slice(1)
        # A null sorts last, as Arrow sorts it.
        rises = pc.or_(pc.fill_null(pc.less(upper, lower), False), pc.and_(pc.is_valid(upper), pc.is_null(lower)))
        falls = pc.or_(pc.fill_null(pc.greater(upper, lower), False), pc.and_(pc.is_null(upper), pc.is_valid(lower)))
        if pc.any(pc.and_(tied, falls)).as_py():
            row = pc.index(pc.and_(tied, falls), True).as_py() + 1
            raise StoreError(f"{path}: row {row + 1} sorts before row {row} by {name}; expected {', '.join(order)}")
        tied = pc.and_(tied, pc.invert(rises))
    return int(pc.sum(tied).as_py() or 0)


# Publishing.


def publish(places: Places, staging: Path, manifest_draft: Manifest) -> Manifest:
    """Make the staged files the newest snapshot; the caller holds the lock.

    Every listed file is read again and hashed, and no other may be there; then files and folders are forced
    to the disk, the folder gets its name, and catalog and CURRENT are switched to it. Raises StoreError where
    any of that fails: what was staged is then removed, and the last snapshot stands.
    """
    try:
        draft = {"sequence": next_sequence(places), "name": "", "parent": current_snapshot(places)}
        unnamed = manifest_draft.model_copy(update=draft)
        manifest = unnamed.model_copy(update={"name": unnamed.proper_name()})
        problems = check_files(staging, manifest)
        if problems:
            raise StoreError(f"nothing was published: {'; '.join(problems[:5])}")
        with store_errors("nothing was published: the snapshot could not be completed"):
            write_new(staging / MANIFEST, manifest.as_bytes())
            for folder, _, _ in os.walk(staging, topdown=False):
                sync_folder(Path(folder))
            final = places.snapshot(manifest.name)
            os.rename(staging, final)
    except BaseException:
        shutil.rmtree(staging, ignore_errors=True)
        raise
    try:
        with store_errors("nothing was published: the snapshot could not be named"):
            sync_folder(places.snapshots)
        parts = _prepare_switch(places, manifest)
    except BaseException:
        # Under its final name it would count as complete; it must lose that before its files go.
        doomed = places.snapshots / f"{_STAGING}{os.getpid()}-abandoned"
        try:
            os.rename(final, doomed)
            shutil.rmtree(doomed, ignore_errors=True)
        except OSError:
            shutil.rmtree(final, ignore_errors=True)
        raise
    _switch(places, *parts)
    return manifest


def check_files(folder: Path, manifest: Manifest) -> list[str]:
    """What differs between a snapshot's folder and its manifest, in words; empty where nothing does."""
    problems = []
    seen = set()
    for above, folders, names in os.walk(folder):
        seen |= {os.path.relpath(os.path.join(above, name), folder) for name in names}
        links = [os.path.join(above, name) for name in folders if os.path.islink(os.path.join(above, name))]
        problems += [f"{os.path.relpath(link, folder)}: is a link; expected a folder" for link in links]
    problems += [f"{path}: is not listed in the manifest" for path in sorted(seen - {*manifest.files, MANIFEST})]
    with ThreadPoolExecutor(_READERS) as pool:
        found = pool.map(lambda file: _check_file(folder, file), manifest.files.values())
        problems += [problem for problem in found if problem]
    return problems


def _check_file(folder: Path, file: StoredFile) -> str | None:
    try:
        size, digest = hash_file(folder / file.path)
    except OSError as error:
        return f"{file.path}: cannot be read: {error.strerror}"
    if size != file.bytes:
        return f"{file.path}: seen {size:,} bytes; expected {file.bytes:,}"
    return None if digest == file.sha256 else f"{file.path}: seen SHA-256 {digest}; expected {file.sha256}"


def facts_of(places: Places, manifest: Manifest) -> SnapshotFacts:
    """What the catalog says of a snapshot, and where its files are."""
    return SnapshotFacts(
        name=manifest.name,
        sequence=manifest.sequence,
        parent=manifest.parent,
        desk=manifest.desk,
        code=manifest.code,
        folder=places.snapshot(manifest.name),
        files=tuple(sorted(manifest.files)),
    )


def _prepare_switch(places: Places, manifest: Manifest) -> tuple[Path, Path]:
    """Write the new catalog and the new CURRENT beside the old ones; raises StoreError, leaving neither."""
    with store_errors("the new catalog could not be written"):
        catalog, current = prepare_part(places.catalog), prepare_part(places.current)
        try:
            build_catalog(catalog, facts_of(places, manifest))
            _note_catalog(places, manifest.name, catalog)
            write_new(current, f"{manifest.name}\n".encode(), 0o644)
        except BaseException:
            catalog.unlink(missing_ok=True)
            raise
    return catalog, current


def _note_catalog(places: Places, name: str, catalog: Path) -> None:
    """Record the hash of a catalog that is about to be switched to, beside that of the one it replaces."""
    known = read_catalog_hashes(places)
    current = current_snapshot(places)
    kept = {current: known[current]} if current in known else {}
    content = {**kept, name: hash_file(catalog)[1]}
    write_whole(places.catalog_hashes, (json.dumps(content, sort_keys=True) + "\n").encode())


def read_catalog_hashes(places: Places) -> dict[str, str]:
    """SHA-256 of the catalog file by snapshot; empty where none can be read."""
    try:
        hashes = json.loads(places.catalog_hashes.read_bytes())
    except (OSError, ValueError):
        return {}
    return hashes if isinstance(hashes, dict) else {}


def _switch(places: Places, catalog: Path, current: Path) -> None:
    """Put both in place. A stop between the two is put right by the next run, see `clean_leftovers`."""
    with store_errors("the snapshot is complete but not switched to; the next run switches"):
        # Left by somebody who opened the old catalog for writing; it must not be replayed on the new one.
        places.catalog.with_name(f"{places.catalog.name}.wal").unlink(missing_ok=True)
        os.replace(catalog, places.catalog)
        os.replace(current, places.current)
        sync_folder(places.store)


def rebuild_catalog(places: Places, manifest: Manifest) -> None:
    """Make catalog and CURRENT those of a snapshot that is in place; the caller holds the lock."""
    _switch(places, *_prepare_switch(places, manifest))


def clean_leftovers(places: Places) -> list[str]:
    """Put right what a killed run left; the caller holds the lock. Returns what was done, in words.

    Staging folders and parts of files are removed. A snapshot that had got its name was complete: where its
    parent is the current one, the switch to it is done now. A catalog that is gone is built again.
    """
    done = []
    with store_errors("the remains of a stopped run could not be removed"):
        done += [f"removed archive/{name}" for name in sweep_arriving(places)]
        for folder in (places.store, places.intake):
            for part in sorted(folder.glob(f".*{PART}*")):
                part.unlink()
                done.append(f"removed {part.name}")
        for staging in sorted(places.snapshots.glob(f"{_STAGING}*")):
            shutil.rmtree(staging)
            done.append(f"removed {staging.name}")
    current = current_snapshot(places)
    while (manifest := _unfinished(places, current, done)) is not None:
        rebuild_catalog(places, manifest)
        done.append(f"switched to {manifest.name}, which a stopped run had completed")
        current = manifest.name
    if current is not None and not places.catalog.exists():
        rebuild_catalog(places, read_manifest(places, current))
        done.append("built the catalog again")
    return done


def _unfinished(places: Places, current: str | None, done: list[str]) -> Manifest | None:
    """The complete snapshot that a stopped run did not switch to; None where there is none."""
    known = (sequence_of(current) if current is not None else None) or 0
    for number, name in reversed(_snapshots_there(places)):
        if number <= known:
            break
        try:
            manifest = read_manifest(places, name)
            if manifest.parent != current:
                continue
            problems = check_files(places.snapshot(name), manifest)
        except StoreUnsound as error:
            problems = [str(error)]
        if not problems:
            return manifest
        message = f"left {name}, which nothing points to, as it is: {problems[0]}"
        if message not in done:
            done.append(message)
    return None
