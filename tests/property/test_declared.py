"""Declared markets, down to the rows that are published: the real chain tells them as the plain loops do."""

import random
import sys
from collections import Counter

import pytest
from hypothesis import assume, given, settings

from tests.property.coverage import DECLARED, as_text, count_declared, too_seldom
from tests.property.declared_strategies import draw_case, shapes
from tests.property.strategies import EFFORT, IS_LONG
from tests.reference.declared import declared_differences


def test_published_ledgers_and_series_of_any_declared_market_are_those_of_the_plain_telling(
    capsys: pytest.CaptureFixture[str],
) -> None:
    seen: Counter[str] = Counter()

    @settings(EFFORT, max_examples=4000 if IS_LONG else 40)
    @given(**shapes)
    def tell_twice(seed: int, length: int, contracts: int, plans: int) -> None:
        case = draw_case(seed, length, contracts, plans)
        assume(case is not None)
        assert case is not None
        seen.update(count_declared(case))
        seen["markets"] += 1
        assert declared_differences(case) == []

    tell_twice()
    if IS_LONG:
        with capsys.disabled():
            sys.stdout.write(
                f"\n{seen['markets']:,} markets declared, both tellings alike:\n{as_text(seen, DECLARED)}\n"
            )
        assert too_seldom(seen, 30, DECLARED) == {}


def test_declared_markets_hold_everything_a_desk_may_change_part_way() -> None:
    seen: Counter[str] = Counter()
    chance = random.Random(1)
    for seed in range(200):
        case = draw_case(seed, chance.choice((45, 70, 110)), chance.randint(3, 7), chance.randint(1, 3))
        if case is not None:
            seen.update(count_declared(case))
    assert too_seldom(seen, 3, DECLARED) == {}
