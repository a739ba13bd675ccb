"""Lacking bars: told where a contract trades, a note where it does not."""

import numpy as np

from contracts.checks.gaps import check_gaps
from contracts.findings import Finding, Kind, Severity
from contracts.panel import Panel
from tests.contracts.small import make_market, make_panel, weekdays

# Their last trading sessions are 2024-03-14, 2024-05-14 and 2024-09-13.
CONTRACTS = ("NWHT-2024-03", "NWHT-2024-05", "NWHT-2024-09")
# 2024-01-02 to 2024-04-15.
DAYS = weekdays("2024-01-02", 75)


def full() -> np.ndarray:
    settle = 200.0 + np.arange(75)[:, None] + np.array([0.0, 3.0, 6.0])
    settle[53:, 0] = np.nan
    return settle


def lay(settle: np.ndarray, volume: float | np.ndarray = 500.0) -> Panel:
    return make_panel(make_market(), CONTRACTS, DAYS, settle, volume=np.broadcast_to(volume, settle.shape))


def told(panel: Panel) -> list[tuple[Kind, Severity, str | None, str]]:
    return [(f.kind, f.severity, f.contract, str(f.session)) for f in check_gaps(panel)]


def test_nothing_lacks_in_full_data_and_an_expired_contract_is_no_gap() -> None:
    assert told(lay(full())) == []


def test_one_empty_session_a_run_and_a_silence_are_told_apart() -> None:
    settle = full()
    settle[10] = np.nan
    settle[20:23] = np.nan
    settle[30:41] = np.nan
    found = check_gaps(lay(settle))
    assert [(f.kind, str(f.session), f.score) for f in found] == [
        (Kind.SESSION_MISSING, "2024-01-16", 1.0),
        (Kind.SESSIONS_MISSING, "2024-01-30", 3.0),
        (Kind.MARKET_SILENT, "2024-02-13", 11.0),
    ]


def test_lacking_bars_of_a_contract_that_trades_want_eyes() -> None:
    settle = full()
    settle[30:32, 1] = np.nan
    assert told(lay(settle)) == [(Kind.CONTRACT_MISSING, Severity.REVIEW, "NWHT-2024-05", "2024-02-13")]


def test_lacking_bars_of_a_contract_that_hardly_trades_are_one_note() -> None:
    settle = full()
    settle[[20, 25, 30, 31], 2] = np.nan
    volume = np.full(settle.shape, 500.0)
    volume[:, 2] = 2.0
    found = check_gaps(lay(settle, volume))
    assert [(f.kind, f.severity, f.contract, f.score) for f in found] == [
        (Kind.CONTRACT_MISSING, Severity.NOTE, "NWHT-2024-09", 4.0)
    ]


def test_contract_whose_bars_stop_six_sessions_early_is_told_and_one_that_stops_one_early_is_not() -> None:
    settle = full()
    settle[47:, 0] = np.nan
    assert told(lay(settle)) == [(Kind.ENDED_EARLY, Severity.REVIEW, "NWHT-2024-03", "2024-03-06")]
    settle = full()
    settle[52:, 0] = np.nan
    assert told(lay(settle)) == []


def test_contract_behind_the_others_is_late_and_a_note_where_it_hardly_trades() -> None:
    settle = full()
    settle[73:, 1] = np.nan
    assert told(lay(settle)) == [(Kind.FILE_LATE, Severity.REVIEW, "NWHT-2024-05", "2024-04-15")]
    volume = np.full(settle.shape, 500.0)
    volume[:, 1] = 1.0
    assert told(lay(settle, volume)) == [(Kind.FILE_LATE, Severity.NOTE, "NWHT-2024-05", "2024-04-15")]


def test_market_without_any_volume_is_judged_by_its_rows() -> None:
    settle = full()
    settle[30, 1] = np.nan
    found: list[Finding] = check_gaps(make_panel(make_market(), CONTRACTS, DAYS, settle))
    assert [(f.kind, f.severity) for f in found] == [(Kind.CONTRACT_MISSING, Severity.REVIEW)]
