"""The real roll and splice code tells random markets as the plain telling does, and keeps its promises."""

import sys
from collections import Counter

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.property.coverage import as_text, count, too_seldom
from tests.property.strategies import (
    BLOCK,
    EFFORT,
    IS_LONG,
    LESS_EFFORT,
    WIDE_CASES,
    markets_and_plans,
    surprised,
    wide_case,
)
from tests.reference.agree import compare, differences, is_near
from tests.reference.plain_market import PlainMarket, PlainPlan, truncate
from tests.reference.plain_rolls import lay_plain
from tests.reference.plain_splice import splice_plain
from tests.reference.real import lay_real


def test_real_and_plain_agree_on_days_exactly_and_on_numbers_to_a_billionth(
    capsys: pytest.CaptureFixture[str],
) -> None:
    """In the long run, also: no option and no outcome is drawn seldom."""
    seen: Counter[str] = Counter()

    @EFFORT
    @given(st.one_of(markets_and_plans(), markets_and_plans(), surprised()))
    def tell_twice(drawn: tuple[PlainMarket, PlainPlan]) -> None:
        compared = compare(*drawn)
        seen.update(count(*drawn, compared.laid, compared.series))
        seen["markets"] += 1
        assert compared.differences == []

    tell_twice()
    if IS_LONG:
        with capsys.disabled():
            sys.stdout.write(f"\n{seen['markets']:,} markets drawn, both tellings alike:\n{as_text(seen)}\n")
        assert too_seldom(seen, 30) == {}


@pytest.mark.parametrize("first", range(0, WIDE_CASES, BLOCK))
def test_real_and_plain_agree_on_cases_drawn_evenly(first: int) -> None:
    failed = {}
    for seed in range(first, first + BLOCK):
        market, plan = wide_case(seed)
        found = differences(market, plan)
        if found:
            failed[seed] = (len(market.sessions) * len(market.contracts), found[0])
    smallest = min(failed.items(), key=lambda item: item[1][0], default=None)
    assert not failed, f"{len(failed)} of {BLOCK} seeds from {first}, the smallest: {smallest}"


def test_cases_drawn_evenly_hold_every_option_and_every_outcome() -> None:
    seen: Counter[str] = Counter()
    for seed in range(1000):
        market, plan = wide_case(seed)
        laid = lay_plain(market, plan)
        seen.update(count(market, plan, laid, {n: splice_plain(market, chain) for n, chain in laid.chains.items()}))
    assert too_seldom(seen, 3) == {}


@LESS_EFFORT
@given(markets_and_plans())
def test_real_back_adjusted_change_is_the_held_positions_change(drawn: tuple[PlainMarket, PlainPlan]) -> None:
    for chain in lay_real(*drawn).values():
        assert chain.identity_error is None
        last = None
        for row in chain.series:
            if row["back_adjusted"] is None:
                continue
            if last is not None:
                assert is_near(row["back_adjusted"] - last, row["change"])
            last = row["back_adjusted"]


@LESS_EFFORT
@given(markets_and_plans())
def test_real_ratio_adjusted_return_is_the_held_positions_return(
    drawn: tuple[PlainMarket, PlainPlan],
) -> None:
    for chain in lay_real(*drawn).values():
        last = None
        for row in chain.series:
            if row["ratio_adjusted"] is None:
                continue
            if last is not None and last > 0 and row["ratio_adjusted"] > 0:
                assert is_near(row["ratio_adjusted"] / last - 1, row["simple_return"])
            last = row["ratio_adjusted"]


@LESS_EFFORT
@given(markets_and_plans())
def test_real_rolls_only_go_forward_and_take_effect_after_they_are_decided(
    drawn: tuple[PlainMarket, PlainPlan],
) -> None:
    market, _ = drawn
    for chain in lay_real(*drawn).values():
        for row in chain.rows:
            assert market.contracts.index(row["incoming"]) > market.contracts.index(row["outgoing"])
            assert row["decided_on"] < row["effective_on"] < len(market.sessions)
            assert row["measured_on"] is None or row["measured_on"] < row["effective_on"]


@LESS_EFFORT
@given(markets_and_plans())
def test_real_decisions_use_nothing_that_was_not_known_at_their_close(
    drawn: tuple[PlainMarket, PlainPlan],
) -> None:
    market, plan = drawn
    whole = lay_real(market, plan)
    ends = {decided for chain in whole.values() for decided, *_ in chain.decisions}
    for end in sorted(ends):
        cut = lay_real(truncate(market, end), plan)
        for nearby, chain in whole.items():
            assert cut[nearby].decisions == [decision for decision in chain.decisions if decision[0] <= end]
            assert cut[nearby].rows == [row for row in chain.rows if row["effective_on"] <= end]
