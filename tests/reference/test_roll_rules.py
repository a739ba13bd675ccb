"""The plain and the real telling of the roll rules agree with examples worked by hand.

Each group of examples has the source of its rule before it. The papers, with what was read of them:

- Ma, Mercer and Walker (1992), Rolling over futures contracts: a note, Journal of Futures Markets 12(2), 203-217: the
  day of leaving and the way of adjusting change what is found in a series (from memory; the paper was not open).
- Geiss (1995), Distortion-free futures price series, Journal of Futures Markets 15(7), 805-831: several contracts laid
  into one series by weights, without a jump where the weights move (from memory; the paper was not open).
- Carchano and Pardo (2009), Rolling over stock index futures contracts, Journal of Futures Markets 29(7), 684-694: five
  criteria for the day, and no significant difference between them for stock indices (abstract read; paper not open).
- Moskowitz, Ooi and Pedersen (2012), Time series momentum, Journal of Financial Economics 104(2), 228-250: trend
  signals on returns of the most liquid contract, compounded over rolls (abstract read; the rest from memory).
"""

from dataclasses import replace
from typing import Any

import pytest

from tests.reference.plain_market import PlainMarket, PlainPlan, truncate
from tests.reference.plain_rolls import count_from
from tests.reference.small import Values, small_market
from tests.reference.tellings import TELLINGS, Telling

A, B, C, D, E = "XX-2024-03", "XX-2024-06", "XX-2024-09", "XX-2024-12", "XX-2025-03"
FAR = {A: 90, B: 190, C: 290, D: 390, E: 490}


def flat(count: int, *levels: float) -> Values:
    """Contracts A, B, .. that settle at a level each on every session."""
    return {contract: [level] * count for contract, level in zip((A, B, C, D), levels, strict=False)}


@pytest.fixture(params=TELLINGS, name="tell")
def _tell(request: pytest.FixtureRequest) -> Telling:
    return TELLINGS[request.param]


def rolls(tell: Telling, market: PlainMarket, plan: PlainPlan, nearby: int = 1) -> list[tuple[Any, ...]]:
    """(decided, measured, effective, outgoing, incoming, trigger) of each ledger row."""
    names = ("decided_on", "measured_on", "effective_on", "outgoing", "incoming", "trigger")
    return [tuple(row[name] for name in names) for row in tell(market, plan).chains[nearby].rows]


# Leaving when the later contract trades more: one of the criteria compared by Carchano and Pardo (2009), from memory.
# To hold it from the session after, at the settles of the deciding one, is common practice, no source; so is asking
# for several sessions in a row.
def test_volume_on_one_session_rolls_on_the_next(tell: Telling) -> None:
    market = small_market(flat(5, 100, 105), FAR, volume={A: [9, 9, 4, 4, 4], B: [1, 9, 5, 5, 5]})
    assert rolls(tell, market, PlainPlan("p", "volume")) == [(2, 2, 3, A, B, "volume")]
    row = tell(market, PlainPlan("p", "volume")).chains[1].rows[0]
    assert (row["gap"], row["ratio"], row["outgoing_volume"], row["incoming_volume"]) == (5.0, 1.05, 4.0, 5.0)
    assert (row["weight_before"], row["weight_after"], row["step"]) == (0.0, 1.0, 1)


def test_equal_volume_does_not_exceed_and_missing_volume_is_no(tell: Telling) -> None:
    market = small_market(flat(4, 100, 105), FAR, volume={A: [9, 9, None, 4], B: [9, None, 9, 4]})
    assert rolls(tell, market, PlainPlan("p", "volume")) == []


def test_confirm_two_starts_again_after_a_session_of_no(tell: Telling) -> None:
    market = small_market(flat(7, 100, 105), FAR, volume={A: [1] * 7, B: [2, 0, 2, 2, 0, 0, 0]})
    assert rolls(tell, market, PlainPlan("p", "volume", confirm=2)) == [(3, 3, 4, A, B, "volume")]


def test_confirm_reaching_before_the_first_session_is_no(tell: Telling) -> None:
    market = small_market(flat(4, 100, 105), FAR, volume={A: [1] * 4, B: [2] * 4})
    assert rolls(tell, market, PlainPlan("p", "volume", confirm=3)) == [(2, 2, 3, A, B, "volume")]


