"""What is worth knowing about a plan's rolls and its series.

Belongs here: findings about the ledger and the series it makes. Does not belong here: deciding or measuring a
roll (`rolls.py`), computing a series (`splice.py`).
"""

import datetime
import math
from dataclasses import dataclass, replace

import numpy as np

from contracts.findings import Finding, Kind, Severity
from contracts.markets import Before, Plan
from contracts.panel import Panel
from contracts.rolls import BACKSTOP, NEVER, Held, RollStep
from contracts.sessions import day_of

# Shares of the most active contract under which an incoming is thin, and under which it hardly trades.
_THIN = 0.1
_HARDLY_TRADES = 0.02
_FEW_SESSIONS = 5


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
    if held.nearby == 1:
        # A farther nearby is thinner by nature, and nobody holds it into delivery.
        found += _thin_incomings(teller, held)
        found += _after_first_notice(teller, plan, held)
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


def _thin_incomings(teller: _Teller, held: Held) -> list[Finding]:
    """Rolls into a contract that hardly trades, against the market's most active contract as known when decided.

    The share is the larger of two: median volume of the last five sessions, and open interest. Common practice, no
    source: under a tenth is told, under a fiftieth wants eyes, since such a position cannot well be carried over.
    """
    panel = teller.panel
    volume, interest = panel.field("volume"), panel.field("open_interest")
    found = []
    for decision in dict.fromkeys(step.decision for step in held.steps):
        traded = np.nan_to_num(volume[max(0, decision.decided - _FEW_SESSIONS + 1) : decision.decided + 1])
        known = decision.decided - panel.market.open_interest_lag
        open_ = np.nan_to_num(interest[known]) if known >= 0 else np.zeros(panel.shape[1])
        counts = [size for size in (np.median(traded, axis=0), open_) if size.max() > 0]
        if not counts:
            continue
        share = max(float(size[decision.incoming] / size.max()) for size in counts)
        if share >= _THIN:
            continue
        incoming, day = panel.contracts[decision.incoming], day_of(panel.sessions[decision.decided])
        busiest = panel.contracts[int(counts[0].argmax())]
        text = (
            f"the roll to {incoming} ({decision.trigger}) was decided when it had {share:.1%} of the volume and open "
            f"interest of the most active contract, {busiest}"
        )
        severity = Severity.REVIEW if share < _HARDLY_TRADES else Severity.NOTE
        finding = teller.tell(Kind.THIN_INCOMING, severity, panel.contracts[decision.outgoing], day, text, share)
        found.append(replace(finding, threshold=_THIN))
    return found


def _after_first_notice(teller: _Teller, plan: Plan, held: Held) -> list[Finding]:
    """How often a plan holds a contract on or after first notice, unless it says that it counts from the last trade.

    From first notice on the holder of a bought contract may be made to take delivery.
    """
    panel = teller.panel
    is_meant = "before" in plan.model_fields_set and plan.before is Before.LAST_TRADE
    if not panel.market.first_notice or is_meant or held.start == NEVER:
        return []
    sessions = np.arange(held.start, len(panel.sessions))
    contract, incoming = held.contract[sessions], held.incoming[sessions]
    late = (contract >= 0) & (sessions >= panel.first_notice[contract])
    late |= (incoming >= 0) & (sessions >= panel.first_notice[incoming])
    if not late.any():
        return []
    count, several = int(late.sum()), len(np.unique(contract[late]))
    text = (
        f'held on {count} sessions on or after first notice, in {several} contracts; before = "first notice" rolls '
        'in time, before = "last trade" says that it is meant'
    )
    return [teller.tell(Kind.AFTER_FIRST_NOTICE, Severity.NOTE, None, None, text, float(count))]
