"""The schedule, reckoned by Prefect itself from moments that tests choose; and one kept for real."""

import datetime
import itertools
import os
import signal
import subprocess
import sys
import time
from collections import Counter
from pathlib import Path

import pytest

from catalog.declarations import SAMPLE_DESK, Schedule, load_desk
from tests.flows.conftest import ROOT, Run


@pytest.mark.parametrize("zone", ["Europe/Oslo", "America/New_York", "Australia/Sydney"])
def test_the_sample_s_cron_gives_one_night_each_weekday_of_a_year_through_both_changes_of_the_clock(zone: str) -> None:
    from flows.schedule import night_times

    cron = load_desk(SAMPLE_DESK).schedule.cron
    assert cron == "30 19 * * 1-5"
    start = datetime.datetime(2026, 1, 1, 0, 0, tzinfo=datetime.UTC)
    times = night_times(Schedule(cron=cron, timezone=zone), start, 270)
    nights = Counter(moment.date() for moment in times if moment.date() <= datetime.date(2026, 12, 31))
    first = min(nights)
    days = [first + datetime.timedelta(days=number) for number in range((datetime.date(2026, 12, 31) - first).days + 1)]
    assert nights == Counter(day for day in days if day.weekday() < 5)
    assert len(nights) >= 260
    assert {moment.strftime("%H:%M") for moment in times} == {"19:30"}
    assert len({moment.utcoffset() for moment in times}) == 2, "summer and winter time both occur"


@pytest.mark.parametrize("zone", ["Europe/Oslo", "America/New_York", "Australia/Sydney"])
def test_every_day_too_there_is_exactly_one(zone: str) -> None:
    from flows.schedule import night_times

    start = datetime.datetime(2026, 1, 1, 12, 0, tzinfo=datetime.UTC)
    times = night_times(Schedule(cron="30 19 * * *", timezone=zone), start, 365)
    dates = [moment.date() for moment in times]
    assert [later - earlier for earlier, later in itertools.pairwise(dates)] == [datetime.timedelta(days=1)] * 364


def test_the_next_nights_are_told_without_a_server(desk: Path, run: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("PREFECT_API_URL", "http://127.0.0.1:9/api")
    result = run("schedule", "--desk", desk, "--show", "2")
    assert result.exit_code == 0
    lines = result.stdout.splitlines()
    assert lines[0] == "30 19 * * 1-5 UTC"
    assert [line.endswith("19:30 UTC") for line in lines[1:]] == [True, True]


@pytest.mark.skipif(os.environ.get("ROPEWALK_LONG") != "1", reason="waits for minutes of the clock; ROPEWALK_LONG=1")
def test_nights_go_on_after_one_is_killed_and_sigterm_ends_the_schedule_with_143(desk: Path, tmp_path: Path) -> None:
    """A night every minute; the first is killed outright while it holds the lock, a later one publishes."""
    text = (desk / "desk.toml").read_text()
    (desk / "desk.toml").write_text(text + '[schedule]\ncron = "* * * * *"\ntimezone = "UTC"\n')
    kept = {name: value for name, value in os.environ.items() if not name.startswith("PREFECT")}
    with (tmp_path / "out").open("w") as out:
        process = subprocess.Popen(
            [sys.executable, "-m", "flows.commands", "schedule", "--desk", str(desk)],
            env={**kept, "HOME": str(tmp_path), "PYTHONPATH": str(ROOT)}, cwd=tmp_path, stdout=out, stderr=out,
        )  # fmt: skip
        try:
            lock = desk / "published" / "lock"
            _wait(lambda: lock.exists() and lock.read_text().strip() != "", 200)
            killed = _night_of(process.pid)
            os.kill(killed, signal.SIGKILL)
            _wait(lambda: (desk / "published" / "CURRENT").exists(), 300)
            assert process.poll() is None
            process.send_signal(signal.SIGTERM)
            assert process.wait(90) == 143
        finally:
            if process.poll() is None:
                process.kill()
    assert "published snapshot 000001-" in (tmp_path / "out").read_text()


def _wait(is_so, seconds: float) -> None:  # type: ignore[no-untyped-def]
    end = time.monotonic() + seconds
    while not is_so():
        assert time.monotonic() < end, f"not within {seconds} s"
        time.sleep(0.05)


def _night_of(parent: int) -> int:
    """The process that carries out a night for the scheduler."""
    children = Path(f"/proc/{parent}/task/{parent}/children").read_text().split()
    (found,) = [int(pid) for pid in children if b"prefect" in Path(f"/proc/{pid}/cmdline").read_bytes()
                and b"uvicorn" not in Path(f"/proc/{pid}/cmdline").read_bytes()]  # fmt: skip
    return found
