"""Raw bytes kept for ever, by SHA-256, and the register that says when each arrived and under which path.

Belongs here: walking the raw folder, keeping what is new in it, giving it back unharmed. Does not belong
here: which layout reads a file, what its rows say (`contracts/`).
"""

import hashlib
import json
import os
import re
import stat
import threading
import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from functools import partial
from io import FileIO
from pathlib import Path

from catalog.packed import expand, pack
from catalog.places import PART, Places, append_whole, store_errors, sync_folder, write_new, write_whole
from contracts.errors import IntakeError, StoreError, StoreUnsound
from contracts.unpack import LARGEST_TEXT, list_members

_SHA = re.compile(r"[0-9a-f]{64}")
# Names reach pages, tables and patterns; what no exchange or vendor has reason to write is not let in.
_NAME = re.compile(r"[A-Za-z0-9_](?:[A-Za-z0-9_.+@=,&()~ -]{0,198}[A-Za-z0-9_.+@=&()~-])?")
_LARGEST_FILE = LARGEST_TEXT
_LARGE = 32 * 1024 * 1024
_WORKERS = 4
_DEEPEST = 16
# A file written this shortly before it is read could be written again without its times changing.
_STEADY_NS = 2_000_000_000
_MEMORY_FORMAT = 1


@dataclass(frozen=True)
class Arrival:
    """One version of one raw file: the intake that brought it, its path, SHA-256 and size.

    `container` marks a .zip, whose members have arrivals of their own below its path.
    """

    taken_in: int
    path: str
    file: str
    bytes: int
    container: bool = False


@dataclass(frozen=True, order=True)
class Problem:
    """A path below the raw folder of which something could not be taken in, and why.

    `may_pass` marks a file that was being written: another look may find it whole.
    """

    path: str
    reason: str
    may_pass: bool = field(default=False, compare=False)


@dataclass(frozen=True)
class Intake:
    """The archive after a look at the raw folder.

    number: of the newest intake that brought anything, 0 before the first; new: arrivals it brought now;
    arrivals: all there ever were, in order; problems: what was not taken in now, in order of path.
    """

    number: int
    new: int
    arrivals: tuple[Arrival, ...]
    problems: tuple[Problem, ...]


@dataclass(frozen=True)
class _Kept:
    """What came of reading one raw file: (path, sha, bytes, is container) of it and its members."""

    path: str
    contents: tuple[tuple[str, str, int, bool], ...]
    problems: tuple[Problem, ...]
    signature: list[int] | None


class _NotTaken(Exception):
    """A raw file that is left where it is; the text says why."""


class _StillWritten(_NotTaken):
    """A raw file that changes while it is read."""


def take_in(raw: Path, places: Places, rehash: bool = False) -> Intake:
    """Archive whatever is new below the raw folder and register it; the caller holds the store's lock.

    Only files whose size, times or identity changed since the last intake are read; with `rehash` all are,
    and a damaged archive file is written anew. Whatever is wrong in the raw folder is a problem, never an
    error. Raises StoreError where the archive cannot be written, StoreUnsound where the register is damaged.
    """
    arrivals, whole = parse_register(places)
    newest = {arrival.path: arrival.file for arrival in arrivals}
    remembered = {} if rehash else _read_memory(places)
    problems: list[Problem] = []
    with store_errors("the archive could not be prepared"):
        places.archive.mkdir(parents=True, exist_ok=True)
        places.intake.mkdir(parents=True, exist_ok=True)
        sweep_arriving(places)
    memory: dict[str, list[int | str]] = {}
    kept: list[_Kept] = []
    root = _open_root(raw, problems)
    if root is not None:
        try:
            changed: list[tuple[str, int]] = []
            for path, status in _walk(root, "", _identity(places.store), problems):
                known = remembered.get(path)
                if known is not None and known[:-1] == _signature(status) and newest.get(path) == known[-1]:
                    memory[path] = known
                else:
                    changed.append((path, status.st_size))
            if not memory and not changed:
                reason = f"the raw folder {raw} holds no file to take in; the archive alone is used"
                problems.append(Problem(".", reason))
            if changed:
                kept = _keep_files(places, root, rehash, changed)
        finally:
            os.close(root)
    number = arrivals[-1].taken_in if arrivals else 0
    fresh: list[Arrival] = []
    for file in kept:
        problems += file.problems
        if file.signature is not None:
            memory[file.path] = [*file.signature, file.contents[0][1]]
        for path, sha, size, is_container in file.contents:
            if newest.get(path) != sha:
                newest[path] = sha
                fresh.append(Arrival(number + 1, path, sha, size, is_container))
    if fresh:
        fresh.sort(key=lambda arrival: arrival.path)
        with store_errors("the register of arrivals could not be written"):
            for folder in sorted({places.archived(arrival.file).parent for arrival in fresh}):
                sync_folder(folder)
            sync_folder(places.archive)
            append_register(places, whole, fresh)
        number += 1
    if root is not None and (memory != remembered or rehash):
        _write_memory(places, memory)
    return Intake(number, len(fresh), (*arrivals, *fresh), tuple(sorted(set(problems))))


