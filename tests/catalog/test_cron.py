"""A cron that would skip a night, or run two, is a mistake of the desk."""

from pathlib import Path

import pytest

from catalog.cron import cron_mistake
from catalog.declarations import load_desk
from contracts.errors import DeskError
from tests.integration.tiny import write_desk


@pytest.mark.parametrize(
    ("cron", "zone", "seen"),
    [
        ("30 2 * * *", "Europe/Oslo", "02:30 in Europe/Oslo, a zone with summer time"),
        ("0 1 * * 1-5", "America/New_York", "01:00 in America/New_York"),
        ("15 1,20 * * *", "Australia/Sydney", "01:15 in Australia/Sydney"),
        # Clocks of the Azores go from 00:00 to 01:00, Chile's from 24:00 to 01:00.
        ("30 0 * * *", "Atlantic/Azores", "00:30 in Atlantic/Azores, which does not come on 2024-03-31"),
        ("30 23 * * *", "America/Santiago", "23:30 in America/Santiago, which comes twice on 2024-04-06"),
        ("60 2 * * *", "UTC", "minute '60'"),
        ("5-1 2 * * *", "UTC", "minute '5-1'"),
        ("0 9 1-32 * *", "UTC", "day '1-32'"),
        ("0 */0 * * *", "UTC", "hour '*/0'"),
    ],
)
def test_a_time_that_does_not_come_once_a_night_is_named_with_its_reason(cron: str, zone: str, seen: str) -> None:
    mistake = cron_mistake(cron, zone)
    assert mistake is not None and mistake.startswith(seen)


@pytest.mark.parametrize(
    ("cron", "zone"),
    [
        ("30 2 * * *", "UTC"),
        ("30 2 * * *", "Asia/Tokyo"),
        ("30 19 * * 1-5", "Europe/Oslo"),
        ("0 3 * * *", "Europe/Oslo"),
        ("59 0 * * *", "America/New_York"),
        ("*/15 4-22 1,15 * 0-7", "Australia/Sydney"),
    ],
)
def test_a_time_that_comes_once_a_night_is_none(cron: str, zone: str) -> None:
    assert cron_mistake(cron, zone) is None


def test_the_desk_refuses_such_a_cron_and_says_what_it_expects(tmp_path: Path) -> None:
    desk = write_desk(tmp_path)
    text = (desk / "desk.toml").read_text()
    (desk / "desk.toml").write_text(text + '[schedule]\ncron = "30 2 * * *"\ntimezone = "Europe/Oslo"\n')
    with pytest.raises(DeskError) as caught:
        load_desk(desk)
    (mistake,) = caught.value.mistakes
    assert (mistake.file, mistake.key) == ("desk.toml", "schedule")
    assert "02:30 in Europe/Oslo" in str(mistake)
