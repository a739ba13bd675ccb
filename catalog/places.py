"""A store as a folder: its paths, its one writer, and how a file comes to lie in it whole or not at all.

Belongs here: where things are, the lock, and the few steps that put a file in its place so that neither a
kill nor a power cut leaves half of it. Does not belong here: what the files say (`archive.py`, `store.py`).
"""

import errno
import fcntl
import hashlib
import json
import os
import re
import socket
import stat
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path

from contracts.declared import CODE
from contracts.errors import StoreBusy, StoreError

# A market code holds no underscore and no small letter, so that no market can be called this.
DESK_WIDE = "_desk"
PART = ".part"
_SNAPSHOT = re.compile(r"(\d{6,})-[0-9a-f]{12}")
_MARKET = re.compile(CODE)
_TABLE = re.compile(r"[a-z_]{1,40}")
_READ_BACK = 1 << 20
_LOOKS, _BETWEEN_LOOKS = 100, 0.02
# DuckDB takes these for a pattern of several files wherever it is given a path.
_UNNAMEABLE = re.compile(r"[*?\[\]\x00-\x1f\x7f]")


@dataclass(frozen=True)
class Places:
    """The paths of one store; `store` is made absolute and free of links.

    Raises StoreError where the path holds a character that would stand for other paths in the catalog.
    """

    store: Path

    def __post_init__(self) -> None:
        real = Path(os.path.realpath(self.store))
        if _UNNAMEABLE.search(str(real)):
            raise StoreError(
                f"the store {str(real)!r}: seen one of * ? [ ] or a control character in its path; "
                "expected none, since the catalog names each file by its path; choose another folder"
            )
        object.__setattr__(self, "store", real)

    @property
    def archive(self) -> Path:
        """Raw bytes, by SHA-256."""
        return self.store / "archive"

    @property
    def register(self) -> Path:
        """The register of arrivals, one JSON object a line."""
        return self.archive / "register.jsonl"

    @property
    def arriving(self) -> Path:
        """An empty file that is there while files are being put into the archive."""
        return self.archive / ".arriving"

    @property
    def intake(self) -> Path:
        """What a night remembers of the last one; may be deleted, and then costs one long night."""
        return self.store / "intake"

    @property
    def snapshots(self) -> Path:
        """The published snapshots."""
        return self.store / "snapshots"

    @property
    def current(self) -> Path:
        """The file that names the newest snapshot."""
        return self.store / "CURRENT"

    @property
    def catalog(self) -> Path:
        """The DuckDB file with the views on the newest snapshot."""
        return self.store / "catalog.duckdb"

    @property
    def catalog_hashes(self) -> Path:
        """SHA-256 of the catalog file by the snapshot it shows: of the newest, and of the one before it."""
        return self.store / "catalog.json"

    @property
    def lock(self) -> Path:
        """The file whose lock the one writer holds."""
        return self.store / "lock"

    @property
    def runs(self) -> Path:
        """The log of runs, one JSON object a line, also of those that published nothing."""
        return self.store / "runs.jsonl"

    @property
    def last_night(self) -> Path:
        """What the last night came to, as JSON."""
        return self.store / "last_night.json"

    @property
    def names(self) -> Path:
        """Names that people gave snapshots, one JSON object."""
        return self.store / "names.json"

    def archived(self, sha: str) -> Path:
        """Where the archive keeps the raw bytes of this SHA-256."""
        return self.archive / sha[:2] / f"{sha}.zst"

    def snapshot(self, name: str) -> Path:
        """The folder of one snapshot; raises StoreError where the name is not that of a snapshot."""
        if _SNAPSHOT.fullmatch(name) is None:
            raise StoreError(f"seen {name!r}; expected the name of a snapshot such as 000042-0123456789ab")
        return self.snapshots / name


def sequence_of(name: str) -> int | None:
    """The number in a snapshot's name; None where it is not the name of a snapshot."""
    match = _SNAPSHOT.fullmatch(name)
    return int(match[1]) if match else None


def table_path(table: str, market: str | None) -> str:
    """Path of a table's file below its snapshot: `series/NWHT.parquet`, `coverage/_desk.parquet`.

    Rows that belong to no single market are kept under `_desk`, given by that name or by None.

    Raises StoreError where table or market is not a name a path may be made of.
    """
    if _TABLE.fullmatch(table) is None:
        raise StoreError(f"seen the table {table!r}; expected small letters and underscores")
    if market is None or market == DESK_WIDE:
        return f"{table}/{DESK_WIDE}.parquet"
    if _MARKET.fullmatch(market) is None:
        raise StoreError(f"seen the market {market!r}; expected a code of the form {CODE}")
    return f"{table}/{market}.parquet"


@contextmanager
def store_errors(doing: str) -> Iterator[None]:
    """Turn what the operating system refuses into a StoreError that says what was being done."""
    try:
        yield
    except OSError as error:
        where = f" ({error.filename})" if error.filename else ""
        reason = error.strerror or str(error)
        raise StoreError(f"{doing}: {reason}{where}; what was published before still stands") from error


