"""The roll rules in plain loops: one session after the other, one contract after the other.

Belongs here: when a contract is left, for which one, on which settles the gap is measured. Does not belong
here: the series (`plain_splice.py`), any import from `contracts/`.
"""

from dataclasses import dataclass, field
from typing import Any

from tests.reference.plain_market import PlainMarket, PlainPlan

Row = dict[str, Any]


@dataclass(frozen=True)
class Decision:
    """A roll as it was decided at the close of session `decided`."""

    decided: int
    outgoing: str
    incoming: str
    trigger: str


@dataclass
class Chain:
    """What one nearby held: from `start` on `first`, then by `rows`; `waiting` is decided and not done."""

    nearby: int
    start: int | None = None
    first: str | None = None
    decisions: list[Decision] = field(default_factory=list)
    rows: list[Row] = field(default_factory=list)
    waiting: list[Decision] = field(default_factory=list)


@dataclass
class Laid:
    """All nearbys of a plan by number, and the forced rolls that had no effect."""

    chains: dict[int, Chain]
    unused_force: list[tuple[str, int]]


@dataclass
class _Roll:
    decision: Decision
    planned: int
    outgoing: str
    incoming: str
    moved: int = 0
    last_measured: int | None = None
    ends: int | None = None
    broken: bool = False
    rows: list[Row] = field(default_factory=list)


def is_allowed(plan: PlainPlan, contract: str) -> bool:
    """Whether the plan may hold the contract's delivery month."""
    return plan.months is None or int(contract[-2:]) in plan.months


def eligible(market: PlainMarket, plan: PlainPlan, t: int) -> list[str]:
    """Contracts known at the close of t that the plan may hold, in delivery order."""
    known = []
    for contract in market.contracts:
        if is_allowed(plan, contract) and contract in market.first_bar and market.first_bar[contract] <= t:
            known.append(contract)
    return known


def foreseen(market: PlainMarket, index: int, t: int) -> int:
    """A session's index as counted at the close of t, which knows of no unscheduled session after it."""
    return index - sum(1 for day in market.unscheduled if t < day <= index)


def deadline(market: PlainMarket, plan: PlainPlan, contract: str, t: int) -> int:
    """Session index from which on the next contract is to be held, as counted at the close of t."""
    if plan.before == "last trade":
        day = market.last_trade[contract]
    elif market.first_notice is None:
        raise ValueError(f"plan {plan.name}: before = {plan.before!r} in a market without first notice")
    elif plan.before == "first notice":
        day = market.first_notice[contract]
    elif plan.before == "earlier":
        day = min(market.last_trade[contract], market.first_notice[contract])
    else:
        raise ValueError(f"plan {plan.name}: before = {plan.before!r}")
    return foreseen(market, day, t) - plan.backstop


def decides_force(market: PlainMarket, plan: PlainPlan, effective: int) -> int:
    """The first session at whose close a forced roll's day is no more than `delay` sessions off."""
    t = effective - plan.delay
    while t - 1 + plan.delay >= foreseen(market, effective, t - 1):
        t -= 1
    return t


def is_later(market: PlainMarket, contract: str, other: str) -> bool:
    """Whether the contract is delivered after the other."""
    return market.place[contract] > market.place[other]


def count_from(market: PlainMarket, plan: PlainPlan, contract: str, n: int, t: int) -> str | None:
    """The n-th eligible contract counted from `contract`, which is the first; None while fewer are known."""
    counted = [contract]
    for other in eligible(market, plan, t):
        if is_later(market, other, contract):
            counted.append(other)
    return counted[n - 1] if len(counted) >= n else None


def find_first(market: PlainMarket, plan: PlainPlan, t: int, after: str | None = None) -> str | None:
    """The nearest eligible contract before its deadline with a usable settle on t (later than `after`)."""
    for contract in eligible(market, plan, t):
        if after is not None and not is_later(market, contract, after):
            continue
        if deadline(market, plan, contract, t) > t and (contract, t) in market.usable:
            return contract
    return None


def _is_greater(values: dict[tuple[str, int], float], outgoing: str, incoming: str, session: int) -> bool:
    left = values.get((outgoing, session))
    right = values.get((incoming, session))
    return left is not None and right is not None and right > left


def fires(market: PlainMarket, plan: PlainPlan, outgoing: str, incoming: str, t: int) -> bool:
    """Whether the trigger holds on each of the last `confirm` sessions."""
    if plan.trigger == "calendar":
        return False
    for u in range(t - plan.confirm + 1, t + 1):
        by_volume = _is_greater(market.volume, outgoing, incoming, u)
        by_interest = _is_greater(market.open_interest, outgoing, incoming, u - market.open_interest_lag)
        holds = {
            "volume": by_volume,
            "open interest": by_interest,
            "both": by_volume and by_interest,
            "either": by_volume or by_interest,
        }[plan.trigger]
        if u < 0 or not holds:
            return False
    return True