# Leaving when more of the later contract is open: likewise (from memory). That its number is a session old: a
# settlement table printed on Monday 2018-05-21 has Friday's open interest (AP, CBOT corn 1,865,533).
def test_open_interest_is_known_a_session_late(tell: Telling) -> None:
    market = small_market(flat(6, 100, 105), FAR, open_interest={A: [9, 9, 1, 1, 1, 1], B: [3] * 6}, lag=1)
    assert rolls(tell, market, PlainPlan("p", "open interest")) == [(3, 3, 4, A, B, "open interest")]
    row = tell(market, PlainPlan("p", "open interest")).chains[1].rows[0]
    assert (row["outgoing_open_interest"], row["incoming_open_interest"]) == (1.0, 3.0)


# Both or either of the two: common practice, no source.
def test_both_needs_both_on_the_same_session_and_either_one_of_them_each_session(tell: Telling) -> None:
    market = small_market(
        flat(6, 100, 105),
        FAR,
        volume={A: [5] * 6, B: [1, 9, 1, 1, 9, 9]},
        open_interest={A: [5] * 6, B: [1, 1, 9, 1, 9, 9]},
    )
    assert rolls(tell, market, PlainPlan("p", "both")) == [(4, 4, 5, A, B, "both")]
    assert rolls(tell, market, PlainPlan("p", "either", confirm=2)) == [(2, 2, 3, A, B, "either")]


# Leaving a fixed number of sessions before the end: the plainest of the criteria of Ma, Mercer and Walker (1992) and of
# Carchano and Pardo (2009), from memory. Before first notice, where a long position may be given the goods: common
# practice, no source.
def test_backstop_holds_the_incoming_from_that_many_sessions_before_last_trade(tell: Telling) -> None:
    market = small_market(flat(12, 100, 105), {**FAR, A: 8})
    assert rolls(tell, market, PlainPlan("p", "volume", backstop=2)) == [(5, 5, 6, A, B, "backstop")]
    assert rolls(tell, market, PlainPlan("p", "calendar", backstop=2, delay=3)) == [(3, 5, 6, A, B, "calendar")]


def test_the_trigger_is_named_where_it_fires_on_the_deadline(tell: Telling) -> None:
    market = small_market(flat(12, 100, 105), {**FAR, A: 8}, volume={A: [5] * 12, B: [1] * 5 + [9] * 7})
    assert rolls(tell, market, PlainPlan("p", "volume", backstop=2)) == [(5, 5, 6, A, B, "volume")]


@pytest.mark.parametrize(("before", "effective"), [("last trade", 8), ("first notice", 6), ("earlier", 6)])
def test_the_backstop_counts_from_the_named_day(tell: Telling, before: str, effective: int) -> None:
    market = small_market(flat(12, 100, 105), {**FAR, A: 8}, first_notice={**FAR, A: 6})
    assert [row[2] for row in rolls(tell, market, PlainPlan("p", "calendar", before=before))] == [effective]


# Going into the most active contract, past illiquid months: the returns of Moskowitz, Ooi and Pedersen (2012) are those
# of the most liquid contract (from memory). Holding chosen months only: common practice, no source.
def test_most_active_skips_and_a_tie_goes_to_the_nearest(tell: Telling) -> None:
    settle = flat(6, 100, 105, 110, 115)
    tied = small_market(settle, FAR, volume={A: [5] * 6, B: [6, 1, 1, 1, 1, 1], C: [7] + [1] * 5, D: [7] + [1] * 5})
    assert rolls(tell, tied, PlainPlan("p", "volume", incoming="most active")) == [(0, 0, 1, A, C, "volume")]
    nothing = small_market(settle, {**FAR, A: 3})
    assert rolls(tell, nothing, PlainPlan("p", "volume", incoming="most active")) == [(2, 2, 3, A, B, "backstop")]


def test_only_the_plans_months_are_held(tell: Telling) -> None:
    market = small_market(flat(12, 100, 105, 110), {**FAR, A: 5})
    assert rolls(tell, market, PlainPlan("p", "calendar", months=(3, 9))) == [(4, 4, 5, A, C, "calendar")]


