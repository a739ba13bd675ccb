"""A kill at any step and a disk full at any size leave a whole snapshot and a clean next run."""

import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

from tests.catalog.stopped import SIZES


def break_nights(kind: str, folder: Path) -> tuple[list[dict[str, Any]], list[str]]:
    """Rows of `stopped`, and what `verify` says of the store at the end."""
    root = Path(__file__).parents[2]
    run = subprocess.run(
        [sys.executable, "-m", "tests.catalog.stopped", kind, str(folder)],
        capture_output=True, text=True, cwd=root, env={**os.environ, "PYTHONPATH": str(root)}, check=True,
    )  # fmt: skip
    *rows, problems = (json.loads(line) for line in run.stdout.splitlines())
    return rows, problems


def check_recovery(row: dict[str, Any]) -> None:
    """One broken night, seen by a reader, by the next run, and after one more night."""
    found = row["recovered"]
    for seen in (found["reader"], found["after"], found["next"]):
        assert seen["rows"] == [18, 12], row
    # Catalog and CURRENT are switched one after the other, and either is a whole snapshot in between.
    assert found["reader"]["current"] in (row["before"], found["after"]["current"]), row
    assert found["reader"]["catalog"] in (row["before"], found["after"]["current"]), row
    assert found["after"]["catalog"] == found["after"]["current"], row
    assert found["problems"] == [], row
    assert found["parts"] == [], row
    # The raw file has arrived once, whether or not the broken night had registered it.
    assert found["arrivals"] == list(range(1, row["number"] + 2)), row
    assert found["raw"] == f"night {row['number']}\n", row


def test_a_kill_at_any_step_of_a_night_leaves_a_whole_snapshot_and_a_clean_next_run(tmp_path: Path) -> None:
    rows, problems = break_nights("kill", tmp_path)
    *killed, finished = rows
    assert len(killed) > 40
    assert {row["ended"] for row in killed} == {-9}
    assert finished["ended"] == 0
    for row in rows:
        check_recovery(row)
    # Early kills change nothing, late ones come after the snapshot was complete.
    assert killed[0]["recovered"]["after"]["current"] == killed[0]["before"]
    assert killed[-1]["recovered"]["after"]["current"] != killed[-1]["before"]
    assert any("switched to" in done for row in killed for done in row["recovered"]["cleaned"])
    assert problems == []


def test_a_disk_that_fills_up_leaves_the_last_snapshot_and_says_what_could_not_be_written(
    tmp_path: Path,
) -> None:
    rows, problems = break_nights("fill", tmp_path)
    assert [row["size"] for row in rows] == SIZES
    told = [row["answer"].removeprefix("StoreError: ").partition(": ")[0] for row in rows]
    assert told == [
        f"the store {tmp_path / 'store'} cannot be written",
        "the raw file NWHT.csv could not be archived",
        "the register of arrivals could not be written",
        "files/NWHT.parquet could not be written",
        "files/NWHT.parquet could not be written",
        "the catalog could not be built",
        "the catalog could not be built",
    ]
    for row in rows:
        assert row["answer"].startswith("StoreError: ")
        assert row["answer"].endswith("still stands")
        assert row["recovered"]["after"]["current"] == row["before"]
        check_recovery(row)
    assert problems == []
