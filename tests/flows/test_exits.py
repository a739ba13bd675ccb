"""What a command's end says to the scheduler; a stopped one leaves nothing behind."""

import errno
import json
import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from catalog.places import Places, write_lock
from contracts.errors import (
    CalendarError,
    DeskError,
    Mistake,
    RopewalkError,
    StoreBusy,
    StoreError,
    StoreUnsound,
    UsageError,
)
from flows.exits import Exit, Terminated, code_of, code_of_any, sigterm_raises
from tests.flows.conftest import ROOT, Run, RunApart
from tests.integration.tiny import write_raw


def snapshots(store: Path) -> list[str]:
    return sorted(entry.name for entry in (store / "snapshots").iterdir())


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (DeskError([Mistake("a", "b", "c", "d")]), 2),
        (UsageError("no such market"), 2),
        (CalendarError("no such day"), 2),
        (StoreError("full"), 4),
        (StoreBusy("held"), 4),
        (StoreUnsound("flipped"), 5),
    ],
)
def test_an_error_raised_on_purpose_has_its_code(error: RopewalkError, code: int) -> None:
    assert code_of(error) == code


def test_a_query_cut_off_by_a_signal_has_the_code_of_the_signal() -> None:
    """DuckDB raises the same for either."""
    cut = RuntimeError("Query interrupted")
    with sigterm_raises():
        assert code_of_any(cut) == 130
        with pytest.raises(Terminated):
            os.kill(os.getpid(), signal.SIGTERM)
        assert code_of_any(cut) == 143
    assert code_of_any(RuntimeError("a bug")) == 1


def test_published_is_0_and_so_is_nothing_new(desk: Path, run: Run) -> None:
    first = run("build", "--desk", desk)
    assert (first.exit_code, first.stderr) == (0, "")
    assert re.match(r"published snapshot 000001-[0-9a-f]{12}: 2 markets", first.stdout)
    again = run("build", "--desk", desk)
    assert again.exit_code == 0
    assert re.match(r"nothing new: snapshot 000001-[0-9a-f]{12} stands\n", again.stdout)
    assert len(snapshots(desk / "published")) == 1


def test_a_market_held_back_is_3_and_the_other_is_published(desk: Path, run: Run) -> None:
    (desk / "raw" / "TINB_2024_03.csv").write_text("date,high,low,settle,volume,oi\n" + "rubbish\n" * 90)
    result = run("build", "--desk", desk)
    assert result.exit_code == 3
    assert "published: TINA\n" in result.stdout
    assert "held back: TINB: " in result.stdout


def test_nothing_published_is_4_where_every_market_is_sick_and_none_was_published(desk: Path, run: Run) -> None:
    for file in (desk / "raw").iterdir():
        file.write_text("date,high,low,settle,volume,oi\n" + "rubbish\n" * 90)
    result = run("build", "--desk", desk)
    assert result.exit_code == 4
    assert "TINA" in result.stderr and "TINB" in result.stderr
    assert snapshots(desk / "published") == []


def test_a_store_held_by_another_is_4_and_names_the_holder(desk: Path, run: Run) -> None:
    with write_lock(Places(desk / "published")):
        result = run("build", "--desk", desk, "--json")
    assert result.exit_code == 4
    told = json.loads(result.stdout)
    assert told["exit_code"] == 4
    assert str(os.getpid()) in told["error"]


def test_a_wrong_desk_is_2_tells_every_mistake_and_leaves_no_store(desk: Path, run: Run) -> None:
    text = (desk / "markets" / "tina.toml").read_text()
    (desk / "markets" / "tina.toml").write_text(text.replace("tick_size = 0.25", "tick_size = 'x'\nwhat = 1"))
    (desk / "desk.toml").write_text((desk / "desk.toml").read_text().replace('store = "published"', ""))
    for command in ("build", "nightly", "desk"):
        result = run(command, "--desk", desk)
        assert result.exit_code == 2
        for key in ("store", "tick_size", "what"):
            assert f" {key}: seen" in result.stderr, f"{command} does not tell of {key}"
    assert not (desk / "published").exists()


def test_a_desk_or_raw_folder_that_is_not_there_is_2_and_leaves_no_store(desk: Path, tmp_path: Path, run: Run) -> None:
    store = tmp_path / "store"
    for wrong in (
        ("--desk", tmp_path / "nowhere"),
        ("--desk", desk, "--raw", tmp_path / "nowhere"),
    ):
        result = run("build", *wrong, "--store", store)
        assert result.exit_code == 2
        assert "nowhere" in result.stderr
        assert not store.exists()


@pytest.mark.parametrize(
    "arguments",
    [
        ("unknown",),
        ("build", "--jobs", "0"),
        ("build", "--unknown"),
        ("trace", "TINA"),
        ("trace", "TINA", "2024-13-01"),
        ("trace", "TINA", "5 November"),
        ("findings", "--severity", "fatal"),
        ("findings", "--since", "yesterday"),
        ("desk", "TINA", "--years", "2026:2019"),
        ("desk", "TINA", "--years", "19:26"),
        ("desk", "--years", "2019:2026"),
        ("desk", "TINX"),
    ],
)
def test_wrong_usage_is_2_and_says_why(arguments: tuple[str, ...], desk: Path, run: Run) -> None:
    extra = () if arguments[0] == "unknown" else ("--desk", desk)
    result = run(*arguments, *extra)
    assert result.exit_code == 2
    assert result.stderr.strip()
    assert "Traceback" not in result.stderr


