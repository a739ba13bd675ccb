"""A market's contracts with the days its rules give.

Belongs here: what a person checks against the exchange's own calendar before trusting a market file. Does
not belong here: any bar.
"""

import datetime
from typing import Any

from contracts.deliveries import Delivery, contract_name, delivery_of
from contracts.errors import CalendarError, Mistake
from contracts.markets import Before, Market, Plan
from contracts.sessions import (
    calendar_mistake,
    day_number,
    day_of,
    first_notice_day,
    last_trade_day,
    market_days,
)

_MARGIN_YEARS = 3


def contract_days(market: Market, first_year: int, last_year: int) -> list[dict[str, Any]]:
    """Contracts delivering within the years, each a dict: contract, last_trade, first_notice, deadlines.

    Days are `datetime.date`, `first_notice` is None where none is declared, `deadlines` maps each plan that
    holds the contract to the session from which it no longer does. Raises CalendarError.
    """
    rows = []
    for year in range(first_year, last_year + 1):
        for month in market.delivery_months:
            delivery = Delivery(year, month)
            last, notice = last_trade_day(market, delivery), first_notice_day(market, delivery)
            held_by = {
                name: plan for name, plan in market.plans.items() if month in (plan.months or market.delivery_months)
            }
            rows.append(
                {
                    "contract": contract_name(market.code, delivery),
                    "last_trade": last,
                    "first_notice": notice,
                    "deadlines": {
                        name: _deadline(market, plan, last, notice) for name, plan in sorted(held_by.items())
                    },
                }
            )
    return rows


def _deadline(market: Market, plan: Plan, last: datetime.date, notice: datetime.date | None) -> datetime.date:
    """The session from which a plan no longer holds a contract with these days."""
    ends = {
        Before.LAST_TRADE: last,
        Before.FIRST_NOTICE: notice or last,
        Before.EARLIER: min(last, notice or last),
    }
    end = ends[plan.before]
    days = market_days(market, end.year - _MARGIN_YEARS, end.year + 1)
    return day_of(days.shift(days.on_or_before(day_number(end)), -plan.backstop))


def calendar_mistakes(market: Market, file: str) -> list[Mistake]:
    """Calendars a market names that cannot be used, and forced rolls on days that cannot be."""
    found = []
    named = [("calendar", market.calendar)]
    for name in ("last_trade", "first_notice"):
        named += [(f"{name}.business_days", rule.business_days) for rule in getattr(market, name) if rule.business_days]
    for key, calendar in dict.fromkeys(named):
        wrong = calendar_mistake(calendar)
        if wrong:
            found.append(Mistake(file, key, wrong, "'weekdays' or a key of exchange_calendars that can be built"))
    return found or _force_mistakes(market, file)


def _force_mistakes(market: Market, file: str) -> list[Mistake]:
    found = []
    for name, plan in market.plans.items():
        for index, force in enumerate(plan.force):
            key = f"plans.{name}.force[{index}].effective"
            days = market_days(market, force.effective.year, force.effective.year)
            if not days.is_open(day_number(force.effective)):
                found.append(Mistake(file, key, f"{force.effective}, no session of the market", "a session"))
            try:
                last = last_trade_day(market, delivery_of(force.outgoing))
            except (CalendarError, ValueError):
                continue
            if force.effective > last:
                expected = f"a session up to the last trading day of {force.outgoing}, {last}"
                found.append(Mistake(file, key, str(force.effective), expected))
    return found
