"""A market whose last-trade rule changes, and one whose listed months change, through a real desk.

Each ledger and series is held against the plain telling of tests/reference, and its days against literal ones.
"""

import datetime

import pytest

from contracts.calendar_table import contract_days
from contracts.markets import parse_market
from tests.integration.one_market import (
    Published,
    RawRow,
    business_days,
    differences_from_plain,
    write_one_market,
)

# To February 2016: the business day before the fifteenth day before the first of the delivery month (or before the
# business day preceding that day) (ICE 2012 specification). From March 2016: the last business day of the second month
# before delivery, one earlier on the eve of Christmas Day or New Year's Day (ICE product specification 219).
BRENT = """
code = "B"
name = "north sea crude oil"
exchange = "IFEU"
currency = "USD"
unit = "1,000 barrels"
point_value = 1000.0
tick_size = 0.01
delivery_months = [1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12]
open_interest_lag = 1
calendar = "XLON"
[[last_trade]]
rule = "FREQ=MONTHLY;BYMONTHDAY=1"
steps = [{days = -15}, {if_closed = "previous"}, {business_days = -1}]
business_days = "XLON"
[[last_trade]]
from = "2016-03"
month_offset = -2
rule = "FREQ=MONTHLY;BYMONTHDAY=-1"
steps = [{if_closed = "previous"}, {not_eve_of = ["12-25", "01-01"]}]
business_days = "XLON"
[plans.three_before]
trigger = "calendar"
backstop = 3
[plans.by_interest]
trigger = "open interest"
confirm = 2
backstop = 2
nearbys = [1, 2]
[plans.by_hand]
trigger = "calendar"
backstop = 1
[[plans.by_hand.force]]
outgoing = "B-2016-02"
effective = 2016-01-14
reason = "held to the last day of the old rule"
by = "test"
[[plans.by_hand.force]]
outgoing = "B-2016-03"
effective = 2016-01-20
reason = "left a week before the deadline of the new rule"
by = "test"
"""
# To 2016-02 as published (ice_brent_old_expiries.csv of OpenSourceRisk/Engine's test data); from 2016-03 computed by
# the specification's words: 25 March 2016 was Good Friday, which none of them meets.
BRENT_LAST_TRADE = {
    "2015-12": "2015-11-13", "2016-01": "2015-12-16", "2016-02": "2016-01-14",
    "2016-03": "2016-01-29", "2016-04": "2016-02-29", "2016-05": "2016-03-31", "2016-06": "2016-04-29",
}  # fmt: skip
LONDON_CLOSED = {"2015-12-25", "2015-12-28", "2016-01-01", "2016-03-25", "2016-03-28"}


def curve_rows(days: list[datetime.date], place: int, last: datetime.date, weight: float = 1.0) -> list[RawRow]:
    """Rows of one contract: a common wave, a step of the curve, and interest that is largest 30 days before the end."""
    rows: list[RawRow] = []
    for number, day in enumerate(days):
        left = (last - day).days
        if left < 0:
            break
        settle = 60.0 + 0.35 * place + 0.01 * ((number * 37) % 101 - (number * 11) % 53) + 0.01 * ((number + place) % 3)
        interest = int(weight * (40000 - 900 * abs(left - 30 + number % 5))) if left < 74 else int(weight * 500)
        volume = max(0, int(0.3 * interest) + 17 * ((number + 3 * place) % 7))
        prices = (f"{settle:.2f}", f"{settle + 0.4:.2f}", f"{settle - 0.4:.2f}", f"{settle:.2f}")
        rows.append((str(day), *prices, str(volume), str(max(0, interest))))
    return rows


@pytest.fixture(scope="module")
def brent(tmp_path_factory: pytest.TempPathFactory) -> Published:
    days = [day for day in business_days("2015-10-01", 135) if str(day) not in LONDON_CLOSED]
    contracts = {
        delivery: curve_rows(days, place, datetime.date.fromisoformat(last))
        for place, (delivery, last) in enumerate(BRENT_LAST_TRADE.items())
    }
    folder = tmp_path_factory.mktemp("brent")
    return Published(write_one_market(folder, BRENT, contracts), folder / "published", "B")


