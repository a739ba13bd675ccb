"""Random declared markets: day rules that change, months listed that change, rescaled prices, several plans.

Belongs here: what a desk may declare of one market, in all its mixtures. Does not belong here: what must hold of it.
How much there is of a market is drawn, so that a failing example shrinks; what it consists of comes from one seed.
"""

import datetime
import random
from dataclasses import replace

from hypothesis import strategies as st

from tests.property.strategies import draw_plan
from tests.reference.declared import Case, Day, Place, last_trade_of, plain_market, sessions_of
from tests.reference.plain_days import ONE, PlainCalendar, PlainRule, shift_month
from tests.reference.plain_market import PlainPlan

MONTHS = ((3, 6, 9, 12), (1, 3, 5, 7, 9, 11), tuple(range(1, 13)), (3, 5, 9, 12), (6, 12))
PLAN_NAMES = ("a_plan", "b_plan", "c_plan")


def _rule(chance: random.Random, since: tuple[int, int] | None) -> PlainRule:
    by_date = chance.random() < 0.6
    steps: list[tuple[str, str | int]] = []
    for _ in range(chance.randint(0, 3)):
        steps.append(
            chance.choice(
                [
                    ("if_closed", "previous"),
                    ("if_closed", "next"),
                    ("business_days", chance.choice([-14, -3, -1, 1, 2])),
                    ("days", chance.choice([-15, -3, 4])),
                ]
            )
        )
    return PlainRule(
        month_offset=chance.choice([-1, 0, 0, 0, 1]),
        month_day=chance.choice([1, 15, 25, -1]) if by_date else None,
        nth=None if by_date else chance.choice([1, 3, -1]),
        weekday=None if by_date else chance.randint(0, 4),
        steps=tuple(steps),
        since=since,
    )


def _rules(chance: random.Random, deliveries: list[tuple[int, int]]) -> tuple[PlainRule, ...]:
    """One rule for all, then up to two that take over from a delivery month on; in any order in the file."""
    later = chance.sample(deliveries, min(len(deliveries), chance.choice([0, 0, 1, 1, 2])))
    rules = [_rule(chance, since) for since in (None, *sorted(set(later)))]
    chance.shuffle(rules)
    return tuple(rules)


def _deliveries(chance: random.Random, count: int) -> list[tuple[int, int]]:
    """So many months from 2024-02 on; from one of them on another set of months is listed."""
    before, after = chance.choice(MONTHS), chance.choice(MONTHS)
    change = chance.randint(0, count)
    found: list[tuple[int, int]] = []
    year, month = 2024, chance.randint(1, 4)
    while len(found) < count:
        year, month = shift_month(year, month, 1)
        if month in (before if len(found) < change else after):
            found.append((year, month))
    return found


def _closed_and_opened(chance: random.Random, first: Day) -> PlainCalendar:
    days = [first + ONE * at for at in range(-30, 400)]
    share = chance.choice([0.0, 0.03, 0.2])
    closed = {day for day in days if day.weekday() < 5 and chance.random() < share}
    opened = {day for day in days if day.weekday() >= 5 and chance.random() < share / 4}
    return PlainCalendar(frozenset(closed), frozenset(opened))


def _rescaled(chance: random.Random, sessions: list[Day]) -> tuple[tuple[Day, float], ...]:
    count = chance.choice([0, 0, 1, 2])
    return tuple(
        (chance.choice(sessions) + ONE * chance.randint(-2, 2), chance.choice([0.1, 10.0, 0.01, 100.0, 0.5]))
        for _ in range(count)
    )


