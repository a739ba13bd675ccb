"""A closed day that trades all the same does not change the rolls that were published before it."""

from pathlib import Path

from catalog.study import list_evidence
from contracts.calendar_table import contract_days
from contracts.markets import parse_market
from tests.integration.one_market import Published, differences_from_plain, settles, write_one_market

MARKET = """
code = "STORM"
name = "a market that opened on a holiday"
exchange = "XTST"
currency = "EUR"
unit = "1 t"
point_value = 1.0
tick_size = 0.25
delivery_months = [3, 5]
closed = [2024-03-08]
[last_trade]
rule = "FREQ=MONTHLY;BYMONTHDAY=14"
[plans.five_before]
trigger = "calendar"
backstop = 5
"""
DAYS = [
    "2024-02-28", "2024-02-29", "2024-03-01", "2024-03-04", "2024-03-05", "2024-03-06", "2024-03-07", "2024-03-08",
    "2024-03-11", "2024-03-12", "2024-03-13", "2024-03-14", "2024-03-15",
]  # fmt: skip
MARCH: list[float | str] = [200, 201.5, 201, 202.25, 203, 202.5, 203.75, 204, 203, 202, 203.5, 204.25, ""]
MAY: list[float | str] = [205, 206.5, 206.25, 207, 208, 207.5, 208.5, 209, 208, 207, 208.25, 209, 210]


def test_roll_of_the_week_before_stands_when_the_holiday_has_traded(tmp_path: Path) -> None:
    """Five sessions before 14 March, of which the holiday was none, are 6 March; with it they would be the 7th."""
    early = {"2024-03": settles(DAYS[:6], MARCH[:6]), "2024-05": settles(DAYS[:6], MAY[:6])}
    then = Published(write_one_market(tmp_path / "then", MARKET, early), tmp_path / "then_published", "STORM")
    (known,) = then.rolls("five_before")
    assert (str(known["decided_on"]), str(known["effective_on"])) == ("2024-03-05", "2024-03-06")
    whole = {"2024-03": settles(DAYS, MARCH), "2024-05": settles(DAYS, MAY)}
    now = Published(write_one_market(tmp_path / "now", MARKET, whole), tmp_path / "now_published", "STORM")
    (finding,) = now.findings("calendar_disagrees")
    assert str(finding["session"]) == "2024-03-08"
    assert "2024-03-08" in now.series("five_before")
    (later,) = now.rolls("five_before")
    assert {**later, "impact_sessions": 0} == {**known, "impact_sessions": 0}
    declared = parse_market(MARKET, "markets/storm.toml")
    assert differences_from_plain(now, declared) == []
    (march, _) = contract_days(declared, 2024, 2024)
    assert str(march["deadlines"]["five_before"]) == "2024-03-06"
    # And so it is printed, for a person to decide it again: one session off, and not two.
    ((told,), (told_then,)) = (list_evidence(one.places, "STORM")[1] for one in (now, then))
    assert (told.sessions_to_deadline, str(told.deadline_on)) == (1, "2024-03-06")
    assert (told_then.sessions_to_deadline, told_then.decided_on) == (1, told.decided_on)
