"""What is worth knowing about a plan's rolls and its series.

Belongs here: findings about the ledger. Does not belong here: deciding or measuring a roll (`rolls.py`).
"""

import math

import numpy as np

from contracts.findings import Finding, Kind, Severity
from contracts.markets import Plan, Trigger
from contracts.panel import Panel
from contracts.rolls import BACKSTOP, NEVER, Held, RollStep
from contracts.sessions import day_of


def check_rolls(panel: Panel, name: str, plan: Plan, held: Held) -> list[Finding]:
    """Rolls by deadline, postponed, stale, unmeasured or pending; unused forces; ratios that do not exist."""
    found: list[Finding] = []
    label = f"plan {name}, nearby {held.nearby}"

    def add(
        kind: Kind,
        severity: Severity,
        step_or_none: RollStep | None,
        outgoing: str,
        day: object,
        text: str,
        score: float | None = None,
    ) -> None:
        found.append(
            Finding(
                kind, severity, f"{outgoing}, {day}: {label}: {text}", panel.market.code, outgoing,
                day if day is not None else None, score=score, detail=f"{name} {held.nearby} {step_or_none.step if step_or_none else ''}",
            )
        )  # fmt: skip

    for step in held.steps:
        outgoing, incoming = panel.contracts[step.decision.outgoing], panel.contracts[step.incoming]
        day = day_of(panel.sessions[step.effective])
        if step.measured == NEVER:
            add(
                Kind.ROLL_UNMEASURED,
                Severity.BLOCK,
                step,
                outgoing,
                day,
                f"no session has usable settles of it and a later contract; the series is cut and begins anew with {incoming}",
            )
            continue
        measured = day_of(panel.sessions[step.measured])
        if step.is_stale:
            add(
                Kind.ROLL_MEASURED_STALE,
                Severity.REVIEW,
                step,
                outgoing,
                day,
                f"no two usable settles up to its last trading session; the gap to {incoming} is measured on {measured}",
                float(step.postponed),
            )
        elif step.postponed:
            add(
                Kind.ROLL_POSTPONED,
                Severity.NOTE,
                step,
                outgoing,
                day,
                f"the roll to {incoming} waited {step.postponed} sessions for two usable settles, until {measured}",
                float(step.postponed),
            )
        if math.isnan(step.ratio):
            add(
                Kind.RATIO_UNDEFINED,
                Severity.REVIEW,
                step,
                outgoing,
                day,
                f"settles {step.outgoing_settle:g} and {step.incoming_settle:g} on {measured} have no ratio; ratio_adjusted, scale and growth are null before this roll",
            )
        if step.step == 1 and step.decision.trigger == BACKSTOP and plan.trigger is not Trigger.CALENDAR:
            add(
                Kind.ROLL_BY_DEADLINE,
                Severity.NOTE,
                step,
                outgoing,
                day,
                f"rolled to {incoming} by the deadline, before its {plan.trigger} trigger",
            )
    if held.pending is not None:
        decision = held.pending
        decided = day_of(panel.sessions[decision.decided])
        text = f"a roll to {panel.contracts[decision.incoming]} is decided ({decision.trigger}) and takes effect after the end of the data"
        add(Kind.ROLL_PENDING, Severity.NOTE, None, panel.contracts[decision.outgoing], decided, text)
    for contract in held.unused:
        day = next((force.effective for force in plan.force if force.outgoing == contract), None)
        add(
            Kind.FORCE_UNUSED,
            Severity.REVIEW,
            None,
            contract,
            day,
            "the declared roll found the contract not held, or a roll under way",
        )
    if held.start == NEVER:
        last = day_of(panel.sessions[-1])
        found.append(
            Finding(
                Kind.ROLL_UNMEASURED, Severity.BLOCK, f"{panel.market.code}, {last}: {label}: no contract can ever be held",
                panel.market.code, detail=f"{name} {held.nearby} start",
            )
        )  # fmt: skip
    return found


def held_cells(panel: Panel, held: Held) -> np.ndarray:
    """Weight of every contract on every session, (T, N)."""
    weights = np.zeros(panel.shape)
    if held.start == NEVER:
        return weights
    rows = np.arange(held.start, panel.shape[0])
    weights[rows, held.contract[held.start :]] = 1.0 - held.weight[held.start :]
    moving = rows[held.incoming[held.start :] != NEVER]
    weights[moving, held.incoming[moving]] = held.weight[moving]
    return weights
