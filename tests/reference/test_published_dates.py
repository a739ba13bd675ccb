"""Declared day rules give the last trading and first notice days that exchanges and others have published."""

import csv
import datetime
import pathlib

import pytest

from contracts.deliveries import parse_delivery
from contracts.errors import DeskError
from contracts.markets import Market, parse_market
from contracts.sessions import first_notice_day, last_trade_day

DATA = pathlib.Path(__file__).parent / "data"

# Open on days on which the city's stock exchange is closed (published reports; see last_trade_rules.csv).
COMMODITY_DAYS = """business_days = "XNYS"
also_business_days = [2012-10-29, 2012-10-30, 2018-12-05, 2025-01-09]"""

# The words of each rule, and their source, stand in data/last_trade_rules.csv.
RULES = {
    "cl25": f"""month_offset = -1
rule = "FREQ=MONTHLY;BYMONTHDAY=25"
steps = [{{if_closed = "previous"}}, {{business_days = -3}}]
{COMMODITY_DAYS}""",
    "ng3": f"""rule = "FREQ=MONTHLY;BYMONTHDAY=1"
steps = [{{business_days = -3}}]
{COMMODITY_DAYS}""",
    "last_bd_prev": f"""month_offset = -1
rule = "FREQ=MONTHLY;BYMONTHDAY=-1"
steps = [{{if_closed = "previous"}}]
{COMMODITY_DAYS}""",
    "third_last_bd": f"""rule = "FREQ=MONTHLY;BYMONTHDAY=-1"
steps = [{{if_closed = "previous"}}, {{business_days = -2}}]
{COMMODITY_DAYS}""",
    "oj14": f"""rule = "FREQ=MONTHLY;BYMONTHDAY=-1"
steps = [{{if_closed = "previous"}}, {{business_days = -14}}]
{COMMODITY_DAYS}""",
    "brent_old": """rule = "FREQ=MONTHLY;BYMONTHDAY=1"
steps = [{days = -15}, {if_closed = "previous"}, {business_days = -1}]
business_days = "XLON" """,
    "brent_new": """from = "2016-03"
month_offset = -2
rule = "FREQ=MONTHLY;BYMONTHDAY=-1"
steps = [{if_closed = "previous"}, {not_eve_of = ["12-25", "01-01"]}]
business_days = "XLON" """,
    "vx30": """month_offset = 1
rule = "FREQ=MONTHLY;BYDAY=3FR"
steps = [{if_closed = "previous"}, {days = -30}, {if_closed = "previous"}]
business_days = "XNYS" """,
    "third_fri": """rule = "FREQ=MONTHLY;BYDAY=3FR"
steps = [{if_closed = "previous"}]
business_days = "XNYS" """,
    "imm_minus2": """rule = "FREQ=MONTHLY;BYDAY=3WE"
steps = [{business_days = -2}]
business_days = "XNYS" """,
    "fn_last_bd_prev": f"""month_offset = -1
rule = "FREQ=MONTHLY;BYMONTHDAY=-1"
steps = [{{if_closed = "previous"}}]
{COMMODITY_DAYS}""",
    "last_bd": f"""rule = "FREQ=MONTHLY;BYMONTHDAY=-1"
steps = [{{if_closed = "previous"}}]
{COMMODITY_DAYS}""",
    "ca_bond_fn": """month_offset = -1
rule = "FREQ=MONTHLY;BYMONTHDAY=-1"
steps = [{if_closed = "previous"}]
business_days = "XTSE" """,
}

# Last-trade and first-notice rules by product, in the order of their delivery months.
PRODUCTS = {
    "B": (("brent_old", "brent_new"), None),
    "C": (("last_bd",), "fn_last_bd_prev"),
    "CGB": (("last_bd",), "ca_bond_fn"),
    "CGF": (("last_bd",), "ca_bond_fn"),
    "CGZ": (("last_bd",), "ca_bond_fn"),
    "CL": (("cl25",), None),
    "COA": (("last_bd",), None),
    "DX": (("imm_minus2",), None),
    "ES": (("third_fri",), None),
    "GC": (("third_last_bd",), "fn_last_bd_prev"),
    "HO": (("last_bd_prev",), None),
    "NG": (("ng3",), None),
    "OJ": (("oj14",), None),
    "VX": (("vx30",), None),
}


