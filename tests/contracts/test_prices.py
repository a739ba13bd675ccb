"""Settles that stand alone are refuted; what the whole curve or the bar itself bears out is not."""

import numpy as np
import pytest

from contracts.findings import Kind
from contracts.quality import Quality
from contracts.repairs import clean_panel
from tests.contracts.small import make_bars_of, make_market, make_panel, weekdays

CONTRACTS = ("NWHT-2024-03", "NWHT-2024-05", "NWHT-2024-09", "NWHT-2024-12", "NWHT-2025-03")
DAYS = weekdays("2023-10-02", 80)
# Moves of the common curve in ticks of 0.25, drawn once by hand; every contract follows with a tick of its own.
MOVES = [3, -2, 5, 1, -4, 2, 0, -3, 6, -1, 2, -5, 4, 1, -2, 3, -1, -4, 2, 5] * 4
OWN = [[0, 1, 0, -1, 0], [1, 0, -1, 0, 0], [0, -1, 0, 1, 0], [-1, 0, 1, 0, 0]] * 20


def curve() -> np.ndarray:
    base = 212.25 + 0.25 * np.cumsum(MOVES)
    offsets = np.array([0.0, 2.5, 5.0, 6.25, 8.0])
    return base[:, None] + offsets + 0.25 * np.array(OWN)


def judge(settle: np.ndarray, **fields: np.ndarray):
    panel = make_panel(make_market(fields.pop("extra", "")), CONTRACTS, DAYS, settle, **fields)  # type: ignore[arg-type]
    return clean_panel(panel, make_bars_of(panel), (), Quality())


def test_quiet_curve_has_no_verdict() -> None:
    assert judge(curve()).verdicts == ()


@pytest.mark.parametrize(("factor", "power"), [(0.1, -1), (10.0, 1), (100.0, 2)])
def test_misplaced_decimal_is_repaired_to_within_two_ticks(factor: float, power: int) -> None:
    true = curve()
    settle = true.copy()
    settle[40, 1] *= factor
    clean = judge(settle)
    assert [(v.session, v.contract, v.kind, v.power) for v in clean.verdicts] == [(40, 1, Kind.DECIMAL_SHIFT, power)]
    assert abs(clean.settle[40, 1] - true[40, 1]) <= 0.5
    assert clean.is_repaired[40, 1]
    assert not clean.usable[40, 1]


def test_whole_bar_a_hundred_times_too_big_is_repaired_with_its_range() -> None:
    true = curve()
    fields = {"open": true.copy(), "high": true + 1, "low": true - 1, "volume": np.full(true.shape, 500.0)}
    settle = true.copy()
    settle[40, 1] *= 100
    for name in ("open", "high", "low"):
        fields[name][40, 1] *= 100
    clean = judge(settle, **fields)
    assert [(v.session, v.contract, v.kind) for v in clean.verdicts] == [(40, 1, Kind.DECIMAL_SHIFT)]
    assert clean.prices[1][40, 1] == pytest.approx(true[40, 1] + 1)
    assert clean.prices[2][40, 1] == pytest.approx(true[40, 1] - 1)


def test_run_of_shifted_decimals_is_repaired_session_by_session() -> None:
    true = curve()
    settle = true.copy()
    settle[40:44, 2] /= 10
    clean = judge(settle)
    assert [(v.session, v.contract) for v in clean.verdicts] == [(40, 2), (41, 2), (42, 2), (43, 2)]
    assert np.abs(clean.settle[40:44, 2] - true[40:44, 2]).max() <= 1.0


def test_spike_outside_its_own_range_that_comes_back_is_repaired() -> None:
    true = curve()
    fields = {"high": true + 1, "low": true - 1, "volume": np.full(true.shape, 500.0)}
    settle = true.copy()
    settle[40, 0] += 12.5
    clean = judge(settle, **fields)
    assert [(v.session, v.contract, v.kind) for v in clean.verdicts] == [(40, 0, Kind.REVERTING_SPIKE)]
    assert abs(clean.settle[40, 0] - true[40, 0]) <= 0.5


def test_spike_on_the_last_session_is_repaired_without_waiting_for_tomorrow() -> None:
    settle = curve()
    settle[-1, 2] += 12.5
    clean = judge(settle)
    assert [(v.session, v.contract, v.kind) for v in clean.verdicts] == [(79, 2, Kind.CURVE_BREAK)]
    assert clean.is_repaired[79, 2]


