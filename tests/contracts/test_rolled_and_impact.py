"""What is told of rolls, what faults would have cost, and what waivers do to findings."""

import datetime

import numpy as np
import pytest

from contracts.checks.rolled import check_rolls
from contracts.checks.stale import StaleRun
from contracts.findings import Action, Finding, Kind, Severity, Waiver, waive
from contracts.impact import Laid, lay_uncleaned, tell_cleaning, weigh_findings
from contracts.markets import parse_market
from contracts.panel import Panel
from contracts.quality import Quality
from contracts.repairs import Clean, DeclaredRepair, clean_panel
from contracts.rolls import lay_rolls
from contracts.splice import carry_forward, splice
from tests.contracts.small import MARKET, make_bars_of, make_panel, weekdays

CONTRACTS = ("NWHT-2024-03", "NWHT-2024-05", "NWHT-2024-09")
DAYS = weekdays("2024-01-02", 50)
NOTICE = '[first_notice]\nrule = "FREQ=MONTHLY;BYMONTHDAY=1"\nsteps = [{if_closed = "next"}]\n'
# Rises by a tick a session; the last trade of the first contract is on session 52, 2024-03-14.
SETTLE = 200.0 + 0.25 * np.arange(50)[:, None] + np.array([0.0, 4.0, 8.0])


def rolled(plan: str, volume: list[float], extra: str = "") -> list[tuple[Kind, Severity]]:
    """Findings about a plan, with the same volumes and open interest on every session."""
    market = parse_market(MARKET.format(extra="") + f"[plans.tested]\n{plan}\n{extra}", "markets/nwht.toml")
    counts = np.broadcast_to(np.array(volume), SETTLE.shape)
    panel = make_panel(market, CONTRACTS, DAYS, SETTLE, volume=counts, open_interest=6.0 * counts)
    tested = market.plans["tested"]
    (held,) = lay_rolls(panel, ~np.isnan(SETTLE), SETTLE, tested)
    return [(f.kind, f.severity) for f in check_rolls(panel, "tested", tested, held)]


@pytest.mark.parametrize(
    ("volume", "told"),
    [
        ([500.0, 300.0, 100.0], []),
        ([500.0, 30.0, 20.0], [(Kind.THIN_INCOMING, Severity.NOTE)]),
        ([500.0, 5.0, 20.0], [(Kind.THIN_INCOMING, Severity.REVIEW)]),
        ([0.0, 0.0, 0.0], []),
    ],
)
def test_incoming_under_a_tenth_of_the_busiest_contract_is_noted_and_under_a_fiftieth_wants_eyes(
    volume: list[float], told: list[tuple[Kind, Severity]]
) -> None:
    assert rolled('trigger = "calendar"\nbackstop = 20', volume) == told


def test_holding_past_first_notice_is_noted_unless_the_plan_says_that_it_counts_from_the_last_trade() -> None:
    """First notice is on 2024-03-01, session 43; eight sessions before the last trade is session 44."""
    calendar, even = 'trigger = "calendar"\nbackstop = 8', [500.0, 400.0, 300.0]
    assert rolled(calendar, even, NOTICE) == [(Kind.AFTER_FIRST_NOTICE, Severity.NOTE)]
    assert rolled(f'{calendar}\nbefore = "last trade"', even, NOTICE) == []
    assert rolled(f'{calendar}\nbefore = "first notice"', even, NOTICE) == []
    assert rolled(calendar, even) == []


def lay(settle: np.ndarray, repairs: tuple[DeclaredRepair, ...] = ()) -> tuple[Panel, Clean, Laid]:
    """The market's plan by volume on settles, cleaned by declared repairs; it holds the first contract throughout."""
    market = parse_market(MARKET.format(extra=""), "markets/nwht.toml")
    volume = np.broadcast_to(np.array([500.0, 300.0, 100.0]), settle.shape)
    panel = make_panel(market, CONTRACTS, DAYS[:40], settle, volume=volume)
    clean = clean_panel(panel, make_bars_of(panel), repairs, Quality(refuted_ticks=100000.0))
    (held,) = lay_rolls(panel, clean.usable, clean.settle, market.plans["by_volume"])
    series = splice(held, *carry_forward(clean.settle, clean.is_repaired))
    return panel, clean, Laid("by_volume", held, series)


def repair(session: datetime.date, reported: float, corrected: float) -> DeclaredRepair:
    on = datetime.date(2024, 3, 1)
    return DeclaredRepair(
        contract="NWHT-2024-03", session=session, field="settle", reported=reported, corrected=corrected,
        reason="test", by="desk", on=on,
    )  # fmt: skip


def wrong_for_two_sessions() -> tuple[Panel, Clean, Laid]:
    """Sessions 20 and 21 (2024-01-30 and 31) are reported 3.00 too low and put right by a person."""
    settle = SETTLE[:40].copy()
    settle[20:22, 0] -= 3.0
    days = (datetime.date(2024, 1, 30), datetime.date(2024, 1, 31))
    return lay(settle, (repair(days[0], 202.0, 205.0), repair(days[1], 202.25, 205.25)))


