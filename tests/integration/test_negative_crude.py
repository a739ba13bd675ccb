"""The crude oil days of April 2020 through a real desk: a negative settle is a fact, and nothing raises.

May 2020 settled at -37.63 on 20 April, its last session but one (CFTC release 8315-20; DTN 2020-04-20), after 18.27
on the 17th (derived: -37.63 + 55.90); June 2020 settled at 25.03 (derived: 20.43 + 4.60) and 20.43 (DTN). July's
26.28 and both volumes of the 20th are of DTN's report late in the day (the open interests are invented); the low of
-40.32 is of EIA, This Week in Petroleum, 2020-04-22. The settles of 21 April, 10.01 and 11.57, are from memory.
The sessions before the 17th and after the 21st are invented, as are all other prices of later contracts.
"""

import itertools
from pathlib import Path

import pytest

from tests.integration.one_market import Published, RawRow, settles, write_one_market

# Third business day before the 25th of the month before delivery; where that is no business day, before the last one
# that precedes it (NYMEX rulebook; EIA glossary): 21 April 2020 for May, as 25 April was a Saturday.
MARKET = """
code = "CL"
name = "crude oil"
exchange = "XNYM"
currency = "USD"
unit = "1,000 barrels"
point_value = 1000.0
tick_size = 0.01
may_be_negative = {may_be_negative}
delivery_months = [1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12]
closed = [2020-04-10]
[last_trade]
month_offset = -1
rule = "FREQ=MONTHLY;BYMONTHDAY=25"
steps = [{{if_closed = "previous"}}, {{business_days = -3}}]
business_days = "XNYS"
also_business_days = [2018-12-05]
[plans.day_before]
trigger = "calendar"
backstop = 1
[plans.by_hand]
trigger = "calendar"
[[plans.by_hand.force]]
outgoing = "CL-2020-05"
effective = 2020-04-21
reason = "held one session longer than the others"
by = "test"
"""
DAYS = [
    "2020-04-08", "2020-04-09", "2020-04-13", "2020-04-14", "2020-04-15", "2020-04-16", "2020-04-17", "2020-04-20",
    "2020-04-21", "2020-04-22", "2020-04-23",
]  # fmt: skip
MAY = [25.0, 23.0, 22.5, 20.0, 19.5, 20.0, 18.27]
JUNE = [31.0, 29.0, 28.5, 26.5, 26.0, 26.5, 25.03, 20.43, 11.57, 14.0, 16.0]
# July as far as it is published: one settle.
JULY_ALONE: list[float | str] = [*[""] * 7, 26.28, *[""] * 3]
# A whole curve behind them, invented: five contracts that move with June, the less the farther they are.
FARTHER = {
    f"2020-{7 + place:02d}": [round(31 + place + (price - 25.03) * (0.75 - 0.05 * place), 2) for price in JUNE]
    for place in range(5)
}

THE_20TH = ("2020-04-20", "17.73", "17.85", "-40.32", "-37.63", "152815", "108593")


def may_rows() -> list[RawRow]:
    """May's rows; the last trading session is 21 April."""
    return [*settles(DAYS, MAY + [""] * 4), THE_20TH, *settles(["2020-04-21"], [10.01])]


def june_rows() -> list[RawRow]:
    return settles(DAYS, JUNE, volume=1116714)


def publish(folder: Path, curve: str, may_be_negative: bool, carried_share: float = 0.1) -> Published:
    contracts = {"2020-05": may_rows(), "2020-06": june_rows()}
    if curve == "published prices":
        contracts["2020-07"] = settles(DAYS, JULY_ALONE)
    else:
        contracts |= {delivery: settles(DAYS, prices) for delivery, prices in FARTHER.items()}
    market = MARKET.format(may_be_negative=str(may_be_negative).lower())
    return Published(write_one_market(folder, market, contracts, carried_share), folder / "published", "CL")


