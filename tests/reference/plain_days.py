"""Sessions and day rules in plain loops: one calendar day after the other.

Belongs here: which day is open, the day a rule gives, the place of a day among the sessions. Does not belong here: any
import from `contracts/`. The recurrences are those two of RFC 5545 (iCalendar, 2009, section 3.3.10) that exchanges
write their rules with: BYMONTHDAY (negative from the end of the month) and BYDAY with a number (3FR, the third Friday).
"""

import datetime
from dataclasses import dataclass

ONE = datetime.timedelta(days=1)
WEEKDAY_NAMES = ("MO", "TU", "WE", "TH", "FR", "SA", "SU")


@dataclass(frozen=True)
class PlainRule:
    """A day of a month: `month_day`, or the `nth` of a `weekday` (0 is Monday); then `steps`, in order.

    A step is ("if_closed", "previous" | "next"), ("business_days", n) or ("days", n). `since` is the first delivery
    (year, month) the rule is for; None for all.
    """

    month_offset: int = 0
    month_day: int | None = None
    nth: int | None = None
    weekday: int | None = None
    steps: tuple[tuple[str, str | int], ...] = ()
    since: tuple[int, int] | None = None


@dataclass(frozen=True)
class PlainCalendar:
    """Mondays to Fridays, less `closed`, plus `opened`."""

    closed: frozenset[datetime.date] = frozenset()
    opened: frozenset[datetime.date] = frozenset()

    def is_open(self, day: datetime.date) -> bool:
        """Whether the market trades on a day."""
        return day in self.opened or (day.weekday() < 5 and day not in self.closed)

    def open_days(self, first: datetime.date, last: datetime.date) -> list[datetime.date]:
        """The open days from one day to another, both included."""
        days = []
        day = first
        while day <= last:
            if self.is_open(day):
                days.append(day)
            day += ONE
        return days

    def shift(self, day: datetime.date, count: int) -> datetime.date:
        """The count-th open day after a day, or before it where count is negative; the day itself for 0."""
        way = ONE if count > 0 else -ONE
        left = abs(count)
        while left:
            day += way
            if self.is_open(day):
                left -= 1
        return day

    def index(self, sessions: list[datetime.date], day: datetime.date) -> int:
        """Place of the last session on or before a day, counted on along the calendar before and behind them."""
        if day < sessions[0]:
            return -1 - len(self.open_days(day + ONE, sessions[0] - ONE))
        within = sum(1 for session in sessions if session <= day)
        return within - 1 + len(self.open_days(sessions[-1] + ONE, day))


def month_days(year: int, month: int) -> list[datetime.date]:
    """Every day of a month."""
    day = datetime.date(year, month, 1)
    days = []
    while day.month == month:
        days.append(day)
        day += ONE
    return days


def shift_month(year: int, month: int, count: int) -> tuple[int, int]:
    """The month so many months later."""
    for _ in range(abs(count)):
        month += 1 if count > 0 else -1
        if month == 13:
            year, month = year + 1, 1
        if month == 0:
            year, month = year - 1, 12
    return year, month


def rule_day(rule: PlainRule, calendar: PlainCalendar, delivery: tuple[int, int]) -> datetime.date:
    """The day a rule gives for a delivery month."""
    days = month_days(*shift_month(*delivery, rule.month_offset))
    if rule.month_day is not None:
        day = days[rule.month_day - 1] if rule.month_day > 0 else days[rule.month_day]
    else:
        if rule.nth is None:
            raise ValueError("a rule needs a day of the month or a numbered weekday")
        same = [other for other in days if other.weekday() == rule.weekday]
        day = same[rule.nth - 1] if rule.nth > 0 else same[rule.nth]
    for name, value in rule.steps:
        if name == "if_closed":
            while not calendar.is_open(day):
                day += ONE if value == "next" else -ONE
        elif name == "business_days":
            day = calendar.shift(day, int(value))
        elif name == "days":
            day += ONE * int(value)
        else:
            raise ValueError(f"no step is called {name!r}")
    return day


def newest_rule(rules: tuple[PlainRule, ...], delivery: tuple[int, int]) -> PlainRule | None:
    """The rule with the latest `since` that is not after the delivery; None where none is for it."""
    best = None
    for rule in rules:
        if rule.since is not None and rule.since > delivery:
            continue
        if best is None or best.since is None or (rule.since is not None and rule.since > best.since):
            best = rule
    return best