def test_wrong_prices_of_one_contract_in_a_row_carry_the_impact_of_all() -> None:
    """By look-backs of 1 and 2 a rise scores 2; the two low prices turn sessions 20 and 21 and nothing after them."""
    panel, clean, laid = wrong_for_two_sessions()
    weighed = weigh_findings(clean.findings, panel, clean, [laid], [], (1, 2))
    assert [(f.kind, str(f.session), f.impact_sessions) for f in weighed] == [
        (Kind.DECLARED_REPAIR, "2024-01-30", 2),
        (Kind.DECLARED_REPAIR, "2024-01-31", 2),
    ]


def test_kept_price_weighs_by_what_was_expected_and_a_note_weighs_nothing() -> None:
    panel, clean, laid = lay(SETTLE[:40])
    kept = Finding(
        Kind.CURVE_BREAK, Severity.REVIEW, "kept", "NWHT", "NWHT-2024-03", datetime.date(2024, 1, 30), "settle",
        reported=205.0, expected=202.0,
    )  # fmt: skip
    note = Finding(
        Kind.LONE_MOVE, Severity.NOTE, "note", "NWHT", "NWHT-2024-03", datetime.date(2024, 1, 30), "settle",
        reported=205.0, expected=202.0,
    )  # fmt: skip
    of_another = Finding(
        Kind.CURVE_BREAK, Severity.REVIEW, "kept", "NWHT", "NWHT-2024-09", datetime.date(2024, 1, 30), "settle",
        reported=213.0, expected=210.0,
    )  # fmt: skip
    weighed = weigh_findings([kept, note, of_another], panel, clean, [laid], [], (1, 2))
    assert [f.impact_sessions for f in weighed] == [1, 0, 0]


def test_stale_run_weighs_by_the_path_of_the_curve() -> None:
    """Settles of sessions 20 to 22 would have fallen by a point a session; the score turns on each of them."""
    panel, clean, laid = lay(SETTLE[:40])
    stale = Finding(
        Kind.STALE_PRICE, Severity.REVIEW, "stale", "NWHT", "NWHT-2024-03", datetime.date(2024, 1, 30), "settle",
        reported=205.0, expected=202.0,
    )  # fmt: skip
    run = StaleRun(20, 22, 0, -3.0, (204.0, 203.0, 202.0))
    (weighed,) = weigh_findings([stale], panel, clean, [laid], [run], (1, 2))
    assert weighed.impact_sessions == 3


def test_cleaning_tells_what_the_score_would_have_been_and_its_worst_session() -> None:
    panel, clean, laid = wrong_for_two_sessions()
    uncleaned = lay_uncleaned(laid.held, panel, clean)
    assert uncleaned[19:23].tolist() == [204.75, 202.0, 202.25, 205.5]
    assert tell_cleaning([laid], panel, clean, (1, 2)) == {
        "by_volume": {
            "sessions": 38,
            "replaced": 2,
            "turned": 2,
            "worst": {"session": "2024-01-30", "clean": 2, "reported": -2},
        }
    }


def test_cleaning_that_replaced_nothing_turned_nothing() -> None:
    panel, clean, laid = lay(SETTLE[:40])
    (told,) = tell_cleaning([laid], panel, clean, (1, 2)).values()
    assert told == {"sessions": 38, "replaced": 0, "turned": 0, "worst": None}


def found_on(day: datetime.date) -> Finding:
    return Finding(Kind.STALE_PRICE, Severity.BLOCK, "stands", "NWHT", "NWHT-2024-03", day, action=Action.KEPT)


@pytest.mark.parametrize(
    ("until", "day", "kinds"),
    [
        ("2024-03-01", "2024-02-01", []),
        ("2024-02-28", "2024-02-01", [Kind.WAIVER_EXPIRED]),
        ("2024-03-01", "2024-01-31", [Kind.WAIVER_UNMATCHED]),
    ],
)
def test_waiver_covers_until_its_day_and_is_a_finding_where_it_does_not(
    until: str, day: str, kinds: list[Kind]
) -> None:
    waiver = Waiver.model_validate(
        {
            "market": "NWHT", "kind": "stale_price", "from": datetime.date(2024, 2, 1), "to": datetime.date(2024, 2, 2),
            "reason": "a holiday", "by": "desk", "on": datetime.date(2024, 2, 3),
            "until": datetime.date.fromisoformat(until),
        }
    )  # fmt: skip
    finding, *about = waive([found_on(datetime.date.fromisoformat(day))], (waiver,), "NWHT", datetime.date(2024, 3, 1))
    assert [(f.kind, f.severity) for f in about] == [(kind, Severity.REVIEW) for kind in kinds]
    assert finding.waived_until == (None if kinds else datetime.date.fromisoformat(until))