def test_the_first_held_is_the_nearest_before_its_deadline_with_a_usable_settle(tell: Telling) -> None:
    settle: Values = {A: [100] * 4, B: [None, None, 105, 105], C: [110] * 4}
    chain = tell(small_market(settle, {**FAR, A: 0}, unusable=((C, 0),)), PlainPlan("p", "calendar")).chains[1]
    assert (chain.start, chain.first) == (1, C)


# Moving in equal parts over several sessions: as published of a commodity index (test_index_roll.py has it); weights
# that move without a jump in the series: Geiss (1995), from memory.
def test_two_steps_move_half_each_and_end_on_the_deadline(tell: Telling) -> None:
    market = small_market(flat(12, 100, 110), {**FAR, A: 8})
    rows = tell(market, PlainPlan("p", "calendar", steps=2)).chains[1].rows
    assert [(r["decided_on"], r["measured_on"], r["effective_on"], r["step"]) for r in rows] == [
        (6, 6, 7, 1),
        (6, 7, 8, 2),
    ]
    assert [(r["weight_before"], r["weight_after"], r["gap"]) for r in rows] == [
        (0.0, 0.5, 5.0),
        (0.5, 1.0, 5.0),
    ]
    assert [r["ratio"] for r in rows] == [pytest.approx(105 / 100), pytest.approx(110 / 105)]


# A person's decision comes before the rule: common practice, no source.
def test_a_forced_roll_silences_trigger_and_deadline_of_its_contract(tell: Telling) -> None:
    volume: Values = {A: [1] * 12, B: [9] * 12, C: [1] * 12}
    market = small_market(flat(12, 100, 105, 110), {**FAR, A: 9, B: 11}, volume=volume)
    assert rolls(tell, market, PlainPlan("p", "volume", backstop=5, delay=2, force=((A, 8),))) == [
        (6, 7, 8, A, B, "forced"),
        (8, 9, 10, B, C, "backstop"),
    ]


def test_a_forced_roll_of_a_contract_not_held_is_reported_and_the_rule_counts_again(tell: Telling) -> None:
    market = small_market(flat(12, 100, 105, 110), {**FAR, A: 4, B: 8})
    laid = tell(market, PlainPlan("p", "calendar", force=((B, 3),)))
    assert laid.unused_force == [B]
    assert [(r["effective_on"], r["trigger"]) for r in laid.chains[1].rows] == [
        (4, "calendar"),
        (8, "calendar"),
    ]


# Both settles of a gap from one session's close, so that it holds no move in time: Geiss (1995), from memory. To wait
# for them, and what to do where they never come: our own choice.
def test_a_roll_waits_until_both_settles_are_usable(tell: Telling) -> None:
    market = small_market(flat(12, 100, 105), {**FAR, A: 8}, unusable=((A, 5), (B, 6)))
    assert rolls(tell, market, PlainPlan("p", "calendar", backstop=2)) == [(5, 7, 8, A, B, "calendar")]
    assert [row["postponed"] for row in tell(market, PlainPlan("p", "calendar", backstop=2)).chains[1].rows] == [2]


def test_each_step_counts_the_sessions_it_waited(tell: Telling) -> None:
    """Three steps due from sessions 3, 4 and 5 on: the first on time, the second a session late and so the third."""
    market = small_market(flat(12, 100, 105), {**FAR, A: 8}, unusable=((A, 4),))
    rows = tell(market, PlainPlan("p", "calendar", steps=3, backstop=2)).chains[1].rows
    assert [(row["effective_on"], row["postponed"]) for row in rows] == [(4, 0), (6, 1), (7, 1)]


def test_the_outgoings_last_trading_session_is_the_last_to_wait_for(tell: Telling) -> None:
    market = small_market(flat(12, 100, 105), {**FAR, A: 8}, unusable=((A, 7),))
    assert rolls(tell, market, PlainPlan("p", "calendar")) == [(7, 8, 9, A, B, "calendar")]


def test_without_a_later_session_the_latest_earlier_one_measures(tell: Telling) -> None:
    market = small_market(flat(12, 100, 105), {**FAR, A: 8}, unusable=tuple((A, s) for s in range(5, 9)))
    row = tell(market, PlainPlan("p", "calendar", backstop=2)).chains[1].rows[0]
    assert (row["decided_on"], row["measured_on"], row["effective_on"], row["is_stale"]) == (5, 4, 9, True)


