"""What watching costs: nights on fresh homes, and the same night with and without Prefect.

    python -m tests.benchmarks.prefect_cost --nights 10 --markets 9

Prints, for each night on a home nobody has used: exit code, tracebacks and ERROR lines seen, task runs kept;
then the seconds of `build`, of `nightly` against a server that runs already, and their difference. Exits with 1
where a night failed, said something it should not, or lost a record. No time is judged.
"""

import argparse
import os
import re
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from tests.integration import tiny

ROOT = Path(__file__).resolve().parent.parent.parent


def call(home: Path, *words: str, **extra: str) -> tuple[float, subprocess.CompletedProcess[str]]:
    """One command in a process of its own; returns its seconds and what came of it."""
    home.mkdir(exist_ok=True)
    kept = {name: value for name, value in os.environ.items() if not name.startswith("PREFECT")}
    started = time.monotonic()
    done = subprocess.run(
        [sys.executable, "-m", "flows.commands", *words], capture_output=True, text=True, check=False,
        env={**kept, "HOME": str(home), "PYTHONPATH": str(ROOT), **extra},
    )  # fmt: skip
    return time.monotonic() - started, done


def write_markets(folder: Path, count: int) -> Path:
    """A desk of so many small markets with the raw files of 80 sessions."""
    tiny.MARKETS = tuple(f"TIN{number:03d}" for number in range(count))
    desk = tiny.write_desk(folder)
    tiny.write_raw(desk, 80, tiny.MARKETS)
    return desk


def tell(line: str) -> None:
    """Print one line at once."""
    sys.stdout.write(f"{line}\n")
    sys.stdout.flush()


def main() -> int:
    """Measure and print; returns the exit code."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--nights", type=int, default=10)
    parser.add_argument("--markets", type=int, default=9)
    asked = parser.parse_args()
    failed = 0
    with tempfile.TemporaryDirectory() as made:
        folder = Path(made)
        desk = write_markets(folder, asked.markets)
        for number in range(1, asked.nights + 1):
            store = folder / f"store{number}"
            seconds, done = call(folder / f"home{number}", "nightly", "--desk", str(desk), "--store", str(store))
            kept = re.search(r"Prefect keeps (\d+) of (\d+) task runs", done.stdout)
            strange = done.stderr.count("Traceback") + done.stderr.count("ERROR")
            is_right = done.returncode == 0 and not strange and kept is not None and kept[1] == kept[2]
            failed += not is_right
            told = kept[0] if kept else done.stderr[-200:]
            tell(f"fresh home {number}: exit {done.returncode}, {strange} bad lines, {told}, {seconds:.1f} s")
        failed += _against_a_server(folder, desk)
    return 1 if failed else 0


def _against_a_server(folder: Path, desk: Path) -> int:
    """Build and nightly in turn against one server, three times; both from nothing."""
    from flows.watched import reach_api

    os.environ["PREFECT_HOME"] = str(folder / "server")
    failed = 0
    with reach_api(is_lasting=True) as api:
        for turn in range(3):
            plain, one = call(folder / "home", "build", "--desk", str(desk), "--store", str(folder / f"b{turn}"))
            watched, two = call(
                folder / "home", "nightly", "--desk", str(desk), "--store", str(folder / f"n{turn}"),
                PREFECT_API_URL=api.url,
            )  # fmt: skip
            failed += bool(one.returncode or two.returncode or two.stderr)
            kept = re.search(r"Prefect keeps .*", two.stdout)
            told = kept[0] if kept else two.stderr[-200:]
            tell(f"build {plain:.1f} s, nightly {watched:.1f} s, Prefect {watched - plain:.1f} s; {told}")
    return failed


if __name__ == "__main__":
    sys.exit(main())
