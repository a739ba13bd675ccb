"""Roll plans of one market side by side: what each held, what its rolls cost in gaps, where they disagree.

Belongs here: the figures a desk argues with when it chooses a plan. Does not belong here: which figure
matters, and anything about slippage or fees, which prices alone cannot tell.
"""

import datetime
import itertools
import math
from dataclasses import dataclass

import numpy as np

from contracts.deliveries import delivery_of
from contracts.panel import Panel
from contracts.rolls import BACKSTOP, FORCED, NEVER, Held, RollStep
from contracts.sessions import day_number, day_of, first_notice_day
from contracts.splice import Series
from contracts.trend import sign_score

LAST_WEEK = 5
_DAYS_A_YEAR = 365.25


@dataclass(frozen=True)
class Gaps:
    """Gaps of whole rolls in ticks: mean and largest of their sizes, and which roll was the largest."""

    mean: float
    worst: float
    worst_on: datetime.date
    worst_roll: str


@dataclass(frozen=True)
class Crossing:
    """Sessions from the liquidity crossing to the decision: median, least and most; negative is decided before.

    `rolls` are those with a crossing, `never` those whose incoming contract never overtook for good up to the
    outgoing's last trade; where that is after the data's end, a roll without a crossing counts as neither.
    """

    rolls: int
    never: int
    median: float | None
    least: int | None
    most: int | None


@dataclass(frozen=True)
class PlanFigures:
    """One plan, nearby 1, on the market's own sessions; shares are 0 to 1, None where nothing is known."""

    plan: str
    first_session: datetime.date
    last_session: datetime.date
    sessions: int
    rolls: int
    rolls_a_year: float
    most_active_by_volume: float | None
    most_active_by_open_interest: float | None
    volume_held: float | None
    after_first_notice: int | None
    in_last_week: int
    gaps: Gaps | None
    after_volume_crossing: Crossing
    after_open_interest_crossing: Crossing
    by_deadline: int
    by_person: int
    postponed: int
    measured_stale: int
    without_price: int


@dataclass(frozen=True)
class Difference:
    """Two plans: sessions both held something, on how many they held other contracts or shares, on how many
    both had a trend-sign score and it differed, and on how many of those by its sign (one up, one down)."""

    plan: str
    other: str
    sessions: int
    held_apart: int
    scored: int
    score_differs: int
    score_opposed: int


def figures_of(panel: Panel, plan: str, held: Held, series: Series) -> PlanFigures:
    """The figures of one plan's first nearby."""
    start = held.start
    rows = np.arange(start, len(panel.sessions))
    main = main_contract(held)[start:]
    volume, interest = panel.field("volume"), known_interest(panel)
    rolls = [roll for roll in whole_rolls(held) if roll[-1].weight_after >= 1.0]
    years = max((int(panel.sessions[-1]) - int(panel.sessions[start])) / _DAYS_A_YEAR, 1 / _DAYS_A_YEAR)
    has_notice = bool(panel.market.first_notice)
    return PlanFigures(
        plan=plan,
        first_session=day_of(panel.sessions[start]),
        last_session=day_of(panel.sessions[-1]),
        sessions=len(rows),
        rolls=len(rolls),
        rolls_a_year=len(rolls) / years,
        most_active_by_volume=_share_most_active(volume, rows, main),
        most_active_by_open_interest=_share_most_active(interest, rows, main),
        volume_held=_share_held(volume, held),
        after_first_notice=int((panel.sessions[rows] >= _notice_days(panel)[main]).sum()) if has_notice else None,
        in_last_week=int((rows > panel.last_trade[main] - LAST_WEEK).sum()),
        gaps=_gaps(panel, rolls),
        after_volume_crossing=_crossings(panel, volume, rolls),
        after_open_interest_crossing=_crossings(panel, interest, rolls),
        by_deadline=sum(roll[0].decision.trigger == BACKSTOP for roll in rolls),
        by_person=sum(roll[0].decision.trigger == FORCED for roll in rolls),
        postponed=sum(any(step.postponed and not step.is_stale for step in roll) for roll in rolls),
        measured_stale=sum(any(step.is_stale for step in roll) for roll in rolls),
        without_price=int((series.status >= 2).sum()),
    )


def _notice_days(panel: Panel) -> np.ndarray:
    """First notice of each contract as a day number, (N,): the day itself, which may be no session."""
    days = [first_notice_day(panel.market, delivery_of(name)) for name in panel.contracts]
    return np.array([day_number(day) if day is not None else np.iinfo(np.int64).max for day in days])