def test_a_stale_step_moves_all_that_is_left(tell: Telling) -> None:
    market = small_market(flat(14, 100, 112), {**FAR, A: 8}, unusable=((A, 7), (A, 8)))
    rows = tell(market, PlainPlan("p", "calendar", steps=4, backstop=1)).chains[1].rows
    assert [(r["measured_on"], r["effective_on"], r["weight_before"], r["weight_after"], r["gap"]) for r in rows] == [
        (3, 4, 0.0, 0.25, 3.0),
        (4, 5, 0.25, 0.5, 3.0),
        (5, 6, 0.5, 0.75, 3.0),
        (6, 7, 0.75, 1.0, 3.0),
    ]
    late = small_market(flat(14, 100, 112), {**FAR, A: 8}, unusable=((A, 5), (A, 6), (A, 7), (A, 8)))
    rows = tell(late, PlainPlan("p", "calendar", steps=4, backstop=1)).chains[1].rows
    assert [(r["step"], r["measured_on"], r["effective_on"], r["weight_after"], r["gap"]) for r in rows] == [
        (1, 3, 4, 0.25, 3.0),
        (2, 4, 5, 0.5, 3.0),
        (3, 4, 9, 1.0, 6.0),
    ]


def test_two_steps_left_at_the_last_trading_session_are_effective_together(tell: Telling) -> None:
    market = small_market(flat(14, 100, 112), {**FAR, A: 8}, unusable=((A, 6), (A, 7)))
    rows = tell(market, PlainPlan("p", "calendar", steps=3)).chains[1].rows
    assert [(r["step"], r["measured_on"], r["effective_on"], r["weight_after"]) for r in rows] == [
        (1, 5, 6, 1 / 3),
        (2, 8, 9, 2 / 3),
        (3, 8, 9, 1.0),
    ]


def test_a_later_contract_takes_the_place_of_one_that_never_stood_beside_the_outgoing(tell: Telling) -> None:
    settle: Values = {A: [100.0] * 9 + [None] * 3, B: [None] * 9 + [105.0] * 3, C: [110.0] * 12}
    market = small_market(settle, {**FAR, A: 8}, bars=((B, 3),), unusable=((C, 8), (C, 7), (C, 6)))
    assert rolls(tell, market, PlainPlan("p", "calendar", backstop=2)) == [(5, 5, 9, A, C, "calendar")]


def test_a_chain_is_broken_where_nothing_ever_stood_beside_the_outgoing(tell: Telling) -> None:
    settle: Values = {A: [100.0] * 9 + [None] * 3, B: [None] * 10 + [105.0] * 2}
    market = small_market(settle, {**FAR, A: 8}, bars=((B, 3),))
    row = tell(market, PlainPlan("p", "calendar", backstop=2)).chains[1].rows[0]
    assert (row["decided_on"], row["measured_on"], row["effective_on"], row["incoming"]) == (5, None, 10, B)
    assert (row["gap"], row["ratio"], row["outgoing_settle"], row["incoming_settle"]) == (
        None,
        None,
        None,
        None,
    )


@pytest.mark.parametrize("last", [7, 8])
def test_a_broken_chain_begins_anew_after_the_last_trade_even_where_the_incoming_stands_on_it(
    tell: Telling, last: int
) -> None:
    settle: Values = {A: [100.0] * last + [None] * (12 - last), B: [None] * last + [105.0] * (12 - last)}
    market = small_market(settle, {**FAR, A: last}, bars=((B, 3),))
    assert rolls(tell, market, PlainPlan("p", "calendar")) == [(last - 1, None, last + 1, A, B, "calendar")]


def test_a_broken_chain_begins_anew_behind_what_was_held_even_where_an_earlier_delivery_trades_longer(
    tell: Telling,
) -> None:
    """B ends on 5, A, delivered before it, on 90; A has settles from 6 on and C from 7 on."""
    settle: Values = {A: [None] * 6 + [100.0] * 4, B: [105.0] * 6 + [None] * 4, C: [None] * 7 + [110.0] * 3}
    market = small_market(settle, {**FAR, B: 5}, bars=((A, 0), (C, 0)))
    assert rolls(tell, market, PlainPlan("p", "calendar")) == [(4, None, 7, B, C, "calendar")]


