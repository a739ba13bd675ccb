"""Publish a small store over and over, stopped at a different step each time; run as a program.

    python -m tests.catalog.stopped kill FOLDER     every step in turn is the last one before SIGKILL
    python -m tests.catalog.stopped fill FOLDER     no file may grow beyond a size, a different one each time

All nights are of one store, and every broken one is followed by a whole one. Prints a JSON object a line: the
step or size, and what a reader and the next run then see. Each night is a forked child, so that the kill is
real; the program itself starts no thread before it forks.
"""

import json
import os
import resource
import signal
import sys
from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import Any

import duckdb  # noqa: F401  loaded once here and not in every child
import pyarrow as pa

from catalog.archive import read_archived, read_register, take_in
from catalog.places import Places, write_lock
from catalog.query import open_catalog, run_query
from catalog.standing import check_files, current_snapshot, read_manifest
from catalog.store import clean_leftovers, link_table, open_staging, publish, write_table
from catalog.verify import verify_store
from contracts.errors import StoreError
from contracts.tables import COVERAGE, FILES
from tests.catalog.small import STAMP, draft_of, lay_raw, publish_small, sound_table

STEPS = ("fsync", "replace", "rename", "link", "write", "ftruncate", "mkdir", "unlink", "pwrite", "chmod")
A_TABLE_EACH = ("link", "mkdir", "unlink")
SIZES = [0, 1, 100, 1000, 3000, 20_000, 300_000]


def work(places: Places, raw: Path) -> None:
    """A night: one raw file arrives, two tables are written anew, the others are linked."""
    with write_lock(places):
        clean_leftovers(places)
        intake = take_in(raw, places)
        last = read_manifest(places)
        staging = open_staging(places)
        files = dict(last.files)
        for table, owner in ((FILES, "NWHT"), (COVERAGE, None)):
            data = sound_table(table.name)
            if table is FILES:
                place = data.schema.get_field_index("taken_in")
                data = data.set_column(place, data.schema.field(place), pa.array([intake.number], pa.int32()))
            stored = write_table(staging, table, owner, data, STAMP)
            files[stored.path] = stored
        for path in last.files.keys() - {"files/NWHT.parquet", "coverage/_desk.parquet"}:
            link_table(staging, places.snapshot(last.name), path)
        publish(places, staging, draft_of(files))


def stop_at(step: int) -> None:
    """Let this process be killed instead of its n-th change to the disk; a write is half done first.

    Of the calls that are made once a table, in a row, only the first two count.
    """
    count = 0
    met = dict.fromkeys(STEPS, 0)

    def stopping(name: str, original: Callable[..., Any]) -> Callable[..., Any]:
        def call(*arguments: Any, **named: Any) -> Any:
            nonlocal count
            met[name] += 1
            is_counted = name not in A_TABLE_EACH or met[name] <= 2
            count += is_counted
            if is_counted and count == step:
                if name == "write":
                    original(arguments[0], bytes(arguments[1])[: len(arguments[1]) // 2])
                os.kill(os.getpid(), signal.SIGKILL)
            return original(*arguments, **named)

        return call

    for name in STEPS:
        setattr(os, name, stopping(name, getattr(os, name)))


def look(places: Places) -> dict[str, Any]:
    """What a reader sees: the catalog's snapshot, how many rows its tables have, what CURRENT names."""
    with open_catalog(places) as connection:
        name = run_query(connection, "select name from snapshot")[1][0][0]
        rows = run_query(connection, "select (select count(*) from series), (select count(*) from bars)")[1][0]
    return {"catalog": name, "rows": list(rows), "current": current_snapshot(places)}


def recover(places: Places, raw: Path) -> dict[str, Any]:
    """What a reader sees, what the next run cleans up, whether all is in place after that and a night."""
    seen: dict[str, Any] = {"reader": look(places)}
    with write_lock(places):
        seen["cleaned"] = clean_leftovers(places)
    seen["after"] = look(places)
    manifest = read_manifest(places)
    seen["problems"] = check_files(places.snapshot(manifest.name), manifest)
    seen["parts"] = sorted(str(path.relative_to(places.store)) for path in places.store.rglob(".*"))
    work(places, raw)
    seen["next"] = look(places)
    arrivals = read_register(places)
    seen["arrivals"] = [arrival.taken_in for arrival in arrivals]
    seen["raw"] = read_archived(places, arrivals[-1].file).decode()
    return seen


def fork(job: Callable[[], Any]) -> tuple[int, Any]:
    """Run a job in a child; returns the signal that ended it (0 for none) and what the job returned."""
    reader, writer = os.pipe()
    child = os.fork()
    if child == 0:
        os.close(reader)
        try:
            answer = json.dumps(job())
        except Exception as error:
            answer = json.dumps(f"{type(error).__name__}: {error}")
        with open(writer, "w") as file:
            file.write(answer)
        os._exit(0)
    os.close(writer)
    with open(reader) as file:
        answer = file.read()
    return os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]), json.loads(answer) if answer else None


def killed_night(places: Places, raw: Path, step: int) -> None:
    stop_at(step)
    work(places, raw)


def filled_night(places: Places, raw: Path, size: int) -> str:
    # Past the limit a write fails as on a full disk, once the signal that goes with it is ignored.
    signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, size))
    try:
        work(places, raw)
    except StoreError as error:
        return f"StoreError: {error}"
    return "published"


def tell(row: object) -> None:
    """One JSON object a line."""
    sys.stdout.write(json.dumps(row) + "\n")
    sys.stdout.flush()


def main(kind: str, folder: Path) -> None:
    """Break a night in every way of one kind, with a new raw file each night."""
    places, raw = Places(folder / "store"), folder / "raw"
    _, name = fork(lambda: publish_small(places, raw).name)
    for number in range(1, 1000):
        lay_raw(raw, text=f"night {number}\n".encode())
        row: dict[str, Any] = {"number": number, "before": name}
        if kind == "kill":
            row["ended"], row["answer"] = fork(partial(killed_night, places, raw, number))
        else:
            row["size"] = SIZES[number - 1]
            row["ended"], row["answer"] = fork(partial(filled_night, places, raw, row["size"]))
        row["recovered"] = fork(lambda: recover(places, raw))[1]
        name = row["recovered"]["next"]["current"]
        tell(row)
        if (kind == "kill" and row["ended"] == 0) or (kind == "fill" and number == len(SIZES)):
            break
    tell(fork(lambda: list(verify_store(places).problems))[1])


if __name__ == "__main__":
    main(sys.argv[1], Path(sys.argv[2]))