def differences(plans: list[tuple[str, Held, Series]], look_backs: tuple[int, ...]) -> list[Difference]:
    """Every pair of plans held against one another, in the order given."""
    found = []
    for (name, held, series), (other, held2, series2) in itertools.combinations(plans, 2):
        start = max(held.start, held2.start)
        apart = np.zeros(len(held.contract) - start, dtype=bool)
        for one, two in ((held.contract, held2.contract), (held.incoming, held2.incoming), (held.weight, held2.weight)):
            apart |= one[start:] != two[start:]
        first = sign_score(series.back_adjusted, look_backs)[start - held.start :]
        second = sign_score(series2.back_adjusted, look_backs)[start - held2.start :]
        both = ~np.isnan(first) & ~np.isnan(second)
        found.append(
            Difference(
                name, other, len(apart), int(apart.sum()), int(both.sum()), int((first != second)[both].sum()),
                int((first * second < 0)[both].sum()),
            )
        )  # fmt: skip
    return found


def main_contract(held: Held) -> np.ndarray:
    """The contract with the larger share on each session, (T,); the outgoing while both are equal."""
    return np.where((held.incoming != NEVER) & (held.weight > 0.5), held.incoming, held.contract)


def known_interest(panel: Panel) -> np.ndarray:
    """Open interest as it is known at the close of each session, (T, N)."""
    lag, interest = panel.market.open_interest_lag, panel.field("open_interest")
    known = np.full(interest.shape, np.nan)
    if lag < len(interest):
        known[lag:] = interest[: len(interest) - lag]
    return known


def whole_rolls(held: Held) -> list[list[RollStep]]:
    """The ledger's rows, those of one roll together."""
    rolls: list[list[RollStep]] = []
    for step in held.steps:
        if rolls and rolls[-1][0].decision == step.decision:
            rolls[-1].append(step)
        else:
            rolls.append([step])
    return rolls


def crossing(values: np.ndarray, outgoing: int, incoming: int, until: int) -> int:
    """The session from which the incoming stays above the outgoing, as far as both are known; NEVER for none.

    `values` (T, N) are volumes or known open interests; sessions after `until` do not count.
    """
    one, other = values[: until + 1, outgoing], values[: until + 1, incoming]
    known = np.flatnonzero(~np.isnan(one) & ~np.isnan(other))
    if not len(known):
        return NEVER
    below = np.flatnonzero(other[known] <= one[known])
    first = int(below[-1]) + 1 if len(below) else 0
    return int(known[first]) if first < len(known) else NEVER


def _crossings(panel: Panel, values: np.ndarray, rolls: list[list[RollStep]]) -> Crossing:
    after, never = [], 0
    for roll in rolls:
        decision = roll[0].decision
        last = int(panel.last_trade[decision.outgoing])
        crossed = crossing(values, decision.outgoing, roll[-1].incoming, last)
        if crossed != NEVER:
            after.append(decision.decided - crossed)
        elif last < len(values):
            never += 1
    if not after:
        return Crossing(0, never, None, None, None)
    return Crossing(len(after), never, float(np.median(after)), min(after), max(after))


def _share_most_active(values: np.ndarray, rows: np.ndarray, main: np.ndarray) -> float | None:
    """Share of the sessions on which something is known whose largest value is the held contract's."""
    known = np.where(np.isnan(values[rows]), -np.inf, values[rows])
    largest = known.max(axis=1)
    told = largest > 0
    if not told.any():
        return None
    return float((known[np.arange(len(rows)), main] == largest)[told].mean())


def _share_held(volume: np.ndarray, held: Held) -> float | None:
    rows = np.arange(held.start, len(volume))
    traded = np.nan_to_num(volume)
    total = float(traded[rows].sum())
    if not total:
        return None
    contract, incoming, weight = (part[held.start :] for part in (held.contract, held.incoming, held.weight))
    mine = (1 - weight) * traded[rows, contract]
    mine += np.where(incoming == NEVER, 0.0, weight * traded[rows, np.maximum(incoming, 0)])
    return float(mine.sum() / total)


def _gaps(panel: Panel, rolls: list[list[RollStep]]) -> Gaps | None:
    tick = panel.market.tick_size
    sizes = [(abs(math.fsum(step.gap for step in roll)) / tick, roll) for roll in rolls if roll[-1].measured != NEVER]
    if not sizes:
        return None
    worst, roll = max(sizes, key=lambda pair: pair[0])
    pair = f"{panel.contracts[roll[0].decision.outgoing]} -> {panel.contracts[roll[-1].incoming]}"
    mean = math.fsum(size for size, _ in sizes) / len(sizes)
    return Gaps(mean, worst, day_of(panel.sessions[roll[-1].effective]), pair)
