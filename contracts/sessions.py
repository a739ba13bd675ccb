"""Trading sessions, business days, last trading days and first notice days.

Belongs here: every question of whether, and which, day. Does not belong here: what traded on it.
Days are `datetime.date` at the border and day numbers (days since 1970-01-01, int64) inside.
"""

import datetime
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from contracts.deliveries import Delivery
from contracts.errors import CalendarError
from contracts.markets import Closed, DayRule, Market, Step, rule_day, rule_for

WEEKDAYS = "weekdays"
FIRST_YEAR, LAST_YEAR = 1900, 2099

# exchange_calendars 4.13.2 cannot build these with pandas 3.1.
_BROKEN = frozenset({"ASEX", "XBEL", "XBSE", "XCYS", "XTAE"})


def day_number(day: datetime.date) -> int:
    """Days since 1970-01-01."""
    return day.toordinal() - 719163


def day_of(number: int) -> datetime.date:
    """The date of a day number."""
    return datetime.date.fromordinal(int(number) + 719163)


@dataclass(frozen=True, eq=False)
class OpenDays:
    """The open days of a span of whole years, as rising day numbers."""

    name: str
    days: np.ndarray
    first: int
    last: int

    def _inside(self, number: int) -> int:
        if not self.first <= number <= self.last:
            known = f"{day_of(self.first)} to {day_of(self.last)}"
            raise CalendarError(f"calendar {self.name} was asked for {day_of(number)}; it knows {known}")
        return number

    def is_open(self, number: int) -> bool:
        """Whether the day is open; raises CalendarError outside the span."""
        at = int(np.searchsorted(self.days, self._inside(number)))
        return at < len(self.days) and int(self.days[at]) == number

    def on_or_before(self, number: int) -> int:
        """The day itself where it is open, else the open day before it."""
        at = int(np.searchsorted(self.days, self._inside(number), side="right")) - 1
        if at < 0:
            raise CalendarError(f"calendar {self.name} has no open day on or before {day_of(number)}")
        return int(self.days[at])

    def on_or_after(self, number: int) -> int:
        """The day itself where it is open, else the open day after it."""
        at = int(np.searchsorted(self.days, self._inside(number)))
        if at == len(self.days):
            raise CalendarError(f"calendar {self.name} has no open day on or after {day_of(number)}")
        return int(self.days[at])

    def shift(self, number: int, count: int) -> int:
        """The open day `count` open days later (earlier where negative) than the day, which need not be open itself."""
        self._inside(number)
        at = int(np.searchsorted(self.days, number, side="left" if count <= 0 else "right"))
        target = at + count if count <= 0 else at + count - 1
        if count == 0:
            return number
        if not 0 <= target < len(self.days):
            raise CalendarError(f"calendar {self.name} ends before {count} open days from {day_of(number)}")
        return int(self.days[target])

    def between(self, first: int, last: int) -> np.ndarray:
        """Open days from `first` to `last`, both included; raises CalendarError outside the span."""
        self._inside(first), self._inside(last)
        return self.days[np.searchsorted(self.days, first) : np.searchsorted(self.days, last, side="right")]


def calendar_mistake(key: str) -> str | None:
    """Why a desk may not name this calendar; None where it may."""
    if key == WEEKDAYS:
        return None
    if key in _BROKEN:
        return f"{key}, which exchange_calendars 4.13.2 cannot build with pandas 3.1"
    from exchange_calendars.calendar_utils import get_calendar_names

    return None if key in get_calendar_names() else f"{key!r}, which is no calendar"


@lru_cache(maxsize=512)
def _decade(key: str, decade: int) -> np.ndarray:
    """Open days of ten years of a calendar."""
    first, last = day_number(datetime.date(decade, 1, 1)), day_number(datetime.date(decade + 9, 12, 31))
    if key == WEEKDAYS:
        every = np.arange(first, last + 1)
        return every[(every + 3) % 7 < 5]
    mistake = calendar_mistake(key)
    if mistake:
        raise CalendarError(f"seen the calendar {mistake}; expected 'weekdays' or a key of exchange_calendars")
    import exchange_calendars

    try:
        known = exchange_calendars.get_calendar(key)
        low, high = known.bound_min(), known.bound_max()
        start = max(first, day_number(low.date())) if low is not None else first
        end = min(last, day_number(high.date())) if high is not None else last
        if start > end:
            raise CalendarError(f"calendar {key} knows no day from {day_of(first)} to {day_of(last)}")
        calendar = exchange_calendars.get_calendar(key, start=str(day_of(start)), end=str(day_of(end)))
    except (NotImplementedError, ValueError) as error:
        raise CalendarError(f"calendar {key} cannot be built for {decade} to {decade + 9}: {error}") from error
    return np.asarray(calendar.sessions.to_numpy(dtype="datetime64[D]")).astype(np.int64)


