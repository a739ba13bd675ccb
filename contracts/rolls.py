"""Roll plan + panel -> held weights and the roll ledger.

Belongs here: when a plan leaves a contract, for which one, and on which settles the gap is measured. Does not
belong here: what the series then look like (`splice.py`). All positions are indices of the panel's sessions
and contracts; nothing later than the close of a decision enters it.
"""

import math
from dataclasses import dataclass, field

import numpy as np

from contracts.deliveries import delivery_of
from contracts.markets import Incoming, Plan, Trigger
from contracts.panel import Panel, foreseen, plan_ends
from contracts.sessions import day_number, session_index

NEVER = -1
BACKSTOP = "backstop"
FORCED = "forced"


@dataclass(frozen=True)
class Decision:
    """A roll as decided at the close of a session; `planned` is its first effective session."""

    decided: int
    outgoing: int
    incoming: int
    trigger: str
    planned: int


@dataclass(frozen=True)
class RollStep:
    """One row of the ledger. `measured` is NEVER where no session has both settles."""

    decision: Decision
    step: int
    measured: int
    effective: int
    incoming: int
    weight_before: float
    weight_after: float
    outgoing_settle: float
    incoming_settle: float
    is_stale: bool = False
    postponed: int = 0

    @property
    def gap(self) -> float:
        """(weight after - weight before) x (incoming - outgoing settle)."""
        return (self.weight_after - self.weight_before) * (self.incoming_settle - self.outgoing_settle)

    @property
    def ratio(self) -> float:
        """Value of the new mix over the old one; NaN where a leg is at or below zero or unknown."""
        if not (self.outgoing_settle > 0 and self.incoming_settle > 0):
            return math.nan
        after = (1 - self.weight_after) * self.outgoing_settle + self.weight_after * self.incoming_settle
        before = (1 - self.weight_before) * self.outgoing_settle + self.weight_before * self.incoming_settle
        return after / before


@dataclass
class Held:
    """What one nearby of a plan holds through each session, and how it came to.

    `start` is the first session held (NEVER where there is none). `contract`, `incoming` (T,) are contract
    indices, -1 for none; `weight` (T,) is the incoming's share. `steps` is the ledger in order, `decisions`
    every decision including those not effective within the data, `unused` the forces that found nothing to
    decide.
    """

    nearby: int
    start: int
    contract: np.ndarray
    incoming: np.ndarray
    weight: np.ndarray
    steps: list[RollStep] = field(default_factory=list)
    decisions: list[Decision] = field(default_factory=list)
    unused: list[str] = field(default_factory=list)
    pending: Decision | None = None


