"""By when a session's files are due, by the market's own clock."""

import datetime

import pytest

from contracts.due import due_moment, due_session
from contracts.errors import DeskError
from contracts.markets import Market, parse_market
from tests.integration.tiny import MARKET

UTC = datetime.UTC


def market(*lines: str) -> Market:
    text = MARKET.format(code="TINA").replace("delivery_months", "\n".join((*lines, "delivery_months")))
    return parse_market(text, "markets/tina.toml")


OSLO = ('due = "18:30"', 'due_zone = "Europe/Oslo"', "closed = [2024-12-25]")


@pytest.mark.parametrize(
    ("moment", "session"),
    [
        # Oslo is an hour ahead of UTC in winter, two in summer.
        (datetime.datetime(2024, 1, 10, 17, 29, 59, tzinfo=UTC), datetime.date(2024, 1, 9)),
        (datetime.datetime(2024, 1, 10, 17, 30, tzinfo=UTC), datetime.date(2024, 1, 10)),
        (datetime.datetime(2024, 7, 10, 16, 29, tzinfo=UTC), datetime.date(2024, 7, 9)),
        (datetime.datetime(2024, 7, 10, 16, 30, tzinfo=UTC), datetime.date(2024, 7, 10)),
        # A Sunday and a closed day have no session.
        (datetime.datetime(2024, 1, 14, 20, 0, tzinfo=UTC), datetime.date(2024, 1, 12)),
        (datetime.datetime(2024, 12, 25, 20, 0, tzinfo=UTC), datetime.date(2024, 12, 24)),
    ],
)
def test_the_session_due_follows_the_zone_s_own_clock_and_the_market_s_calendar(
    moment: datetime.datetime, session: datetime.date
) -> None:
    assert due_session(market(*OSLO), moment) == session


def test_a_market_east_of_the_date_line_is_due_on_its_own_day() -> None:
    sydney = market('due = "17:00"', 'due_zone = "Australia/Sydney"')
    assert due_session(sydney, datetime.datetime(2024, 1, 10, 6, 0, tzinfo=UTC)) == datetime.date(2024, 1, 10)
    assert due_session(sydney, datetime.datetime(2024, 1, 10, 5, 59, tzinfo=UTC)) == datetime.date(2024, 1, 9)


def test_files_may_be_due_on_a_day_after_the_session() -> None:
    next_morning = market('due = "06:00"', 'due_zone = "UTC"', "due_days_after = 1")
    assert due_session(next_morning, datetime.datetime(2024, 1, 13, 5, 59, tzinfo=UTC)) == datetime.date(2024, 1, 11)
    assert due_session(next_morning, datetime.datetime(2024, 1, 13, 6, 0, tzinfo=UTC)) == datetime.date(2024, 1, 12)


def test_where_no_time_is_declared_nothing_is_due() -> None:
    assert due_session(market(), datetime.datetime(2024, 1, 10, 23, tzinfo=UTC)) is None
    assert due_moment(market(), datetime.date(2024, 1, 10)) is None


@pytest.mark.parametrize(
    ("lines", "key", "expected"),
    [
        (('due = "18:30"',), "due", "due_zone"),
        (('due_zone = "UTC"',), "due_zone", "due"),
        (("due_days_after = 1",), "due_days_after", "due"),
        (('due = "24:00"', 'due_zone = "UTC"'), "due", "00:00 to 23:59"),
        (('due = "18:30"', 'due_zone = "Oslo"'), "due_zone", "Europe/Oslo"),
    ],
)
def test_half_a_declaration_is_a_mistake_that_names_its_key(lines: tuple[str, ...], key: str, expected: str) -> None:
    with pytest.raises(DeskError) as caught:
        market(*lines)
    (mistake,) = caught.value.mistakes
    assert mistake.key == key
    assert expected in f"{mistake.expected} {mistake.seen}"