def test_a_full_disk_is_4(desk: Path, run: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    def full(*_: object) -> None:
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr("catalog.night.build_one", full)
    result = run("build", "--desk", desk)
    assert result.exit_code == 4
    assert "No space left" in result.stderr and "Traceback" not in result.stderr


def test_a_bug_is_1_with_its_traceback_and_says_it_is_one(
    desk: Path, run: Run, monkeypatch: pytest.MonkeyPatch
) -> None:
    def wrong(*_: object) -> None:
        raise TypeError("seen a bug")

    monkeypatch.setattr("catalog.night.build_one", wrong)
    result = run("build", "--desk", desk)
    assert result.exit_code == 1
    assert "TypeError: seen a bug" in result.stderr
    assert "this is a bug in ropewalk" in result.stderr
    assert snapshots(desk / "published") == [], "the staging folder is left behind"


def test_a_flipped_byte_in_what_is_published_is_5(desk: Path, run: Run) -> None:
    assert run("build", "--desk", desk).exit_code == 0
    assert run("verify", "--desk", desk).exit_code == 0
    (snapshot,) = snapshots(desk / "published")
    file = desk / "published" / "snapshots" / snapshot / "series" / "TINA.parquet"
    data = bytearray(file.read_bytes())
    data[len(data) // 2] ^= 1
    file.chmod(0o644)
    file.write_bytes(data)
    result = run("verify", "--desk", desk, "--json")
    assert result.exit_code == 5
    told = json.loads(result.stdout)
    assert told["sound"] is False
    assert any("series/TINA.parquet" in problem for problem in told["problems"])


SLOW = """
import sys, time, pathlib
import catalog.night as night
real = night.build_one
def slow(*given):
    pathlib.Path("begun").touch()
    time.sleep(1.5)
    return real(*given)
night.build_one = slow
from flows.commands import main
main(sys.argv[1:])
"""


@pytest.mark.parametrize(("name", "code"), [("SIGINT", 130), ("SIGTERM", 143)])
def test_a_stopped_build_frees_the_lock_and_removes_its_staging(
    name: str, code: int, desk: Path, tmp_path: Path, run: Run
) -> None:
    process = subprocess.Popen(
        [sys.executable, "-c", SLOW, "build", "--desk", str(desk)],
        cwd=tmp_path,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    deadline = time.monotonic() + 60
    while not (tmp_path / "begun").exists() and time.monotonic() < deadline:
        time.sleep(0.02)
    process.send_signal(getattr(signal, name))
    out, err = process.communicate(timeout=60)
    assert process.returncode == code
    assert out == ""
    assert "stopped by" in err and "Traceback" not in err
    assert snapshots(desk / "published") == []
    assert run("build", "--desk", desk).exit_code == 0


@pytest.mark.parametrize(("name", "code", "told"), [("SIGINT", 130, "Ctrl-C"), ("SIGTERM", 143, "SIGTERM")])
def test_a_query_that_is_stopped_says_so_and_is_no_bug(
    name: str, code: int, told: str, desk: Path, run: Run, tmp_path: Path
) -> None:
    assert run("build", "--desk", desk).exit_code == 0
    asking = (
        "import catalog.query as query\nreal = query.run_query\n"
        "def tell(*given):\n    print('asking', flush=True)\n    return real(*given)\n"
        "query.run_query = tell\nimport sys\nfrom flows.commands import main\nmain(sys.argv[1:])"
    )
    process = subprocess.Popen(
        [sys.executable, "-c", asking, "sql", "select sum(range * 7 % 13) from range(500000000000)", "--desk", desk],
        cwd=tmp_path, env={**os.environ, "PYTHONPATH": str(ROOT)}, stdout=subprocess.PIPE, stderr=subprocess.PIPE,
        text=True,
    )  # fmt: skip
    assert process.stdout is not None and process.stdout.readline() == "asking\n"
    time.sleep(0.5)
    process.send_signal(getattr(signal, name))
    out, err = process.communicate(timeout=60)
    assert (process.returncode, out) == (code, "")
    assert err.endswith(f"stopped by {told}; the last snapshot stands\n")
    assert "Traceback" not in err


def test_a_reader_that_has_had_enough_is_no_error(desk: Path, run: Run, tmp_path: Path) -> None:
    assert run("build", "--desk", desk).exit_code == 0
    query = "select repeat('x', 1000) from range(5000)"
    process = subprocess.Popen(
        [sys.executable, "-m", "flows.commands", "sql", query, "--desk", str(desk)],
        cwd=tmp_path,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    )
    assert process.stdout is not None and process.stderr is not None
    process.stdout.read(100)
    process.stdout.close()
    assert process.stderr.read() == b""
    assert process.wait(60) == Exit.DONE
    process.stderr.close()


def test_build_loads_no_prefect(desk: Path, run_apart: RunApart) -> None:
    code = (
        "import sys\nfrom flows.commands import main\n"
        "try:\n    main(sys.argv[1:])\n"
        "except SystemExit as end:\n    print(end.code, 'prefect' in sys.modules)\n"
    )
    done = run_apart("build", "--desk", desk, code=code)
    assert done.stdout.splitlines()[-1] == "0 False"


def test_what_arrives_after_a_night_is_published_by_the_next(desk: Path, run: Run) -> None:
    assert run("build", "--desk", desk).exit_code == 0
    write_raw(desk, 81, ("TINA",))
    result = run("build", "--desk", desk, "--json")
    told = json.loads(result.stdout)
    assert result.exit_code == 0
    assert told["snapshot"].startswith("000002-")
    assert told["published"] == ["TINA", "TINB"]