def test_each_contract_ends_by_the_rule_of_its_delivery_month(brent: Published) -> None:
    assert brent.summary.exit_code == 0
    assert {row["contract"][2:]: str(row["last_trade"]) for row in brent.table("terms")} == BRENT_LAST_TRADE


def test_deadline_rolls_follow_the_old_rule_and_then_the_new(brent: Published) -> None:
    """Three sessions before each last trading day; the new rule's first contract is held for eleven sessions only."""
    rows = brent.rolls("three_before")
    assert [(row["outgoing"], str(row["effective_on"])) for row in rows] == [
        ("B-2015-12", "2015-11-10"),
        ("B-2016-01", "2015-12-11"),
        ("B-2016-02", "2016-01-11"),
        ("B-2016-03", "2016-01-26"),
        ("B-2016-04", "2016-02-24"),
        # 25 and 28 March were closed.
        ("B-2016-05", "2016-03-24"),
    ]
    declared = parse_market(BRENT, "markets/b.toml")
    listed = {row["contract"]: str(row["deadlines"]["three_before"]) for row in contract_days(declared, 2015, 2016)}
    assert {row["outgoing"]: str(row["effective_on"]) for row in rows}.items() <= listed.items()


def test_forced_rolls_stand_on_either_side_of_the_change(brent: Published) -> None:
    rows = [row for row in brent.rolls("by_hand") if row["outgoing"] in ("B-2016-01", "B-2016-02", "B-2016-03")]
    assert [(row["outgoing"], row["incoming"], row["trigger"], str(row["effective_on"])) for row in rows] == [
        ("B-2016-01", "B-2016-02", "calendar", "2015-12-15"),
        # On its last trading day, a session later than the plan's own deadline.
        ("B-2016-02", "B-2016-03", "forced", "2016-01-14"),
        ("B-2016-03", "B-2016-04", "forced", "2016-01-20"),
    ]
    assert brent.findings("force_unused") == []


def test_both_nearbys_by_open_interest_are_those_of_the_plain_telling(brent: Published) -> None:
    assert differences_from_plain(brent, parse_market(BRENT, "markets/b.toml")) == []
    triggers = {row["trigger"] for row in brent.rolls("by_interest")}
    assert triggers == {"open interest"}
    assert [row["outgoing"] for row in brent.rolls("by_interest", 2)][:2] == ["B-2016-01", "B-2016-02"]


# Quarterly to 2018, monthly from 2019, and no July any more from 2020.
LISTED = [
    *[(year, month) for year in (2017, 2018) for month in (3, 6, 9, 12)],
    *[(2019, month) for month in range(1, 13)],
    *[(2020, month) for month in range(1, 13) if month != 7],
    *[(2021, month) for month in (1, 2, 3, 4, 5, 6)],
]
METAL = """
code = "METAL"
name = "a metal that is listed for more and more months"
exchange = "XTST"
currency = "USD"
unit = "1 t"
point_value = 1.0
tick_size = 0.01
delivery_months = [1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12]
open_interest_lag = 1
[last_trade]
rule = "FREQ=MONTHLY;BYMONTHDAY=20"
steps = [{if_closed = "previous"}]
[plans.next_one]
trigger = "volume"
confirm = 2
backstop = 4
nearbys = [1, 2, 3]
[plans.most_active]
trigger = "open interest"
backstop = 4
incoming = "most active"
[plans.quarterly]
trigger = "both"
backstop = 4
months = [3, 6, 9, 12]
nearbys = [1, 2]
[plans.with_the_dropped_month]
trigger = "calendar"
backstop = 4
months = [3, 7, 12]
[plans.one_a_year]
trigger = "calendar"
months = [3]
[plans.in_steps]
trigger = "either"
steps = 3
delay = 2
backstop = 4
"""


