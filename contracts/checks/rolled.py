"""What is worth knowing about a plan's rolls and its series.

Belongs here: findings about the ledger and the series it makes. Does not belong here: deciding or measuring a
roll (`rolls.py`), computing a series (`splice.py`).
"""

import datetime
import math
from dataclasses import dataclass

import numpy as np

from contracts.findings import Finding, Kind, Severity
from contracts.markets import Plan
from contracts.panel import Panel
from contracts.rolls import BACKSTOP, NEVER, Held, RollStep
from contracts.sessions import day_of


def check_rolls(panel: Panel, name: str, plan: Plan, held: Held) -> list[Finding]:
    """Rolls by deadline, postponed, stale, unmeasured or pending; unused forces; ratios that do not exist."""
    teller = _Teller(panel, name, held.nearby)
    found = [finding for step in held.steps for finding in _about_step(teller, plan, step)]
    if held.pending is not None:
        decision = held.pending
        incoming = panel.contracts[decision.incoming]
        text = f"a roll to {incoming} is decided ({decision.trigger}) and takes effect after the end of the data"
        day = day_of(panel.sessions[decision.decided])
        found.append(teller.tell(Kind.ROLL_PENDING, Severity.NOTE, panel.contracts[decision.outgoing], day, text))
    for contract in held.unused:
        day = next(force.effective for force in plan.force if force.outgoing == contract)
        text = "the declared roll found the contract not held, or a roll under way"
        found.append(teller.tell(Kind.FORCE_UNUSED, Severity.REVIEW, contract, day, text))
    if held.start == NEVER:
        text = "no contract can ever be held"
        # A market may well list too few contracts for a farther nearby; without the first there is no series.
        severity = Severity.BLOCK if held.nearby == 1 else Severity.REVIEW
        found.append(teller.tell(Kind.ROLL_UNMEASURED, severity, None, None, text))
    return found


def check_back_adjusted(
    panel: Panel, name: str, held: Held, settle: np.ndarray, back_adjusted: np.ndarray
) -> list[Finding]:
    """Where gaps added up carry the back-adjusted price of a positive settle to zero or below: it has no percentages.

    `settle` and `back_adjusted` (T - start,) in price units, NaN where there is none. One finding a series; it is
    about no one session, since every roll to come moves those it speaks of.
    """
    places = np.flatnonzero((settle > 0) & (back_adjusted <= 0)) + held.start
    if not len(places):
        return []
    first, last = (day_of(panel.sessions[place]) for place in (places[0], places[-1]))
    text = (
        f"back_adjusted is at or below zero on {len(places)} sessions from {first} to {last} whose settle is above "
        "zero; its differences stand, its percentages mean nothing: take simple_return or ratio_adjusted"
    )
    teller = _Teller(panel, name, held.nearby)
    kind = Kind.PERCENT_OF_BACK_ADJUSTED_UNDEFINED
    return [teller.tell(kind, Severity.NOTE, None, None, text, score=float(len(places)))]


@dataclass(frozen=True)
class _Teller:
    """Words a finding about one nearby of one plan."""

    panel: Panel
    plan: str
    nearby: int

    def tell(
        self, kind: Kind, severity: Severity, contract: str | None, day: datetime.date | None, text: str,
        score: float | None = None, step: int | None = None,
    ) -> Finding:  # fmt: skip
        """The finding, told with its place first."""
        market = self.panel.market.code
        place = ", ".join(str(part) for part in (contract or market, day) if part is not None)
        message = f"{place}: plan {self.plan}, nearby {self.nearby}: {text}"
        detail = f"{self.plan} {self.nearby} {step or ''}"
        return Finding(kind, severity, message, market, contract, day, score=score, detail=detail)


def _about_step(teller: _Teller, plan: Plan, step: RollStep) -> list[Finding]:
    """What is worth knowing of one row of the ledger."""
    panel = teller.panel
    outgoing, incoming = panel.contracts[step.decision.outgoing], panel.contracts[step.incoming]
    day = day_of(panel.sessions[step.effective])

    def tell(kind: Kind, severity: Severity, text: str, score: float | None = None) -> Finding:
        return teller.tell(kind, severity, outgoing, day, text, score, step.step)

    if step.measured == NEVER:
        text = f"no session has usable settles of it and a later contract; the series begins anew with {incoming}"
        return [tell(Kind.ROLL_UNMEASURED, Severity.BLOCK, text)]
    found = []
    measured, waited = day_of(panel.sessions[step.measured]), float(step.postponed)
    if step.is_stale:
        text = f"no two usable settles up to its last trading session; the gap to {incoming} is measured on {measured}"
        found.append(tell(Kind.ROLL_MEASURED_STALE, Severity.REVIEW, text, waited))
    elif step.postponed:
        text = f"the roll to {incoming} waited {step.postponed} sessions for two usable settles, until {measured}"
        found.append(tell(Kind.ROLL_POSTPONED, Severity.NOTE, text, waited))
    if math.isnan(step.ratio):
        text = (
            f"settles {step.outgoing_settle:.10g} and {step.incoming_settle:.10g} on {measured} have no ratio; "
            "ratio_adjusted, scale and growth are null before this roll"
        )
        found.append(tell(Kind.RATIO_UNDEFINED, Severity.REVIEW, text))
    if step.step == 1 and step.decision.trigger == BACKSTOP:
        text = f"rolled to {incoming} by the deadline, before its {plan.trigger} trigger"
        found.append(tell(Kind.ROLL_BY_DEADLINE, Severity.NOTE, text))
    return found
