"""Volumes and open interest that cannot be, and the lag that the data contradict."""

import numpy as np
import pytest

from contracts.checks.lag import check_lag
from contracts.checks.volumes import check_volumes
from contracts.findings import Finding, Kind
from contracts.panel import Panel
from tests.contracts.small import make_market, make_panel, weekdays

CONTRACTS = ("NWHT-2024-09", "NWHT-2024-12")
DAYS = weekdays("2024-01-02", 60)
SETTLE = 200.0 + np.arange(60)[:, None] * 0.5 + np.array([0.0, 3.0])


def lay(volume: np.ndarray, interest: np.ndarray, span: np.ndarray | float = 2.0) -> Panel:
    fields = {"high": SETTLE + span, "low": SETTLE - span}
    return make_panel(
        make_market(), CONTRACTS, DAYS, SETTLE, volume=volume, open_interest=interest, open=SETTLE, **fields
    )


def counts() -> tuple[np.ndarray, np.ndarray]:
    """Volumes of 900 to 1,100 and open interest of 5,000 that grows by 20 a session."""
    steps = np.arange(60)[:, None] + np.zeros(2)
    return 1000.0 + 100.0 * np.sin(2.0 * steps), 5000.0 + 20.0 * steps


def told(found: list[Finding]) -> list[tuple[Kind, str | None, str, float | None]]:
    return [(f.kind, f.contract, str(f.session), f.reported) for f in found]


def test_ordinary_counts_are_not_told() -> None:
    assert check_volumes(lay(*counts())) == []


@pytest.mark.parametrize("session", [30, 59])
def test_hundredfold_volume_is_told_also_on_the_last_session(session: int) -> None:
    volume, interest = counts()
    volume[session, 1] = 100000.0
    found = check_volumes(lay(volume, interest))
    day = {30: "2024-02-13", 59: "2024-03-25"}[session]
    assert told(found) == [(Kind.VOLUME_IMPLAUSIBLE, "NWHT-2024-12", day, 100000.0)]


def test_eightfold_volume_is_a_day_of_news() -> None:
    volume, interest = counts()
    volume[30, 1] = 8000.0
    assert check_volumes(lay(volume, interest)) == []


def test_great_volume_with_a_bar_to_match_is_a_fact() -> None:
    volume, interest = counts()
    span = np.full(SETTLE.shape, 2.0)
    volume[30, 1] = 30000.0
    assert [f.kind for f in check_volumes(lay(volume, interest, span))] == [Kind.VOLUME_IMPLAUSIBLE]
    span[30, 1] = 30.0
    assert check_volumes(lay(volume, interest, span)) == []


def test_first_block_in_a_contract_that_hardly_trades_is_a_fact() -> None:
    volume, interest = counts()
    volume[:, 1], interest[:, 1] = 1.0, 10.0
    volume[30, 1] = 400.0
    interest[31:, 1] = 400.0
    assert check_volumes(lay(volume, interest)) == []


@pytest.mark.parametrize("wrong", [0.0, 56.0, 56000.0])
@pytest.mark.parametrize("session", [30, 59])
def test_open_interest_that_stands_alone_is_told_also_on_the_last_session(session: int, wrong: float) -> None:
    volume, interest = counts()
    interest[session, 0] = wrong
    found = check_volumes(lay(volume, interest))
    assert [(f.kind, f.contract, f.reported) for f in found] == [
        (Kind.OPEN_INTEREST_IMPLAUSIBLE, "NWHT-2024-09", wrong)
    ]


def test_open_interest_that_stays_on_its_new_level_is_a_fact() -> None:
    volume, interest = counts()
    interest[30:, 0] = 20000.0
    assert check_volumes(lay(volume, interest)) == []


def drawn(late: int, length: int = 300) -> Panel:
    """Open interest that changes by up to the volume of its session, printed so many sessions late (or early)."""
    rng = np.random.default_rng(5)
    volume = np.round(1000.0 * np.exp(0.5 * rng.standard_normal((length, 2))))
    interest = 50000.0 + np.cumsum(np.round(0.2 * rng.standard_normal((length, 2)) * volume), axis=0)
    printed = np.full(interest.shape, np.nan)
    if late >= 0:
        printed[late:] = interest[: length - late]
    else:
        printed[:late] = interest[-late:]
    settle = np.full((length, 2), 200.0)
    contracts = ("NWHT-2025-12", "NWHT-2026-03")
    days = weekdays("2024-01-02", length)
    return make_panel(make_market(), contracts, days, settle, volume=volume, open_interest=printed)


def test_open_interest_on_its_own_session_is_not_told() -> None:
    assert check_lag(drawn(0)) == []


@pytest.mark.parametrize("late", [1, 2, 4])
def test_open_interest_printed_late_is_told_with_how_late(late: int) -> None:
    (found,) = check_lag(drawn(late))
    assert (found.kind, found.contract, found.reported) == (Kind.OPEN_INTEREST_LAG_WRONG, None, float(late))
    assert found.score is not None and found.score > 5


def test_open_interest_of_a_later_session_is_told_as_known_too_soon() -> None:
    panel = drawn(-1)
    (found,) = check_lag(panel)
    assert found.reported == -1.0 and "could not know" in found.message


def test_open_interest_that_has_nothing_to_do_with_volume_says_nothing() -> None:
    panel = drawn(0)
    panel.values[4] = np.random.default_rng(6).permutation(panel.values[4].ravel()).reshape(panel.shape)
    assert check_lag(panel) == []


def test_more_blank_sessions_than_the_declared_lag_are_told() -> None:
    panel = drawn(0)
    panel.values[5, -3:] = np.nan
    (found,) = check_lag(panel)
    assert (found.kind, found.expected, found.reported) == (Kind.OPEN_INTEREST_LAG_WRONG, 1.0, 3.0)
    panel.values[5, -1:] = np.nan
    panel.values[5, -3:-1] = 50000.0
    assert check_lag(panel) == []