def test_without_a_known_incoming_nothing_is_decided_and_a_late_one_comes_too_late_to_measure(tell: Telling) -> None:
    settle: Values = {A: [100.0] * 12, B: [None] * 10 + [105.0] * 2}
    assert rolls(tell, small_market(settle, {**FAR, A: 8}), PlainPlan("p", "calendar", delay=1)) == [
        (10, None, 11, A, B, "calendar")
    ]


def test_a_roll_not_effective_by_the_last_session_waits_outside_the_ledger(tell: Telling) -> None:
    chain = tell(small_market(flat(6, 100, 105), {**FAR, A: 6}), PlainPlan("p", "calendar")).chains[1]
    assert chain.rows == []
    assert chain.is_waiting
    assert chain.decisions == [(5, A, B, "calendar")]


@pytest.mark.parametrize("count", [6, 300])
def test_a_roll_measured_on_the_very_last_session_waits_however_long_the_data(tell: Telling, count: int) -> None:
    market = small_market(flat(count, 100, 105), {**FAR, A: count})
    chain = tell(market, PlainPlan("p", "calendar")).chains[1]
    assert (chain.decisions, chain.rows, chain.is_waiting) == ([(count - 1, A, B, "calendar")], [], True)


# Counting nearbys from the contract held, and rolling them together: common practice, no source.
def test_the_second_nearby_rolls_with_the_first(tell: Telling) -> None:
    plan = PlainPlan("p", "calendar", nearbys=(1, 2))
    market = small_market(flat(12, 100, 105, 110), {**FAR, A: 5})
    assert rolls(tell, market, plan, 1) == [(4, 4, 5, A, B, "calendar")]
    assert rolls(tell, market, plan, 2) == [(4, 4, 5, B, C, "calendar")]


def test_the_second_nearby_waits_by_itself(tell: Telling) -> None:
    plan = PlainPlan("p", "calendar", nearbys=(1, 2))
    market = small_market(flat(12, 100, 105, 110), {**FAR, A: 5}, unusable=((C, 4), (C, 5)))
    assert rolls(tell, market, plan, 1) == [(4, 4, 5, A, B, "calendar")]
    assert rolls(tell, market, plan, 2) == [(4, 6, 7, B, C, "calendar")]


def test_the_second_nearby_keeps_its_plan_where_the_first_waits(tell: Telling) -> None:
    plan = PlainPlan("p", "calendar", nearbys=(1, 2))
    market = small_market(flat(12, 100, 105, 110), {**FAR, A: 6}, unusable=((A, 5),))
    assert rolls(tell, market, plan, 1) == [(5, 6, 7, A, B, "calendar")]
    assert rolls(tell, market, plan, 2) == [(5, 5, 6, B, C, "calendar")]


def test_a_second_nearby_that_still_waits_goes_straight_to_the_next_target(tell: Telling) -> None:
    plan = PlainPlan("p", "calendar", nearbys=(2,))
    market = small_market(
        flat(14, 100, 105, 110, 115), {**FAR, A: 4, B: 9}, unusable=tuple((C, s) for s in range(3, 14))
    )
    chain = tell(market, plan).chains[2]
    assert chain.decisions == [(3, B, C, "calendar"), (8, B, D, "calendar")]
    assert rolls(tell, market, plan, 2) == [(8, 8, 9, B, D, "calendar")]


def test_a_second_nearby_that_has_moved_a_step_finishes_before_it_goes_on(tell: Telling) -> None:
    plan = PlainPlan("p", "calendar", steps=2, nearbys=(1, 2))
    market = small_market(
        flat(16, 100, 105, 110, 115), {**FAR, A: 4, B: 9}, unusable=tuple((C, s) for s in (3, 4, 5, 6, 7, 8))
    )
    rows = tell(market, plan).chains[2].rows
    assert [(r["decided_on"], r["measured_on"], r["effective_on"], r["outgoing"], r["incoming"]) for r in rows] == [
        (2, 2, 3, B, C),
        (2, 9, 10, B, C),
        (7, 10, 11, C, D),
        (7, 11, 12, C, D),
    ]


