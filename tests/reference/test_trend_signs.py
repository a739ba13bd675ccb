"""The sign score over a week, two weeks, a month and two months: common practice, no source."""

import random

import numpy as np
import pytest

from contracts.trend import impact_of_gap, sign_score
from tests.reference import plain_trend
from tests.reference.plain_trend import plain_score

LOOK_BACKS = (5, 10, 21, 42)


def series_with_signs(signs: str) -> list[float | None]:
    """43 sessions at 100, of which the last stands above or below those the four look-backs reach."""
    values: list[float | None] = [100.0] * 43
    for back, sign in zip(LOOK_BACKS, signs, strict=True):
        values[42 - back] = {"+": 99.0, "-": 101.0, "0": 100.0}[sign]
    return values


@pytest.mark.parametrize(
    ("signs", "score", "share"),
    [
        ("+-++", 2, 0.5),
        ("--+-", -2, -0.5),
        ("-++-", 0, 0.0),
        ("++++", 4, 1.0),
        ("----", -4, -1.0),
        ("+0++", 3, 0.75),
    ],
)
def test_four_signs_add_up_to_the_score(signs: str, score: int, share: float) -> None:
    values = series_with_signs(signs)
    assert plain_score(values, 42) == score
    real = sign_score(np.array(values), LOOK_BACKS)
    assert real[42] == score
    assert real[42] / len(LOOK_BACKS) == share


def test_there_is_no_score_before_the_longest_look_back_or_beside_a_missing_price() -> None:
    values: list[float | None] = [float(t) for t in range(100)]
    values[60] = None
    real = sign_score(np.array([np.nan if v is None else v for v in values]), LOOK_BACKS)
    missing = [t for t in range(100) if np.isnan(real[t])]
    assert missing == [*range(42), 60, 65, 70, 81]
    assert [t for t in range(100) if plain_score(values, t) is None] == missing


def test_real_and_plain_score_the_same_random_walks() -> None:
    chance = random.Random(7)
    for _ in range(40):
        walk, values = 100.0, list[float | None]()
        for _ in range(chance.choice([1, 30, 43, 120])):
            walk += chance.randint(-2, 2) / 4
            values.append(None if chance.random() < 0.02 else walk)
        real = sign_score(np.array([np.nan if v is None else v for v in values]), LOOK_BACKS)
        assert [None if np.isnan(score) else int(score) for score in real] == [
            plain_score(values, t) for t in range(len(values))
        ]


def test_real_and_plain_count_the_same_sessions_for_a_gap_left_in() -> None:
    chance = random.Random(8)
    turned = 0
    for _ in range(60):
        walk, values = 100.0, list[float | None]()
        for _ in range(150):
            walk += chance.randint(-2, 2) / 4
            values.append(None if chance.random() < 0.01 else walk)
        effective, gap = chance.randint(1, 149), chance.choice([-5.0, -0.5, 0.5, 3.0])
        expected = plain_trend.impact_of_gap(values, effective, gap)
        real = impact_of_gap(np.array([np.nan if v is None else v for v in values]), effective, gap, LOOK_BACKS)
        assert real == expected
        turned += expected
    assert turned > 100