def write_new(path: Path, data: bytes, mode: int = 0o444) -> None:
    """Write a file that must not exist yet and force it to the disk; raises OSError, leaving nothing.

    A failed fsync is never tried again: after one, the kernel may report success for pages it has dropped.
    What was written is read back, and other bytes are an error.
    """
    opened = os.open(path, os.O_RDWR | os.O_CREAT | os.O_EXCL | os.O_NOFOLLOW | os.O_CLOEXEC, mode)
    try:
        try:
            append_whole(opened, 0, data)
        finally:
            os.close(opened)
    except BaseException:
        path.unlink(missing_ok=True)
        raise


def append_whole(opened: int, end: int, data: bytes) -> None:
    """Write at the end of an open file, force it to the disk and read it back; raises OSError."""
    os.lseek(opened, end, os.SEEK_SET)
    view = memoryview(data)
    while view:
        view = view[os.write(opened, view) :]
    os.fsync(opened)
    _check_written(opened, end, data)


def _check_written(opened: int, start: int, data: bytes) -> None:
    """Read an open file from `start` on; raises OSError where it does not hold just these bytes."""
    view, at = memoryview(data), 0
    while part := os.pread(opened, _READ_BACK, start + at):
        if part != view[at : at + len(part)]:
            break
        at += len(part)
    if part or at != len(data):
        raise OSError(errno.EIO, "what is read back differs from what was written; is the disk sound?")


def write_whole(path: Path, data: bytes, mode: int = 0o644) -> None:
    """Put a file in the place of what is there, by one rename; raises OSError, leaving what was there."""
    part = prepare_part(path)
    write_new(part, data, mode)
    os.replace(part, path)
    sync_folder(path.parent)


def prepare_part(path: Path) -> Path:
    """The name under which a file is written before it is renamed to `path`, free of a dead run's remains."""
    part = path.with_name(f".{path.name}{PART}")
    part.unlink(missing_ok=True)
    return part


def sync_folder(folder: Path) -> None:
    """Force a folder's entries to the disk; raises OSError."""
    opened = os.open(folder, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
    try:
        os.fsync(opened)
    finally:
        os.close(opened)


def hash_file(path: Path) -> tuple[int, str]:
    """Size and SHA-256 of a regular file; raises OSError for anything else, also for a link to one."""
    opened = os.open(path, os.O_RDONLY | os.O_NOFOLLOW | os.O_NONBLOCK | os.O_CLOEXEC)
    with open(opened, "rb") as file:
        status = os.fstat(opened)
        if not stat.S_ISREG(status.st_mode):
            raise OSError(errno.EINVAL, "is not a regular file", str(path))
        return status.st_size, hashlib.file_digest(file, "sha256").hexdigest()


# The lock.

_held: set[int] = set()


def _let_go_in_child() -> None:
    # A forked worker that outlives its killed parent would otherwise keep the store locked.
    while _held:
        os.close(_held.pop())


os.register_at_fork(after_in_child=_let_go_in_child)


@contextmanager
def write_lock(places: Places) -> Iterator[None]:
    """Hold the store as its one writer; makes the store's folder where there is none.

    Raises StoreBusy, naming the holder, where another process writes it. The operating system frees the lock
    of a process that is gone, whatever the file says.
    """
    with store_errors(f"the store {places.store} cannot be written"):
        places.store.mkdir(parents=True, exist_ok=True)
        flags = os.O_RDWR | os.O_CREAT | os.O_NOFOLLOW | os.O_CLOEXEC
        opened = os.open(places.lock, flags, 0o644)
    try:
        _take_lock(opened, places)
        _held.add(opened)
        with store_errors(f"the store {places.store} cannot be written"):
            os.ftruncate(opened, 0)
            os.pwrite(opened, json.dumps(_describe_self()).encode() + b"\n", 0)
        yield
    finally:
        if opened in _held:
            _held.remove(opened)
            # Whoever holds it counts, not what the file says; a night that has published has not failed here.
            with suppress(OSError):
                os.ftruncate(opened, 0)
        os.close(opened)


def _take_lock(opened: int, places: Places) -> None:
    """Lock the open file; raises StoreBusy. A holder that just came or is about to go has no name there yet."""
    for _ in range(_LOOKS):
        try:
            fcntl.flock(opened, fcntl.LOCK_EX | fcntl.LOCK_NB)
            return
        except OSError as error:
            if error.errno not in (errno.EWOULDBLOCK, errno.EACCES):
                raise StoreError(f"{places.lock} cannot be locked: {error.strerror}; nothing was done") from error
        if content := os.pread(opened, 4096, 0):
            break
        time.sleep(_BETWEEN_LOOKS)
    raise StoreBusy(f"{places.store} is being written by {_describe_holder(content)}; nothing was done")


def _describe_self() -> dict[str, str | int]:
    started = time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime())
    command = " ".join([Path(sys.argv[0]).name, *sys.argv[1:]])[:500]
    return {"pid": os.getpid(), "host": socket.gethostname(), "command": command, "since": started}


def _describe_holder(content: bytes) -> str:
    try:
        holder = json.loads(content)
        command = ascii(str(holder["command"]))[1:-1]
        return f"process {int(holder['pid'])} on {holder['host']} ({command}) since {holder['since']}"
    except (ValueError, TypeError, KeyError):
        return "another process"