def test_a_second_nearby_unknown_on_the_decision_is_decided_when_it_is_listed(tell: Telling) -> None:
    plan = PlainPlan("p", "calendar", delay=2, nearbys=(1, 2))
    settle: Values = {A: [100.0] * 12, B: [105.0] * 12, C: [None] * 6 + [110.0] * 6}
    market = small_market(settle, {**FAR, A: 5})
    assert rolls(tell, market, plan, 1) == [(3, 4, 5, A, B, "calendar")]
    assert rolls(tell, market, plan, 2) == [(6, 6, 7, B, C, "calendar")]


def test_a_second_nearby_starts_when_there_is_one(tell: Telling) -> None:
    settle: Values = {A: [100.0] * 6, B: [None, None, 105.0, 105.0, 105.0, 105.0]}
    chain = tell(small_market(settle, FAR), PlainPlan("p", "calendar", nearbys=(2,))).chains[2]
    assert (chain.start, chain.first, chain.rows) == (2, B, [])


def test_a_second_nearby_effective_on_the_last_session_is_in_the_ledger_and_waits_for_nothing(tell: Telling) -> None:
    plan = PlainPlan("p", "calendar", nearbys=(1, 2))
    market = small_market(flat(6, 100, 105, 110), {**FAR, A: 5})
    assert rolls(tell, market, plan, 2) == [(4, 4, 5, B, C, "calendar")]
    assert not tell(market, plan).chains[2].is_waiting


def test_a_second_nearby_not_known_before_the_first_decides_again_follows_the_later_decision(tell: Telling) -> None:
    """A to B is decided on 2, when no C is known; C is listed on 6, when B to C is decided; D is listed on 8."""
    settle: Values = {
        A: [100.0] * 12, B: [105.0] * 12, C: [None] * 6 + [110.0] * 6, D: [None] * 8 + [115.0] * 4,
    }  # fmt: skip
    market = small_market(settle, {**FAR, A: 7, B: 9})
    plan = PlainPlan("p", "calendar", backstop=4, nearbys=(1, 2))
    assert rolls(tell, market, plan, 1) == [(2, 2, 3, A, B, "calendar"), (6, 6, 7, B, C, "calendar")]
    assert rolls(tell, market, plan, 2) == [(8, 8, 9, B, D, "calendar")]


def test_a_second_nearby_that_ended_in_another_contract_than_decided_goes_on_from_that_one(tell: Telling) -> None:
    """B to D, decided on 1, finds no D beside B up to B's end on 5: E takes its place; it is the second from D then."""
    volume: Values = {A: [1] * 12, B: [1] * 12, C: [1] + [9] * 11, D: [1] * 8 + [20] * 4, E: [1] * 12}
    market = small_market(
        {**flat(12, 100, 105, 110, 115), E: [120.0] * 12}, {**FAR, B: 5}, volume=volume,
        unusable=tuple((D, s) for s in range(8)),
    )  # fmt: skip
    plan = PlainPlan("p", "volume", incoming="most active", nearbys=(1, 2))
    assert rolls(tell, market, plan, 1) == [(1, 1, 2, A, C, "volume"), (8, 8, 9, C, D, "volume")]
    assert rolls(tell, market, plan, 2) == [(1, 5, 6, B, E, "volume")]
    assert tell(market, plan).chains[2].decisions == [(1, B, D, "volume")]


def test_counting_from_the_incoming_counts_it_as_the_first() -> None:
    market = small_market(flat(3, 100, 105, 110), FAR)
    plan = PlainPlan("p", "calendar")
    assert [count_from(market, plan, B, n, 0) for n in (1, 2, 3)] == [B, C, None]


def test_a_shorter_market_decides_the_same_up_to_its_end(tell: Telling) -> None:
    volume: Values = {A: [9, 9, 1, 1, 1, 1], B: [1, 1, 5, 5, 1, 1], C: [0, 0, 0, 0, 4, 4]}
    market, plan = small_market(flat(6, 100, 105, 110), FAR, volume=volume), PlainPlan("p", "volume")
    assert tell(market, plan).chains[1].decisions == [
        (2, A, B, "volume"),
        (4, B, C, "volume"),
    ]
    assert tell(truncate(market, 3), plan).chains[1].decisions == [(2, A, B, "volume")]


