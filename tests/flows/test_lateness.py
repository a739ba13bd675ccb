"""Files that are overdue by their market's own clock, with a clock that tests turn."""

import datetime
import json
from pathlib import Path

import pytest

from catalog.places import Places
from catalog.standing import read_manifest
from catalog.summary import Summary
from flows.settings import Where
from flows.work import pool_builder, run_night
from tests.flows.test_work import hashes
from tests.integration.tiny import sessions, write_raw

# The 80th session of the files is Tuesday 2024-02-20; the 81st is due on Wednesday at 17:30 UTC.
WEDNESDAY = datetime.datetime(2024, 2, 21, 17, 30, tzinfo=datetime.UTC)


class Turned:
    """A clock that stands until somebody sleeps; what is to happen by then happens."""

    def __init__(self, now: datetime.datetime, events: dict[float, object] | None = None) -> None:
        self.start = self.time = now
        self.events = dict(events or {})

    def now(self) -> datetime.datetime:
        return self.time

    def sleep(self, seconds: float) -> None:
        assert seconds > 0
        self.time += datetime.timedelta(seconds=seconds)
        for after in sorted(self.events):
            if self.start + datetime.timedelta(seconds=after) <= self.time:
                self.events.pop(after)()  # type: ignore[operator]

    @property
    def minutes(self) -> float:
        return (self.time - self.start).total_seconds() / 60


@pytest.fixture
def due(desk: Path) -> Path:
    """The desk of the test, with files of both markets due at 18:30 in Oslo and a wait of 20 minutes."""
    assert sessions(81)[79:] == [datetime.date(2024, 2, 20), datetime.date(2024, 2, 21)]
    for file in (desk / "markets").iterdir():
        when = 'due = "18:30"\ndue_zone = "Europe/Oslo"\n'
        file.write_text(file.read_text().replace("delivery_months", f"{when}delivery_months"))
    (desk / "desk.toml").write_text((desk / "desk.toml").read_text() + "[run]\nwait_minutes = 20\n")
    return desk


def night(desk: Path, clock: Turned, told: list[str] | None = None) -> Summary:
    where = Where(desk, None, desk / "published")
    lines: list[str] = [] if told is None else told
    return run_night(where, "build", pool_builder(2), clock, lines.append)


def last_session(desk: Path, market: str) -> str:
    return str(read_manifest(Places(desk / "published")).markets[market].facts["last_session"])


def test_a_file_that_comes_within_the_wait_is_published_the_same_night(due: Path) -> None:
    write_raw(due, 81, ("TINA",))
    told: list[str] = []
    clock = Turned(WEDNESDAY, {240: lambda: write_raw(due, 81, ("TINB",))})
    summary = night(due, clock, told)
    assert (summary.late, summary.overdue, summary.exit_code) == ((), (), 0)
    assert last_session(due, "TINB") == "2024-02-21"
    assert clock.minutes == 4
    assert told == ["waiting until 17:50 UTC at the latest for files of TINB"]


def test_what_does_not_come_is_published_without_and_told_and_the_next_night_picks_it_up(due: Path) -> None:
    write_raw(due, 81, ("TINA",))
    clock = Turned(WEDNESDAY)
    summary = night(due, clock)
    assert clock.minutes == 20
    assert (summary.late, summary.exit_code) == (("TINB",), 0)
    assert [entry.describe() for entry in summary.overdue] == [
        "TINB: nothing of 2024-02-21; the newest bar is of 2024-02-20; due 2024-02-21T18:30:00+01:00"
    ]
    assert (last_session(due, "TINA"), last_session(due, "TINB")) == ("2024-02-21", "2024-02-20")

    write_raw(due, 81)
    second = Turned(WEDNESDAY + datetime.timedelta(hours=1))
    summary = night(due, second)
    assert (summary.late, summary.built, second.minutes) == ((), ("TINB",), 0)
    assert last_session(due, "TINB") == "2024-02-21"


def test_before_the_hour_nothing_is_overdue(due: Path) -> None:
    assert night(due, Turned(WEDNESDAY - datetime.timedelta(minutes=1))).overdue == ()


def test_a_market_of_which_one_contract_lacks_is_waited_for_once_it_was_published(due: Path) -> None:
    """The first file of a session is not the session: its other contracts are on their way."""
    night(due, Turned(WEDNESDAY - datetime.timedelta(hours=2)))
    rest = (due / "raw" / "TINB_2024_06.csv").read_text()
    write_raw(due, 81)
    whole = (due / "raw" / "TINB_2024_06.csv").read_text()
    (due / "raw" / "TINB_2024_06.csv").write_text(rest)
    clock = Turned(WEDNESDAY, {90: lambda: (due / "raw" / "TINB_2024_06.csv").write_text(whole)})
    assert night(due, clock).overdue == ()
    assert clock.minutes == 2
    assert whole != rest


def test_the_hour_of_a_night_changes_no_table(due: Path, tmp_path: Path) -> None:
    """Punctual or late, waited for or not: the same files give the same bytes, but for the log of runs."""
    where = Where(due, None, tmp_path / "early")
    run_night(where, "build", pool_builder(1), Turned(WEDNESDAY - datetime.timedelta(hours=2)))
    assert night(due, Turned(WEDNESDAY)).late == ("TINA", "TINB")
    assert hashes(tmp_path / "early") == hashes(due / "published")


def test_due_times_rebuild_no_market(due: Path) -> None:
    night(due, Turned(WEDNESDAY - datetime.timedelta(hours=2)))
    file = due / "markets" / "tina.toml"
    file.write_text(file.read_text().replace("18:30", "19:30"))
    assert night(due, Turned(WEDNESDAY - datetime.timedelta(hours=1))).built == ()


def test_a_file_being_written_is_left_for_the_next_look_of_the_same_night(
    due: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    import catalog.archive as archive

    real, looks = archive._read_steady, []

    def unsteady(root: int, path: str):  # type: ignore[no-untyped-def]
        if path == "TINA_2024_03.csv" and len(looks) < 2:
            looks.append(path)
            raise archive._StillWritten("changed twice while it was read; it is left for the next night")
        return real(root, path)

    monkeypatch.setattr(archive, "_read_steady", unsteady)
    told: list[str] = []
    clock = Turned(WEDNESDAY - datetime.timedelta(hours=2))
    summary = night(due, clock, told)
    assert told == ["waiting until 15:50 UTC at the latest for TINA_2024_03.csv, still being written"]
    assert clock.minutes == pytest.approx(20 / 60)
    assert summary.finding_counts.get("review", 0) == 0


def test_what_a_night_came_to_is_left_in_the_store_as_it_is_told(due: Path) -> None:
    write_raw(due, 81, ("TINA",))
    summary = night(due, Turned(WEDNESDAY))
    told = json.loads((due / "published" / "last_night.json").read_text())
    assert told["overdue"] == [
        {"market": "TINB", "session": "2024-02-21", "due": "2024-02-21T18:30:00+01:00", "newest": "2024-02-20",
         "lacking": []}
    ]  # fmt: skip
    assert (told["late"], told["exit_code"], told["outcome"]) == (["TINB"], 0, "published")
    assert told["snapshot"] == summary.snapshot
    assert told["finished_at"] == "2024-02-21T17:50:00+00:00"