def read_register(places: Places) -> tuple[Arrival, ...]:
    """All arrivals ever, in order; empty before the first intake. Raises StoreUnsound where it is damaged."""
    return parse_register(places)[0]


def register_digest(places: Places, intake: int) -> str:
    """SHA-256 of the register's lines up to an intake; raises StoreUnsound where it is damaged."""
    arrivals, whole = parse_register(places)
    count = sum(arrival.taken_in <= intake for arrival in arrivals)
    lines = places.register.read_bytes()[:whole].splitlines(keepends=True) if count else []
    return hashlib.sha256(b"".join(lines[:count])).hexdigest()


def read_archived(places: Places, sha: str) -> bytes:
    """The raw bytes with this SHA-256; raises StoreUnsound where they are gone or no longer hash to it."""
    if _SHA.fullmatch(sha) is None:
        raise StoreUnsound(f"seen {sha!r}; expected the SHA-256 of a raw file, 64 hexadecimal digits")
    path = places.archived(sha)
    try:
        packed = path.read_bytes()
    except FileNotFoundError:
        raise StoreUnsound(f"{path}: the raw file {sha} is not in the archive") from None
    except OSError as error:
        raise StoreUnsound(f"{path}: cannot be read: {error.strerror}") from error
    try:
        return expand(packed, sha)
    except ValueError as error:
        raise StoreUnsound(f"{path}: {error}; expected the raw file {sha}") from error


def keep_texts(places: Places, texts: dict[str, bytes]) -> dict[str, str]:
    """Archive texts that came from no raw folder; returns their SHA-256 by name. Raises StoreError."""
    with store_errors("the archive could not be written"):
        places.archive.mkdir(parents=True, exist_ok=True)
        places.arriving.touch()
    kept = {name: _keep_bytes(places, name, data, rehash=False, is_container=False)[1] for name, data in texts.items()}
    with store_errors("the archive could not be written"):
        for folder in sorted({places.archived(sha).parent for sha in kept.values()}):
            sync_folder(folder)
        sync_folder(places.archive)
        places.arriving.unlink()
    return kept


# The raw folder.