def test_confirm_longer_than_the_data_is_never_fulfilled(tell: Telling) -> None:
    market = small_market(flat(4, 100, 105), FAR, volume={A: [1] * 4, B: [2] * 4})
    assert rolls(tell, market, PlainPlan("p", "volume", confirm=9)) == []


@pytest.mark.parametrize("lag", [4, 5, 9])
def test_open_interest_known_later_than_the_data_reach_decides_nothing(tell: Telling, lag: int) -> None:
    market = small_market(flat(4, 100, 105), FAR, open_interest={A: [1] * 4, B: [2] * 4}, lag=lag)
    assert rolls(tell, market, PlainPlan("p", "open interest")) == []


def test_a_settle_between_zero_and_one_has_a_ratio_and_zero_has_none(tell: Telling) -> None:
    plan = PlainPlan("p", "calendar")
    for outgoing, incoming, ratio in ((0.5, 0.75, 1.5), (0.5, 0.0, None), (0.0, 0.5, None), (0.5, -0.5, None)):
        market = small_market(flat(6, outgoing, incoming), {**FAR, A: 3})
        assert [row["ratio"] for row in tell(market, plan).chains[1].rows] == [ratio]


@pytest.mark.parametrize("listed", [4, 5])
def test_a_contract_listed_between_two_others_makes_the_third_nearby_known_and_is_not_measured_before(
    tell: Telling, listed: int
) -> None:
    """Volume leads from A to C on session 1. Counted from C there are C and E; D, listed later, makes E the third."""
    settle = dict(flat(8, 100, 105, 110), **{E: [120.0] * 8, D: [None] * listed + [115.0] * (8 - listed)})
    volume: Values = {A: [9, 1, 1, 1, 1, 1, 1, 1], B: [1] * 8, C: [5] * 8}
    plan = PlainPlan("p", "volume", incoming="most active", nearbys=(1, 3))
    market = small_market(settle, FAR, volume=volume)
    assert rolls(tell, market, plan, 1) == [(1, 1, 2, A, C, "volume")]
    assert rolls(tell, market, plan, 3) == [(listed, listed, listed + 1, C, E, "volume")]


def test_a_farther_nearby_alone_is_laid_as_beside_the_first(tell: Telling) -> None:
    market = small_market(flat(12, 100, 105, 110), {**FAR, A: 5})
    laid = tell(market, PlainPlan("p", "calendar", nearbys=(2,), force=((B, 3),)))
    assert [(row["effective_on"], row["outgoing"], row["incoming"]) for row in laid.chains[2].rows] == [(5, B, C)]
    assert laid.unused_force == [B]


@pytest.mark.parametrize(
    ("delay", "effective", "unused"),
    [(2, -4, [B]), (2, 0, [B]), (2, 7, [B]), (2, 8, []), (2, 40, []), (1, 6, [B]), (1, 7, [])],
)
def test_a_forced_roll_is_unused_once_its_decision_session_has_come(
    tell: Telling, delay: int, effective: int, unused: list[str]
) -> None:
    """Sessions 0 to 5: with a delay of two, effective on 7 is decided on 5, on 8 after the end of the data."""
    market = small_market(flat(6, 100, 105, 110), FAR)
    plan = PlainPlan("p", "calendar", delay=delay, nearbys=(1, 2), force=((B, effective),))
    assert tell(market, plan).unused_force == unused


@pytest.mark.parametrize(("delay", "effective"), [(1, 0), (2, 1), (3, -4), (3, 2)])
def test_a_forced_roll_that_would_have_been_decided_before_the_first_session_is_unused_and_the_rule_counts(
    tell: Telling, delay: int, effective: int
) -> None:
    market = small_market(flat(12, 100, 105, 110), {**FAR, A: 8})
    laid = tell(market, PlainPlan("p", "calendar", delay=delay, force=((A, effective),)))
    assert laid.chains[1].decisions == [(8 - delay, A, B, "calendar")]
    assert laid.unused_force == [A]