class _Market:
    """What a plan may look at: eligible contracts, usable settles, volume and known open interest."""

    def __init__(self, panel: Panel, usable: np.ndarray, settle: np.ndarray, plan: Plan) -> None:
        self.panel, self.plan, self.usable, self.settle = panel, plan, usable, settle
        self.length, count = panel.shape
        months = plan.months or panel.market.delivery_months
        has_bar = panel.bar >= 0
        self.first_bar = np.where(has_bar.any(axis=0), has_bar.argmax(axis=0), self.length)
        listed = np.array([delivery_of(name).month in months for name in panel.contracts], dtype=bool)
        self.eligible = np.flatnonzero(listed & (self.first_bar < self.length))
        self.ends = plan_ends(panel, plan)
        self.last_trade = panel.last_trade
        self.volume = panel.field("volume")
        lag = panel.market.open_interest_lag
        self.known_interest = np.full((self.length, count), np.nan)
        if lag < self.length:
            self.known_interest[lag:] = panel.field("open_interest")[: self.length - lag]
        self.forces = {
            panel.contracts.index(force.outgoing): session_index(panel.sessions, panel.calendar, force.effective)
            for force in plan.force
            if force.outgoing in panel.contracts
        }

    def deadline(self, contracts: np.ndarray | int, sessions: np.ndarray) -> np.ndarray:
        """Session index from which contracts are no longer held, as counted at the close of sessions (broadcast)."""
        return foreseen(self.panel, self.ends[contracts], sessions) - self.plan.backstop

    def decides_force(self, effective: int) -> int:
        """The first session at whose close a forced roll's day is no more than the plan's delay off."""
        before = np.arange(effective - self.plan.delay - len(self.panel.disagreeing), effective - self.plan.delay + 1)
        is_near = before + self.plan.delay >= foreseen(self.panel, effective, before)
        return int(before[is_near][0])

    def later(self, contract: int, session: int) -> np.ndarray:
        """Eligible contracts after one, known at the close of a session, in delivery order."""
        after = self.eligible[self.eligible > contract]
        return after[self.first_bar[after] <= session]

    def first_hold(self, start: int, after: int) -> tuple[int, int]:
        """First session from `start`, and the contract, that rule 2 holds there; (NEVER, NEVER) for none."""
        able = self.eligible[self.eligible > after]
        sessions = np.arange(start, self.length)
        open_to = self.usable[start:, able] & (self.deadline(able, sessions[:, None]) > sessions[:, None])
        rows = np.flatnonzero(open_to.any(axis=1))
        if not len(rows):
            return NEVER, NEVER
        return int(sessions[rows[0]]), int(able[open_to[rows[0]].argmax()])

    def incoming_from(self, outgoing: int, sessions: np.ndarray) -> np.ndarray:
        """The contract a roll decided on each of the sessions would go into; NEVER where none is known."""
        chosen = np.full(len(sessions), NEVER, dtype=np.int64)
        after = self.eligible[self.eligible > outgoing]
        if not len(after):
            return chosen
        for contract in after[::-1]:
            chosen[sessions >= self.first_bar[contract]] = contract
        if self.plan.incoming is Incoming.MOST_ACTIVE:
            activity = self.volume if self.plan.trigger is Trigger.VOLUME else self.known_interest
            # Before its first bar a contract has neither volume nor open interest.
            values = np.nan_to_num(activity[np.ix_(sessions, after)], nan=-np.inf)
            best = values.argmax(axis=1)
            known = values[np.arange(len(sessions)), best] > -np.inf
            chosen = np.where(known, after[best], chosen)
        return chosen

    def fires(self, outgoing: int, incoming: np.ndarray, sessions: np.ndarray) -> np.ndarray:
        """Whether the trigger held on each of the last `confirm` sessions, for each of the sessions."""
        if self.plan.trigger is Trigger.CALENDAR:
            return np.zeros(len(sessions), dtype=bool)
        held = incoming != NEVER
        for back in range(self.plan.confirm):
            at = sessions - back
            held &= (at >= 0) & self._exceeds(outgoing, incoming, np.maximum(at, 0))
        return held

    def _exceeds(self, outgoing: int, incoming: np.ndarray, at: np.ndarray) -> np.ndarray:
        # A comparison with NaN is false: a missing value on either side is no.
        by_volume = self.volume[at, incoming] > self.volume[at, outgoing]
        by_interest = self.known_interest[at, incoming] > self.known_interest[at, outgoing]
        made: np.ndarray = {
            Trigger.VOLUME: by_volume,
            Trigger.OPEN_INTEREST: by_interest,
            Trigger.BOTH: by_volume & by_interest,
            Trigger.EITHER: by_volume | by_interest,
        }[self.plan.trigger]
        return made


def decide(market: _Market, outgoing: int, start: int) -> Decision | None:
    """The next decision to leave a contract, from the close of `start` on; None where the data hold none."""
    plan = market.plan
    forced = market.forces.get(outgoing)
    if forced is not None:
        decided = market.decides_force(forced)
        if decided >= start:
            if decided >= market.length:
                return None
            incoming = market.incoming_from(outgoing, np.array([decided])).item()
            # Where none was known then, none was before: the rule below finds nothing earlier.
            if incoming != NEVER:
                return Decision(decided, outgoing, incoming, FORCED, forced)
    sessions = np.arange(start, market.length)
    incoming_by_session = market.incoming_from(outgoing, sessions)
    fired = market.fires(outgoing, incoming_by_session, sessions)
    is_due = sessions + plan.delay + plan.steps - 1 >= market.deadline(outgoing, sessions)
    ready = np.flatnonzero((fired | is_due) & (incoming_by_session != NEVER))
    if not len(ready):
        return None
    place = ready[0]
    deadline_name = str(Trigger.CALENDAR) if plan.trigger is Trigger.CALENDAR else BACKSTOP
    trigger = str(plan.trigger) if fired[place] else deadline_name
    decided = int(sessions[place])
    return Decision(decided, outgoing, int(incoming_by_session[place]), trigger, decided + plan.delay)


def carry_out(market: _Market, decision: Decision) -> tuple[list[RollStep], bool]:
    """Measure a decided roll step by step; returns its rows and whether it is complete within the data."""
    steps = market.plan.steps
    outgoing, incoming = decision.outgoing, decision.incoming
    last = int(market.last_trade[outgoing])
    both = market.usable[:, outgoing] & market.usable[:, incoming]
    rows: list[RollStep] = []
    earliest = decision.planned - 1
    for step in range(steps):
        found = np.flatnonzero(both[earliest : last + 1])
        if not len(found):
            return _close_stale(market, decision, rows, step, last)
        measured = earliest + int(found[0])
        earliest = measured + 1
        if earliest >= market.length:
            return rows, False
        rows.append(_row(market, decision, step, incoming, measured, earliest, (step + 1) / steps, rows))
    return rows, True


