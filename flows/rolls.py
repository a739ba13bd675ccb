"""The command that prints the roll ledger, and what each roll was decided on.

Belongs here: how ledger and evidence are shown. Does not belong here: deciding a roll (`contracts/rolls.py`),
gathering its evidence (`contracts/evidence.py`). Heavy modules are imported inside the command.
"""

from dataclasses import asdict
from typing import TYPE_CHECKING, Any

import click

from flows.exits import Exit
from flows.render import say, say_json, say_table
from flows.shell import Asked, command

if TYPE_CHECKING:
    from contracts.evidence import Compared, Evidence, Settles
    from contracts.markets import Plan

_COLUMNS = (
    "plan", "nearby", "effective_on", "outgoing", "incoming", "weight_after", "outgoing_settle",
    "incoming_settle", "gap", "ratio", "trigger", "decided_on", "measured_on", "impact_sessions",
)  # fmt: skip


def _rolls(
    asked: Asked, market: str, plan: str | None, nearby: int | None, evidence: bool, snapshot: str | None
) -> Exit:
    """Print the roll ledger of a MARKET.

    Every roll with its two prices and its gap, in the order of plan, nearby and day. With --evidence each roll
    of nearby 1 is told so that it can be decided again by hand: the rule, what it saw session by session, the
    deadline, the sessions it could be measured on, the arithmetic of the gap.
    """
    from catalog.listings import list_rolls
    from catalog.places import Places

    places = Places(asked.where().store)
    if evidence:
        return _tell_evidence(asked, market, plan, snapshot)
    columns, rows = list_rolls(places, market, plan, nearby)
    if asked.as_json:
        say_json({"rolls": [dict(zip(columns, row, strict=True)) for row in rows]})
    elif rows:
        at = [columns.index(name) for name in _COLUMNS]
        say_table(_COLUMNS, [tuple(row[place] for place in at) for row in rows])
        say(["", f"ropewalk rolls {market} --evidence tells what each was decided on"])
    else:
        say(["no rolls"])
    return Exit.DONE


def _tell_evidence(asked: Asked, market: str, plan: str | None, snapshot: str | None) -> Exit:
    from catalog.places import Places
    from catalog.study import list_evidence

    carried, found = list_evidence(Places(asked.where().store), market, plan, snapshot)
    plans = {name: carried.market.plans[name] for name in carried.declared if plan in (None, name)}
    if asked.as_json:
        say_json(
            {
                "market": market,
                "snapshot": carried.snapshot,
                "open_interest_lag": carried.market.open_interest_lag,
                "plans": {name: one.model_dump(mode="json") for name, one in plans.items()},
                "evidence": [_as_json(each) for each in found],
                "notes": list(carried.notes),
            }
        )
        return Exit.DONE
    say([f"{market}, snapshot {carried.snapshot}", *carried.notes])
    for name, one in plans.items():
        say(["", f"plan {name}: {_rule(one, carried.market.open_interest_lag)}"])
        for each in found:
            if each.plan == name:
                say(_lines(each, one))
    return Exit.DONE


def _as_json(each: "Evidence") -> dict[str, Any]:
    told = asdict(each)
    told["steps"] = [
        {
            "step": step.step, "weight_before": step.weight_before, "weight_after": step.weight_after,
            "outgoing_settle": step.outgoing_settle, "incoming_settle": step.incoming_settle, "gap": step.gap,
            "ratio": step.ratio, "stale": step.is_stale,
        }
        for step in each.steps
    ]  # fmt: skip
    return told


_BEFORE = {
    "last trade": "last trade",
    "first notice": "first notice",
    "earlier": "last trade or first notice, whichever is earlier",
}


