"""A roll in fifths through a real desk gives the published method's weights, gaps and excess return index.

Weights move by quantity in fifths after the close of business days 5 to 9, as the S&P GSCI roll period is
published (goldmansachs.com, S&P GSCI roll period page). The excess return is
sum w(t-1) P(t) / sum w(t-1) P(t-1) - 1, compounded from 100 on day 4 (formula from memory; prices
invented, values computed).
"""

import itertools

import pytest

from tests.integration.one_market import Published, settles, write_one_market

# All is held in the later contract from the tenth business day of the month before delivery on, five before the
# last trading day.
MARKET = """
code = "FIFTHS"
name = "a market rolled in fifths"
exchange = "XTST"
currency = "USD"
unit = "1"
point_value = 1.0
tick_size = 0.5
delivery_months = [2, 3]
closed = [2024-01-01]
[last_trade]
month_offset = -1
rule = "FREQ=MONTHLY;BYMONTHDAY=1"
steps = [{if_closed = "next"}, {business_days = 14}]
[plans.in_fifths]
trigger = "calendar"
steps = 5
backstop = 5
"""
# Business days 1 to 10 of January 2024, of which the first is the 2nd; the three before day 4 are there so that
# the series does not begin where the index does.
DAYS = [
    "2024-01-02", "2024-01-03", "2024-01-04", "2024-01-05", "2024-01-08",
    "2024-01-09", "2024-01-10", "2024-01-11", "2024-01-12", "2024-01-15",
]  # fmt: skip
NEAR = [98, 99, 98.5, 100, 101, 99, 100, 102, 103, 101]
FAR = [103, 104, 103.5, 105, 106.5, 104, 105, 107, 108.5, 106]
NEAR_WEIGHT_AFTER_CLOSE = {
    "2024-01-05": 1.0, "2024-01-08": 0.8, "2024-01-09": 0.6, "2024-01-10": 0.4, "2024-01-11": 0.2, "2024-01-12": 0.0,
    "2024-01-15": 0.0,
}  # fmt: skip
# As printed: seven to ten figures, the last one rounded.
EXCESS_RETURN_INDEX = {
    "2024-01-05": "100", "2024-01-08": "101", "2024-01-09": "98.92262488", "2024-01-10": "99.90205681",
    "2024-01-11": "101.84190257", "2024-01-12": "103.1869843", "2024-01-15": "100.80940402",
}  # fmt: skip


@pytest.fixture(scope="module")
def published(tmp_path_factory: pytest.TempPathFactory) -> Published:
    folder = tmp_path_factory.mktemp("fifths")
    contracts = {"2024-02": settles(DAYS, NEAR), "2024-03": settles(DAYS, FAR)}
    return Published(write_one_market(folder, MARKET, contracts), folder / "published", "FIFTHS")


def test_growth_is_the_excess_return_index_to_its_printed_digits(published: Published) -> None:
    series = published.series("in_fifths")
    assert series["2024-01-02"]["growth"] == 100.0
    base = series["2024-01-05"]["growth"]
    assert base != 100.0
    rebased = {day: 100.0 * series[day]["growth"] / base for day in EXCESS_RETURN_INDEX}
    printed = {
        day: f"{rebased[day]:.{len(text.partition('.')[2])}f}" for day, text in EXCESS_RETURN_INDEX.items()
    }  # fmt: skip
    assert printed == EXCESS_RETURN_INDEX


def test_weights_held_through_a_session_are_those_after_the_close_before_it(published: Published) -> None:
    series = published.series("in_fifths")
    held = {
        day: 1.0 - row["incoming_weight"] if row["contract"] == "FIFTHS-2024-02" else 0.0 for day, row in series.items()
    }
    for after_close, session in itertools.pairwise(DAYS[3:]):
        assert held[session] == pytest.approx(NEAR_WEIGHT_AFTER_CLOSE[after_close], abs=1e-12)
    assert [held[day] for day in DAYS[:5]] == [1.0] * 5
    incoming = {day: row["incoming"] for day, row in series.items()}
    assert [incoming[day] for day in DAYS[4:]] == [None, *["FIFTHS-2024-03"] * 4, None]


def test_ledger_has_a_fifth_of_the_difference_as_the_gap_of_each_step(published: Published) -> None:
    rows = published.rolls("in_fifths")
    assert [(row["step"], str(row["measured_on"]), str(row["effective_on"])) for row in rows] == [
        (1, "2024-01-08", "2024-01-09"),
        (2, "2024-01-09", "2024-01-10"),
        (3, "2024-01-10", "2024-01-11"),
        (4, "2024-01-11", "2024-01-12"),
        (5, "2024-01-12", "2024-01-15"),
    ]
    assert {str(row["decided_on"]) for row in rows} == {"2024-01-08"}
    # A fifth of 106.5 - 101, 104 - 99, 105 - 100, 107 - 102, 108.5 - 103.
    assert [row["gap"] for row in rows] == pytest.approx([1.1, 1.0, 1.0, 1.0, 1.1], abs=1e-12)
    assert [row["weight_after"] for row in rows] == pytest.approx([0.2, 0.4, 0.6, 0.8, 1.0], abs=1e-12)
    # (0.8 x 101 + 0.2 x 106.5) / 101, then (0.6 x 99 + 0.4 x 104) / (0.8 x 99 + 0.2 x 104), and so on.
    assert [row["ratio"] for row in rows] == pytest.approx(
        [102.1 / 101.0, 101.0 / 100.0, 103.0 / 102.0, 106.0 / 105.0, 108.5 / 107.4], abs=1e-12
    )


def test_night_publishes_it_and_finds_nothing_to_review(published: Published) -> None:
    assert published.summary.exit_code == 0
    assert [(row["session"], row["kind"]) for row in published.findings() if row["severity"] != "note"] == []
    # 5.2 is the sum of the gaps: the index's day 4 stands so much higher on the later contract's level.
    assert published.series("in_fifths")["2024-01-05"]["back_adjusted"] == pytest.approx(105.2, abs=1e-12)
    assert published.series("in_fifths")["2024-01-15"]["back_adjusted"] == 106.0
