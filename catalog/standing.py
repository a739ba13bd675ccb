"""The snapshots that stand: which there are, what their manifests say, whether their files are still those.

Belongs here: reading what is published, without the lock. Does not belong here: publishing (`store.py`), the
report of all that is wrong with a store (`verify.py`).
"""

import json
import os
from collections.abc import Iterable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

from pydantic import ValidationError

from catalog.catalog_file import SnapshotFacts
from catalog.manifest import MANIFEST, Manifest, StoredFile
from catalog.places import Places, hash_file, sequence_of
from contracts.errors import StoreError, StoreUnsound, UsageError

_READERS = 4


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
            f"(newest there: {_newest_names(places)}); ropewalk verify --repoint --from N points to one"
        )
    return name


def find_snapshot(places: Places, asked: str) -> str:
    """Name of the snapshot with this name, number or given name; raises UsageError where there is none."""
    given = named_snapshots(places)
    for number, name in snapshots_there(places):
        if asked == name or (asked.isdecimal() and int(asked) == number) or given.get(asked) == name:
            return name
    names = f"; named: {', '.join(sorted(given))}" if given else ""
    expected = f"expected a snapshot that is there, by name or number (newest: {_newest_names(places)}{names})"
    raise UsageError(f"{places.store}: seen {asked!r}; {expected}")


def list_snapshots(places: Places) -> list[str]:
    """Names of all snapshots, oldest first."""
    return [name for _, name in snapshots_there(places)]


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
    return max((number for number, _ in snapshots_there(places)), default=0) + 1


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


def snapshots_there(places: Places) -> list[tuple[int, str]]:
    """Number and name of every snapshot, oldest first."""
    try:
        names = os.listdir(places.snapshots)
    except FileNotFoundError:
        return []
    except OSError as error:
        raise StoreError(f"{places.snapshots}: cannot be read: {error.strerror}") from error
    return sorted((number, name) for name in names if (number := sequence_of(name)) is not None)


def _newest_names(places: Places) -> str:
    return ", ".join(name for _, name in snapshots_there(places)[-3:]) or "none"


def read_catalog_hashes(places: Places) -> dict[str, str]:
    """SHA-256 of the catalog file by snapshot; empty where none can be read."""
    try:
        hashes = json.loads(places.catalog_hashes.read_bytes())
    except (OSError, ValueError):
        return {}
    return hashes if isinstance(hashes, dict) else {}


def check_files(folder: Path, manifest: Manifest) -> list[str]:
    """What differs between a snapshot's folder and its manifest, in words; empty where nothing does."""
    problems = []
    seen = set()
    for above, folders, names in os.walk(folder):
        seen |= {os.path.relpath(os.path.join(above, name), folder) for name in names}
        links = [os.path.join(above, name) for name in folders if os.path.islink(os.path.join(above, name))]
        problems += [f"{os.path.relpath(link, folder)}: is a link; expected a folder" for link in links]
    problems += [f"{path}: is not listed in the manifest" for path in sorted(seen - {*manifest.files, MANIFEST})]
    return [*problems, *check_each(folder, manifest.files.values()).values()]


def check_each(folder: Path, files: Iterable[StoredFile]) -> dict[str, str]:
    """What is wrong with files of a snapshot's folder, by path, in words; of a sound file nothing."""
    listed = list(files)
    with ThreadPoolExecutor(_READERS) as pool:
        found = pool.map(lambda file: _check_file(folder, file), listed)
        return {file.path: problem for file, problem in zip(listed, found, strict=True) if problem}


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
