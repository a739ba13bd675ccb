"""Both tellings of the splice, and the plain one of the trend score, agree with examples worked by hand.

Each group of examples has the source of its rule before it; what was read of the papers stands in test_roll_rules.py.
"""

from typing import Any

import pytest

from tests.reference.plain_market import PlainMarket, PlainPlan
from tests.reference.plain_rolls import lay_plain
from tests.reference.plain_trend import count_different, impact_of_gap, impact_of_price, plain_score
from tests.reference.small import small_market
from tests.reference.tellings import TELLINGS, Telling

A, B, C, D = "XX-2024-03", "XX-2024-06", "XX-2024-09", "XX-2024-12"


@pytest.fixture(params=TELLINGS, name="tell")
def _tell(request: pytest.FixtureRequest) -> Telling:
    return TELLINGS[request.param]


def column(tell: Telling, market: PlainMarket, plan: PlainPlan, name: str) -> list[Any]:
    """One column of the first nearby's series."""
    return [row[name] for row in tell(market, plan).chains[1].series]


# A change is that of the weights held into it, so that a roll adds none: Geiss (1995), from memory. Past prices shifted
# by gaps, or scaled by ratios: common practice, no source; that the choice matters: Ma, Mercer and Walker (1992), from
# memory. Returns of the held contract, compounded, for a trend signal: Moskowitz, Ooi and Pedersen (2012), from memory.
def test_the_series_of_one_roll_written_out(tell: Telling) -> None:
    settle = {A: [100.0, 90.0, 80.0, 70.0], B: [110.0, 99.0, 100.0, 120.0]}
    market, plan = small_market(settle, {A: 2, B: 99}), PlainPlan("p", "calendar")
    # Measured on session 1: gap 9, ratio 1.1; B is held from session 2 on.
    assert column(tell, market, plan, "contract") == [A, A, B, B]
    assert column(tell, market, plan, "settle") == [100.0, 90.0, 100.0, 120.0]
    assert column(tell, market, plan, "shift") == [9.0, 9.0, 0.0, 0.0]
    assert column(tell, market, plan, "scale") == [pytest.approx(1.1), pytest.approx(1.1), 1.0, 1.0]
    assert column(tell, market, plan, "back_adjusted") == [109.0, 99.0, 100.0, 120.0]
    assert column(tell, market, plan, "ratio_adjusted") == [pytest.approx(110), pytest.approx(99), 100.0, 120.0]
    assert column(tell, market, plan, "change") == [None, -10.0, 1.0, 20.0]
    returns, growth = column(tell, market, plan, "simple_return"), column(tell, market, plan, "growth")
    assert returns[0] is None
    assert returns[1:] == pytest.approx([-0.1, 1 / 99, 0.2])
    assert growth == pytest.approx([100, 90, 90 * 100 / 99, 90 * 120 / 99])
    assert column(tell, market, plan, "rolled") == [False, False, True, False]


def test_half_and_half_while_a_roll_of_two_steps_moves(tell: Telling) -> None:
    settle = {A: [100.0, 100.0, 104.0, 104.0], B: [110.0, 110.0, 110.0, 112.0]}
    market, plan = small_market(settle, {A: 3, B: 99}), PlainPlan("p", "calendar", steps=2)
    assert column(tell, market, plan, "settle") == [100.0, 100.0, 107.0, 112.0]
    assert column(tell, market, plan, "contract") == [A, A, A, B]
    assert column(tell, market, plan, "incoming") == [None, None, B, None]
    assert column(tell, market, plan, "incoming_weight") == [0.0, 0.0, 0.5, 0.0]
    assert column(tell, market, plan, "shift") == [8.0, 8.0, 3.0, 0.0]
    assert column(tell, market, plan, "change") == [None, 0.0, 2.0, 2.0]


