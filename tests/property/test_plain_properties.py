"""What holds of the plain telling on every random market, whatever the real code does."""

from dataclasses import replace

from hypothesis import given

from tests.property.strategies import LESS_EFFORT, markets_and_plans
from tests.reference.agree import is_near
from tests.reference.plain_market import PlainMarket, PlainPlan, truncate
from tests.reference.plain_rolls import lay_plain
from tests.reference.plain_splice import splice_plain, weights_at


@LESS_EFFORT
@given(markets_and_plans())
def test_the_back_adjusted_change_is_the_held_positions_change(drawn: tuple[PlainMarket, PlainPlan]) -> None:
    market, plan = drawn
    for chain in lay_plain(market, plan).chains.values():
        last = None
        for row in splice_plain(market, chain):
            if row["back_adjusted"] is None:
                assert row["settle"] is None or row["shift"] is None
                continue
            if last is not None:
                assert is_near(row["back_adjusted"] - last, row["change"])
            last = row["back_adjusted"]


@LESS_EFFORT
@given(markets_and_plans())
def test_the_ratio_adjusted_return_is_the_held_positions_return(drawn: tuple[PlainMarket, PlainPlan]) -> None:
    market, plan = drawn
    for chain in lay_plain(market, plan).chains.values():
        last = None
        for row in splice_plain(market, chain):
            if row["ratio_adjusted"] is None:
                continue
            if last is not None and row["simple_return"] is not None:
                assert is_near(row["ratio_adjusted"] / last - 1, row["simple_return"])
            last = row["ratio_adjusted"]


@LESS_EFFORT
@given(markets_and_plans())
def test_rolls_only_go_forward(drawn: tuple[PlainMarket, PlainPlan]) -> None:
    market, plan = drawn
    for chain in lay_plain(market, plan).chains.values():
        held = chain.first
        for row in chain.rows:
            assert row["outgoing"] == held
            assert market.contracts.index(row["incoming"]) > market.contracts.index(row["outgoing"])
            assert row["decided_on"] < row["effective_on"] < len(market.sessions)
            assert row["measured_on"] is None or row["measured_on"] < row["effective_on"]
            held = row["incoming"] if row["weight_after"] == 1.0 else held


@LESS_EFFORT
@given(markets_and_plans())
def test_a_market_cut_at_any_decision_decides_the_same_up_to_it(drawn: tuple[PlainMarket, PlainPlan]) -> None:
    market, plan = drawn
    whole = lay_plain(market, plan)
    ends = {decision.decided for chain in whole.chains.values() for decision in chain.decisions}
    for end in sorted(ends):
        cut = lay_plain(truncate(market, end), plan)
        for nearby, chain in whole.chains.items():
            assert cut.chains[nearby].decisions == [d for d in chain.decisions if d.decided <= end]
            assert cut.chains[nearby].rows == [row for row in chain.rows if row["effective_on"] <= end]


@LESS_EFFORT
@given(markets_and_plans())
def test_every_farther_nearby_starts_behind_the_contract_held_at_the_first(
    drawn: tuple[PlainMarket, PlainPlan],
) -> None:
    market, plan = drawn
    chains = lay_plain(market, replace(plan, nearbys=(1, 2, 3))).chains
    for nearby in (2, 3):
        start, first = chains[nearby].start, chains[nearby].first
        if start is None or first is None:
            continue
        nearest = next(iter(weights_at(chains[1], start)))
        assert market.contracts.index(first) >= market.contracts.index(nearest) + nearby - 1