@pytest.fixture(scope="module")
def metal(tmp_path_factory: pytest.TempPathFactory) -> Published:
    days = business_days("2017-01-02", 4 * 261)
    contracts = {}
    for place, (year, month) in enumerate(LISTED):
        last = datetime.date(year, month, 20)
        # Listed 300 calendar days ahead; the months between the quarters are thin.
        listed = [day for day in days if (last - day).days <= 300]
        rows = curve_rows(listed, place, last, 1.0 if month % 3 == 0 else 0.2)
        contracts[f"{year}-{month:02d}"] = rows
    folder = tmp_path_factory.mktemp("metal")
    return Published(write_one_market(folder, METAL, contracts), folder / "published", "METAL")


def chain(published: Published, plan: str) -> list[str]:
    """Contracts in the order in which a plan held them, without the market's code."""
    rows = [row for row in published.rolls(plan) if row["weight_after"] == 1.0]
    return [rows[0]["outgoing"][6:], *(row["incoming"][6:] for row in rows)]


def test_changing_months_give_the_ledgers_and_series_of_the_plain_telling(metal: Published) -> None:
    assert metal.summary.exit_code == 0
    assert differences_from_plain(metal, parse_market(METAL, "markets/metal.toml")) == []


def test_next_contract_is_the_quarter_and_then_the_month(metal: Published) -> None:
    held = chain(metal, "next_one")
    everything = [f"{year}-{month:02d}" for year, month in LISTED]
    assert held == everything[: len(held)]
    assert held[8:12] == ["2019-01", "2019-02", "2019-03", "2019-04"]
    assert held[25:27] == ["2020-06", "2020-08"]
    assert held[-1] == "2021-01"


def test_quarterly_months_pass_over_what_is_listed_between_them(metal: Published) -> None:
    expected = [f"{year}-{month:02d}" for year in (2017, 2018, 2019, 2020) for month in (3, 6, 9, 12)]
    assert chain(metal, "quarterly") == [*expected, "2021-03"]
    assert {held[-2:] for held in chain(metal, "most_active")} <= {"03", "06", "09", "12"}


def test_plan_with_a_dropped_month_goes_on_to_the_next_of_its_months(metal: Published) -> None:
    """July exists in 2019 alone."""
    assert chain(metal, "with_the_dropped_month") == [
        "2017-03", "2017-12", "2018-03", "2018-12", "2019-03", "2019-07", "2019-12", "2020-03", "2020-12", "2021-03",
    ]  # fmt: skip


def test_plan_whose_next_contract_is_listed_too_late_says_at_each_break_that_it_begins_anew(metal: Published) -> None:
    """March is listed in May of the year before, when the March before has ended: no session has both settles.

    Its first bar makes it known, and it is held from the session after that.
    """
    rows = metal.rolls("one_a_year")
    assert [(row["outgoing"][6:], row["incoming"][6:], str(row["effective_on"])) for row in rows] == [
        ("2017-03", "2018-03", "2017-05-25"),
        ("2018-03", "2019-03", "2018-05-25"),
        ("2019-03", "2020-03", "2019-05-28"),
        ("2020-03", "2021-03", "2020-05-26"),
    ]
    assert {(row["measured_on"], row["gap"], row["ratio"]) for row in rows} == {(None, None, None)}
    found = metal.findings("roll_unmeasured")
    assert {(row["contract"][6:], row["severity"]) for row in found} == {
        ("2017-03", "block"), ("2018-03", "block"), ("2019-03", "block"), ("2020-03", "block"),
    }  # fmt: skip
    series = metal.series("one_a_year")
    assert series["2020-05-25"]["back_adjusted"] is None
    assert series["2020-05-26"]["back_adjusted"] == series["2020-05-26"]["settle"]
