"""Sessions, business days and the days that rules give."""

import datetime

import numpy as np
import pytest

from contracts.deliveries import Delivery
from contracts.errors import CalendarError
from contracts.markets import rule_day
from contracts.sessions import (
    calendar_mistake,
    day_number,
    first_notice_day,
    last_trade_day,
    market_days,
    session_index,
)
from tests.contracts.small import make_market


def d(text: str) -> datetime.date:
    return datetime.date.fromisoformat(text)


def test_weekdays_less_closed_plus_opened_are_the_sessions() -> None:
    market = make_market("closed = [2024-12-25]\nopened = [2024-12-28]")
    days = market_days(market, 2024, 2024)
    found = [
        str(datetime.date.fromordinal(int(n) + 719163))
        for n in days.between(day_number(d("2024-12-24")), day_number(d("2024-12-30")))
    ]
    assert found == ["2024-12-24", "2024-12-26", "2024-12-27", "2024-12-28", "2024-12-30"]


@pytest.mark.parametrize(
    ("day", "count", "expected"),
    [
        ("2024-03-01", 1, "2024-03-04"),  # Friday to Monday
        ("2024-03-04", -1, "2024-03-01"),
        ("2024-03-02", -1, "2024-03-01"),  # from a Saturday the first business day before it
        ("2024-03-02", 1, "2024-03-04"),
        ("2024-03-01", 5, "2024-03-08"),
    ],
)
def test_shift_counts_business_days_from_open_and_closed_days(day: str, count: int, expected: str) -> None:
    days = market_days(make_market(), 2024, 2024)
    assert days.shift(day_number(d(day)), count) == day_number(d(expected))


def test_last_trade_is_the_business_day_before_the_fifteenth() -> None:
    assert last_trade_day(make_market(), Delivery(2025, 3)) == d("2025-03-14")
    # 15 June 2025 would be a Sunday: moved to Monday the 16th, then one business day back.
    market = make_market().model_copy(update={"delivery_months": (6,)})
    assert last_trade_day(market, Delivery(2025, 6)) == d("2025-06-13")


def test_market_without_first_notice_has_none() -> None:
    assert first_notice_day(make_market(), Delivery(2025, 3)) is None


def test_session_index_counts_on_beyond_both_ends_of_the_data() -> None:
    days = market_days(make_market(), 2023, 2025)
    sessions = days.between(day_number(d("2024-01-01")), day_number(d("2024-01-10")))
    assert len(sessions) == 8
    assert session_index(sessions, days, d("2024-01-01")) == 0
    assert session_index(sessions, days, d("2024-01-06")) == 4  # a Saturday: the Friday before
    assert session_index(sessions, days, d("2024-01-10")) == 7
    assert session_index(sessions, days, d("2024-01-12")) == 9
    assert session_index(sessions, days, d("2024-01-13")) == 9
    assert session_index(sessions, days, d("2023-12-29")) == -1
    assert session_index(sessions, days, d("2023-12-31")) == -1
    assert session_index(sessions, days, d("2023-12-28")) == -2


def test_rule_that_gives_no_day_or_several_says_so() -> None:
    with pytest.raises(CalendarError, match=r"gives 0 days in 2023-02, one is needed"):
        rule_day("FREQ=MONTHLY;BYMONTHDAY=30", 2023, 2)
    with pytest.raises(CalendarError, match=r"gives 4 days in 2023-02, one is needed"):
        rule_day("FREQ=WEEKLY;BYDAY=FR", 2023, 2)


@pytest.mark.parametrize("key", ["ASEX", "XBEL", "XBSE", "XCYS", "XTAE"])
def test_calendars_that_cannot_be_built_are_named_as_such(key: str) -> None:
    assert "cannot build with pandas 3.1" in (calendar_mistake(key) or "")


def test_unknown_calendar_is_a_mistake_and_known_ones_are_not() -> None:
    assert calendar_mistake("XNYZ") == "'XNYZ', which is no calendar"
    assert calendar_mistake("XNYS") is None
    assert calendar_mistake("weekdays") is None


def test_exchange_calendar_closes_its_holidays() -> None:
    """New York Stock Exchange, 2024: closed on Good Friday, 29 March (exchange_calendars, XNYS)."""
    days = market_days(make_market('calendar = "XNYS"'), 2024, 2024)
    assert not days.is_open(day_number(d("2024-03-29")))
    assert days.is_open(day_number(d("2024-03-28")))


def test_day_outside_what_a_calendar_knows_is_an_error() -> None:
    days = market_days(make_market(), 2020, 2024)
    with pytest.raises(CalendarError, match="it knows 2020-01-01 to 2029-12-31"):
        days.is_open(day_number(d("2031-01-01")))
    assert np.all(np.diff(days.days) > 0)
