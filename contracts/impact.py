"""What the faults of a market would have done to its trend score.

Belongs here: weighing findings by the sessions whose score they would have turned, and the score a market would have
had without any cleaning. Does not belong here: the score itself (`trend.py`), finding or repairing a fault.

A finding on a replaced settle is weighed as if the reported price stood; wrong prices of one contract on sessions that
follow each other (a lacking bar or a masked price between them does not part them) belong together, and each carries
the impact of all: alone, the second day of a wrong level often turns nothing. A finding on a settle that was kept
although the curve expects another is weighed as if the expected price stood, since that is what the signal misses; of a
stale run, the expected prices follow the curve from its first session on. Notes are facts, and weigh nothing.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from contracts.checks.stale import StaleRun
from contracts.findings import Action, Finding, Kind, Severity
from contracts.panel import Panel
from contracts.repairs import Clean
from contracts.rolls import NEVER, Held
from contracts.sessions import day_number, day_of
from contracts.splice import Series, carry_forward, splice
from contracts.trend import impact_of_prices, sign_score

_REPLACED = frozenset({Action.REPAIRED, Action.MASKED})


@dataclass(frozen=True, eq=False)
class Laid:
    """One plan carried through: its name, what was held, and the series (None where nothing ever was)."""

    name: str
    held: Held
    series: Series | None


def weight_of(held: Held, session: int, contract: int) -> float:
    """The share of a contract in what is held through a session."""
    if held.contract[session] == contract:
        return float(1.0 - held.weight[session])
    return float(held.weight[session]) if held.incoming[session] == contract else 0.0


def weigh_findings(
    findings: Sequence[Finding], panel: Panel, clean: Clean, laid: Sequence[Laid], stale: Sequence[StaleRun],
    look_backs: tuple[int, ...],
) -> list[Finding]:  # fmt: skip
    """The findings with `impact_sessions`, each at the plan whose first nearby it would have harmed most."""
    first_nearbys = [(one.held, one.series) for one in laid if one.held.nearby == 1 and one.series is not None]
    runs = {(run.contract, run.first): run for run in stale}
    weighed = []
    for finding in findings:
        cells = _other_settles(finding, panel, clean, runs)
        if cells is not None:
            contract, sessions, settles = cells
            used = clean.settle[sessions, contract]
            impacts = (
                _impact(held, series, contract, sessions, settles, used, look_backs) for held, series in first_nearbys
            )
            finding = replace(finding, impact_sessions=max(impacts, default=0))
        weighed.append(finding)
    return weighed


def _other_settles(
    finding: Finding, panel: Panel, clean: Clean, runs: Mapping[tuple[int, int], StaleRun]
) -> tuple[int, np.ndarray, np.ndarray] | None:
    """The contract, sessions and other settles by which a finding is weighed; None for one that weighs nothing."""
    if finding.field != "settle" or finding.session is None or finding.contract not in panel.contracts:
        return None
    contract = panel.contracts.index(finding.contract)
    session = int(np.searchsorted(panel.sessions, day_number(finding.session)))
    reported = panel.field("settle")[:, contract]
    if finding.action in _REPLACED:
        sessions = _run_around(clean, reported, session, contract)
        return contract, sessions, reported[sessions]
    if finding.severity is Severity.NOTE or finding.expected is None:
        return None
    run = runs.get((contract, session)) if finding.kind is Kind.STALE_PRICE else None
    if run is not None:
        sessions = np.arange(run.first, run.last + 1)
        return contract, sessions, np.asarray(run.path)
    return contract, np.array([session]), np.array([finding.expected])


def _run_around(clean: Clean, reported: np.ndarray, session: int, contract: int) -> np.ndarray:
    """The sessions of one contract's replaced settles that follow each other about a session."""
    priced = np.flatnonzero(~np.isnan(reported))
    is_replaced = (clean.is_repaired | clean.is_masked)[priced, contract]
    at = first = last = int(np.searchsorted(priced, session))
    if at >= len(priced) or priced[at] != session:
        return np.array([session])
    while first > 0 and is_replaced[first - 1]:
        first -= 1
    while last + 1 < len(priced) and is_replaced[last + 1]:
        last += 1
    return np.asarray(priced[first : last + 1])


def _impact(
    held: Held, series: Series, contract: int, sessions: np.ndarray, settles: np.ndarray, used: np.ndarray,
    look_backs: tuple[int, ...],
) -> int:  # fmt: skip
    """Sessions of one series whose score differs with other settles of a contract in place of those used."""
    at, differences = [], []
    for session, settle, own in zip(sessions.tolist(), settles.tolist(), used.tolist(), strict=True):
        weight = weight_of(held, session, contract) if session >= held.start else 0.0
        place = session - held.start
        if not weight or np.isnan(series.back_adjusted[place]):
            continue
        # In place of a masked settle the series carries an earlier one.
        at.append(place)
        differences.append(weight * (settle - (series.settle[place] if np.isnan(own) else own)))
    if not at:
        return 0
    return impact_of_prices(series.back_adjusted, np.array(at), np.array(differences), look_backs)


def lay_uncleaned(held: Held, panel: Panel, clean: Clean) -> np.ndarray:
    """The back-adjusted series had every reported settle stood, (T - start,), with the same holdings.

    Gaps are those of the reported settles on the sessions on which they were measured.
    """
    reported = panel.field("settle")
    raw = np.where(np.isnan(reported), clean.settle, reported)
    steps = [
        step
        if step.measured == NEVER
        else replace(
            step,
            outgoing_settle=float(raw[step.measured, step.decision.outgoing]),
            incoming_settle=float(raw[step.measured, step.incoming]),
        )
        for step in held.steps
    ]
    carried, status = carry_forward(raw, np.zeros(raw.shape, dtype=bool))
    return splice(replace(held, steps=steps), carried, status).back_adjusted


def tell_cleaning(laid: Sequence[Laid], panel: Panel, clean: Clean, look_backs: tuple[int, ...]) -> dict[str, Any]:
    """For each plan's nearby 1: what cleaning did to its sign score, as plain values by the plan's name.

    `sessions`: how many have a score; `replaced`: held sessions whose settle was repaired or masked; `turned`: sessions
    whose score would be another without cleaning; `worst`: None, or the session where it is farthest off (the newest
    of several), with `clean`, the score as published, and `reported`, what it would have been.
    """
    told: dict[str, Any] = {}
    is_replaced = clean.is_repaired | clean.is_masked
    for one in laid:
        if one.held.nearby != 1 or one.series is None:
            continue
        ours = sign_score(one.series.back_adjusted, look_backs)
        theirs = sign_score(lay_uncleaned(one.held, panel, clean), look_backs)
        same = (ours == theirs) | (np.isnan(ours) & np.isnan(theirs))
        apart = np.nan_to_num(np.abs(ours - theirs))
        worst = None
        if (apart > 0).any():
            at = int(np.flatnonzero(apart == apart.max())[-1])
            day = day_of(panel.sessions[one.held.start + at]).isoformat()
            worst = {"session": day, "clean": int(ours[at]), "reported": int(theirs[at])}
        rows = np.arange(one.held.start, len(panel.sessions))
        held = is_replaced[rows, one.held.contract[rows]]
        held |= is_replaced[rows, np.maximum(one.held.incoming[rows], 0)] & (one.held.incoming[rows] >= 0)
        told[one.name] = {
            "sessions": int((~np.isnan(ours)).sum()),
            "replaced": int(held.sum()),
            "turned": int((~same).sum()),
            "worst": worst,
        }
    return told