def _open_root(raw: Path, problems: list[Problem]) -> int | None:
    try:
        return os.open(raw, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
    except OSError as error:
        reason = f"the raw folder {raw} cannot be read: {error.strerror}; the archive alone is used"
        problems.append(Problem(".", reason))
        return None


def _identity(path: Path) -> tuple[int, int]:
    status = path.stat()
    return status.st_dev, status.st_ino


def _walk(
    folder: int, above: str, store: tuple[int, int], problems: list[Problem]
) -> Iterator[tuple[str, os.stat_result]]:
    """Regular files below an open folder, path and status, in order of path; the rest becomes problems."""
    with os.scandir(folder) as listing:
        entries = sorted(listing, key=lambda entry: os.fsencode(entry.name))
    for entry in entries:
        path = f"{above}{entry.name}"
        shown = f"{above}{ascii(entry.name)[1:-1]}"
        try:
            status = entry.stat(follow_symlinks=False)
            refusal = _refuse(entry.name, status)
            if refusal:
                problems.append(Problem(shown, refusal))
            elif not stat.S_ISDIR(status.st_mode):
                yield path, status
            elif (status.st_dev, status.st_ino) == store:
                problems.append(Problem(shown, "the store itself lies in the raw folder; it was not entered"))
            elif path.count("/") >= _DEEPEST:
                problems.append(Problem(shown, f"lies more than {_DEEPEST} folders deep; it was not entered"))
            else:
                inner = os.open(entry.name, _FOLDER, dir_fd=folder)
                try:
                    yield from _walk(inner, f"{path}/", store, problems)
                finally:
                    os.close(inner)
        except OSError as error:
            problems.append(Problem(shown, f"cannot be read: {error.strerror}"))


_FOLDER = os.O_RDONLY | os.O_DIRECTORY | os.O_NOFOLLOW | os.O_CLOEXEC
# Without O_NONBLOCK a pipe put in the place of a file would hold the night for ever.
_FILE = os.O_RDONLY | os.O_NOFOLLOW | os.O_NONBLOCK | os.O_CLOEXEC


def _refuse(name: str, status: os.stat_result) -> str | None:
    if stat.S_ISLNK(status.st_mode):
        return "is a link; expected a regular file or a folder"
    if not stat.S_ISREG(status.st_mode) and not stat.S_ISDIR(status.st_mode):
        return "is neither a regular file nor a folder"
    if not _is_plain_name(name):
        return "its name is not plain: expected letters, digits and . _ - + @ = , & ( ) ~ and inner spaces"
    if status.st_size > _LARGEST_FILE and stat.S_ISREG(status.st_mode):
        return f"seen {status.st_size:,} bytes; expected at most {_LARGEST_FILE:,}"
    return None


def _is_plain_name(name: str) -> bool:
    return _NAME.fullmatch(name) is not None and ".." not in name


def _signature(status: os.stat_result) -> list[int]:
    return [status.st_size, status.st_mtime_ns, status.st_ctime_ns, status.st_ino]


_large_files = threading.Lock()


def _keep_files(places: Places, root: int, rehash: bool, changed: list[tuple[str, int]]) -> list[_Kept]:
    """Archive raw files, given by path and size, in that order; raises StoreError."""
    with store_errors("the archive could not be written"):
        places.arriving.touch()
    keep = partial(_keep_file, places, root, rehash)
    with ThreadPoolExecutor(_WORKERS) as pool:
        kept = list(pool.map(keep, *zip(*changed, strict=True)))
    with store_errors("the archive could not be written"):
        places.arriving.unlink()
    return kept


def sweep_arriving(places: Places) -> list[str]:
    """Remove the parts of files that a stopped intake left in the archive; returns their names."""
    if not places.arriving.exists():
        return []
    parts = sorted(places.archive.glob(f"??/.*{PART}"))
    for part in parts:
        part.unlink()
    places.arriving.unlink()
    return [part.name for part in parts]


def _keep_file(places: Places, root: int, rehash: bool, path: str, size: int) -> _Kept:
    """Archive one raw file and, of a .zip, its members, large ones one at a time; raises StoreError."""
    try:
        if size > _LARGE or _is_container(path):
            with _large_files:
                return _keep_read(places, root, path, rehash)
        return _keep_read(places, root, path, rehash)
    except _NotTaken as error:
        return _Kept(path, (), (Problem(path, str(error), isinstance(error, _StillWritten)),), None)


def _keep_read(places: Places, root: int, path: str, rehash: bool) -> _Kept:
    data, status = _read_steady(root, path)
    contents, problems = [_keep_bytes(places, path, data, rehash, _is_container(path))], []
    if _is_container(path):
        try:
            for name, text in list_members(data, path):
                member = f"{path}/{name}"
                if not all(map(_is_plain_name, name.split("/"))) or name.count("/") > _DEEPEST:
                    shown = f"{path}/{ascii(name)[1:-1]}"
                    problems.append(Problem(shown, "a member whose name is not plain; it was not taken out"))
                elif _is_container(name):
                    problems.append(Problem(member, "a .zip within a .zip; it was not opened"))
                else:
                    contents.append(_keep_bytes(places, member, text, rehash))
        except IntakeError as error:
            problems.append(Problem(path, str(error)))
    is_settled = time.time_ns() - max(status.st_mtime_ns, status.st_ctime_ns) > _STEADY_NS
    signature = _signature(status) if is_settled and not problems else None
    return _Kept(path, tuple(contents), tuple(problems), signature)


def _is_container(path: str) -> bool:
    return path.lower().endswith(".zip")


def _open_below(root: int, path: str) -> int:
    """Open a file folder by folder, so that no link is followed even where one was put in since the walk."""
    *folders, name = path.split("/")
    folder = root
    try:
        for part in folders:
            inner = os.open(part, _FOLDER, dir_fd=folder)
            if folder != root:
                os.close(folder)
            folder = inner
        return os.open(name, _FILE, dir_fd=folder)
    except OSError as error:
        raise _NotTaken(f"cannot be read: {error.strerror}; it is left for the next night") from error
    finally:
        if folder != root:
            os.close(folder)


def _read_steady(root: int, path: str) -> tuple[bytes, os.stat_result]:
    """The bytes of a file that did not change meanwhile, at the second attempt if need be."""
    for _ in range(2):
        opened = _open_below(root, path)
        try:
            with open(opened, "rb", buffering=0) as file:
                before = os.fstat(opened)
                if not stat.S_ISREG(before.st_mode):
                    raise _NotTaken("is no longer a regular file")
                if before.st_size > _LARGEST_FILE:
                    raise _NotTaken(f"seen {before.st_size:,} bytes; expected at most {_LARGEST_FILE:,}")
                data = _read_up_to(file, before.st_size + 1)
                after = os.fstat(opened)
        except OSError as error:
            raise _NotTaken(f"cannot be read: {error.strerror}; it is left for the next night") from error
        if _signature(before) == _signature(after) and len(data) == after.st_size:
            return data, after
    raise _StillWritten("changed twice while it was read; it is left for the next night")


def _read_up_to(file: FileIO, most: int) -> bytes:
    parts, missing = [], most
    while missing and (part := file.read(missing)):
        parts.append(part)
        missing -= len(part)
    return b"".join(parts)


def _keep_bytes(
    places: Places, path: str, data: bytes, rehash: bool, is_container: bool = False
) -> tuple[str, str, int, bool]:
    """Put bytes into the archive unless they are there; raises StoreError."""
    sha = hashlib.sha256(data).hexdigest()
    target = places.archived(sha)
    with store_errors(f"the raw file {path} could not be archived"):
        if not target.exists() or (rehash and _is_damaged(places, sha)):
            target.parent.mkdir(exist_ok=True)
            # Two paths may bring the same bytes at once, hence a name of the thread's own.
            part = target.with_name(f".{sha}-{threading.get_ident()}{PART}")
            write_new(part, pack(data))
            os.replace(part, target)
    return path, sha, len(data), is_container


def _is_damaged(places: Places, sha: str) -> bool:
    try:
        read_archived(places, sha)
    except StoreUnsound:
        return True
    return False


# The register. Every line says how many of its intake follow, so that an intake counts whole or not at all.


def append_register(places: Places, whole: int, fresh: list[Arrival]) -> None:
    """Put one intake's arrivals behind the whole lines of the register, and see them onto the disk."""
    lines = []
    for left, arrival in zip(range(len(fresh) - 1, -1, -1), fresh, strict=True):
        lines.append(json.dumps({**vars(arrival), "left": left}) + "\n")
    opened = os.open(places.register, os.O_RDWR | os.O_CREAT | os.O_NOFOLLOW | os.O_CLOEXEC, 0o644)
    try:
        os.ftruncate(opened, whole)
        append_whole(opened, whole, "".join(lines).encode())
    finally:
        os.close(opened)
    sync_folder(places.archive)


def parse_register(places: Places) -> tuple[tuple[Arrival, ...], int]:
    """The arrivals of whole intakes, and the bytes of the register that hold them."""
    try:
        data = places.register.read_bytes()
    except FileNotFoundError:
        return (), 0
    except OSError as error:
        raise StoreError(f"{places.register}: cannot be read: {error.strerror}") from error
    lines = data[: data.rfind(b"\n") + 1].splitlines(keepends=True)
    try:
        records = json.loads(b"[" + b",".join(lines) + b"]")
        rows = [_parse_arrival(record) for record in records]
    except (ValueError, TypeError, KeyError, AttributeError):
        raise StoreUnsound(_first_unreadable(places, lines)) from None
    count = len(rows)
    if count and rows[-1][1]:
        unfinished = rows[-1][0].taken_in
        while count and rows[count - 1][0].taken_in == unfinished:
            count -= 1
    return tuple(arrival for arrival, _ in rows[:count]), sum(map(len, lines[:count]))


def _parse_arrival(record: dict[str, object]) -> tuple[Arrival, int]:
    taken_in, path, sha, size, container, left = (
        record[key] for key in ("taken_in", "path", "file", "bytes", "container", "left")
    )
    is_right = type(taken_in) is int and type(size) is int and type(left) is int and type(container) is bool
    if not is_right or not isinstance(path, str) or not isinstance(sha, str) or not _SHA.fullmatch(sha):
        raise ValueError(record)
    return Arrival(taken_in, path, sha, size, container), left  # type: ignore[arg-type, return-value]


def _first_unreadable(places: Places, lines: list[bytes]) -> str:
    for number, line in enumerate(lines, 1):
        try:
            _parse_arrival(json.loads(line))
        except (ValueError, TypeError, KeyError, AttributeError):
            seen = ascii(line[:80].decode(errors="replace").rstrip())
            return f"{places.register}:{number}: seen {seen}; expected one arrival as a JSON object"
    return f"{places.register}: seen lines that are no arrivals; expected one JSON object a line"


# What the last intake saw, so that unchanged files are not read again.


def _memory_path(places: Places) -> Path:
    return places.intake / "seen.json"


def _read_memory(places: Places) -> dict[str, list[int | str]]:
    """By path: size, times and identity of the file, and its SHA-256; empty where none is to be had."""
    try:
        record = json.loads(_memory_path(places).read_bytes())
        if record["format"] == _MEMORY_FORMAT and isinstance(record["files"], dict):
            files: dict[str, list[int | str]] = record["files"]
            return {path: row for path, row in files.items() if isinstance(row, list) and len(row) == 5}
    except (OSError, ValueError, TypeError, KeyError):
        pass
    return {}


def _write_memory(places: Places, memory: dict[str, list[int | str]]) -> None:
    record = {"format": _MEMORY_FORMAT, "files": memory}
    with store_errors("the memory of the intake could not be written"):
        write_whole(_memory_path(places), json.dumps(record, sort_keys=True).encode())
