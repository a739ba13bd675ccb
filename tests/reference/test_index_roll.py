"""A roll in fifths over business days 5 to 9 gives the published method's weights and excess return.

Weights move by quantity in fifths after the close of business days 5 to 9, as the S&P GSCI roll period is
published (goldmansachs.com, S&P GSCI roll period page). The excess return is
sum w(t-1) P(t) / sum w(t-1) P(t-1) - 1, compounded from 100 on day 4 (formula from memory; prices
invented, values computed).
"""

import pytest

from tests.reference.plain_market import PlainPlan
from tests.reference.plain_rolls import lay_plain
from tests.reference.plain_splice import splice_plain
from tests.reference.real import lay_real
from tests.reference.small import small_market

NEAR, FAR = "XX-2024-03", "XX-2024-06"
# Business days 4 to 10; day 4 is session 0.
MARKET = small_market(
    {
        NEAR: [100.0, 101.0, 99.0, 100.0, 102.0, 103.0, 101.0],
        FAR: [105.0, 106.5, 104.0, 105.0, 107.0, 108.5, 106.0],
    },
    # All is held in the far contract from day 10, session 6.
    {NEAR: 6, FAR: 99},
)
PLAN = PlainPlan("fifths", "calendar", steps=5)
NEAR_WEIGHT_AFTER_CLOSE = [1.0, 0.8, 0.6, 0.4, 0.2, 0.0, 0.0]
EXCESS_RETURN_INDEX = [100.0, 101.0, 98.92262488, 99.90205681, 101.84190257, 103.1869843, 100.80940402]


def test_the_plain_telling_gives_weights_and_index() -> None:
    rows = splice_plain(MARKET, lay_plain(MARKET, PLAN).chains[1])
    far = [1.0 if row["contract"] == FAR else row["incoming_weight"] for row in rows]
    # What is held through a session is what was held after the close before it.
    assert far[1:] == pytest.approx([1 - weight for weight in NEAR_WEIGHT_AFTER_CLOSE[:-1]])
    assert [row["growth"] for row in rows] == pytest.approx(EXCESS_RETURN_INDEX, abs=1e-8)


def test_the_real_code_gives_weights_and_index() -> None:
    chain = lay_real(MARKET, PLAN)[1]
    far = [1.0 if row["contract"] == FAR else row["incoming_weight"] for row in chain.series]
    assert far[1:] == pytest.approx([1 - weight for weight in NEAR_WEIGHT_AFTER_CLOSE[:-1]])
    assert [row["growth"] for row in chain.series] == pytest.approx(EXCESS_RETURN_INDEX, abs=1e-8)
    assert [(row["step"], row["measured_on"], row["effective_on"]) for row in chain.rows] == [
        (1, 1, 2), (2, 2, 3), (3, 3, 4), (4, 4, 5), (5, 5, 6),
    ]  # fmt: skip