def choose_incoming(market: PlainMarket, plan: PlainPlan, outgoing: str, t: int) -> str | None:
    """The contract the plan would go into at the close of t; None while no later one is known."""
    later = [c for c in eligible(market, plan, t) if is_later(market, c, outgoing)]
    if not later:
        return None
    if plan.incoming == "next":
        return later[0]
    best, best_value = later[0], None
    for contract in later:
        if plan.trigger == "volume":
            value = market.volume.get((contract, t))
        else:
            value = market.open_interest.get((contract, t - market.open_interest_lag))
        if value is not None and (best_value is None or value > best_value):
            best, best_value = contract, value
    return best


def decide(market: PlainMarket, plan: PlainPlan, held: str, t: int) -> Decision | None:
    """What is decided at the close of t when `held` is held and no roll is pending."""
    incoming = choose_incoming(market, plan, held, t)
    forced_on = None
    for outgoing, effective in plan.force:
        if outgoing == held:
            forced_on = decides_force(market, plan, effective)
    if forced_on is not None and t < forced_on:
        return None
    if incoming is None:
        return None
    if forced_on == t:
        return Decision(t, held, incoming, "forced")
    if fires(market, plan, held, incoming, t):
        return Decision(t, held, incoming, plan.trigger)
    if t + plan.delay + plan.steps - 1 >= deadline(market, plan, held, t):
        return Decision(t, held, incoming, "calendar" if plan.trigger == "calendar" else "backstop")
    return None


class _Strand:
    """One nearby as it is laid."""

    def __init__(self, market: PlainMarket, plan: PlainPlan, nearby: int) -> None:
        self.market = market
        self.plan = plan
        self.chain = Chain(nearby)
        self.held: str | None = None
        self.roll: _Roll | None = None
        self.queued: _Roll | None = None
        # A roll of nearby 1 whose n-th contract was not known yet: (contract counted from, trigger).
        self.late: tuple[str, str] | None = None

    def start(self, contract: str, t: int) -> None:
        self.held, self.chain.first, self.chain.start = contract, contract, t

    def open_session(self, t: int) -> None:
        """Complete a roll whose last step is effective on t; begin the one that waited behind it."""
        roll = self.roll
        if roll is not None and roll.ends is not None and roll.ends <= t:
            self.held, self.roll = roll.incoming, None
            if self.queued is not None:
                self.roll, self.queued = self.queued, None
                self.roll.planned = max(self.roll.planned, roll.ends + 1)

    def begin(self, decision: Decision, planned: int) -> None:
        self.chain.decisions.append(decision)
        self.roll = _Roll(decision, planned, decision.outgoing, decision.incoming)

    def drop_waiting(self, t: int) -> None:
        """Drop the roll of which nothing is effective by t; one that has moved a step ends first."""
        self.queued = None
        roll = self.roll
        if roll is not None and not any(row["effective_on"] <= t for row in roll.rows):
            self.chain.rows = [row for row in self.chain.rows if row not in roll.rows]
            self.roll = None

    def retarget(self, target: str, t: int, planned: int, trigger: str) -> None:
        """Nearby 1 rolls: leave what is held here, or will be once a roll under way has ended."""
        leaving = self.held if self.roll is None else self.roll.incoming
        if leaving is None:
            raise ValueError("a nearby that holds nothing cannot roll")
        if not is_later(self.market, target, leaving):
            return
        decision = Decision(t, leaving, target, trigger)
        if self.roll is None:
            self.begin(decision, planned)
        else:
            self.chain.decisions.append(decision)
            self.queued = _Roll(decision, planned, leaving, target)

    def measure(self, t: int) -> None:
        """Everything that can be measured at the close of t."""
        while self.measure_once(t):
            pass

    def measure_once(self, t: int) -> bool:
        roll = self.roll
        if roll is None or roll.ends is not None:
            return False
        last = self.market.last_trade[roll.outgoing]
        if roll.broken:
            return self.mend(roll, t)
        earliest = roll.planned - 1 + roll.moved
        if roll.last_measured is not None:
            earliest = max(earliest, roll.last_measured + 1)
        if earliest <= t <= last and self.both_usable(roll.outgoing, roll.incoming, t):
            weight = (roll.moved + 1) / self.plan.steps
            self.write(roll, t, t + 1, weight, is_stale=False)
            roll.moved, roll.last_measured = roll.moved + 1, t
            if roll.moved == self.plan.steps:
                roll.ends = t + 1
            return True
        if t >= last:
            self.measure_stale(roll, last)
            return True
        return False

    def both_usable(self, outgoing: str, incoming: str, s: int) -> bool:
        return (outgoing, s) in self.market.usable and (incoming, s) in self.market.usable

    def measure_stale(self, roll: _Roll, last: int) -> None:
        candidates = [roll.incoming]
        for contract in eligible(self.market, self.plan, last):
            if is_later(self.market, contract, roll.incoming):
                candidates.append(contract)
        for contract in candidates:
            for s in range(last, -1, -1):
                if self.both_usable(roll.outgoing, contract, s):
                    roll.incoming = contract
                    effective = max(roll.planned + roll.moved, last + 1)
                    self.write(roll, s, effective, 1.0, is_stale=True)
                    roll.moved, roll.ends = self.plan.steps, effective
                    return
        roll.broken = True

    def mend(self, roll: _Roll, t: int) -> bool:
        """After a broken chain: hold again from the first session that offers a contract."""
        if t <= self.market.last_trade[roll.outgoing] or t < roll.planned:
            return False
        found = find_first(self.market, self.plan, t, roll.outgoing)
        if found is None:
            return False
        roll.incoming = found
        self.write(roll, None, t, 1.0, is_stale=False)
        self.held, self.roll = found, None
        return True

    def write(self, roll: _Roll, measured: int | None, effective: int, weight: float, is_stale: bool) -> None:
        market, decided = self.market, roll.decision.decided
        before = roll.moved / self.plan.steps
        known = decided - market.open_interest_lag
        row: Row = {
            "nearby": self.chain.nearby,
            "step": roll.moved + 1,
            "decided_on": decided,
            "measured_on": measured,
            "effective_on": effective,
            "outgoing": roll.outgoing,
            "incoming": roll.incoming,
            "weight_before": before,
            "weight_after": weight,
            "outgoing_settle": None,
            "incoming_settle": None,
            "gap": None,
            "ratio": None,
            "trigger": roll.decision.trigger,
            "outgoing_volume": market.volume.get((roll.outgoing, decided)),
            "incoming_volume": market.volume.get((roll.incoming, decided)),
            "outgoing_open_interest": market.open_interest.get((roll.outgoing, known)),
            "incoming_open_interest": market.open_interest.get((roll.incoming, known)),
            "last_trade": market.last_trade[roll.outgoing],
            "first_notice": None if market.first_notice is None else market.first_notice[roll.outgoing],
            "is_stale": is_stale,
            "postponed": 0 if measured is None else effective - (roll.planned + roll.moved),
        }
        if measured is not None:
            left, right = market.prices[(roll.outgoing, measured)], market.prices[(roll.incoming, measured)]
            row["outgoing_settle"], row["incoming_settle"] = left, right
            row["gap"] = (weight - before) * (right - left)
            if left > 0 and right > 0:
                row["ratio"] = (left * (1 - weight) + right * weight) / (left * (1 - before) + right * before)
        self.chain.rows.append(row)
        roll.rows.append(row)


