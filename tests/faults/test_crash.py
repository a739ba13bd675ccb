"""A failure at any call that changes the disk leaves the old snapshot or the new one, whole, and a clean next night.

The everyday run takes a few points of more than a thousand; ROPEWALK_LONG=1 takes all of them, about an hour.
"""

import json
import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
IS_LONG = "ROPEWALK_LONG" in os.environ
# With a prime stride every call and failure has its turn.
EVERY = 1 if IS_LONG else 107


@pytest.mark.skipif(shutil.which("strace") is None, reason="strace is not installed: failures cannot be injected")
def test_every_failure_leaves_a_whole_snapshot_and_a_clean_next_night(tmp_path: Path) -> None:
    run = subprocess.run(
        [sys.executable, "-m", "tests.faults.crash", str(tmp_path), "--every", str(EVERY)],
        capture_output=True, text=True, cwd=ROOT, env={**os.environ, "PYTHONPATH": str(ROOT)}, check=False,
    )  # fmt: skip
    assert run.returncode == 0, run.stderr
    *rows, counts = (json.loads(line) for line in run.stdout.splitlines())
    # Shown by pytest -s.
    sys.stdout.write(f"{counts}\n")
    assert counts["points"] >= 1000
    assert counts["run"] == len(rows) >= (1000 if IS_LONG else 8)
    assert [row for row in rows if row["outcome"].startswith("wrong")] == []
    assert {"fsync", "fdatasync", "write", "pwrite64", "rename", "unlink", "mkdir"} <= set(counts["calls"])
