"""Figures of a roll plan against small markets worked out by hand."""

import datetime
from dataclasses import replace

import numpy as np
import pytest

from contracts.compared import Crossing, Difference, crossing, differences, figures_of
from contracts.deliveries import Delivery
from contracts.markets import Plan
from contracts.panel import Panel
from contracts.rolls import NEVER, Held, lay_rolls
from contracts.sessions import last_trade_day
from contracts.splice import Series, carry_forward, splice
from tests.contracts.small import make_market, make_panel, weekdays

NAN = float("nan")
# Ten sessions from Monday 26 February 2024; NWHT-2024-03 trades until Thursday 14 March.
DAYS = weekdays("2024-02-26", 10)
CONTRACTS = ("NWHT-2024-03", "NWHT-2024-05")
MARCH = [200.0, 201.0, 202.0, 203.0, 204.0, 205.0, 206.0, 207.0, 208.0, 209.0]
VOLUME_MARCH = [100, 100, 100, 100, 60, 40, 30, 20, 20, 10]
VOLUME_MAY = [0, 20, 20, 110, 50, 80, 90, 90, 90, 90]


def market_of_two() -> Panel:
    settle = np.array([[m, m + 2.5] for m in MARCH])
    volume = np.array([VOLUME_MARCH, VOLUME_MAY], dtype=float).T
    return make_panel(make_market(), CONTRACTS, DAYS, settle, volume=volume, open_interest=volume * 10)


def lay(panel: Panel, **keys: object) -> tuple[Plan, Held, Series]:
    plan = Plan.model_validate(keys)
    settle = panel.field("settle")
    (held,) = lay_rolls(panel, ~np.isnan(settle), settle, plan)
    return plan, held, splice(held, *carry_forward(settle, np.zeros(settle.shape, dtype=bool)))


def test_figures_of_one_roll_by_volume() -> None:
    """May first trades more on session 3, for good from session 5; the roll is decided on 3 and held from 4."""
    panel = market_of_two()
    _, held, series = lay(panel, trigger="volume")
    figures = figures_of(panel, "by_volume", held, series)
    assert (figures.sessions, figures.rolls, figures.by_deadline, figures.by_person) == (10, 1, 0, 0)
    # Sessions 0 to 2 and 5 to 9 hold the larger; on 3 May is larger, on 4 March.
    assert figures.most_active_by_volume == pytest.approx(8 / 10)
    held_volume = sum(VOLUME_MARCH[:4]) + sum(VOLUME_MAY[4:])
    assert figures.volume_held == pytest.approx(held_volume / (sum(VOLUME_MARCH) + sum(VOLUME_MAY)))
    assert figures.after_volume_crossing == Crossing(1, 0, -2.0, -2, -2)
    assert figures.gaps is not None
    assert (figures.gaps.mean, figures.gaps.worst) == (10.0, 10.0)  # 2.5 in ticks of 0.25
    assert figures.gaps.worst_on == datetime.date(2024, 3, 1)
    assert figures.gaps.worst_roll == "NWHT-2024-03 -> NWHT-2024-05"
    assert figures.rolls_a_year == pytest.approx(1 / (11 / 365.25))
    assert figures.after_first_notice is None  # the market declares no notice


def test_roll_by_deadline_and_sessions_of_the_last_week() -> None:
    """The last trade is the close of session 13; held to the end of the data, 9 is within five sessions of it."""
    panel = market_of_two()
    assert last_trade_day(panel.market, Delivery(2024, 3)) == datetime.date(2024, 3, 14)
    assert panel.last_trade[0] == 13
    _, held, series = lay(panel, trigger="calendar")
    late = figures_of(panel, "late", held, series)
    assert (late.rolls, late.in_last_week, late.gaps) == (0, 1, None)
    assert late.after_volume_crossing == Crossing(0, 0, None, None, None)
    _, held, series = lay(panel, trigger="open interest", confirm=9, backstop=8)
    early = figures_of(panel, "early", held, series)
    assert (early.rolls, early.by_deadline, early.in_last_week) == (1, 1, 0)