def lay_plain(market: PlainMarket, plan: PlainPlan) -> Laid:
    """Lay every nearby of the plan; a row effective after the last session is left in `waiting`."""
    if plan.delay < 1 or plan.steps < 1 or plan.confirm < 1:
        raise ValueError(f"plan {plan.name}: delay, steps and confirm are at least 1")
    highest = max(plan.nearbys)
    strands = [_Strand(market, plan, n) for n in range(1, highest + 1)]
    front = strands[0]
    used: set[tuple[str, int]] = set()
    for t in range(len(market.sessions)):
        for strand in strands:
            strand.open_session(t)
            strand.measure(t)
        if front.held is None:
            found = find_first(market, plan, t)
            if found is None:
                continue
            front.start(found, t)
        if front.held is None:
            raise ValueError("nearby 1 holds nothing")
        for strand in strands[1:]:
            if strand.held is None:
                target = count_from(market, plan, front.held, strand.chain.nearby, t)
                if target is not None:
                    strand.start(target, t)
        decision = decide(market, plan, front.held, t) if front.roll is None else None
        planned = t + plan.delay
        if decision is not None:
            if decision.trigger == "forced":
                planned = dict(plan.force)[decision.outgoing]
                used.add((decision.outgoing, planned))
            front.begin(decision, planned)
        for strand in strands[1:]:
            _follow(market, plan, strand, decision, t, planned)
        for strand in strands:
            strand.measure(t)
    end = len(market.sessions) - 1
    for strand in strands:
        _close(strand, end)
    unused = [f for f in plan.force if f not in used and decides_force(market, plan, f[1]) <= end]
    return Laid({s.chain.nearby: s.chain for s in strands if s.chain.nearby in plan.nearbys}, unused)


def _follow(
    market: PlainMarket, plan: PlainPlan, strand: _Strand, decision: Decision | None, t: int, planned: int
) -> None:
    """Roll a farther nearby with nearby 1, or as soon as its contract is known."""
    if decision is not None:
        strand.late = (decision.incoming, decision.trigger)
        strand.drop_waiting(t)
    else:
        planned = t + 1
    if strand.late is None or strand.held is None:
        return
    counted_from, trigger = strand.late
    target = count_from(market, plan, counted_from, strand.chain.nearby, t)
    if target is not None:
        strand.late = None
        strand.retarget(target, t, planned, trigger)


def _close(strand: _Strand, end: int) -> None:
    """Take what is not effective by the last session out of the ledger."""
    done = [row for row in strand.chain.rows if row["effective_on"] <= end]
    strand.chain.rows = done
    for roll in (strand.roll, strand.queued):
        if roll is not None:
            strand.chain.waiting.append(roll.decision)