def test_move_that_stays_and_has_no_range_is_told_and_kept() -> None:
    settle = curve()
    settle[40:, 0] += 12.5
    clean = judge(settle)
    assert [(v.session, v.contract, v.kind) for v in clean.verdicts] == [(40, 0, Kind.CURVE_BREAK)]
    assert not clean.is_repaired.any()
    assert np.array_equal(clean.settle, settle)


def test_market_wide_shock_is_a_fact() -> None:
    settle = curve()
    settle[40:] *= 0.88
    clean = judge(settle)
    assert clean.verdicts == ()
    assert np.array_equal(clean.settle, settle)


def test_squeeze_with_range_and_volume_behind_it_is_kept() -> None:
    settle = curve()
    fields = {"high": settle + 1, "low": settle - 1, "volume": np.full(settle.shape, 500.0)}
    for session, lift in ((40, 10.0), (41, 22.5), (42, 30.0)):
        settle[session, 0] += lift
        fields["high"][session, 0] += lift
    clean = judge(settle, **fields)
    assert {v.kind for v in clean.verdicts} == {Kind.LONE_MOVE}
    assert np.array_equal(clean.settle, settle)


def test_zero_settle_where_it_cannot_be_is_replaced() -> None:
    true = curve()
    settle = true.copy()
    settle[40, 3] = 0.0
    clean = judge(settle)
    assert [(v.session, v.contract, v.kind) for v in clean.verdicts] == [(40, 3, Kind.NOT_POSITIVE)]
    assert abs(clean.settle[40, 3] - true[40, 3]) <= 0.5


def test_negative_settle_with_its_range_stands_where_the_market_may_be_negative() -> None:
    """The front contract fell through zero on one day with range and volume; nothing of it is touched."""
    settle = curve() - 195.0
    fields = {"high": settle + 1, "low": settle - 1, "volume": np.full(settle.shape, 500.0)}
    settle[70, 0] = -37.5
    fields["low"][70, 0] = -40.25
    clean = judge(settle, extra="may_be_negative = true", **fields)
    assert clean.settle[70, 0] == -37.5
    assert not clean.is_repaired.any()
    assert not clean.is_masked.any()


def test_fall_of_ninety_percent_that_traded_all_the_way_is_kept() -> None:
    settle = curve()
    fields = {"high": settle + 1, "low": settle - 1, "volume": np.full(settle.shape, 500.0)}
    for name, values in {"settle": settle, **fields}.items():
        values[60 if name != "high" else 61 :, 0] /= 10
    fields["low"][60, 0] = settle[60, 0] - 1
    clean = judge(settle, **fields)
    assert [v.kind for v in clean.verdicts] == [Kind.LONE_MOVE]
    assert np.array_equal(clean.settle, settle)


def test_wrong_price_that_passed_does_not_condemn_the_right_ones_after_it() -> None:
    """A slip with a range that reaches it is kept; the contract's return to its neighbours is kept too."""
    settle = curve()
    fields = {"high": settle + 1, "low": settle - 1, "volume": np.full(settle.shape, 500.0)}
    settle[60, 0] /= 10
    fields["low"][60, 0] = settle[60, 0] - 1
    clean = judge(settle, **fields)
    assert [(v.session, v.kind) for v in clean.verdicts] == [(60, Kind.LONE_MOVE)]
    assert np.array_equal(clean.settle, settle)


def test_price_alone_in_its_market_is_masked_where_the_curve_cannot_say() -> None:
    settle = curve()
    settle[:, 1:] = np.nan
    settle[40, 0] *= 10
    clean = judge(settle)
    assert [(v.session, v.kind) for v in clean.verdicts] == [(40, Kind.DECIMAL_SHIFT)]
    assert clean.is_masked[40, 0]
    assert np.isnan(clean.settle[40, 0])


def test_settle_below_zero_is_kept_without_any_range_and_so_is_its_return() -> None:
    """Settles alone, no volume, no range: a fall through zero and back the next day, in a market that may."""
    settle = curve() - 195.0
    settle[70, 0] = -37.5
    clean = judge(settle, extra="may_be_negative = true")
    assert [(v.session, v.kind, v.ruling.value) for v in clean.verdicts] == [(70, Kind.LONE_MOVE, "kept")]
    assert np.array_equal(clean.settle, settle)


def test_low_alone_bears_out_a_fall() -> None:
    settle = curve()
    settle[60:, 0] -= 15.0
    low = np.full(settle.shape, np.nan)
    low[60, 0] = settle[60, 0] - 1
    clean = judge(settle, low=low, volume=np.full(settle.shape, 500.0))
    assert [(v.session, v.kind) for v in clean.verdicts] == [(60, Kind.LONE_MOVE)]
