"""Whether a market may be published.

Belongs here: judging a build's facts by the desk's gates. Does not belong here: finding faults, linking tables.
"""

import datetime
from typing import Any

from contracts.build import RECENT_SESSIONS
from contracts.markets import Market
from contracts.quality import Gates
from contracts.sessions import day_number, market_days


def judge_market(market: Market, facts: dict[str, Any], gates: Gates, data_date: datetime.date) -> tuple[str, ...]:
    """Every reason to hold a market back, in words; empty where it may go out.

    `facts` are those of `contracts.build`; `data_date` is the newest session of any market, so that silence
    is measured by the data and not by the clock.
    """
    reasons = []
    rows, rejected = int(facts["rows"]), int(facts["rejected"])
    if rows and rejected / rows > gates.rejected_share:
        reasons.append(f"{rejected} of {rows} rows were rejected, more than {gates.rejected_share:.2%}")
    for name, plan in facts["plans"].items():
        without = int(plan["recent_without_price"])
        if without / RECENT_SESSIONS > gates.carried_share:
            reasons.append(
                f"plan {name} has no price of its own on {without} of the last {RECENT_SESSIONS} sessions, "
                f"more than {gates.carried_share:.2%}"
            )
    if not facts["plans"]:
        reasons.append("no plan holds any contract")
    blocking = facts["blocking"]
    if len(blocking) > gates.block_findings:
        more = f" (and {len(blocking) - 1} more)" if len(blocking) > 1 else ""
        reasons.append(f"{blocking[0]}{more}")
    silent = silent_sessions(market, datetime.date.fromisoformat(facts["last_session"]), data_date)
    if silent > gates.silent_sessions:
        reasons.append(f"{silent} sessions without a bar up to {data_date}, more than {gates.silent_sessions}")
    return tuple(reasons)


def silent_sessions(market: Market, last_session: datetime.date, data_date: datetime.date) -> int:
    """The market's own sessions after its last bar, up to the newest session of any market."""
    if data_date <= last_session:
        return 0
    days = market_days(market, last_session.year, data_date.year)
    return len(days.between(day_number(last_session) + 1, day_number(data_date)))
