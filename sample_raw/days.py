"""Sessions and last trading days of the sample exchange, in plain code of its own.

Belongs here: calendars as lists of dates, and each market's day rules written out by hand. Nothing is shared with
the project's rooms, so that its day rules can be held against these.
"""

import datetime
from bisect import bisect_left, bisect_right
from typing import Any

ONE = datetime.timedelta(days=1)
FIRST_YEAR, LAST_YEAR = 2013, 2027
Date = datetime.date


def easter_sunday(year: int) -> Date:
    """Easter Sunday of the western churches (the anonymous Gregorian reckoning, from memory)."""
    golden, century, rest = year % 19, year // 100, year % 100
    correction = (century - (century + 8) // 25 + 1) // 3
    epact = (19 * golden + century - century // 4 - correction + 15) % 30
    weekday = (32 + 2 * (century % 4) + 2 * (rest // 4) - epact - rest % 4) % 7
    late = (golden + 11 * epact + 22 * weekday) // 451
    month, day = divmod(epact + weekday - 7 * late + 114, 31)
    return Date(year, month, day + 1)


def nth_weekday(year: int, month: int, weekday: int, n: int) -> Date:
    """The n-th Monday (0) to Sunday (6) of a month; n = -1 is the last."""
    if n > 0:
        first = Date(year, month, 1)
        return first + ONE * ((weekday - first.weekday()) % 7 + 7 * (n - 1))
    last = month_end(year, month)
    return last - ONE * ((last.weekday() - weekday) % 7)


def month_end(year: int, month: int) -> Date:
    """The last calendar day of a month."""
    return Date(year + month // 12, month % 12 + 1, 1) - ONE


def _moved(day: Date) -> Date:
    """A fixed feast of the New York exchange: kept on Friday where it falls on Saturday, on Monday where on Sunday."""
    return day - ONE if day.weekday() == 5 else day + ONE if day.weekday() == 6 else day


def new_york_closed(year: int) -> set[Date]:
    """Weekdays on which the New York stock exchange is closed, 2013 to 2027 (from memory)."""
    days = {
        nth_weekday(year, 1, 0, 3),
        nth_weekday(year, 2, 0, 3),
        easter_sunday(year) - 2 * ONE,
        nth_weekday(year, 5, 0, -1),
        _moved(Date(year, 7, 4)),
        nth_weekday(year, 9, 0, 1),
        nth_weekday(year, 11, 3, 4),
        _moved(Date(year, 12, 25)),
    }
    # New Year's Day is not kept on the Friday before.
    if Date(year, 1, 1).weekday() != 5:
        days.add(_moved(Date(year, 1, 1)))
    if year >= 2022:
        days.add(_moved(Date(year, 6, 19)))
    # Days of mourning for two presidents.
    return days | ({Date(2018, 12, 5), Date(2025, 1, 9)} if year in (2018, 2025) else set())


def open_days(market: dict[str, Any]) -> list[Date]:
    """Every session of a market as its declaration has it, 2013 to 2027, whatever the span of its data."""
    closed = set(market.get("closed", []))
    if market["calendar"] == "XNYS":
        for year in range(FIRST_YEAR, LAST_YEAR + 1):
            closed |= new_york_closed(year)
    elif market["calendar"] != "weekdays":
        raise ValueError(f"{market['code']}: seen calendar {market['calendar']!r}; expected 'weekdays' or 'XNYS'")
    day, days = Date(FIRST_YEAR, 1, 1), []
    while day.year <= LAST_YEAR:
        if day.weekday() < 5 and day not in closed:
            days.append(day)
        day += ONE
    return days


class Calendar:
    """A market's open days, with its last trading and first notice days."""

    def __init__(self, market: dict[str, Any]) -> None:
        self.code: str = market["code"]
        self.days = open_days(market)

    def at_or_before(self, day: Date) -> int:
        """Index of the last open day that is not after `day`."""
        return bisect_right(self.days, day) - 1

    def at_or_after(self, day: Date) -> int:
        """Index of the first open day that is not before `day`."""
        return bisect_left(self.days, day)

    def before(self, day: Date, count: int) -> Date:
        """The count-th open day before a day that need not be open."""
        return self.days[bisect_left(self.days, day) - count]

    def last_trade(self, year: int, month: int) -> Date:
        """The last trading day of a delivery month."""
        last = self.days[self.at_or_before(month_end(year, month))]
        third_friday, third_wednesday = nth_weekday(year, month, 4, 3), nth_weekday(year, month, 2, 3)
        if self.code == "NWHT":
            return self.days[self.at_or_after(Date(year, month, 10))]
        if self.code == "NOIL":
            the_25th = (Date(year, month, 1) - ONE).replace(day=25)
            return self.before(self.days[self.at_or_before(the_25th)], 3)
        if self.code == "NGAS":
            return self.before(Date(year, month, 1), 3)
        if self.code == "NCOP":
            following = self.days[self.at_or_after(last + ONE)]
            feasts = (Date(year, 12, 25), Date(year + 1, 1, 1))
            return self.before(last, 1) if any(last < feast <= following for feast in feasts) else last
        if self.code == "NBND":
            return self.before(last, 10)
        if self.code == "NEQX":
            return self.days[self.at_or_before(third_friday)]
        if self.code == "NKRN":
            return self.before(third_wednesday, 2)
        if self.code == "NCOC":
            return self.before(last, 10) if (year, month) < (2018, 3) else self.before(third_wednesday, 1)
        if self.code == "NVOL":
            friday = nth_weekday(year + month // 12, month % 12 + 1, 4, 3)
            thirty_before = self.days[self.at_or_before(friday)] - 30 * ONE
            return self.days[self.at_or_before(thirty_before)]
        raise ValueError(f"{self.code}: no last trading day is written out for this market")

    def first_notice(self, year: int, month: int) -> Date | None:
        """The first notice day of a delivery month; None where the market has none."""
        if self.code not in ("NWHT", "NBND", "NCOC"):
            return None
        return self.days[self.at_or_before(Date(year, month, 1) - ONE)]
