"""Random markets and random plans, shared by every property.

Belongs here: what can happen to a market, in all its mixtures. Does not belong here: what must hold of it.
The shape of a market is drawn value by value, so that a failing example shrinks to few sessions and
contracts; its cells are filled from one seed, so that drawing stays quick.
"""

import os
import random
from dataclasses import dataclass, replace

from hypothesis import settings
from hypothesis import strategies as st

from tests.reference.plain_market import Cell, PlainMarket, PlainPlan
from tests.reference.small import weekdays

# Every day the same quick examples; with ROPEWALK_LONG=1 in the environment many new ones.
IS_LONG = os.environ.get("ROPEWALK_LONG") == "1"
EFFORT = settings(
    max_examples=20_000 if IS_LONG else 150,
    derandomize=not IS_LONG,
    deadline=None,
    database=None,
    print_blob=True,
)
# What must hold of each telling by itself, which many of the same panels would not make surer.
LESS_EFFORT = settings(EFFORT, max_examples=4000 if IS_LONG else 150)
WIDE_CASES = 50_000 if IS_LONG else 1000
# Evenly drawn cases are told block by block, so that a broken rule shows after few of them.
BLOCK = 100

TRIGGERS = ("volume", "open interest", "both", "either", "calendar")
_DELIVERIES = tuple((year, month) for year in (2024, 2025, 2026) for month in range(1, 13))


@dataclass(frozen=True)
class Listing:
    """One contract: sessions from the one before, listed and dying early or late, and its notice day."""

    after_previous: int
    listed: int
    dies_early: int
    notice: int
    first_delivery_gap: int


@dataclass(frozen=True)
class Noise:
    """Shares of bars, settles and volumes that are absent, unusable, masked, repaired; how often they tie."""

    no_bar: float
    no_settle: float
    no_activity: float
    suspect: float
    masked: float
    declared: float
    highest_activity: int
    lowest_level: int


listings = st.builds(
    Listing,
    after_previous=st.sampled_from([4, 5, 7, 9, 2, 1, 0]),
    listed=st.sampled_from([0, 0, 0, 0, 0, 0, 3, 8, 15, 24]),
    dies_early=st.sampled_from([0, 0, 0, 0, 0, 0, 1, 2, 5, 30]),
    notice=st.integers(-6, 2),
    first_delivery_gap=st.integers(1, 3),
)
shares = st.sampled_from([0.0, 0.0, 0.0, 0.05, 0.3, 0.7])
noises = st.builds(
    Noise,
    no_bar=shares,
    no_settle=shares,
    no_activity=shares,
    suspect=shares,
    masked=st.sampled_from([0.0, 0.0, 0.0, 0.1, 0.4]),
    declared=st.sampled_from([0.0, 0.1]),
    highest_activity=st.sampled_from([0, 1, 3, 1000]),
    lowest_level=st.sampled_from([-8, 3, 100, 100]),
)


nearby_numbers = st.one_of(
    st.just((1, 2, 3)), st.sets(st.integers(1, 5), min_size=1, max_size=3).map(lambda numbers: tuple(sorted(numbers)))
)


