"""A day the calendar calls closed may trade all the same; no decision before it may count on it."""

from dataclasses import replace

from hypothesis import given

from tests.property.strategies import LESS_EFFORT, surprised
from tests.reference.agree import differences
from tests.reference.plain_market import PlainMarket, PlainPlan, truncate
from tests.reference.plain_rolls import foreseen
from tests.reference.real import lay_real
from tests.reference.small import small_market


@LESS_EFFORT
@given(surprised())
def test_real_and_plain_agree_on_surprise_sessions(drawn: tuple[PlainMarket, PlainPlan]) -> None:
    assert differences(*drawn) == []


@LESS_EFFORT
@given(surprised())
def test_real_decisions_count_on_no_session_that_nobody_knew_of(drawn: tuple[PlainMarket, PlainPlan]) -> None:
    market, plan = drawn
    whole = lay_real(market, plan)
    ends = {max(0, session - 1) for session in market.unscheduled}
    ends |= {decided for chain in whole.values() for decided, *_ in chain.decisions}
    for end in sorted(ends):
        then = replace(plan, force=tuple((name, foreseen(market, day, end)) for name, day in plan.force))
        cut = lay_real(truncate(market, end), then)
        for nearby, chain in whole.items():
            assert cut[nearby].decisions == [decision for decision in chain.decisions if decision[0] <= end]
            assert cut[nearby].rows == [row for row in chain.rows if row["effective_on"] <= end]


NEAR, FAR = "XX-2024-03", "XX-2024-06"


def test_deadline_is_counted_without_the_surprise_until_it_comes() -> None:
    """Three sessions before session 8: on the 5th. Session 6 is a surprise, without it it would be the 4th.

    At the close of session 3 the last trading session was the fourth one from then, and the roll of three sessions
    before it was due; that a closed day would trade was not known.
    """
    prices: list[float | None] = [100.0 + t for t in range(10)]
    market = small_market({NEAR: prices, FAR: [price + 5 for price in prices if price]}, {NEAR: 8, FAR: 99})
    plan = PlainPlan("near", "calendar", backstop=3)
    effective = {
        name: lay_real(other, plan)[1].rows[0]["effective_on"]
        for name, other in {
            "foreseen": market,
            "surprise": replace(market, unscheduled={6}),
            # Once it has come it counts: then three sessions before the last are known to be left.
            "surprise long before": replace(market, unscheduled={1}),
        }.items()
    }
    assert effective == {"foreseen": 5, "surprise": 4, "surprise long before": 5}
    assert differences(replace(market, unscheduled={6}), plan) == []


def test_forced_roll_is_decided_in_time_and_takes_effect_on_its_day_over_a_surprise() -> None:
    """A delay of two sessions before session 6, of which session 5 was not foreseen: decided on 3, measured on 5."""
    prices: list[float | None] = [100.0 + t for t in range(10)]
    market = small_market({NEAR: prices, FAR: [price + 5 for price in prices if price]}, {NEAR: 8, FAR: 99})
    plan = PlainPlan("by_hand", "calendar", delay=2, force=((NEAR, 6),))
    for unscheduled, decided in ((set(), 4), ({5}, 3), ({4}, 3), ({3}, 4)):
        other = replace(market, unscheduled=unscheduled)
        (row,) = lay_real(other, plan)[1].rows
        assert (row["trigger"], row["decided_on"], row["measured_on"], row["effective_on"]) == ("forced", decided, 5, 6)
        assert differences(other, plan) == []