# A price stands for at most three sessions after it: our own choice.
def test_three_sessions_are_carried_then_missing_and_the_change_spans_them(tell: Telling) -> None:
    market = small_market({A: [100.0, None, None, None, None, 90.0]}, {A: 99})
    plan = PlainPlan("p", "calendar")
    assert column(tell, market, plan, "settle") == [100.0, 100.0, 100.0, 100.0, None, 90.0]
    assert column(tell, market, plan, "status") == [
        "reported",
        "carried",
        "carried",
        "carried",
        "missing",
        "reported",
    ]
    assert column(tell, market, plan, "change") == [None, 0.0, 0.0, 0.0, None, -10.0]
    assert column(tell, market, plan, "growth") == [100.0, 100.0, 100.0, 100.0, None, pytest.approx(90)]


def test_a_repaired_price_says_so_and_a_masked_one_is_carried(tell: Telling) -> None:
    market = small_market({A: [100.0, 9.9, 980.0]}, {A: 99}, repaired={(A, 1): 99.0}, masked=((A, 2),))
    assert column(tell, market, PlainPlan("p", "calendar"), "status") == ["reported", "repaired", "carried"]
    assert column(tell, market, PlainPlan("p", "calendar"), "settle") == [100.0, 99.0, 99.0]


# What is bought where nobody saw both prices is valued by the last session that did: our own choice.
def test_a_stale_roll_enters_at_the_outgoing_price_plus_the_gap(tell: Telling) -> None:
    settle = {A: [100.0, 101.0, 102.0, None], B: [110.0, None, None, 120.0]}
    market, plan = small_market(settle, {A: 2, B: 99}), PlainPlan("p", "calendar")
    row = tell(market, plan).chains[1].rows[0]
    assert (row["measured_on"], row["effective_on"], row["gap"], row["ratio"]) == (0, 3, 10.0, 1.1)
    # Entered at 102 + 10 = 112, so the position gains 8; in returns it enters at 102 x 1.1.
    assert column(tell, market, plan, "change") == [None, 1.0, 1.0, 8.0]
    assert column(tell, market, plan, "back_adjusted") == [110.0, 111.0, 112.0, 120.0]
    returns = column(tell, market, plan, "simple_return")
    assert returns[3] == pytest.approx(120 / (102 * 1.1) - 1)


def test_a_stale_roll_on_the_second_session_enters_like_any_other(tell: Telling) -> None:
    """B and C stood side by side on 0 only, past their first notice; A comes on 2, B's last session.

    The second nearby begins there with B at 108 and is in C from 3 on, entered at 108 + (110 - 105) = 113.
    """
    settle = {A: [None, None, 100.0, 100.0], B: [105.0, 106.0, 108.0, None], C: [110.0, None, None, 115.0]}
    volume = {A: [1.0] * 4, B: [9.0] * 4, C: [0.0] * 4}
    market = small_market(settle, {A: 90, B: 2, C: 90}, volume=volume, first_notice={A: 90, B: 0, C: 0})
    chain = tell(market, PlainPlan("p", "volume", before="first notice", nearbys=(1, 2))).chains[2]
    assert [(row["measured_on"], row["effective_on"], row["gap"]) for row in chain.rows] == [(0, 3, 5.0)]
    assert [row["settle"] for row in chain.series] == [108.0, 115.0]
    assert [row["change"] for row in chain.series] == [None, 2.0]
    assert chain.series[1]["simple_return"] == pytest.approx(115 / (108 * 110 / 105) - 1)


def test_a_stale_roll_before_the_first_price_of_a_series_changes_nothing(tell: Telling) -> None:
    """As before, but B has no price left when the second nearby begins with it on 5."""
    none = [None] * 5
    settle = {A: [*none, 100.0, 100.0, 100.0], B: [105.0, *none, None, None], C: [110.0, *none, 115.0, 116.0]}
    volume = {A: [1.0] * 8, B: [9.0] * 8, C: [0.0] * 8}
    market = small_market(settle, {A: 90, B: 5, C: 90}, volume=volume, first_notice={A: 90, B: 0, C: 0})
    chain = tell(market, PlainPlan("p", "volume", before="first notice", nearbys=(1, 2))).chains[2]
    assert [(row["measured_on"], row["effective_on"], row["gap"]) for row in chain.rows] == [(0, 6, 5.0)]
    assert [row["settle"] for row in chain.series] == [None, 115.0, 116.0]
    assert [row["change"] for row in chain.series] == [None, None, 1.0]


