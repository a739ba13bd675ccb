"""Declarations: every mistake at once, with file, key, line, what was seen and what was expected."""

import pytest

from contracts.deliveries import Delivery
from contracts.errors import DeskError, Mistake
from contracts.layouts import claim_file, parse_layout
from contracts.markets import Incoming, Trigger, parse_market, rule_for
from tests.contracts.small import LAYOUT, MARKET


def market_text(extra: str = "", **changes: str) -> str:
    text = MARKET.format(extra=extra)
    for old, new in changes.items():
        text = text.replace(f"{old} = ", f"{new} = ")
    return text


def mistakes_of(text: str) -> list[Mistake]:
    with pytest.raises(DeskError) as caught:
        parse_market(text, "markets/nwht.toml")
    return caught.value.mistakes


def test_all_mistakes_of_a_file_come_at_once_with_key_and_line() -> None:
    text = market_text('colour = "green"') + (
        '\n[plans.late]\ntrigger = "open interesting"\n\n[plans.by_volume]\ntrigger = "volume"\nconfrim = 2\n'
    )
    text = text.replace("BYMONTHDAY=15", "BYMONTHDAY=31")
    found = [(m.key, m.line, m.seen) for m in mistakes_of(text)]
    assert found == [
        ("colour", 11, "an unknown key"),
        ("last_trade.rule", 13, "the rule 'FREQ=MONTHLY;BYMONTHDAY=31' gives 0 days in 2000-09, one is needed"),
        ("plans.late.trigger", 21, "'open interesting'"),
        ("plans.by_volume", 23, "the same name twice"),
    ]


def test_message_names_file_line_key_seen_and_expected() -> None:
    text = market_text().replace('trigger = "volume"', 'trigger = "volume"\ndelay = 0')
    assert [str(mistake) for mistake in mistakes_of(text)] == [
        "markets/nwht.toml:18: plans.by_volume.delay: seen 0; expected greater than or equal to 1"
    ]


def test_unknown_key_in_a_plan_names_the_keys_there_are() -> None:
    text = market_text().replace("backstop = 5", "backstopp = 5")
    (mistake,) = mistakes_of(text)
    assert mistake.key == "plans.by_volume.backstopp"
    assert "backstop" in mistake.expected.removeprefix("one of ").split(", ")


@pytest.mark.parametrize(
    ("before", "after", "key"),
    [
        ('tick_size = 0.25', 'tick_size = "0.25"', "tick_size"),
        ("tick_size = 0.25", "tick_size = -1", "tick_size"),
        ("delivery_months = [3, 5, 9, 12]", "delivery_months = [3, 3]", "delivery_months"),
        ("delivery_months = [3, 5, 9, 12]", "delivery_months = [3, 13]", "delivery_months[1]"),
        ('code = "NWHT"', 'code = "../evil"', "code"),
        ('unit = "50 t"', 'unit = "50 t"\nclosed = ["2024-12-25"]', "closed[0]"),
        ('unit = "50 t"', 'unit = "50 t"\nclosed = [2024-12-25]\nopened = [2024-12-25]', "closed"),
        ('trigger = "volume"', 'trigger = "volume"\nbefore = "first notice"', "plans.by_volume.before"),
        ('trigger = "volume"', 'trigger = "volume"\nmonths = [4]', "plans.by_volume.months"),
        ("{if_closed = \"next\"}", "{if_closed = \"next\", days = 1}", "last_trade.steps[0]"),
        ("FREQ=MONTHLY;BYMONTHDAY=15", "FREQ=SECONDLY", "last_trade.rule"),
        ("FREQ=MONTHLY;BYMONTHDAY=15", "every month", "last_trade.rule"),
    ],
)  # fmt: skip
def test_one_wrong_value_is_one_mistake_at_its_key(before: str, after: str, key: str) -> None:
    assert [mistake.key for mistake in mistakes_of(market_text().replace(before, after))] == [key]


def test_broken_toml_is_a_mistake_with_its_line() -> None:
    (mistake,) = mistakes_of(market_text() + "\n[plans\n")
    assert (mistake.key, mistake.expected, mistake.line) == ("(file)", "valid TOML", 20)


def test_newest_rule_that_applies_wins() -> None:
    text = market_text().replace("[last_trade]", "[[last_trade]]") + (
        '\n[[last_trade]]\nfrom = "2016-03"\nrule = "FREQ=MONTHLY;BYMONTHDAY=1"\n'
    )
    # A table of an array may come after other tables.
    market = parse_market(text, "markets/nwht.toml")
    assert rule_for(market.last_trade, Delivery(2016, 2)) is market.last_trade[0]
    assert rule_for(market.last_trade, Delivery(2016, 3)) is market.last_trade[1]


def test_keys_become_members_and_defaults() -> None:
    plan = parse_market(market_text(), "markets/nwht.toml").plans["by_volume"]
    assert (plan.trigger, plan.incoming, plan.confirm, plan.delay, plan.steps, plan.nearbys) == (
        Trigger.VOLUME, Incoming.NEXT, 1, 1, 1, (1,),
    )  # fmt: skip


def test_layout_reads_market_and_delivery_from_the_path() -> None:
    layout = parse_layout(LAYOUT.replace(r"(?P<month>\d\d)", "(?P<month_code>[A-Z])"), "layouts/plain.toml")
    claim = claim_file(layout, "NWHT_2025_H.csv")
    assert claim is not None
    assert claim.contract == "NWHT-2025-03"
    assert claim_file(layout, "NWHT_2025_H.txt") is None


@pytest.mark.parametrize(
    ("before", "after", "key"),
    [
        (r"(?P<year>\\d{4})", r"\\d{4}", "files"),
        ('session = "date"', 'session = "date"\nmarket = "m"', "columns.market"),
        ('thousands = " "', 'thousands = "."', "decimal"),
        ('thousands = " "', 'encoding = "latin-99"', "encoding"),
        ('thousands = " "', 'date_format = "%Y"', "date_format"),
        ('settle = "settle"', 'settle = "open"', "columns"),
        ('settle = "settle"', 'settel = "settle"', "columns.settle"),
    ],
)
def test_wrong_layout_is_told_at_its_key(before: str, after: str, key: str) -> None:
    with pytest.raises(DeskError) as caught:
        parse_layout(
            LAYOUT.replace("\\\\", "\\").replace(before.replace("\\\\", "\\"), after.replace("\\\\", "\\")),
            "layouts/x.toml",
        )
    assert key in [mistake.key for mistake in caught.value.mistakes]
