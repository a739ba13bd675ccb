"""One night under an injected failure at every call to the system that changes the disk; run as a program.

    python -m tests.faults.crash FOLDER [--every N]

Each point is one call (its name and its number within its thread) and one failure: EIO, ENOSPC, EACCES, EDQUOT,
EROFS or SIGKILL. A night of two markets is run with it under strace, in a forked child; another child then reads the
store, verifies it, runs the next night and verifies again. Prints a JSON object a point, and a last line of
counts. `--every N` takes one point in N. The program itself starts no thread before it forks.
"""

import argparse
import json
import os
import random
import re
import shutil
import socket
import subprocess
import sys
from collections import Counter
from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import Any

import duckdb  # noqa: F401  loaded once here and not in every child

from catalog.places import Places
from catalog.query import open_catalog, run_query
from catalog.standing import current_snapshot
from catalog.verify import verify_store
from contracts.errors import RopewalkError
from tests.integration.tiny import run_night, write_desk, write_raw

CALLS = (
    "write", "pwrite64", "writev", "pwritev", "fsync", "fdatasync", "sync_file_range", "rename", "renameat",
    "renameat2", "link", "linkat", "unlink", "unlinkat", "mkdir", "mkdirat", "rmdir", "ftruncate", "fallocate",
    "chmod", "fchmod", "fchmodat",
)  # fmt: skip
FAILURES = ("error=EIO", "error=ENOSPC", "error=EACCES", "error=EDQUOT", "error=EROFS", "signal=SIGKILL")
SESSIONS = 90
_COUNTED = "select count(*), sum(settle), max(session)::varchar from series"


def fork(
    job: Callable[[], Any], watch: Callable[[int], "subprocess.Popen[str] | None"] | None = None
) -> tuple[int, Any]:
    """Run a job in a child, which begins once `watch` has attached to it; returns its end and its answer."""
    # The answer goes by a socket, since `write` may be the very call that fails.
    reader, writer = socket.socketpair()
    ready, go = os.pipe()
    child = os.fork()
    if child == 0:
        reader.close()
        os.close(go)
        os.read(ready, 1)
        try:
            answer = job()
        except BaseException as error:
            answer = {"error": type(error).__name__, "text": str(error), "expected": isinstance(error, RopewalkError)}
        try:
            writer.sendall(json.dumps(answer).encode())
        finally:
            os._exit(0)
    writer.close()
    os.close(ready)
    tracer = watch(child) if watch is not None else None
    os.write(go, b"g")
    os.close(go)
    with reader, reader.makefile("rb") as file:
        content = file.read()
    ended = os.waitstatus_to_exitcode(os.waitpid(child, 0)[1])
    if tracer is not None:
        tracer.wait()
    try:
        return ended, json.loads(content) if content else None
    except ValueError:
        return ended, None


def attach(child: int, *options: str) -> "subprocess.Popen[str]":
    """strace on a process, once it holds it."""
    tracer = subprocess.Popen(
        ["strace", "-f", "-p", str(child), *options], stderr=subprocess.PIPE, stdout=subprocess.DEVNULL, text=True
    )
    assert tracer.stderr is not None
    for line in tracer.stderr:
        if "attached" in line:
            return tracer
    raise RuntimeError(f"strace cannot attach: it ended with {tracer.wait()}")


def look(places: Places) -> dict[str, Any]:
    """What a reader of the catalog sees, and what CURRENT names."""
    with open_catalog(places) as connection:
        name = run_query(connection, "select name from snapshot")[1][0][0]
        rows = list(run_query(connection, _COUNTED)[1][0])
    return {"catalog": name, "rows": rows, "current": current_snapshot(places)}


def night(desk: Path, store: Path) -> str:
    return str(run_night(desk, store).current)


def aftermath(desk: Path, store: Path) -> dict[str, Any]:
    """A reader, `verify`, the next night, and both again."""
    places = Places(store)
    seen: dict[str, Any] = {"reader": look(places), "problems": list(verify_store(places).problems)}
    night(desk, store)
    seen["next"] = look(places)
    seen["next_problems"] = list(verify_store(places).problems)
    seen["left"] = sorted(path.name for path in (store / "snapshots").glob(".*"))
    return seen