def _days_with_bars(chance: random.Random, calendar: PlainCalendar, first: Day, length: int) -> dict[Day, float]:
    """Open days, and closed ones on which there are bars all the same; by day, the share of contracts without one."""
    missing = chance.choice([0.0, 0.0, 0.05, 0.3])
    days = {day: missing for day in calendar.open_days(first, first + ONE * (length * 7 // 5))}
    share = chance.choice([0.0, 0.0, 0.05, 0.2])
    for at in range(length * 7 // 5):
        day = first + ONE * at
        if not calendar.is_open(day) and chance.random() < share:
            days[day] = chance.choice([0.0, 0.0, 0.1, 0.7])
    return dict(sorted(days.items()))


def _fill(chance: random.Random, case: Case, days: dict[Day, float], levels: list[float]) -> None:
    """Bars of each contract from its listing to its last trade, with what can be missing missing."""
    no_field, repaired, corrected = (chance.choice([0.0, 0.0, 0.05, 0.3]) for _ in range(3))
    highest = chance.choice([1, 3, 1000])
    slope = chance.choice([-2.0, 0.0, 2.0])
    for position, contract in enumerate(case.contracts):
        end = last_trade_of(case, contract) - ONE * chance.choice([0, 0, 0, 0, 3, 10, 400])
        listed = chance.choice([0, 0, 0, 10, 30])
        for at, (day, no_bar) in enumerate(days.items()):
            if at < listed or day > end or chance.random() < no_bar:
                continue
            price = levels[at] + slope * position + chance.randint(-2, 2) / 4
            place: Place = (contract, day)
            bar = {}
            for name, value in (("open", price), ("high", price + 1), ("low", price - 1), ("settle", price)):
                if chance.random() >= no_field:
                    for before, factor in reversed(case.rescaled):
                        value = value / factor if day < before else value
                    bar[name] = value
            for name in ("volume", "open_interest"):
                if chance.random() >= no_field:
                    bar[name] = float(chance.randint(0, highest))
            case.bars[place] = bar
            if "settle" not in bar:
                continue
            if chance.random() < repaired:
                case.repaired[place] = price + 0.5
            elif chance.random() < corrected:
                case.corrected[place] = price - 0.75


def _forces(chance: random.Random, case: Case, plan: PlainPlan) -> tuple[tuple[str, Day], ...]:
    """Decisions a desk accepts: effective on a session that is not after the outgoing's last trade."""
    may_leave = [name for name in case.contracts if plan.months is None or int(name[-2:]) in plan.months]
    chosen = chance.sample(may_leave, min(len(may_leave), chance.choice([0, 0, 1, 2])))
    sessions = sessions_of(case)
    around = case.calendar.open_days(sessions[0] - ONE * 9, sessions[-1] + ONE * 9)
    forces = []
    for name in chosen:
        able = [day for day in around if day <= last_trade_of(case, name)]
        if able:
            forces.append((name, chance.choice(able)))
    return tuple(forces)


def draw_case(seed: int, length: int, contracts: int, plans: int) -> Case | None:
    """A declared market over about `length` sessions; None where no bar would be in it."""
    chance = random.Random(seed)
    deliveries = _deliveries(chance, contracts)
    first = datetime.date(2024, 1, 2) + ONE * chance.randint(0, 60)
    calendar = _closed_and_opened(chance, first)
    days = _days_with_bars(chance, calendar, first, length)
    case = Case(
        contracts=tuple(f"XX-{year}-{month:02d}" for year, month in deliveries),
        delivery_months=tuple(sorted({month for _, month in deliveries})),
        calendar=calendar,
        last_trade=_rules(chance, deliveries),
        first_notice=_rules(chance, deliveries) if chance.random() < 0.6 else (),
        open_interest_lag=chance.choice([0, 1, 2, 5]),
        rescaled=_rescaled(chance, list(days)),
        bars={},
        masked=frozenset(),
        repaired={},
        corrected={},
    )
    walk = float(chance.choice([3, 100, 100]))
    levels = []
    for _ in days:
        walk += chance.randint(-6, 6) / 4
        levels.append(walk)
    _fill(chance, case, days, levels)
    sessions = set(sessions_of(case))
    if not sessions:
        return None
    for changed in (case.repaired, case.corrected):
        for place in [place for place in changed if place[1] not in sessions]:
            del changed[place]
    share = chance.choice([0.0, 0.0, 0.1, 0.4])
    standing = sorted(
        place
        for place, bar in case.bars.items()
        if "settle" in bar and place[1] in sessions and place not in case.repaired and place not in case.corrected
    )
    case = replace(case, masked=frozenset(place for place in standing if chance.random() < share))
    market = plain_market(case)
    for name in PLAN_NAMES[:plans]:
        case.plans[name] = replace(draw_plan(chance, market), force=())
        case.forces[name] = _forces(chance, case, case.plans[name])
    return case


# What to draw a case from; the case itself is made in the test, so that a failure prints four numbers and no market.
shapes = {
    "seed": st.integers(0, 2**32 - 1),
    "length": st.sampled_from([45, 70, 110, 20, 5]),
    "contracts": st.sampled_from([5, 6, 7, 4, 3, 2, 1]),
    "plans": st.sampled_from([2, 3, 1]),
}