@st.composite
def markets(draw: st.DrawFn, longest: int = 32) -> PlainMarket:
    """A market of 1 to 6 contracts, whose last trades do not fall, over 1 to `longest` sessions."""
    thirds = draw(st.sampled_from([3, 3, 3, 3, 2, 2, 1, 0]))
    count = max(1, longest * thirds // 3)
    size = draw(st.sampled_from([3, 4, 5, 6, 4, 5, 2, 1]))
    drawn = [draw(listings) for _ in range(size)]
    noise = draw(noises)
    has_notice = draw(st.booleans())
    lag = draw(st.integers(0, 2))
    first_last_trade = draw(st.sampled_from([5, 8, 12, 4, 9, 7, 6, 2, -2]))
    seed = draw(st.integers(0, 2**32 - 1))
    return fill(count, drawn, noise, has_notice, lag, first_last_trade, random.Random(seed))


def fill(
    count: int,
    drawn: list[Listing],
    noise: Noise,
    has_notice: bool,
    lag: int,
    first_last_trade: int,
    chance: random.Random,
) -> PlainMarket:
    """Fill the cells of a market of a given shape."""
    contracts: list[str] = []
    last_trade: dict[str, int] = {}
    notice: dict[str, int] = {}
    delivery, last = 0, first_last_trade
    for position, listing in enumerate(drawn):
        delivery += listing.first_delivery_gap
        last += listing.after_previous if position else 0
        year, month = _DELIVERIES[delivery]
        name = f"XX-{year}-{month:02d}"
        contracts.append(name)
        last_trade[name], notice[name] = last, last + listing.notice
    market = PlainMarket(
        weekdays(count),
        contracts,
        {},
        {},
        {},
        set(),
        set(),
        last_trade,
        notice if has_notice else None,
        lag,
        {},
    )
    walk = float(noise.lowest_level)
    levels = []
    for _ in range(count):
        walk += chance.randint(-6, 6) / 4
        levels.append(walk)
    slope = chance.choice([-2, 0, 2, 2])
    for position, (name, listing) in enumerate(zip(contracts, drawn, strict=True)):
        first = listing.listed
        end = min(count - 1, last_trade[name] - listing.dies_early)
        for t in range(first, end + 1):
            if chance.random() < noise.no_bar:
                continue
            _fill_cell(market, (name, t), levels[t] + slope * position + chance.randint(-2, 2) / 4, noise, chance)
    return market


def _fill_cell(market: PlainMarket, cell: Cell, price: float, noise: Noise, chance: random.Random) -> None:
    market.bars.add(cell)
    if chance.random() >= noise.no_activity:
        market.volume[cell] = float(chance.randint(0, noise.highest_activity))
    if chance.random() >= noise.no_activity:
        market.open_interest[cell] = float(chance.randint(0, noise.highest_activity))
    for values, distance in ((market.open, 0.0), (market.high, 1.0), (market.low, -1.0)):
        if chance.random() >= noise.no_settle:
            values[cell] = price + distance
    if chance.random() < noise.no_settle:
        return
    market.settle[cell] = price
    if chance.random() < noise.masked:
        return
    if chance.random() < noise.suspect:
        market.prices[cell] = price + 0.5
        market.repaired.add(cell)
        return
    market.usable.add(cell)
    market.prices[cell] = price
    if chance.random() < noise.declared:
        market.prices[cell] = price - 0.75
        market.repaired.add(cell)


def _forceable(market: PlainMarket, months: tuple[int, ...] | None) -> list[tuple[str, int]]:
    """Contracts a person may decide on, each with the latest effective session a desk accepts."""
    return [
        (name, min(last, len(market.sessions) - 1))
        for name, last in market.last_trade.items()
        if last >= 0 and (months is None or int(name[-2:]) in months)
    ]


@st.composite
def plans(draw: st.DrawFn, market: PlainMarket) -> PlainPlan:
    """A plan that a desk would accept for the market."""
    before = draw(st.sampled_from(["last trade", "first notice", "earlier"])) if market.first_notice else "last trade"
    delay = draw(st.integers(1, 3))
    deliveries = sorted({int(name[-2:]) for name in market.contracts})
    chosen_months = st.sets(st.sampled_from(deliveries), min_size=1).map(lambda months: tuple(sorted(months)))
    months = draw(st.one_of(st.none(), st.none(), chosen_months))
    may_force = _forceable(market, months)
    force: tuple[tuple[str, int], ...] = ()
    if may_force:
        most = draw(st.sampled_from([0, 0, 1, 2]))
        chosen = draw(st.lists(st.sampled_from(may_force), max_size=most, unique_by=lambda pair: pair[0]))
        force = tuple((name, draw(st.integers(0, latest))) for name, latest in chosen)
    return PlainPlan(
        name="drawn",
        trigger=draw(st.sampled_from(TRIGGERS)),
        confirm=draw(st.sampled_from([1, 2, 3])),
        delay=delay,
        steps=draw(st.sampled_from([1, 1, 2, 3, 4, 5])),
        backstop=draw(st.sampled_from([0, 0, 1, 2, 4, 6])),
        before=before,
        incoming=draw(st.sampled_from(["next", "most active"])),
        months=months,
        nearbys=draw(nearby_numbers),
        force=force,
    )


@st.composite
def markets_and_plans(draw: st.DrawFn, longest: int = 32) -> tuple[PlainMarket, PlainPlan]:
    """A market and a plan for it."""
    market = draw(markets(longest))
    return market, draw(plans(market))


@st.composite
def surprised(draw: st.DrawFn) -> tuple[PlainMarket, PlainPlan]:
    """A market of which up to five sessions were not to be, and a plan."""
    market, plan = draw(markets_and_plans())
    days = draw(st.sets(st.integers(0, len(market.sessions) - 1), min_size=1, max_size=4))
    days |= {effective - 1 for _, effective in plan.force if effective > 0}
    # A desk refuses a decision for a day that its calendar calls closed.
    force = tuple(decision for decision in plan.force if decision[1] not in days)
    return replace(market, unscheduled=days), replace(plan, force=force)


def wide_case(seed: int) -> tuple[PlainMarket, PlainPlan]:
    """A market and a plan, every choice made evenly from one seed: no shrinking, no leaning to small ones."""
    chance = random.Random(seed)
    count, size = chance.choice([1, 12, 20, 30, 40, 50]), chance.choice([1, 3, 4, 5, 6, 7, 8])
    # Contracts that end soon after one another, so that one roll begins before the other has ended.
    is_hurried = chance.random() < 0.3
    between = [1, 2, 3, 3, 4] if is_hurried else [0, 1, 2, 3, 5, 6, 8, 9]

    def share() -> float:
        return chance.choice([0, 0, 0, 0.05, 0.05, 0.2, 0.5])

    drawn = [
        Listing(
            after_previous=chance.choice(between),
            listed=chance.choice([0, 0, 0, 0, 0, 0, 2, 5, 10, 20]),
            dies_early=chance.choice([0, 0, 0, 0, 0, 0, 1, 3, 8, 60]),
            notice=chance.randint(-6, 2),
            first_delivery_gap=chance.randint(1, 3),
        )
        for _ in range(size)
    ]
    noise = Noise(
        share(), share(), share(), share(), chance.choice([0, 0, 0.1, 0.4]), chance.choice([0, 0.1]),
        chance.choice([0, 1, 3, 10, 1000]), chance.choice([-8, 3, 100, 100]),
    )  # fmt: skip
    market = fill(
        count,
        drawn,
        noise,
        chance.random() < 0.5,
        chance.randint(0, 2),
        chance.choice([5, 8, 12, 8, 3, -1]),
        chance,
    )
    plan = draw_plan(chance, market)
    if chance.random() > 0.3:
        return market, plan
    # Sessions that the calendar calls closed: nothing may count on them before they come, least of all a decision.
    days = set(chance.sample(range(count), min(count, chance.randint(1, 4))))
    days |= {effective - 1 for _, effective in plan.force if effective > 0}
    # A desk refuses a decision for such a day.
    force = tuple(decision for decision in plan.force if decision[1] not in days)
    return replace(market, unscheduled=days), replace(plan, force=force)


def _draw_nearbys(chance: random.Random) -> tuple[int, ...]:
    return tuple(sorted(chance.sample(range(1, 6), chance.randint(1, 3))))


def draw_plan(chance: random.Random, market: PlainMarket) -> PlainPlan:
    """A plan that a desk would accept for the market, every choice made evenly."""
    deliveries = sorted({int(name[-2:]) for name in market.contracts})
    months = None
    if chance.random() < 0.3:
        months = tuple(sorted(chance.sample(deliveries, chance.randint(1, len(deliveries)))))
    may_force = _forceable(market, months)
    forced = chance.sample(may_force, min(len(may_force), chance.choice([0, 0, 0, 1, 2])))
    return PlainPlan(
        name="drawn",
        trigger=chance.choice(TRIGGERS),
        confirm=chance.randint(1, 3),
        delay=chance.randint(1, 3),
        steps=chance.choice([1, 1, 2, 3, 4, 5]),
        backstop=chance.choice([0, 0, 1, 2, 4, 6]),
        before=chance.choice(["last trade", "first notice", "earlier"]) if market.first_notice else "last trade",
        incoming=chance.choice(["next", "most active"]),
        months=months,
        nearbys=chance.choice([(1, 2, 3), (1, 2, 3), _draw_nearbys(chance)]),
        force=tuple((name, chance.randint(0, latest)) for name, latest in forced),
    )