def _rule(plan: "Plan", lag: int) -> str:
    """The plan's rule in a sentence."""
    known = f" (known {lag} session{'s' if lag != 1 else ''} later)" if "interest" in plan.trigger else ""
    what = {
        "volume": "the incoming's volume is above the outgoing's",
        "open interest": f"the incoming's open interest{known} is above the outgoing's",
        "both": f"the incoming's volume and its open interest (known {lag} later) are both above the outgoing's",
        "either": f"the incoming's volume or its open interest (known {lag} later) is above the outgoing's",
        "calendar": "only the deadline decides",
    }[str(plan.trigger)]
    often = f" on {plan.confirm} sessions running" if plan.confirm > 1 and plan.trigger != "calendar" else ""
    steps = f", in {plan.steps} equal steps" if plan.steps > 1 else ""
    into = "the next contract" if plan.incoming == "next" else "the most active later contract"
    months = f", months {list(plan.months)}" if plan.months else ""
    return (
        f"{what}{often}; effective {plan.delay} session{'s' if plan.delay > 1 else ''} after the decision{steps}; "
        f"at the latest {plan.backstop} {_sessions(plan.backstop)} before {_BEFORE[str(plan.before)]}; "
        f"into {into}{months}"
    )


def _lines(each: "Evidence", plan: "Plan") -> list[str]:
    told = ["", f"  {each.outgoing} -> {each.incoming}, decided at the close of {each.decided_on} by {each.trigger}"]
    told.append(f"    could be decided from {each.free_since} on")
    told += [f"    {_compared(session)}" for session in each.compared]
    if len(each.candidates) > 1:
        shown = ", ".join(f"{one.contract} {_say(one.activity)}" for one in each.candidates)
        told.append(f"    later contracts by activity: {shown}")
    last_call = plan.delay + plan.steps - 1
    if each.force is not None:
        told.append(f"    a person set the roll for {each.force}")
    else:
        place = f"on {each.deadline_on}, " if each.deadline_on else ""
        due = "due" if last_call >= each.sessions_to_deadline else "not due"
        told.append(
            f"    deadline {place}{each.sessions_to_deadline} {_sessions(each.sessions_to_deadline)} after the "
            f"decision; delay and steps need {last_call}: {due}"
        )
    for step, sessions in zip(each.steps, each.measuring, strict=True):
        told += [f"    {_settles(session)}" for session in sessions[:-1]]
        if sessions:
            share = step.weight_after - step.weight_before
            times = "" if share == 1.0 else f" x {_say(share)}"
            stale = ", the latest session that has both" if step.is_stale else ""
            told.append(
                f"    measured {sessions[-1].session}{stale}: gap ({_say(step.incoming_settle)} - "
                f"{_say(step.outgoing_settle)}){times} = {_say(step.gap)}, ratio {_say(step.ratio)}"
            )
        else:
            told.append("    never measured: no session has both settles")
    return told


def _sessions(count: int) -> str:
    return "session" if count == 1 else "sessions"


def _compared(session: "Compared") -> str:
    return (
        f"{session.session}  volume {_say(session.outgoing_volume)} against {_say(session.incoming_volume)}, "
        f"open interest {_say(session.outgoing_open_interest)} against {_say(session.incoming_open_interest)}"
    )


def _settles(session: "Settles") -> str:
    parts = [
        f"{_say(value)} {'usable' if is_usable else 'not usable'}"
        for value, is_usable in (
            (session.outgoing, session.outgoing_usable),
            (session.incoming, session.incoming_usable),
        )
    ]
    return f"waited on {session.session}: settles {' and '.join(parts)}"


def _say(value: float | None) -> str:
    if value is None or value != value:
        return "none"
    return f"{value:.10g}"


rolls = command(click.Group(), "rolls", "ropewalk rolls NWHT --plan by_open_interest --evidence")(
    click.argument("market")(
        click.option("--plan", metavar="NAME", help="Only this roll plan.")(
            click.option("--nearby", type=click.IntRange(min=1), metavar="N", help="Only this nearby.")(
                click.option("--evidence", is_flag=True, help="Tell what each roll of nearby 1 was decided on.")(
                    click.option("--snapshot", metavar="NAME", help="With --evidence: the snapshot, name or number.")(
                        _rolls
                    )
                )
            )
        )
    )
)