def declaration(code: str, last_trade: str, first_notice: str = "") -> str:
    """A market file with the given rule tables."""
    return f"""code = "{code}"
name = "market of published dates"
exchange = "XTST"
currency = "USD"
unit = "1"
point_value = 1.0
tick_size = 0.01
delivery_months = [1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12]

{last_trade}

{first_notice}

[plans.near]
trigger = "calendar"
"""


def product_market(product: str) -> Market:
    """The market of a product, with all of its rules."""
    last_rules, notice = PRODUCTS[product]
    header = "[last_trade]" if len(last_rules) == 1 else "[[last_trade]]"
    last_trade = "\n\n".join(f"{header}\n{RULES[name]}" for name in last_rules)
    first_notice = f"[first_notice]\n{RULES[notice]}" if notice else ""
    return parse_market(declaration(product, last_trade, first_notice), f"markets/{product.lower()}.toml")


def published() -> list[dict[str, str]]:
    """All rows of the published dates."""
    with (DATA / "last_trade_dates.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def test_there_are_141_published_dates_of_14_products_and_each_names_its_source() -> None:
    rows = published()
    assert len(rows) == 141
    assert {row["product"] for row in rows} == set(PRODUCTS)
    assert all(row["source"] for row in rows)
    for row in rows:
        last_rules, notice = PRODUCTS[row["product"]]
        assert row["rule"] in ((notice,) if row["event"] == "first_notice" else last_rules)


def test_every_declared_rule_stands_in_words_with_its_source() -> None:
    with (DATA / "last_trade_rules.csv").open(encoding="utf-8", newline="") as file:
        described = {row["rule"]: row for row in csv.DictReader(file)}
    for name, text in RULES.items():
        assert described[name]["words"]
        assert described[name]["source"]
        calendar = described[name]["business_days"]
        assert ("XNYS" if calendar == "as cl25" else calendar[:4]) in text


@pytest.mark.parametrize("product", PRODUCTS)
def test_declared_rules_give_every_published_date(product: str) -> None:
    market = product_market(product)
    wrong = []
    checked = 0
    for row in published():
        if row["product"] != product or "no_business_days" in row["note"]:
            continue
        delivery = parse_delivery(row["delivery"])
        if row["event"] == "first_notice":
            found = first_notice_day(market, delivery)
        else:
            found = last_trade_day(market, delivery)
        checked += 1
        if found != datetime.date.fromisoformat(row["date"]):
            wrong.append((row["delivery"], row["event"], row["date"], found))
    assert wrong == []
    assert checked > 0


def test_a_schedule_that_counts_a_holiday_more_says_so_with_no_business_days() -> None:
    """GC 2010-12: the schedule published in 2008 counts 2010-12-31 as a holiday."""
    marked = [
        (row["product"], row["delivery"], row["date"]) for row in published() if "no_business_days" in row["note"]
    ]
    assert marked == [("GC", "2010-12", "2010-12-28")]
    plain = f"[last_trade]\n{RULES['third_last_bd']}"
    december = parse_delivery("2010-12")
    with_it = parse_market(declaration("GC", f"{plain}\nno_business_days = [2010-12-31]"), "markets/gc.toml")
    without = parse_market(declaration("GC", plain), "markets/gc.toml")
    assert last_trade_day(with_it, december) == datetime.date(2010, 12, 28)
    assert last_trade_day(without, december) == datetime.date(2010, 12, 29)


def test_the_newer_rule_begins_with_the_delivery_month_it_names() -> None:
    """Brent: February 2016 by the rule of fifteen days, March 2016 by the last business day of January."""
    market = product_market("B")
    assert last_trade_day(market, parse_delivery("2016-02")) == datetime.date(2016, 1, 14)
    # The last Friday of January 2016: computed by the specification's words.
    assert last_trade_day(market, parse_delivery("2016-03")) == datetime.date(2016, 1, 29)


def test_a_last_business_day_before_the_new_year_is_moved_one_earlier() -> None:
    """The last business day of 2019 in London was the 31st (computed by the rule's words)."""
    assert last_trade_day(product_market("B"), parse_delivery("2020-02")) == datetime.date(2019, 12, 30)


def test_an_unknown_key_in_a_rule_is_refused_with_its_file_and_key() -> None:
    text = declaration("GC", f"[last_trade]\n{RULES['third_last_bd']}\nholidays = [2010-12-31]")
    with pytest.raises(DeskError) as refused:
        parse_market(text, "markets/gc.toml")
    assert [(m.file, m.key) for m in refused.value.mistakes] == [("markets/gc.toml", "last_trade.holidays")]