@pytest.mark.parametrize("more", [0, 300])
def test_the_change_over_a_roll_is_the_incoming_contracts_own_to_the_last_bit(tell: Telling, more: int) -> None:
    """0.3 - 0.1 is not 0.3 - (0.7 + (0.1 - 0.7)) in floating point; the series begins on 1, the roll is of 2 or 302."""
    settle = {A: [None, *[0.7] * (4 + more)], B: [None, *[0.1] * (2 + more), 0.3, 0.3]}
    market = small_market(settle, {A: 3 + more, B: 999}, bars=((A, 0), (B, 0)))
    assert 0.3 - 0.1 != 0.3 - (0.7 + (0.1 - 0.7))
    assert column(tell, market, PlainPlan("p", "calendar"), "change")[1:] == [0.0] * (1 + more) + [0.3 - 0.1, 0.0]


def test_nothing_is_adjusted_across_a_broken_chain(tell: Telling) -> None:
    settle = {A: [100.0, 101.0, 102.0, None], B: [None, None, None, 120.0]}
    market = small_market(settle, {A: 2, B: 99}, bars=((B, 0),))
    plan = PlainPlan("p", "calendar")
    assert column(tell, market, plan, "settle") == [100.0, 101.0, 102.0, 120.0]
    for name in ("shift", "back_adjusted", "scale", "ratio_adjusted", "growth"):
        assert column(tell, market, plan, name)[:3] == [None, None, None], name
    assert column(tell, market, plan, "back_adjusted")[3] == 120.0
    assert column(tell, market, plan, "growth")[3] == 100.0
    assert column(tell, market, plan, "change") == [None, 1.0, 1.0, None]


# Prices at or below zero do occur (crude oil, 2020-04-20, CFTC release 8315-20) and have neither ratio nor return.
def test_a_leg_at_or_below_zero_leaves_no_ratio_before_it(tell: Telling) -> None:
    settle = {A: [10.0, -5.0, 1.0, 1.0], B: [20.0, 15.0, 18.0, 9.0]}
    market, plan = small_market(settle, {A: 2, B: 99}), PlainPlan("p", "calendar")
    assert column(tell, market, plan, "shift") == [20.0, 20.0, 0.0, 0.0]
    assert column(tell, market, plan, "scale") == [None, None, 1.0, 1.0]
    assert column(tell, market, plan, "simple_return") == [None, None, pytest.approx(0.2), pytest.approx(-0.5)]
    assert column(tell, market, plan, "growth") == [None, None, 100.0, pytest.approx(50)]


def test_growth_begins_after_the_last_settle_at_or_below_zero(tell: Telling) -> None:
    market = small_market({A: [10.0, -5.0, 4.0, 6.0]}, {A: 99})
    assert column(tell, market, PlainPlan("p", "calendar"), "growth") == [None, None, 100.0, pytest.approx(150)]
    assert column(tell, market, PlainPlan("p", "calendar"), "simple_return") == [
        None,
        None,
        None,
        pytest.approx(0.5),
    ]


def test_prices_between_zero_and_one_have_returns_and_grow(tell: Telling) -> None:
    market, plan = small_market({A: [0.5, 0.25, 0.75]}, {A: 99}), PlainPlan("p", "calendar")
    assert column(tell, market, plan, "simple_return") == [None, -0.5, pytest.approx(2.0)]
    assert column(tell, market, plan, "growth") == [100.0, 50.0, pytest.approx(150.0)]