def _row(
    market: _Market, decision: Decision, step: int, incoming: int, measured: int, effective: int, weight: float,
    earlier: list[RollStep], is_stale: bool = False,
) -> RollStep:  # fmt: skip
    settle = market.settle
    return RollStep(
        decision, step + 1, measured, effective, incoming, earlier[-1].weight_after if earlier else 0.0, weight,
        float(settle[measured, decision.outgoing]), float(settle[measured, incoming]), is_stale,
        effective - decision.planned - step,
    )  # fmt: skip


def _close_stale(
    market: _Market, decision: Decision, rows: list[RollStep], step: int, last: int
) -> tuple[list[RollStep], bool]:
    """No two usable settles up to the outgoing's last trading session: measure earlier, once it has passed."""
    effective = max(decision.planned + step, last + 1)
    if effective >= market.length:
        return rows, False
    # A step that has moved was measured with the incoming on a session that serves again: only a first step looks on.
    for incoming in [decision.incoming, *market.later(decision.incoming, last).tolist()]:
        both = market.usable[:, decision.outgoing] & market.usable[:, incoming]
        found = np.flatnonzero(both[: last + 1])
        if len(found):
            rows.append(_row(market, decision, step, incoming, int(found[-1]), effective, 1.0, rows, is_stale=True))
            return rows, True
    restart, contract = market.first_hold(max(last + 1, decision.planned), decision.outgoing)
    if restart == NEVER:
        return rows, False
    return [RollStep(decision, 1, NEVER, restart, contract, 0.0, 1.0, math.nan, math.nan)], True


def lay_rolls(panel: Panel, usable: np.ndarray, settle: np.ndarray, plan: Plan) -> list[Held]:
    """Carry a plan through a panel, for each of its nearbys.

    `usable` (T, N) says where a settle may measure a roll or begin a hold; `settle` (T, N) are the clean
    settles those rolls are measured with. Returns one Held for each of `plan.nearbys`, in that order.
    """
    market = _Market(panel, usable, settle, plan)
    first = _lay_first(market)
    laid = [first if nearby == 1 else _lay_later(market, first, nearby) for nearby in plan.nearbys]
    # A plan that publishes farther nearbys only must still say that a person's decision had no effect.
    laid[0].unused = _unused_forces(market, panel, first)
    return laid


def _lay_first(market: _Market) -> Held:
    start, contract = market.first_hold(0, NEVER)
    held = _empty(market.length, 1, start)
    first, at = contract, start
    while start != NEVER and (decision := decide(market, contract, at)) is not None:
        held.decisions.append(decision)
        rows, is_complete = carry_out(market, decision)
        held.steps += rows
        if not is_complete:
            held.pending = decision
            break
        contract, at = rows[-1].incoming, rows[-1].effective
    if start != NEVER:
        _fill(held, first)
    return held


def _unused_forces(market: _Market, panel: Panel, first: Held) -> list[str]:
    """Outgoing contracts of forced rolls that were due within the data and found nothing to decide."""
    done = {panel.contracts[decision.outgoing] for decision in first.decisions if decision.trigger == FORCED}
    # A session so late is decided on after the end of the data. A contract that never arrived is told of too.
    later = panel.calendar.shift(int(panel.sessions[-1]), market.plan.delay + 1)
    due = {force.outgoing for force in market.plan.force if day_number(force.effective) < later}
    return sorted(due - done)


@dataclass
class _Roll:
    """A roll of a farther nearby: its decision, its rows as measured, and whether they complete it."""

    decision: Decision
    rows: list[RollStep]
    is_complete: bool

    @property
    def ends(self) -> float:
        """Session from which the new contract alone is held."""
        return self.rows[-1].effective if self.is_complete else math.inf

    @property
    def into(self) -> int:
        """The contract it ends in."""
        return self.rows[-1].incoming if self.is_complete else self.decision.incoming

    def has_moved_by(self, session: int) -> bool:
        """Whether any of its steps is effective by a session."""
        return any(row.effective <= session for row in self.rows)


