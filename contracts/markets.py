"""A market as declared: terms, calendars, last-trade rules, roll plans.

Belongs here: what one market file may say and whether it makes sense by itself. Does not belong here: the
days its rules give (`sessions.py`), rolling by its plans (`rolls.py`).
"""

import datetime
import itertools
import re
import zoneinfo
from enum import StrEnum
from functools import lru_cache
from typing import Annotated, Any

from dateutil.rrule import rrule, rrulestr
from pydantic import AfterValidator, BeforeValidator, Field, model_validator

from contracts.declared import CODE, PLAIN_NAME, Declared, insist, line_of, read_declaration, validate
from contracts.deliveries import Delivery, delivery_of, parse_delivery
from contracts.errors import CalendarError, Mistake


class Trigger(StrEnum):
    """What makes a plan roll."""

    OPEN_INTEREST = "open interest"
    VOLUME = "volume"
    BOTH = "both"
    EITHER = "either"
    CALENDAR = "calendar"


class Before(StrEnum):
    """The day a plan's backstop counts back from."""

    LAST_TRADE = "last trade"
    FIRST_NOTICE = "first notice"
    EARLIER = "earlier"


class Incoming(StrEnum):
    """Which later contract a plan rolls into."""

    NEXT = "next"
    MOST_ACTIVE = "most active"


class PriceNotation(StrEnum):
    """How a market's prices are written."""

    DECIMAL = "decimal"
    THIRTY_SECONDS = "32nds"
    SIXTY_FOURTHS = "64ths"
    EIGHTHS = "8ths"


def _as_member(kind: type[StrEnum]) -> BeforeValidator:
    def convert(value: Any) -> Any:
        if value in list(kind):
            return kind(value)
        raise ValueError(f"seen {value!r}; expected one of {', '.join(repr(str(m)) for m in kind)}")

    return BeforeValidator(convert)


def _number(value: Any) -> Any:
    return float(value) if isinstance(value, int) and not isinstance(value, bool) else value


def _tuple(value: Any) -> Any:
    return tuple(value) if isinstance(value, list) else value


def _month(value: int) -> int:
    if not 1 <= value <= 12:
        raise ValueError(f"seen {value}; expected a month from 1 to 12")
    return value


def _month_day(value: str) -> str:
    try:
        datetime.date.fromisoformat(f"2000-{value}")
    except ValueError:
        raise ValueError(f"seen {value!r}; expected a month and day such as '12-25'") from None
    return value


def _rising(values: tuple[int, ...]) -> tuple[int, ...]:
    if not values or list(values) != sorted(set(values)):
        raise ValueError(f"seen {list(values)}; expected at least one number, rising, none twice")
    return values


def _date_only(value: Any) -> Any:
    if isinstance(value, datetime.datetime) or not isinstance(value, datetime.date):
        raise ValueError(f"seen {value!r}; expected a date without quotes, such as 2024-12-25")
    return value


def _time_of_day(value: str) -> str:
    if re.fullmatch(r"([01]\d|2[0-3]):[0-5]\d", value) is None:
        raise ValueError(f"seen {value!r}; expected a time of day from 00:00 to 23:59, such as '18:30'")
    return value


def _zone(value: str) -> str:
    try:
        zoneinfo.ZoneInfo(value)
    except (zoneinfo.ZoneInfoNotFoundError, ValueError, OSError):
        raise ValueError(f"seen {value!r}; expected a time zone such as 'Europe/Oslo'") from None
    return value


def _delivery(value: Any) -> Any:
    return parse_delivery(value) if isinstance(value, str) else value


Number = Annotated[float, BeforeValidator(_number)]
Positive = Annotated[float, BeforeValidator(_number), Field(gt=0, allow_inf_nan=False)]
Day = Annotated[datetime.date, BeforeValidator(_date_only)]
Days = Annotated[tuple[Day, ...], BeforeValidator(_tuple)]
Months = Annotated[tuple[Annotated[int, AfterValidator(_month)], ...], BeforeValidator(_tuple), AfterValidator(_rising)]
MonthDays = Annotated[tuple[Annotated[str, AfterValidator(_month_day)], ...], BeforeValidator(_tuple)]
NearbyNumbers = Annotated[
    tuple[Annotated[int, Field(ge=1, le=24)], ...], BeforeValidator(_tuple), AfterValidator(_rising)
]


class Closed(StrEnum):
    """Where a day that is no business day moves to."""

    PREVIOUS = "previous"
    NEXT = "next"


class Step(Declared):
    """One step of a day rule; exactly one of its keys is given."""

    if_closed: Annotated[Closed | None, _as_member(Closed)] = None
    business_days: int | None = None
    days: int | None = None
    not_eve_of: MonthDays | None = None

    @model_validator(mode="after")
    def _exactly_one(self) -> "Step":
        given = [name for name in type(self).model_fields if getattr(self, name) is not None]
        if len(given) != 1:
            expected = "exactly one of if_closed, business_days, days, not_eve_of"
            raise ValueError(f"seen {', '.join(given) or 'nothing'}; expected {expected}")
        return self


