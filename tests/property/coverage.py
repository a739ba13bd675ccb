"""What random markets and plans contained and what came of them, counted.

Belongs here: names for options and outcomes, and where each is seen. Does not belong here: drawing (`strategies.py`),
comparing (`tests/reference/agree.py`).
"""

from collections import Counter
from collections.abc import Iterator

from tests.reference.agree import Row
from tests.reference.declared import Case, delivery_of_name, last_trade_of, sessions_of, surprises_of
from tests.reference.plain_days import ONE, newest_rule, shift_month
from tests.reference.plain_market import PlainMarket, PlainPlan
from tests.reference.plain_rolls import Chain, Laid, eligible, is_later

OPTIONS = (
    *(f"trigger {trigger}" for trigger in ("volume", "open interest", "both", "either", "calendar")),
    *(f"confirm {number}" for number in (1, 2, 3)),
    *(f"delay {number}" for number in (1, 2, 3)),
    *(f"steps {number}" for number in (1, 2, 3, 4, 5)),
    *(f"backstop before {day}" for day in ("last trade", "first notice", "earlier")),
    *(f"no backstop before {day}" for day in ("last trade", "first notice", "earlier")),
    *(f"into {incoming} by {what}" for incoming in ("next", "most active") for what in ("volume", "open interest")),
    *(f"open interest known {number} late" for number in (0, 1, 2)),
    *(f"nearby {number}" for number in (1, 2, 3, 4, 5)),
    "some months only", "no nearby 1", "forced one", "forced two",
)  # fmt: skip
OUTCOMES = (
    *(f"rolled by {trigger}" for trigger in ("volume", "open interest", "both", "either", "calendar")),
    "rolled by backstop", "rolled by forced", "force unused",
    "postponed", "stale", "stale after a step", "stale into another", "unmeasured", "two steps at once",
    "waiting at the end", "nothing held", "next passed over", "measured on a corrected settle",
    "farther dropped", "farther decided late", "farther queued behind",
    "no ratio", "settle at or below zero", "carried", "missing", "repaired",
    "equal activity", "never arrived", "listed late", "dead early", "over before the first session",
    "alive after the last session", "two last trades on one day", "surprise session", "forced over a surprise",
)  # fmt: skip

DECLARED = (
    "last trade by rules that change", "first notice by rules that change", "no first notice",
    "rescaled once", "rescaled twice", "months listed change", "closed on a weekday", "open on a weekend",
    "several plans", "a later delivery ends earlier", "forced and never arrived", "forced outside the data",
    "surprise session", "bar on a closed day left out",
)  # fmt: skip


def count(market: PlainMarket, plan: PlainPlan, laid: Laid, series: dict[int, list[Row]]) -> Counter[str]:
    """How often each option and outcome is there: options once a plan, outcomes as often as they came."""
    seen = Counter(_options(market, plan))
    seen.update(_of_market(market))
    seen["force unused"] += len(laid.unused_force)
    for chain in laid.chains.values():
        seen.update(_of_chain(market, plan, laid, chain))
        for row in series[chain.nearby]:
            seen[row["status"]] += row["status"] != "reported"
            seen["settle at or below zero"] += row["settle"] is not None and row["settle"] <= 0
    return seen


def _options(market: PlainMarket, plan: PlainPlan) -> Iterator[str]:
    yield f"trigger {plan.trigger}"
    yield f"confirm {plan.confirm}"
    yield f"delay {plan.delay}"
    yield f"steps {plan.steps}"
    yield f"{'backstop' if plan.backstop else 'no backstop'} before {plan.before}"
    yield f"into {plan.incoming} by {'volume' if plan.trigger == 'volume' else 'open interest'}"
    yield f"open interest known {market.open_interest_lag} late"
    yield from (f"nearby {number}" for number in plan.nearbys)
    if plan.months is not None:
        yield "some months only"
    if 1 not in plan.nearbys:
        yield "no nearby 1"
    if plan.force:
        yield "forced one" if len(plan.force) == 1 else "forced two"


def _of_market(market: PlainMarket) -> Iterator[str]:
    end = len(market.sessions) - 1
    yield from ("surprise session" for _ in market.unscheduled)
    for contract, following in zip(market.contracts, market.contracts[1:], strict=False):
        if market.last_trade[contract] == market.last_trade[following]:
            yield "two last trades on one day"
        if any(market.volume.get((contract, t), -1.0) == market.volume.get((following, t)) for t in range(end + 1)):
            yield "equal activity"
    for contract in market.contracts:
        last_bar = max((t for name, t in market.bars if name == contract), default=None)
        if last_bar is None:
            yield "never arrived"
        elif last_bar < min(end, market.last_trade[contract]):
            yield "dead early"
        if market.first_bar.get(contract, 0) > 0:
            yield "listed late"
        if market.last_trade[contract] < 0:
            yield "over before the first session"
        if market.last_trade[contract] > end:
            yield "alive after the last session"