@pytest.fixture(scope="module", params=["published prices", "whole curve"])
def published(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Published:
    return publish(tmp_path_factory.mktemp("crude"), request.param, may_be_negative=True)


def test_night_exits_0_and_last_trade_is_21_april(published: Published) -> None:
    assert (published.summary.exit_code, published.summary.published) == (0, ("CL",))
    days = {row["contract"]: str(row["last_trade"]) for row in published.table("terms")}
    assert (days["CL-2020-05"], days["CL-2020-06"]) == ("2020-04-21", "2020-05-19")


def test_roll_measured_on_17_april_has_a_gap_of_6_76(published: Published) -> None:
    (row,) = published.rolls("day_before")
    assert (str(row["measured_on"]), str(row["effective_on"])) == ("2020-04-17", "2020-04-20")
    assert (row["outgoing"], row["incoming"], row["trigger"]) == ("CL-2020-05", "CL-2020-06", "calendar")
    assert row["gap"] == pytest.approx(6.76, abs=1e-12)
    assert row["ratio"] == pytest.approx(25.03 / 18.27, abs=1e-12)


def test_roll_forced_to_be_measured_on_20_april_has_a_gap_of_58_06_and_no_ratio(published: Published) -> None:
    (row,) = published.rolls("by_hand")
    assert (str(row["measured_on"]), str(row["effective_on"]), row["trigger"]) == ("2020-04-20", "2020-04-21", "forced")
    assert (row["outgoing_settle"], row["incoming_settle"]) == (-37.63, 20.43)
    assert row["gap"] == pytest.approx(58.06, abs=1e-12)
    assert row["ratio"] is None


def test_negative_settle_is_published_untouched(published: Published) -> None:
    (bar,) = [
        row
        for row in published.table("bars")
        if (row["contract"], str(row["session"])) == ("CL-2020-05", "2020-04-20")
    ]  # fmt: skip
    assert (bar["settle"], bar["clean_settle"], bar["status"]) == (-37.63, -37.63, "reported")
    row = published.series("by_hand")["2020-04-20"]
    assert (row["contract"], row["settle"], row["status"]) == ("CL-2020-05", -37.63, "reported")
    assert row["low"] == -40.32
    # Not only the settle: no price of any contract was replaced or left out.
    assert {row["action"] for row in published.findings()} <= {"kept"}
    assert {row["status"] for row in published.table("bars")} == {"reported"}


def test_ratio_adjusted_is_null_before_the_roll_without_a_ratio_and_says_so(published: Published) -> None:
    before = [row for day, row in published.series("by_hand").items() if day < "2020-04-21"]
    after = [row for day, row in published.series("by_hand").items() if day >= "2020-04-21"]
    assert len(before) == 8
    assert {(row["ratio_adjusted"], row["scale"], row["growth"]) for row in before} == {(None, None, None)}
    assert [(row["ratio_adjusted"], row["scale"]) for row in after] == [(11.57, 1.0), (14.0, 1.0), (16.0, 1.0)]
    assert after[0]["growth"] == 100.0
    (finding,) = published.findings("ratio_undefined")
    assert (finding["contract"], str(finding["session"]), finding["severity"]) == ("CL-2020-05", "2020-04-21", "review")
    assert "settles -37.63 and 20.43 on 2020-04-20 have no ratio" in finding["message"]


def test_ratio_adjusted_stands_where_the_roll_was_a_day_earlier(published: Published) -> None:
    """The plan that left May on the 17th never held a price at or below zero."""
    series = published.series("day_before")
    assert series["2020-04-17"]["ratio_adjusted"] == pytest.approx(25.03, abs=1e-12)
    assert series["2020-04-20"]["ratio_adjusted"] == 20.43
    assert None not in {row["growth"] for row in series.values()}


def test_back_adjusted_stands_and_its_differences_are_the_held_positions(published: Published) -> None:
    series = published.series("by_hand")
    # May is held through the 20th, June from the 21st.
    held = {
        "2020-04-09": 23.0 - 25.0, "2020-04-13": 22.5 - 23.0, "2020-04-14": 20.0 - 22.5, "2020-04-15": 19.5 - 20.0,
        "2020-04-16": 20.0 - 19.5, "2020-04-17": 18.27 - 20.0, "2020-04-20": -37.63 - 18.27,
        "2020-04-21": 11.57 - 20.43, "2020-04-22": 14.0 - 11.57, "2020-04-23": 16.0 - 14.0,
    }  # fmt: skip
    days = list(series)
    assert days == DAYS
    for before, day in itertools.pairwise(days):
        difference = series[day]["back_adjusted"] - series[before]["back_adjusted"]
        assert difference == pytest.approx(held[day], abs=1e-12)
        assert series[day]["change"] == pytest.approx(held[day], abs=1e-12)
    assert series["2020-04-17"]["back_adjusted"] == pytest.approx(18.27 + 58.06, abs=1e-12)
    # A return on, or from, a price at or below zero does not exist.
    assert [day for day in days if series[day]["simple_return"] is None] == ["2020-04-08", "2020-04-20"]


@pytest.mark.parametrize("curve", ["published prices", "whole curve"])
def test_where_prices_cannot_be_negative_the_settle_is_masked_and_the_roll_waits(tmp_path: Path, curve: str) -> None:
    """The desk says that no price is at or below zero: the settle is not used, and nothing is put in its place.

    The curve would say about 15, but the bar traded down to -40.32: prices say one thing and the declaration another,
    and a person has to look. The forced roll waits for the 21st, as its planned measuring session has no settle of
    May that may be used, and the series carries the 17th's price over the 20th.
    """
    published = publish(tmp_path, curve, may_be_negative=False)
    assert published.summary.exit_code == 0
    (found,) = [row for row in published.findings("not_positive") if row["field"] == "settle"]
    assert (found["contract"], str(found["session"]), found["severity"]) == ("CL-2020-05", "2020-04-20", "review")
    assert (found["reported"], found["action"], found["corrected"]) == (-37.63, "masked", None)
    assert "its bar traded down to it: see whether may_be_negative is right" in found["message"]
    (low,) = [row for row in published.findings("not_positive") if row["field"] == "low"]
    assert (low["reported"], low["action"]) == (-40.32, "masked")
    (bar,) = [
        row
        for row in published.table("bars")
        if (row["contract"], str(row["session"])) == ("CL-2020-05", "2020-04-20")
    ]  # fmt: skip
    assert (bar["settle"], bar["low"], bar["clean_settle"], bar["status"]) == (-37.63, -40.32, None, "masked")
    series = published.series("by_hand")
    row = series["2020-04-20"]
    assert (row["contract"], row["settle"], row["status"], row["low"]) == ("CL-2020-05", 18.27, "carried", None)
    (roll,) = published.rolls("by_hand")
    assert (str(roll["measured_on"]), str(roll["effective_on"])) == ("2020-04-21", "2020-04-22")
    assert roll["gap"] == pytest.approx(11.57 - 10.01, abs=1e-12)
    (waited,) = published.findings("roll_postponed")
    assert "until 2020-04-21" in waited["message"]
    assert published.findings("ratio_undefined") == []
    assert None not in {row["ratio_adjusted"] for row in series.values()}