_FREQUENCIES = ("YEARLY", "MONTHLY", "WEEKLY", "DAILY")


@lru_cache(maxsize=65536)
def rule_day(rule: str, year: int, month: int) -> datetime.date:
    """The one day an RFC 5545 recurrence gives within a month; raises CalendarError for none or several."""
    first = datetime.datetime(year, month, 1)
    following = Delivery(year, month).shift(1)
    end = datetime.datetime(following.year, following.month, 1) - datetime.timedelta(days=1)
    days = sorted({moment.date() for moment in itertools.islice(_recurrence(rule, first, end), 40)})
    if len(days) != 1:
        raise CalendarError(f"the rule {rule!r} gives {len(days)} days in {year}-{month:02d}, one is needed")
    return days[0]


def _recurrence(rule: str, first: datetime.datetime, end: datetime.datetime) -> rrule:
    made = rrulestr(rule, dtstart=first)
    if not isinstance(made, rrule):
        raise ValueError("a set of rules")
    return made.replace(until=end)


def _readable_rule(rule: str) -> str:
    frequency = re.search(r"FREQ=([A-Z]+)", rule)
    if frequency is None or frequency[1] not in _FREQUENCIES:
        raise ValueError(f"seen {rule!r}; expected an RFC 5545 rule with FREQ={', '.join(_FREQUENCIES)}")
    try:
        _recurrence(rule, datetime.datetime(2000, 1, 1), datetime.datetime(2000, 1, 31))
    except (ValueError, AttributeError, TypeError) as error:
        raise ValueError(
            f"seen {rule!r} ({error}); expected an RFC 5545 rule such as FREQ=MONTHLY;BYMONTHDAY=15"
        ) from None
    return rule


class DayRule(Declared):
    """How a last trading day or a first notice day follows from the delivery month."""

    month_offset: Annotated[int, Field(ge=-24, le=24)] = 0
    rule: Annotated[str, AfterValidator(_readable_rule)]
    steps: Annotated[tuple[Step, ...], BeforeValidator(_tuple)] = ()
    business_days: str | None = None
    also_business_days: Days = ()
    no_business_days: Days = ()
    applies_from: Annotated[Delivery | None, BeforeValidator(_delivery)] = Field(default=None, alias="from")


class Rescaled(Declared):
    """Prices before a session are quoted on another scale."""

    before: Day
    multiply: Positive


class Force(Declared):
    """A person's decision on when a contract is left."""

    outgoing: str
    effective: Day
    reason: Annotated[str, Field(min_length=1)]
    by: Annotated[str, Field(min_length=1)]


class Plan(Declared):
    """A named rule that says when to leave one contract for the next."""

    trigger: Annotated[Trigger, _as_member(Trigger)]
    confirm: Annotated[int, Field(ge=1, le=60)] = 1
    delay: Annotated[int, Field(ge=1, le=60)] = 1
    steps: Annotated[int, Field(ge=1, le=60)] = 1
    backstop: Annotated[int, Field(ge=0, le=1000)] = 0
    before: Annotated[Before, _as_member(Before)] = Before.LAST_TRADE
    incoming: Annotated[Incoming, _as_member(Incoming)] = Incoming.NEXT
    months: Months | None = None
    nearbys: NearbyNumbers = (1,)
    force: Annotated[tuple[Force, ...], BeforeValidator(_tuple)] = ()


PlanName = Annotated[str, Field(pattern=f"^{PLAIN_NAME}$")]
Rules = Annotated[
    tuple[DayRule, ...], BeforeValidator(lambda value: (value,) if isinstance(value, dict) else _tuple(value))
]


class Market(Declared):
    """One futures product: its terms, its calendar, its day rules and its roll plans."""

    code: Annotated[str, Field(pattern=f"^{CODE}$")]
    name: Annotated[str, Field(min_length=1)]
    exchange: Annotated[str, Field(pattern="^[A-Z0-9]{4}$")]
    currency: Annotated[str, Field(pattern="^[A-Z]{3}$")]
    unit: str
    point_value: Positive
    tick_size: Positive
    price_notation: Annotated[PriceNotation, _as_member(PriceNotation)] = PriceNotation.DECIMAL
    may_be_negative: bool = False
    daily_limit: Positive | None = None
    delivery_months: Months
    calendar: str = "weekdays"
    closed: Days = ()
    opened: Days = ()
    open_interest_lag: Annotated[int, Field(ge=0, le=20)] = 0
    currency_note: str = ""
    # By when a session's files are due, that day or so many calendar days after it; decides no table.
    due: Annotated[str, AfterValidator(_time_of_day)] | None = None
    due_zone: Annotated[str, AfterValidator(_zone)] | None = None
    due_days_after: Annotated[int, Field(ge=0, le=7)] = 0
    last_trade: Rules
    first_notice: Rules = ()
    rescaled: Annotated[tuple[Rescaled, ...], BeforeValidator(_tuple)] = ()
    plans: dict[PlanName, Plan] = Field(min_length=1)


