"""By when a session's files are due, by a market's own clock.

Belongs here: which session is due at a moment that is handed in. Does not belong here: what time it is
(`flows/clock.py`), and whether its files came (`catalog/lateness.py`).
"""

import datetime
import zoneinfo

from contracts.markets import Market
from contracts.sessions import day_number, day_of, market_days

# A market that is closed for longer than this has other worries than a late file.
_LONGEST_BREAK_DAYS = 60


def due_moment(market: Market, session: datetime.date) -> datetime.datetime | None:
    """When the files of a session are due, with the market's zone; None where the market declares no time.

    A time that clocks skip that day counts as if they had not been put forward, one that comes twice as the
    first.
    """
    if market.due is None or market.due_zone is None:
        return None
    time = datetime.time.fromisoformat(market.due)
    day = session + datetime.timedelta(days=market.due_days_after)
    return datetime.datetime.combine(day, time, zoneinfo.ZoneInfo(market.due_zone))


def due_session(market: Market, moment: datetime.datetime) -> datetime.date | None:
    """The newest session whose files are due at a moment with a zone; None where the market declares no time.

    Raises CalendarError where the market's calendar does not reach the moment.
    """
    if market.due is None or market.due_zone is None:
        return None
    today = moment.astimezone(zoneinfo.ZoneInfo(market.due_zone)).date()
    first = today - datetime.timedelta(days=_LONGEST_BREAK_DAYS)
    sessions = market_days(market, first.year, today.year).between(day_number(first), day_number(today))
    for number in reversed(sessions.tolist()):
        due = due_moment(market, day_of(number))
        # Within one zone datetimes compare by the clock on the wall, which summer time puts back.
        if due is not None and due.astimezone(datetime.UTC) <= moment.astimezone(datetime.UTC):
            return day_of(number)
    return None
