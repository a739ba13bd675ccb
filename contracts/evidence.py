"""What a roll was decided on, so that a person can decide it again by hand.

Belongs here: the figures the rule looked at, session by session, for the rolls of nearby 1. Does not belong
here: deciding (`rolls.py`), showing (`flows/`).
"""

import datetime
from dataclasses import dataclass

import numpy as np

from contracts.compared import known_interest
from contracts.deliveries import delivery_of
from contracts.markets import Incoming, Plan, Trigger
from contracts.panel import Panel, foreseen, plan_ends
from contracts.repairs import Clean
from contracts.rolls import NEVER, Held, RollStep
from contracts.sessions import day_of

# So many sessions are shown on which a roll waited; the rest are counted.
_MOST_WAITS = 10


@dataclass(frozen=True)
class Compared:
    """What the rule saw of one session: volumes of it, and open interests known at its close; None is missing."""

    session: datetime.date
    outgoing_volume: float | None
    incoming_volume: float | None
    outgoing_open_interest: float | None
    incoming_open_interest: float | None


@dataclass(frozen=True)
class Candidate:
    """A later contract the roll could have gone into, with what `most active` looks at (None: missing)."""

    contract: str
    activity: float | None


@dataclass(frozen=True)
class Settles:
    """The two settles of a session a roll was or could have been measured on, and whether each was usable."""

    session: datetime.date
    outgoing: float | None
    incoming: float | None
    outgoing_usable: bool
    incoming_usable: bool


@dataclass(frozen=True)
class Evidence:
    """One roll and what it follows from.

    compared: the sessions the trigger looked at up to the decision, and the one before them, oldest first;
    free_since: first session at whose close this roll could have been decided; sessions_to_deadline: from the
    decision, as they were counted at its close, negative where it has passed; measuring: per step the sessions
    from the planned one on which it had to wait, and last the one that was measured (an earlier one where it is
    stale).
    """

    plan: str
    outgoing: str
    incoming: str
    trigger: str
    decided_on: datetime.date
    planned_for: datetime.date | None
    free_since: datetime.date
    compared: tuple[Compared, ...]
    candidates: tuple[Candidate, ...]
    deadline_on: datetime.date | None
    sessions_to_deadline: int
    force: datetime.date | None
    steps: tuple[RollStep, ...]
    measuring: tuple[tuple[Settles, ...], ...]


def gather_evidence(panel: Panel, clean: Clean, name: str, plan: Plan, held: Held) -> list[Evidence]:
    """The evidence of every roll of a plan's nearby 1 that took effect, in order."""
    if held.nearby != 1:
        raise ValueError("a farther nearby rolls with nearby 1")
    volume, interest = panel.field("volume"), known_interest(panel)
    ends = plan_ends(panel, plan)
    found = []
    free = held.start
    for decision in held.decisions:
        steps = tuple(step for step in held.steps if step.decision == decision)
        if not steps or (steps[-1].weight_after < 1.0):
            continue
        at, outgoing = decision.decided, decision.outgoing
        window = range(max(0, at - plan.confirm), at + 1)
        compared = tuple(_compare(panel, volume, interest, session, outgoing, decision.incoming) for session in window)
        force = next((f.effective for f in plan.force if f.outgoing == panel.contracts[outgoing]), None)
        deadline = int(foreseen(panel, ends[outgoing], at)) - plan.backstop
        # Nobody counted on a closed day that was to trade after the decision.
        scheduled = np.delete(panel.sessions, panel.disagreeing[panel.disagreeing > at])
        found.append(
            Evidence(
                name, panel.contracts[outgoing], panel.contracts[decision.incoming], decision.trigger, _day(panel, at),
                _day(panel, decision.planned) if decision.planned < len(panel.sessions) else None, _day(panel, free),
                compared, _candidates(panel, plan, volume, interest, at, outgoing),
                day_of(scheduled[deadline]) if 0 <= deadline < len(scheduled) else None, deadline - at, force, steps,
                _all_measuring(panel, clean, steps),
            )
        )  # fmt: skip
        free = steps[-1].effective
    return found


def _compare(
    panel: Panel, volume: np.ndarray, interest: np.ndarray, session: int, outgoing: int, incoming: int
) -> Compared:
    parts = [_number(values[session, c]) for values in (volume, interest) for c in (outgoing, incoming)]
    return Compared(_day(panel, session), *parts)


def _candidates(
    panel: Panel, plan: Plan, volume: np.ndarray, interest: np.ndarray, at: int, outgoing: int
) -> tuple[Candidate, ...]:
    """Later eligible contracts known at the decision; only the next where the rule asks for no other."""
    months = plan.months or panel.market.delivery_months
    activity = volume if plan.trigger is Trigger.VOLUME else interest
    known = [
        contract
        for contract in range(outgoing + 1, len(panel.contracts))
        if delivery_of(panel.contracts[contract]).month in months and (panel.bar[: at + 1, contract] >= 0).any()
    ]
    if plan.incoming is Incoming.NEXT:
        known = known[:1]
    return tuple(Candidate(panel.contracts[contract], _number(activity[at, contract])) for contract in known)


def _all_measuring(panel: Panel, clean: Clean, steps: tuple[RollStep, ...]) -> tuple[tuple[Settles, ...], ...]:
    """Each step is planned a session after the one before, and measured later than that."""
    found, earliest = [], 0
    for number, step in enumerate(steps):
        found.append(_measuring(panel, clean, max(step.decision.planned - 1 + number, earliest), step))
        earliest = step.measured + 1
    return tuple(found)


def _measuring(panel: Panel, clean: Clean, planned: int, step: RollStep) -> tuple[Settles, ...]:
    if step.measured == NEVER:
        return ()
    outgoing, incoming = step.decision.outgoing, step.incoming
    # A stale roll was first tried up to the outgoing's last session, with the contract it was decided for.
    until = int(panel.last_trade[outgoing]) + 1 if step.is_stale else step.measured
    sessions = [*[*range(planned, until)][-_MOST_WAITS:], step.measured]
    return tuple(
        Settles(
            _day(panel, session), _number(clean.settle[session, outgoing]), _number(clean.settle[session, incoming]),
            bool(clean.usable[session, outgoing]), bool(clean.usable[session, incoming]),
        )
        for session in sessions
    )  # fmt: skip


def _day(panel: Panel, session: int) -> datetime.date:
    return day_of(panel.sessions[session])


def _number(value: float) -> float | None:
    return None if np.isnan(value) else float(value)