# What of a market plays no part in its tables.
OF_THE_CLOCK = frozenset({"due", "due_zone", "due_days_after"})


def rule_for(rules: tuple[DayRule, ...], delivery: Delivery) -> DayRule | None:
    """The newest rule that applies to a delivery month; None where none does."""
    applying = [rule for rule in rules if rule.applies_from is None or rule.applies_from <= delivery]
    return max(applying, key=lambda rule: rule.applies_from or Delivery(0, 1), default=None)


def parse_market(text: str, file: str) -> Market:
    """Read one market file; raises DeskError with every mistake it has."""
    return insist(*read_market(text, file))


def read_market(text: str, file: str) -> tuple[Market | None, list[Mistake]]:
    """Read one market file; returns what could be read and every mistake it has."""
    market, data, mistakes = read_declaration(Market, text, file)
    if market is not None:
        mistakes += inconsistencies(market, text, file)
    return market, mistakes + _rule_mistakes(data, text, file)


def inconsistencies(market: Market, text: str, file: str) -> list[Mistake]:
    """What is wrong between keys that are each well formed."""
    found: list[Mistake] = []

    def add(key: tuple[str | int, ...], seen: str, expected: str) -> None:
        shown = "".join(f"[{part}]" if isinstance(part, int) else f".{part}" for part in key).lstrip(".")
        found.append(Mistake(file, shown, seen, expected, line_of(text, key)))

    both = sorted(set(market.closed) & set(market.opened))
    if both:
        add(("closed",), f"{both[0]} in closed and in opened", "a day in one of them")
    if (market.due is None) != (market.due_zone is None):
        given, lacking = ("due", "due_zone") if market.due_zone is None else ("due_zone", "due")
        add((given,), f"{given} without {lacking}", "due, such as '18:30', and due_zone, such as 'Europe/Oslo'")
    if market.due_days_after and market.due is None:
        add(("due_days_after",), "due_days_after without due", "due and due_zone beside it")
    for name, plan in market.plans.items():
        if plan.before is not Before.LAST_TRADE and not market.first_notice:
            add(
                ("plans", name, "before"),
                f"{str(plan.before)!r}",
                "a [first_notice] rule in this market, or before = 'last trade'",
            )
        strange = [month for month in plan.months or () if month not in market.delivery_months]
        if strange:
            add(("plans", name, "months"), f"{strange}", f"months among delivery_months {list(market.delivery_months)}")
        left: set[str] = set()
        for index, force in enumerate(plan.force):
            expected = f"a contract such as {market.code}-2025-{market.delivery_months[0]:02d}"
            try:
                known = force.outgoing.startswith(f"{market.code}-") and delivery_of(force.outgoing).month in (
                    plan.months or market.delivery_months
                )
            except ValueError:
                known = False
            if not known:
                add(("plans", name, "force", index, "outgoing"), f"{force.outgoing!r}", expected)
            if force.outgoing in left:
                add(("plans", name, "force", index, "outgoing"), f"{force.outgoing} twice", "one decision a contract")
            left.add(force.outgoing)
    return found


def _rule_mistakes(data: dict[str, Any], text: str, file: str) -> list[Mistake]:
    """Rules that give no single day in some delivery month; found even where other keys are wrong."""
    found: list[Mistake] = []
    months = data.get("delivery_months")
    if not isinstance(months, list) or not all(isinstance(month, int) and 1 <= month <= 12 for month in months):
        return found
    for name in ("last_trade", "first_notice"):
        given = data.get(name, [])
        tables = given if isinstance(given, list) else [given]
        rules = [validate(DayRule, table, text, file)[0] if isinstance(table, dict) else None for table in tables]
        starts = [rule.applies_from for rule in rules if rule is not None]
        if len(set(starts)) < len(starts):
            found.append(
                Mistake(
                    file,
                    f"{name}.from",
                    "two rules from the same delivery month",
                    "a different from for each",
                    line_of(text, (name, "from")),
                )
            )
        for index, rule in enumerate(rules):
            key: tuple[str | int, ...] = (name, index, "rule") if isinstance(given, list) else (name, "rule")
            shown = f"{name}[{index}].rule" if isinstance(given, list) else f"{name}.rule"
            failure = _first_failure(rule, months) if rule is not None else None
            if failure:
                found.append(
                    Mistake(
                        file, shown, failure, "a rule that gives one day in every delivery month", line_of(text, key)
                    )
                )
    return found


def _first_failure(rule: DayRule, months: list[int]) -> str | None:
    # Twenty-eight years hold every combination of weekday and leap year.
    for year, month in itertools.product(range(2000, 2028), months):
        place = Delivery(year, month).shift(rule.month_offset)
        try:
            rule_day(rule.rule, place.year, place.month)
        except CalendarError as error:
            return str(error)
    return None