def test_first_notice_counts_the_sessions_held_on_and_after_it() -> None:
    market = make_market('[first_notice]\nrule = "FREQ=MONTHLY;BYMONTHDAY=6"')
    settle = np.array([[m, m + 2.5] for m in MARCH])
    panel = make_panel(market, CONTRACTS, DAYS, settle, volume=np.ones((10, 2)))
    _, held, series = lay(panel, trigger="calendar")
    # 6, 7 and 8 March are sessions 7, 8, 9.
    assert figures_of(panel, "held", held, series).after_first_notice == 3


@pytest.mark.parametrize(
    ("outgoing", "incoming", "until", "expected"),
    [
        ([5, 5, 5, 1], [1, 6, 4, 2], 3, 3),  # above once, below again, then above
        ([5, 5, 5, 1], [1, 6, 4, 2], 2, NEVER),  # not above on the last session that counts
        ([5, 5, 5], [6, 6, 6], 2, 0),  # always above
        ([5, 5, 5], [5, 5, 5], 2, NEVER),  # equal is not above
        ([5, NAN, 5, 5], [1, 9, NAN, 6], 3, 3),  # what is not known on both sides does not count
        ([NAN, NAN], [1, 2], 1, NEVER),
    ],
)
def test_crossing_is_the_session_from_which_the_incoming_stays_above(
    outgoing: list[float], incoming: list[float], until: int, expected: int
) -> None:
    assert crossing(np.array([outgoing, incoming], dtype=float).T, 0, 1, until) == expected


def test_two_plans_are_compared_on_the_sessions_both_hold() -> None:
    """They hold apart on session 4 alone; from a gap of 2.5 the older sign over one session differs nowhere."""
    panel = market_of_two()
    _, held, series = lay(panel, trigger="volume")
    _, held2, series2 = lay(panel, trigger="volume", delay=2)
    assert differences([("now", held, series), ("later", held2, series2)], (1, 2)) == [
        Difference("now", "later", 10, 1, 8, 0, 0)
    ]


def test_a_gap_that_one_plan_measures_otherwise_turns_its_score() -> None:
    panel = market_of_two()
    _, held, series = lay(panel, trigger="volume")
    falling = replace(series, back_adjusted=series.back_adjusted[::-1].copy())
    (found,) = differences([("up", held, series), ("down", held, falling)], (1,))
    assert (found.scored, found.score_differs, found.score_opposed) == (9, 9, 9)


def test_a_notice_day_that_is_no_session_counts_from_the_next_one() -> None:
    """9 March 2024 is a Saturday: no session of the ten, the last of which is Friday 8, is on or after it."""
    market = make_market('[first_notice]\nrule = "FREQ=MONTHLY;BYMONTHDAY=9"')
    settle = np.array([[m, m + 2.5] for m in MARCH])
    panel = make_panel(market, CONTRACTS, DAYS, settle, volume=np.ones((10, 2)))
    _, held, series = lay(panel, trigger="calendar")
    assert figures_of(panel, "held", held, series).after_first_notice == 0


def test_a_roll_half_done_at_the_end_of_the_data_is_none_yet() -> None:
    panel = market_of_two()
    _, held, series = lay(panel, trigger="volume", steps=20)
    assert held.steps and held.steps[-1].weight_after < 1.0
    figures = figures_of(panel, "slow", held, series)
    assert (figures.rolls, figures.gaps) == (0, None)


def test_a_crossing_that_may_still_come_is_not_called_never() -> None:
    """The incoming is never above within the ten sessions, and the outgoing trades on until session 13."""
    settle = np.array([[m, m + 2.5] for m in MARCH])
    volume = np.array([[100.0, 10.0]] * 10)
    panel = make_panel(make_market(), CONTRACTS, DAYS, settle, volume=volume, open_interest=volume)
    _, held, series = lay(panel, trigger="calendar", backstop=8)
    figures = figures_of(panel, "early", held, series)
    assert figures.rolls == 1
    assert figures.after_volume_crossing == Crossing(0, 0, None, None, None)