class _Strand:
    """A farther nearby as it is laid: what it holds, the roll under way, and the one that begins behind it."""

    def __init__(self, market: _Market, held: Held, holding: int) -> None:
        self.market, self.held, self.holding = market, held, holding
        self.roll: _Roll | None = None
        self.queued: _Roll | None = None

    def complete_until(self, session: int) -> None:
        """Take over what is complete by a session."""
        while self.roll is not None and self.roll.ends <= session:
            self.held.steps += self.roll.rows
            self.holding = self.roll.into
            self.roll, self.queued = self.queued, None

    def drop_waiting(self, session: int) -> None:
        """Drop what has not moved by a session; a roll that has moved is completed."""
        self.queued = None
        if self.roll is not None and not self.roll.has_moved_by(session):
            self.roll = None

    def turn_to(self, target: int, session: int, planned: int, trigger: str) -> None:
        """Decide on a session to roll into a later contract."""
        leaving = self.holding if self.roll is None else self.roll.into
        if target <= leaving:
            return
        if self.roll is None:
            self.roll = self._decide(Decision(session, leaving, target, trigger, planned))
        elif math.isinf(self.roll.ends):
            # What it waits for does not end within the data.
            self.held.decisions.append(Decision(session, leaving, target, trigger, planned))
        else:
            behind = max(planned, int(self.roll.ends) + 1)
            self.queued = self._decide(Decision(session, leaving, target, trigger, behind))

    def _decide(self, decision: Decision) -> _Roll:
        self.held.decisions.append(decision)
        return _Roll(decision, *carry_out(self.market, decision))

    def close(self) -> None:
        """Take what is effective within the data; the rest is pending."""
        self.complete_until(self.market.length - 1)
        if self.roll is not None:
            self.held.steps += self.roll.rows
            self.held.pending = self.roll.decision


def _lay_later(market: _Market, first: Held, nearby: int) -> Held:
    """Nearby n: the n-th eligible contract from the one held at nearby 1, rolled when that one is.

    It waits for its own two settles. A roll of which nothing is effective when nearby 1 decides again gives
    way to the next; one that has moved is completed first, and the next begins behind it.
    """
    start, holding = _start_later(market, first, nearby)
    held = _empty(market.length, nearby, start)
    if start == NEVER:
        return held
    strand = _Strand(market, held, holding)
    ends = [*(event.decided for event in first.decisions), market.length][1:]
    for event, following in zip(first.decisions, ends, strict=True):
        strand.complete_until(event.decided)
        strand.drop_waiting(event.decided)
        known = _known_from(market, event.incoming, nearby)
        session = max(event.decided, known, start)
        if known == NEVER or session >= following:
            continue
        target = _counted(market, event.incoming, session, nearby)
        strand.complete_until(session)
        planned = event.planned if session == event.decided else session + 1
        strand.turn_to(target, session, planned, event.trigger)
    strand.close()
    _fill(held, holding)
    return held


def _start_later(market: _Market, first: Held, nearby: int) -> tuple[int, int]:
    """The first session on which the n-th contract from the one held at nearby 1 is known, and that contract."""
    if first.start == NEVER:
        return NEVER, NEVER
    changes = np.flatnonzero(np.diff(first.contract[first.start :])) + first.start + 1
    begins = [first.start, *(int(change) for change in changes)]
    for begin, end in zip(begins, [*begins[1:], market.length], strict=True):
        known = _known_from(market, int(first.contract[begin]), nearby)
        session = max(begin, known)
        if known != NEVER and session < end:
            return session, _counted(market, int(first.contract[begin]), session, nearby)
    return NEVER, NEVER


def _counted(market: _Market, base: int, session: int, nearby: int) -> int:
    """The n-th contract (n of 2 or more) counted from `base` among those known at the close of a session."""
    return int(market.later(base, session)[nearby - 2])


def _known_from(market: _Market, base: int, nearby: int) -> int:
    """The first session that knows n (2 or more) contracts counted from `base`; NEVER where there are fewer."""
    after = market.eligible[market.eligible > base]
    if len(after) < nearby - 1:
        return NEVER
    return int(np.sort(market.first_bar[after])[nearby - 2])


def _empty(length: int, nearby: int, start: int) -> Held:
    nothing = np.full(length, NEVER, dtype=np.int64)
    return Held(nearby, start, nothing, nothing.copy(), np.zeros(length))


def _fill(held: Held, first: int) -> None:
    """Lay the ledger out over the sessions."""
    held.contract[held.start :] = first
    for step in held.steps:
        at = slice(step.effective, None)
        if step.weight_after >= 1.0:
            held.contract[at], held.incoming[at], held.weight[at] = step.incoming, NEVER, 0.0
        else:
            held.contract[at], held.incoming[at] = step.decision.outgoing, step.incoming
            held.weight[at] = step.weight_after