def test_a_settle_of_zero_has_no_return_on_it_or_from_it_and_growth_begins_after_it(tell: Telling) -> None:
    market, plan = small_market({A: [2.0, 0.0, 4.0, 5.0]}, {A: 99}), PlainPlan("p", "calendar")
    assert column(tell, market, plan, "simple_return") == [None, None, None, pytest.approx(0.25)]
    assert column(tell, market, plan, "growth") == [None, None, 100.0, pytest.approx(125.0)]


def test_growth_does_not_exist_where_the_last_settle_is_below_zero(tell: Telling) -> None:
    market, plan = small_market({A: [2.0, 4.0, -1.0]}, {A: 99}), PlainPlan("p", "calendar")
    assert column(tell, market, plan, "growth") == [None, None, None]
    assert column(tell, market, plan, "change") == [None, 2.0, -5.0]


def test_the_status_of_a_mix_is_its_worse_leg(tell: Telling) -> None:
    """Half and half on session 2: A is carried there, B repaired."""
    settle = {A: [100.0, 100.0, None, 104.0], B: [110.0, 110.0, 11.0, 112.0]}
    market = small_market(settle, {A: 3, B: 99}, repaired={(B, 2): 110.0})
    plan = PlainPlan("p", "calendar", steps=2)
    assert column(tell, market, plan, "status") == ["reported", "reported", "carried", "reported"]
    turned = small_market({A: [100.0, 100.0, 10.0, 104.0], B: settle[B]}, {A: 3, B: 99}, repaired={(A, 2): 100.0})
    assert column(tell, turned, plan, "status") == ["reported", "reported", "repaired", "reported"]


def test_a_step_at_the_worse_leg_is_measured_when_both_stand_and_the_change_is_of_what_is_held(tell: Telling) -> None:
    """Decided on 1, half on 2; the second half waits for session 3 and is held from 4 on."""
    settle = {A: [100.0, 101.0, 103.0, 104.0, 105.0], B: [110.0, 112.0, 113.0, 115.0, 118.0]}
    market = small_market(settle, {A: 3, B: 99}, unusable=((B, 2),))
    plan = PlainPlan("p", "calendar", steps=2)
    assert [(r["measured_on"], r["effective_on"]) for r in tell(market, plan).chains[1].rows] == [(1, 2), (3, 4)]
    assert column(tell, market, plan, "settle") == [100.0, 101.0, 108.0, 109.5, 118.0]
    assert column(tell, market, plan, "change") == [None, 1.0, 1.5, 1.5, 3.0]
    assert column(tell, market, plan, "shift") == [11.0, 11.0, 5.5, 5.5, 0.0]


def test_two_ratios_multiply_and_two_gaps_add_before_both(tell: Telling) -> None:
    settle = {A: [100.0] * 8, B: [110.0] * 8, C: [88.0] * 8}
    market, plan = small_market(settle, {A: 2, B: 5, C: 99}), PlainPlan("p", "calendar")
    assert column(tell, market, plan, "shift") == [-12.0, -12.0, -22.0, -22.0, -22.0, 0.0, 0.0, 0.0]
    assert column(tell, market, plan, "scale") == pytest.approx([0.88, 0.88, 0.8, 0.8, 0.8, 1.0, 1.0, 1.0])
    assert column(tell, market, plan, "growth") == pytest.approx([100.0] * 8)


def test_only_what_is_before_the_last_missing_ratio_has_no_scale(tell: Telling) -> None:
    """A to B has a ratio of 2, B to C none (B stands at 0 when it is left), C to D one of 1.5."""
    settle = {A: [5.0] * 11, B: [10.0] * 4 + [0.0] * 7, C: [8.0] * 11, D: [12.0] * 11}
    market = small_market(settle, {A: 2, B: 5, C: 8, D: 99})
    plan = PlainPlan("p", "calendar")
    assert column(tell, market, plan, "scale") == [None] * 5 + [1.5] * 3 + [1.0] * 3
    assert column(tell, market, plan, "growth") == [None] * 5 + [pytest.approx(100.0)] * 6
    assert column(tell, market, plan, "shift") == [17.0] * 2 + [12.0] * 3 + [4.0] * 3 + [0.0] * 3


