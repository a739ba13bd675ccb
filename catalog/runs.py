"""The record of runs: the only place where the clock is written down.

Belongs here: one line a run, kept beside the snapshots, and the `runs` table made from it. Does not belong
here: anything a price depends on.
"""

import datetime
import json
import os
from dataclasses import asdict, dataclass

import pyarrow as pa

from catalog.places import Places, append_whole
from contracts.tables import RUNS, make_table


@dataclass(frozen=True)
class Run:
    """One run; times in ISO 8601 with zone."""

    run: int
    command: str
    started_at: str
    finished_at: str
    outcome: str
    markets: int
    published: int
    held_back: int
    snapshot: str | None = None
    # The newest intake it built from; in the log alone.
    intake: int | None = None


def read_runs(places: Places) -> list[Run]:
    """All recorded runs in order; a line cut by a crash is passed over."""
    try:
        lines = places.runs.read_text(encoding="utf-8").splitlines()
    except FileNotFoundError:
        return []
    runs = []
    for line in lines:
        try:
            runs.append(Run(**json.loads(line)))
        except (ValueError, TypeError):
            continue
    return runs


def next_run(places: Places) -> int:
    """Number of the run under way."""
    return max((run.run for run in read_runs(places)), default=0) + 1


def record_run(places: Places, run: Run) -> None:
    """Append one run, see it onto the disk and read it back; raises OSError."""
    places.runs.parent.mkdir(parents=True, exist_ok=True)
    opened = os.open(places.runs, os.O_RDWR | os.O_CREAT | os.O_NOFOLLOW | os.O_CLOEXEC, 0o644)
    try:
        end = os.fstat(opened).st_size
        is_cut = end > 0 and os.pread(opened, 1, end - 1) != b"\n"
        line = ("\n" if is_cut else "") + json.dumps(asdict(run), sort_keys=True) + "\n"
        append_whole(opened, end, line.encode())
    finally:
        os.close(opened)


def runs_table(places: Places, current: Run) -> pa.Table:
    """The runs up to the one under way, as a published table."""
    runs = [*read_runs(places), current]
    columns: dict[str, object] = {name: [getattr(run, name) for run in runs] for name in RUNS.columns}
    for name in ("started_at", "finished_at"):
        columns[name] = [datetime.datetime.fromisoformat(getattr(run, name)) for run in runs]
    return make_table(RUNS, columns)