def test_a_surprise_session_moves_the_decision_of_a_forced_roll_before_the_first_session(tell: Telling) -> None:
    """Effective on 2 with a delay of two is decided on 0; with 1 a surprise, on the session before, which is none."""
    market = small_market(flat(12, 100, 105, 110), {**FAR, A: 8})
    plan = PlainPlan("p", "calendar", delay=2, force=((A, 2),))
    assert tell(market, plan).chains[1].decisions == [(0, A, B, "forced")]
    surprised = tell(replace(market, unscheduled={1}), plan)
    assert surprised.chains[1].decisions == [(6, A, B, "calendar")]
    assert surprised.unused_force == [A]


def test_a_forced_roll_decided_on_the_last_session_is_used_and_pending(tell: Telling) -> None:
    market = small_market(flat(6, 100, 105, 110), FAR)
    laid = tell(market, PlainPlan("p", "volume", force=((A, 6),)))
    assert laid.chains[1].decisions == [(5, A, B, "forced")]
    assert (laid.chains[1].rows, laid.chains[1].is_waiting, laid.unused_force) == ([], True, [])


def test_a_forced_roll_without_a_known_incoming_is_unused_and_the_rule_counts_again(tell: Telling) -> None:
    settle: Values = {A: [100.0] * 10, B: [None] * 5 + [105.0] * 5}
    laid = tell(small_market(settle, {**FAR, A: 7}), PlainPlan("p", "calendar", force=((A, 4),)))
    assert laid.chains[1].decisions == [(6, A, B, "calendar")]
    assert laid.unused_force == [A]


@pytest.mark.parametrize("trigger", ["volume", "open interest", "either"])
def test_a_forced_roll_stays_unused_where_its_contract_is_left_by_the_trigger_later(
    tell: Telling, trigger: str
) -> None:
    settle: Values = {A: [100.0] * 10, B: [None] * 5 + [105.0] * 5}
    activity: Values = {A: [1] * 10, B: [None] * 5 + [2] * 5}
    market = small_market(settle, FAR, volume=activity, open_interest=activity)
    laid = tell(market, PlainPlan("p", trigger, force=((A, 4),)))
    assert laid.chains[1].decisions == [(5, A, B, trigger)]
    assert laid.unused_force == [A]


@pytest.mark.parametrize("incoming", ["next", "most active"])
@pytest.mark.parametrize("effective", [7, 8, 40])
def test_a_forced_roll_after_the_data_is_not_decided_yet(tell: Telling, effective: int, incoming: str) -> None:
    market = small_market(flat(6, 100, 105, 110), FAR, volume={A: [1] * 6, B: [9] * 6})
    laid = tell(market, PlainPlan("p", "volume", incoming=incoming, force=((A, effective),)))
    assert (laid.chains[1].decisions, laid.chains[1].is_waiting, laid.unused_force) == ([], False, [])


def test_a_forced_roll_due_while_another_is_pending_is_unused(tell: Telling) -> None:
    """A to B is decided on 2 and waits until 6; a decision of B on 4 finds it not held yet."""
    market = small_market(flat(12, 100, 105, 110), {**FAR, A: 8, B: 11}, unusable=tuple((A, s) for s in (2, 3, 4, 5)))
    laid = tell(market, PlainPlan("p", "calendar", backstop=5, force=((B, 5),)))
    assert [(row["decided_on"], row["effective_on"]) for row in laid.chains[1].rows] == [(2, 7), (7, 8)]
    assert laid.unused_force == [B]


def test_nothing_is_held_where_no_contract_is_before_its_deadline(tell: Telling) -> None:
    chain = tell(small_market(flat(4, 100), {A: 3}), PlainPlan("p", "calendar", backstop=3)).chains[1]
    assert (chain.start, chain.rows, chain.series) == (None, [], [])


def test_the_two_legs_of_a_ratio_are_the_mixes_before_and_after_the_step(tell: Telling) -> None:
    """From 3/4 of 80 and 1/4 of 120, which is 90, to half and half, which is 100; then 110, then 120."""
    market = small_market(flat(12, 80, 120), {**FAR, A: 8})
    rows = tell(market, PlainPlan("p", "calendar", steps=4)).chains[1].rows
    assert [row["ratio"] for row in rows] == [90 / 80, 100 / 90, 110 / 100, 120 / 110]
    assert [row["gap"] for row in rows] == [10.0, 10.0, 10.0, 10.0]
    assert [row["weight_after"] for row in rows] == [0.25, 0.5, 0.75, 1.0]