def _of_chain(market: PlainMarket, plan: PlainPlan, laid: Laid, chain: Chain) -> Iterator[str]:
    if chain.start is None:
        yield "nothing held"
    if chain.waiting:
        yield "waiting at the end"
    for decision in chain.decisions:
        known = [c for c in eligible(market, plan, decision.decided) if is_later(market, c, decision.outgoing)]
        if chain.nearby == 1 and known[0] != decision.incoming:
            yield "next passed over"
        if decision not in chain.waiting and all(row["decided_on"] != decision.decided for row in chain.rows):
            yield "farther dropped"
        if 1 in laid.chains and all(first.decided != decision.decided for first in laid.chains[1].decisions):
            yield "farther decided late"
    before: Row | None = None
    for row in chain.rows:
        yield from _of_row(market, plan, chain, row)
        if (
            before is not None
            and row["decided_on"] != before["decided_on"] < row["decided_on"] < before["effective_on"]
        ):
            yield "farther queued behind"
        if before is not None and row["effective_on"] == before["effective_on"]:
            yield "two steps at once"
        before = row


def _of_row(market: PlainMarket, plan: PlainPlan, chain: Chain, row: Row) -> Iterator[str]:
    yield f"rolled by {row['trigger']}"
    if row["measured_on"] is None:
        yield "unmeasured"
        return
    decided = next(decision for decision in chain.decisions if decision.decided == row["decided_on"])
    if (
        row["step"] == 1
        and row["trigger"] == "forced"
        and row["effective_on"] > row["decided_on"] + plan.delay
        and not row["postponed"]
    ):
        yield "forced over a surprise"
    if row["is_stale"]:
        yield "stale"
        if row["step"] > 1:
            yield "stale after a step"
        if decided.incoming != row["incoming"]:
            yield "stale into another"
    elif row["measured_on"] > row["decided_on"] + plan.delay - 1 + row["step"] - 1:
        yield "postponed"
    if row["ratio"] is None:
        yield "no ratio"
    if any((contract, row["measured_on"]) in market.repaired for contract in (row["outgoing"], row["incoming"])):
        yield "measured on a corrected settle"


def count_declared(case: Case) -> Counter[str]:
    """Which of the things a desk may declare of a market are in a case, and matter there."""
    return Counter(_of_declaration(case))


def _of_declaration(case: Case) -> Iterator[str]:
    sessions = sessions_of(case)
    arrived = sorted({contract for contract, _ in case.bars})
    for name, rules in (("last trade", case.last_trade), ("first notice", case.first_notice)):
        if len({newest_rule(rules, delivery_of_name(contract)) for contract in arrived}) > 1:
            yield f"{name} by rules that change"
    if not case.first_notice:
        yield "no first notice"
    felt = sum(sessions[0] < before <= sessions[-1] for before, _ in case.rescaled)
    if felt:
        yield "rescaled once" if felt == 1 else "rescaled twice"
    listed = [delivery_of_name(contract) for contract in case.contracts]
    delivery = listed[0]
    while delivery < listed[-1]:
        if delivery[1] in case.delivery_months and delivery not in listed:
            yield "months listed change"
            break
        delivery = shift_month(*delivery, 1)
    days = range((sessions[-1] - sessions[0]).days)
    if any(sessions[0] + ONE * at in case.calendar.closed for at in days):
        yield "closed on a weekday"
    if any(day.weekday() > 4 for day in sessions):
        yield "open on a weekend"
    if len(case.plans) > 1:
        yield "several plans"
    if surprises_of(case):
        yield "surprise session"
    if any(day not in sessions for _, day in case.bars):
        yield "bar on a closed day left out"
    ends = [last_trade_of(case, contract) for contract in arrived]
    if ends != sorted(ends):
        yield "a later delivery ends earlier"
    for forces in case.forces.values():
        for outgoing, day in forces:
            if outgoing not in arrived:
                yield "forced and never arrived"
            if not sessions[0] <= day <= sessions[-1]:
                yield "forced outside the data"


def too_seldom(seen: Counter[str], floor: int, names: tuple[str, ...] = (*OPTIONS, *OUTCOMES)) -> dict[str, int]:
    """Options and outcomes seen less often than the floor."""
    return {name: seen[name] for name in names if seen[name] < floor}


def as_text(seen: Counter[str], names: tuple[str, ...] = (*OPTIONS, *OUTCOMES)) -> str:
    """The counts, one a line, in the order of the names."""
    return "\n".join(f"{seen[name]:>9,} {name}" for name in names)
