"""An index that was divided by ten: the change over the day is of the market, and the file keeps what it said.

May 2007 settled at 138.7 on 23 March 2007, on the old scale, and at 13.79 on the 26th, on the new one (exchange file
rows quoted in an open-source test; mondovisione.com 2007-03-26). All other prices are invented.
"""

import datetime

import pytest

from catalog.trace import trace_price
from catalog.trace_text import trace_lines
from tests.integration.one_market import Published, RawRow, write_one_market

# Thirty days before the third Friday of the month after delivery (or before the business day preceding it, where that
# Friday is closed); where that day is closed, the business day before (Cboe specification).
MARKET = """
code = "VX"
name = "volatility index"
exchange = "XCBF"
currency = "USD"
unit = "1,000 USD a point"
point_value = 1000.0
tick_size = 0.01
delivery_months = [1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12]
calendar = "XNYS"
[last_trade]
month_offset = 1
rule = "FREQ=MONTHLY;BYDAY=3FR"
steps = [{if_closed = "previous"}, {days = -30}, {if_closed = "previous"}]
[[rescaled]]
before = 2007-03-26
multiply = 0.1
[plans.to_the_end]
trigger = "calendar"
[plans.over_the_change]
trigger = "calendar"
[[plans.over_the_change.force]]
outgoing = "VX-2007-05"
effective = 2007-03-26
reason = "a roll measured on the old scale"
by = "test"
"""
DAYS = ["2007-03-21", "2007-03-22", "2007-03-23", "2007-03-26", "2007-03-27"]
MAY = [141.2, 139.9, 138.7, 13.79, 14.1]
JUNE = [142.3, 141.2, 140.2, 13.95, 14.22]
JULY = [143.5, 142.4, 141.5, 14.1, 14.36]


def rows(prices: list[float]) -> list[RawRow]:
    """Bars that open at the settle, with a range of five points of the old scale, a half of the new one."""
    made: list[RawRow] = []
    for day, price in zip(DAYS, prices, strict=True):
        half = 2.5 if day < "2007-03-26" else 0.25
        made.append((day, str(price), f"{price + half:.2f}", f"{price - half:.2f}", str(price), "500", "1000"))
    return made


@pytest.fixture(scope="module")
def published(tmp_path_factory: pytest.TempPathFactory) -> Published:
    folder = tmp_path_factory.mktemp("rescaled")
    contracts = {"2007-05": rows(MAY), "2007-06": rows(JUNE), "2007-07": rows(JULY)}
    return Published(write_one_market(folder, MARKET, contracts), folder / "published", "VX")


def test_change_is_minus_0_08_and_not_minus_124_91(published: Published) -> None:
    row = published.series("to_the_end")["2007-03-26"]
    assert (row["contract"], row["settle"], row["status"]) == ("VX-2007-05", 13.79, "reported")
    assert row["change"] == pytest.approx(-0.08, abs=1e-12)
    assert row["simple_return"] == pytest.approx(13.79 / 13.87 - 1, abs=1e-12)
    before = published.series("to_the_end")["2007-03-23"]
    assert (before["settle"], before["high"], before["low"]) == (13.87, 14.12, 13.62)
    assert row["back_adjusted"] - before["back_adjusted"] == pytest.approx(-0.08, abs=1e-12)
    assert row["growth"] / before["growth"] == pytest.approx(13.79 / 13.87, abs=1e-12)


def test_bars_keep_what_the_file_said_and_clean_settles_are_on_the_present_scale(published: Published) -> None:
    bars = [row for row in published.table("bars") if row["contract"] == "VX-2007-05"]
    assert [row["settle"] for row in bars] == MAY
    assert [(row["high"], row["low"]) for row in bars][2:4] == [(141.2, 136.2), (14.04, 13.54)]
    assert [row["clean_settle"] for row in bars] == [14.12, 13.99, 13.87, 13.79, 14.1]
    assert {row["status"] for row in bars} == {"reported"}


def test_roll_measured_on_the_old_scale_has_its_gap_on_the_present_one(published: Published) -> None:
    (row,) = published.rolls("over_the_change")
    assert (str(row["measured_on"]), str(row["effective_on"])) == ("2007-03-23", "2007-03-26")
    assert (row["outgoing_settle"], row["incoming_settle"]) == (13.87, 14.02)
    assert row["gap"] == pytest.approx(0.15, abs=1e-12)
    held = published.series("over_the_change")["2007-03-26"]
    assert (held["contract"], held["settle"]) == ("VX-2007-06", 13.95)
    assert held["change"] == pytest.approx(13.95 - 14.02, abs=1e-12)


def test_declared_change_of_scale_is_nothing_to_review(published: Published) -> None:
    assert published.summary.exit_code == 0
    assert [row["message"] for row in published.findings() if row["severity"] != "note"] == []


def test_trace_shows_the_text_of_the_file_and_the_scale(published: Published) -> None:
    told = trace_price(published.places, "VX", datetime.date(2007, 3, 23), "to_the_end")
    (leg,) = told.legs
    assert leg.text == "2007-03-23,138.7,141.20,136.20,138.7,500,1000"
    assert (leg.reported, leg.settle, leg.scale) == (138.7, 13.87, 0.1)
    lines = trace_lines(told)
    assert "VX-2007-05 on 2007-03-23: reported 138.7, used 13.87 (reported)" in lines
    assert "  on the market's present scale: 138.7 x 0.1 = 13.87" in lines
    assert any("rescaled[0]: prices before 2007-03-26 x 0.1" in line for line in lines)
    after = trace_price(published.places, "VX", datetime.date(2007, 3, 26), "to_the_end")
    assert after.legs[0].scale == 1.0
    assert not any("scale:" in line for line in trace_lines(after))