class Crash:
    """A desk, the store before the night, and what old and new look like."""

    def __init__(self, folder: Path) -> None:
        self.folder, self.desk, self.store = folder, write_desk(folder), folder / "store"
        write_raw(self.desk, SESSIONS)
        fork(partial(night, self.desk, self.store))
        self.old = fork(lambda: look(Places(self.store)))[1]
        shutil.copytree(self.store, folder / "before")
        write_raw(self.desk, SESSIONS + 1)
        self.counts = self._count()
        self.new = fork(lambda: look(Places(self.store)))[1]
        assert self.old["rows"] != self.new["rows"]

    def _count(self) -> dict[str, int]:
        """The most calls of each name any thread of a night makes."""
        log = self.folder / "calls"
        watch = partial(self._attach, "-o", str(log), "-e", f"trace={','.join(CALLS)}")
        ended, answer = fork(partial(night, self.desk, self.store), watch)
        assert ended == 0 and isinstance(answer, str), answer
        met: Counter[tuple[str, str]] = Counter()
        for line in log.read_text().splitlines():
            match = re.match(r"(\d+) +(\w+)\(", line)
            if match:
                met[match[1], match[2]] += 1
        most: dict[str, int] = {}
        for (_, name), count in met.items():
            most[name] = max(most.get(name, 0), count)
        return most

    @staticmethod
    def _attach(*options_and_child: Any) -> "subprocess.Popen[str]":
        *options, child = options_and_child
        return attach(child, *options)

    def points(self) -> list[tuple[str, int, str]]:
        """Every call and failure of a night, in an order of no pattern but always the same."""
        made = [
            (name, number, failure)
            for name in sorted(self.counts)
            for number in range(1, self.counts[name] + 1)
            for failure in FAILURES
        ]
        random.Random(5).shuffle(made)
        return made

    def run(self, name: str, number: int, failure: str) -> dict[str, Any]:
        """One night with one failure, and what is left of it."""
        shutil.rmtree(self.store)
        shutil.copytree(self.folder / "before", self.store)
        options = ("-o", "/dev/null", "-e", f"trace={name}", "-e", f"inject={name}:{failure}:when={number}")
        ended, answer = fork(partial(night, self.desk, self.store), partial(self._attach, *options))
        _, seen = fork(partial(aftermath, self.desk, self.store))
        row: dict[str, Any] = {"call": name, "number": number, "failure": failure, "ended": ended, "answer": answer}
        row["seen"] = seen
        row["outcome"] = self.judge(row)
        return row

    def judge(self, row: dict[str, Any]) -> str:
        """The outcome in a word, or what is wrong with it."""
        seen = row["seen"]
        if not isinstance(seen, dict) or "error" in seen:
            return f"wrong: the store cannot be read or the next night fails: {seen}"
        rows = seen["reader"]["rows"]
        if rows not in (self.old["rows"], self.new["rows"]):
            return f"wrong: a reader sees neither the old nor the new snapshot: {rows}"
        if seen["problems"]:
            return f"wrong: verify: {seen['problems'][0]}"
        if seen["next"]["rows"] != self.new["rows"] or seen["next"]["catalog"] != seen["next"]["current"]:
            return f"wrong: the next night: {seen['next']}"
        if seen["next_problems"]:
            return f"wrong: verify after the next night: {seen['next_problems'][0]}"
        if seen["left"]:
            return f"wrong: left behind: {seen['left']}"
        answer = row["answer"]
        # What the system refuses outside the store's own steps is told by the command line, with code 4.
        known = isinstance(answer, dict) and (answer["expected"] or answer["error"] in ("PermissionError", "OSError"))
        if isinstance(answer, dict) and not known:
            return f"wrong: {answer['error']}: {answer['text']}"
        if row["ended"] == -9:
            told = "killed"
        elif isinstance(answer, dict):
            told = "refused"
        else:
            told = "published all the same"
            if rows == self.old["rows"]:
                return "wrong: said to be published, and a reader sees the old snapshot"
        return f"{told}, {'new' if rows == self.new['rows'] else 'old'} stands"


def main() -> None:
    """Break a night at every point, or at one in N."""
    options = argparse.ArgumentParser()
    options.add_argument("folder", type=Path)
    options.add_argument("--every", type=int, default=1)
    options.add_argument("--point", help="One point alone, such as 'write 1 error=EIO'.")
    asked = options.parse_args()
    crash = Crash(asked.folder)
    points = crash.points()
    if asked.point:
        name, number, failure = asked.point.split()
        points = [(name, int(number), failure)]
    outcomes: Counter[str] = Counter()
    for name, number, failure in points[:: asked.every]:
        row = crash.run(name, number, failure)
        outcomes[row["outcome"] if not row["outcome"].startswith("wrong") else "wrong"] += 1
        tell({key: row[key] for key in ("call", "number", "failure", "ended", "answer", "outcome")})
    tell({"points": len(points), "run": sum(outcomes.values()), "calls": crash.counts, "outcomes": outcomes})


def tell(row: object) -> None:
    """One JSON object a line."""
    sys.stdout.write(json.dumps(row) + "\n")
    sys.stdout.flush()


if __name__ == "__main__":
    main()