@lru_cache(maxsize=1024)
def _open_days(
    key: str, added: tuple[datetime.date, ...], removed: tuple[datetime.date, ...], first_decade: int, last_decade: int
) -> OpenDays:
    parts = [_decade(key, decade) for decade in range(first_decade, last_decade + 1, 10)]
    days = np.concatenate(parts)
    if added:
        days = np.union1d(days, np.array([day_number(day) for day in added], dtype=np.int64))
    if removed:
        days = np.setdiff1d(days, np.array([day_number(day) for day in removed], dtype=np.int64))
    first, last = day_number(datetime.date(first_decade, 1, 1)), day_number(datetime.date(last_decade + 9, 12, 31))
    days = days[(days >= first) & (days <= last)]
    return OpenDays(key, days, first, last)


def _decades(first_year: int, last_year: int) -> tuple[int, int]:
    low, high = max(first_year, FIRST_YEAR), min(last_year, LAST_YEAR)
    return low // 10 * 10, high // 10 * 10


def market_days(market: Market, first_year: int, last_year: int) -> OpenDays:
    """The market's sessions by its calendar, less `closed`, plus `opened`, over at least the given years."""
    return _open_days(market.calendar, market.opened, market.closed, *_decades(first_year, last_year))


def rule_business_days(market: Market, rule: DayRule, first_year: int, last_year: int) -> OpenDays:
    """The business days a rule counts in: its own calendar, or the market's sessions."""
    if rule.business_days is not None:
        return _open_days(
            rule.business_days, rule.also_business_days, rule.no_business_days, *_decades(first_year, last_year)
        )
    added = tuple(set(market.opened) - set(rule.no_business_days)) + rule.also_business_days
    removed = tuple(set(market.closed) - set(rule.also_business_days)) + rule.no_business_days
    return _open_days(market.calendar, tuple(sorted(added)), tuple(sorted(removed)), *_decades(first_year, last_year))


def _is_eve(number: int, month_days: tuple[str, ...], days: OpenDays) -> bool:
    """Whether the day is the last business day before one of the month-days."""
    year = day_of(number).year
    for month_day in month_days:
        for feast_year in (year, year + 1):
            feast = day_number(datetime.date.fromisoformat(f"{feast_year}-{month_day}"))
            if feast > number and days.on_or_before(feast - 1) == number:
                return True
    return False


def _take_step(number: int, step: Step, days: OpenDays) -> int:
    if step.if_closed is not None:
        return days.on_or_before(number) if step.if_closed is Closed.PREVIOUS else days.on_or_after(number)
    if step.business_days is not None:
        return days.shift(number, step.business_days)
    if step.days is not None:
        return number + step.days
    return days.shift(number, -1) if _is_eve(number, step.not_eve_of or (), days) else number


def _day_by(market: Market, rule: DayRule, delivery: Delivery) -> datetime.date:
    place = delivery.shift(rule.month_offset)
    days = rule_business_days(market, rule, place.year - 1, place.year + 2)
    number = day_number(rule_day(rule.rule, place.year, place.month))
    for step in rule.steps:
        number = _take_step(number, step, days)
    return day_of(number)


def last_trade_day(market: Market, delivery: Delivery) -> datetime.date:
    """The last trading day of a delivery month by the newest rule that applies.

    Raises CalendarError where no rule applies to the delivery month.
    """
    rule = rule_for(market.last_trade, delivery)
    if rule is None:
        raise CalendarError(f"{market.code}: no [[last_trade]] applies to the delivery month {delivery}")
    return _day_by(market, rule, delivery)


def first_notice_day(market: Market, delivery: Delivery) -> datetime.date | None:
    """The first notice day of a delivery month; None where the market declares none for it."""
    rule = rule_for(market.first_notice, delivery)
    return None if rule is None else _day_by(market, rule, delivery)


def session_index(sessions: np.ndarray, calendar: OpenDays, day: datetime.date) -> int:
    """Index of the last session on or before a day, counted along the market's calendar.

    `sessions` are the day numbers of a market's sessions, (T,), rising. The index is T or more for a day
    past the last of them and negative for one before the first.
    """
    number = day_number(day)
    if number < sessions[0]:
        return -len(calendar.between(min(number + 1, int(sessions[0])), int(sessions[0]) - 1)) - 1
    if number <= sessions[-1]:
        return int(np.searchsorted(sessions, number, side="right")) - 1
    return len(sessions) - 1 + len(calendar.between(int(sessions[-1]) + 1, number))
