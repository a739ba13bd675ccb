"""Declared markets, down to the rows that are published: the real chain tells them as the plain loops do."""

from hypothesis import assume, given, settings

from tests.property.declared_strategies import draw_case, shapes
from tests.property.strategies import EFFORT, IS_LONG
from tests.reference.declared import declared_differences


@settings(EFFORT, max_examples=4000 if IS_LONG else 40)
@given(**shapes)
def test_published_ledgers_and_series_of_any_declared_market_are_those_of_the_plain_telling(
    seed: int, length: int, contracts: int, plans: int
) -> None:
    case = draw_case(seed, length, contracts, plans)
    assume(case is not None)
    assert case is not None
    assert declared_differences(case) == []
