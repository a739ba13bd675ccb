"""Back-adjusted differences and ratio-adjusted returns are the held position's, in numbers worked by hand."""

from collections.abc import Callable
from typing import Any

import pytest

from tests.reference.plain_market import PlainMarket, PlainPlan
from tests.reference.plain_rolls import lay_plain
from tests.reference.plain_splice import splice_plain
from tests.reference.real import lay_real
from tests.reference.small import Values, small_market

OUT, IN = "XX-2024-03", "XX-2024-06"
PLAN = PlainPlan("late", "calendar")
Rows = list[dict[str, Any]]


def plain(market: PlainMarket) -> tuple[Rows, Rows]:
    """Ledger and series by the plain telling."""
    chain = lay_plain(market, PLAN).chains[1]
    return chain.rows, splice_plain(market, chain)


def real(market: PlainMarket) -> tuple[Rows, Rows]:
    """Ledger and series by the real code."""
    chain = lay_real(market, PLAN)[1]
    return chain.rows, chain.series


both_tellings = pytest.mark.parametrize("tell", [plain, real])


@both_tellings
def test_a_falling_and_a_rising_leg(tell: Callable[[PlainMarket], tuple[Rows, Rows]]) -> None:
    """Outgoing 100 90 80 60 50, then incoming 25 35 40 45, which stood at 20 beside the 50 (invented)."""
    settle: Values = {
        OUT: [100.0, 90.0, 80.0, 60.0, 50.0, None, None, None, None],
        IN: [None, None, None, None, 20.0, 25.0, 35.0, 40.0, 45.0],
    }
    ledger, rows = tell(small_market(settle, {OUT: 5, IN: 99}, bars=((IN, 0),)))
    assert [(row["measured_on"], row["gap"], row["ratio"]) for row in ledger] == [(4, -30.0, pytest.approx(0.4))]
    # Held: 50 - 100 in the outgoing and 45 - 20 in the incoming make -25 points; 50/100 x 45/20 makes 1.125.
    assert sum(row["change"] for row in rows[1:]) == pytest.approx(-25.0)
    assert rows[-1]["growth"] / 100 - 1 == pytest.approx(0.125)
    assert (rows[0]["back_adjusted"], rows[-1]["back_adjusted"]) == (70.0, 45.0)
    assert (rows[0]["ratio_adjusted"], rows[-1]["ratio_adjusted"]) == (pytest.approx(40.0), 45.0)


# Crude oil, deliveries 2020-05 and 2020-06. 2020-04-20: settles -37.63 and 20.43 (CFTC release 8315-20; DTN
# 2020-04-20). 2020-04-17: 18.27 and 25.03 (derived from the day's changes: -37.63 + 55.90, 20.43 + 4.60).
# 2020-04-21: 10.01 and 11.57 (from memory).
CRUDE: Values = {OUT: [18.27, -37.63, 10.01], IN: [25.03, 20.43, 11.57]}


@both_tellings
def test_crude_oil_left_a_session_before_it_went_negative(
    tell: Callable[[PlainMarket], tuple[Rows, Rows]],
) -> None:
    ledger, rows = tell(small_market(CRUDE, {OUT: 1, IN: 99}))
    assert [row["gap"] for row in ledger] == [pytest.approx(6.76)]
    assert [row["ratio"] for row in ledger] == [pytest.approx(25.03 / 18.27)]
    assert [row["back_adjusted"] for row in rows] == [pytest.approx(25.03), 20.43, 11.57]


@both_tellings
def test_crude_oil_left_on_the_negative_session_has_a_gap_and_no_ratio(
    tell: Callable[[PlainMarket], tuple[Rows, Rows]],
) -> None:
    ledger, rows = tell(small_market(CRUDE, {OUT: 2, IN: 99}))
    assert [row["gap"] for row in ledger] == [pytest.approx(58.06)]
    assert [row["ratio"] for row in ledger] == [None]
    assert [row["back_adjusted"] for row in rows] == [pytest.approx(76.33), pytest.approx(20.43), 11.57]
    assert [row["ratio_adjusted"] for row in rows] == [None, None, 11.57]
    assert [row["scale"] for row in rows] == [None, None, 1.0]
    assert [row["growth"] for row in rows] == [None, None, 100.0]
    assert [row["change"] for row in rows] == [None, pytest.approx(-55.90), pytest.approx(-8.86)]
    assert rows[1]["simple_return"] is None
    assert rows[2]["simple_return"] == pytest.approx(11.57 / 20.43 - 1)
