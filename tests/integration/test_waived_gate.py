"""A gate waived for one night, with a reason, and no longer."""

import json
import subprocess
import sys
from pathlib import Path

import pytest

from tests.integration.tiny import write_desk, write_raw


def ropewalk(desk: Path, *words: str) -> "subprocess.CompletedProcess[str]":
    command = [sys.executable, "-m", "flows.commands", *words, "--desk", str(desk)]
    return subprocess.run(command, capture_output=True, text=True, check=False)


@pytest.fixture
def desk(tmp_path: Path) -> Path:
    """Two markets published; then a file of the second comes with four rows fewer, which holds it back."""
    desk = write_desk(tmp_path)
    raw = write_raw(desk, 90)
    assert ropewalk(desk, "build").returncode == 0
    write_raw(desk, 91)
    lines = (raw / "TINB_2024_06.csv").read_text().splitlines(keepends=True)
    (raw / "TINB_2024_06.csv").write_text("".join(lines[:20] + lines[24:]))
    return desk


def coverage(desk: Path) -> dict[str, tuple[str, str | None]]:
    told = ropewalk(desk, "sql", "select market, state, reason from coverage", "--json")
    return {market: (state, reason) for market, state, reason in json.loads(told.stdout)["rows"]}


def test_a_waived_gate_lets_the_market_out_for_the_night_and_says_who_and_why(desk: Path) -> None:
    held = ropewalk(desk, "build")
    assert held.returncode == 3
    assert "served as of 000001-" in held.stdout and "to 2024-03-05" in held.stdout
    assert coverage(desk)["TINB"][0] == "held back"

    out = ropewalk(desk, "build", "--waive-gate", "TINB", "rows withdrawn by the exchange, notice 9")
    assert out.returncode == 0, out.stdout
    assert "published all the same: TINB: gate waived by " in out.stdout
    state, reason = coverage(desk)["TINB"]
    assert state == "published" and reason is not None
    assert "rows withdrawn by the exchange, notice 9 (" in reason and "TINB_2024_06.csv" in reason
    assert ropewalk(desk, "verify").returncode == 0

    # A night with nothing new leaves it; one that publishes again judges it again.
    assert ropewalk(desk, "build").returncode == 0
    write_raw(desk, 92, ("TINA",))
    again = ropewalk(desk, "build")
    assert again.returncode == 3
    assert coverage(desk)["TINB"][0] == "held back"
    assert ropewalk(desk, "verify").returncode == 0


def test_a_waiver_needs_a_reason_and_a_market_of_the_desk(desk: Path) -> None:
    empty = ropewalk(desk, "build", "--waive-gate", "TINB", " ")
    assert (empty.returncode, "expected why the market may go out" in empty.stderr) == (2, True)
    unknown = ropewalk(desk, "build", "--waive-gate", "TINC", "because")
    assert (unknown.returncode, "no market 'TINC' to waive the gate of" in unknown.stderr) == (2, True)


def test_a_market_that_cannot_be_built_is_not_let_out(desk: Path) -> None:
    for file in (desk / "raw").glob("TINB*.csv"):
        file.write_text("nothing,of,use\n")
    told = ropewalk(desk, "build", "--waive-gate", "TINB", "because")
    assert told.returncode == 3
    assert coverage(desk)["TINB"][0] == "held back"