def test_a_stale_roll_into_a_price_below_zero_counts_returns_like_changes(tell: Telling) -> None:
    """Measured on 0 (A 10, B -2: no ratio), entered on 3 at 14 - 12 = 2; B stands at 3 there."""
    settle = {A: [10.0, 12.0, 14.0, None], B: [-2.0, None, None, 3.0]}
    market, plan = small_market(settle, {A: 2, B: 99}), PlainPlan("p", "calendar")
    assert column(tell, market, plan, "change") == [None, 2.0, 2.0, 1.0]
    assert column(tell, market, plan, "simple_return")[3] == pytest.approx(0.5)
    assert column(tell, market, plan, "growth") == [None, None, None, 100.0]


def test_a_series_that_begins_without_a_price_begins_to_change_after_its_first(tell: Telling) -> None:
    """The second nearby is known on 0 by a bar that has no settle."""
    settle: dict[str, list[float | None]] = {A: [100.0] * 4, B: [None, None, 105.0, 107.0]}
    market = small_market(settle, {A: 99, B: 199}, bars=((B, 0),))
    rows = tell(market, PlainPlan("p", "calendar", nearbys=(1, 2))).chains[2].series
    assert [row["settle"] for row in rows] == [None, None, 105.0, 107.0]
    assert [row["change"] for row in rows] == [None, None, None, 2.0]
    assert [row["growth"] for row in rows] == [None, None, 100.0, pytest.approx(100 * 107 / 105)]
    assert [row["status"] for row in rows] == ["missing", "missing", "reported", "reported"]


def test_a_gap_left_in_turns_the_sign_of_look_backs_that_span_it() -> None:
    rising: list[float | None] = [0.0, 1.0, 2.0, 3.0, 4.0, 5.0]
    assert [plain_score(rising, t, (1, 2)) for t in range(6)] == [None, None, 2, 2, 2, 2]
    # Gap -2 left in: the past stands 2 higher, 2 3 4 3 4 5. Over 1 session 3 falls, over 2 3 and 4 are level.
    assert impact_of_gap(rising, 3, -2.0, (1,)) == 1
    assert impact_of_gap(rising, 3, -2.0, (2,)) == 2
    assert impact_of_gap(rising, 3, -2.0, (1, 2)) == 2
    assert impact_of_gap(rising, 3, 2.0, (1, 2)) == 0


def test_a_bad_price_left_standing_turns_signs_on_its_session_and_a_look_back_later() -> None:
    market = small_market({A: [10.0, 11.0, 12.0, 13.0, 14.0, 15.0]}, {A: 99})
    chain = lay_plain(market, PlainPlan("p", "calendar")).chains[1]
    assert impact_of_price(market, chain, A, 2, 120.0, (1,)) == 1
    assert impact_of_price(market, chain, A, 2, 1.2, (1,)) == 1
    assert impact_of_price(market, chain, A, 2, 120.0, (2,)) == 1
    assert impact_of_price(market, chain, A, 2, 11.5, (1,)) == 0


def test_a_bad_price_on_the_measuring_session_moves_all_that_came_before() -> None:
    settle = {A: [10.0, 11.0, 12.0, 12.0], B: [20.0, 21.0, 22.0, 23.0]}
    market = small_market(settle, {A: 2, B: 99})
    chain = lay_plain(market, PlainPlan("p", "calendar")).chains[1]
    # A at 1.1 on session 1: gap 19.9 in place of 10; back-adjusted 29.9 21 22 23 in place of 20 21 22 23.
    assert impact_of_price(market, chain, A, 1, 1.1, (1,)) == 1
    assert impact_of_price(market, chain, A, 1, 1.1, (2,)) == 1
    assert impact_of_price(market, chain, A, 1, 1.1, (3,)) == 1


def test_series_of_different_length_are_not_compared() -> None:
    with pytest.raises(ValueError, match="1 and 2 sessions"):
        count_different([1.0], [1.0, 2.0])
