"""An undeclared change of scale is told once, and not as thousands of shifted decimals."""

import numpy as np
import pytest

from contracts.checks.scale import ScaleChange, find_scale_changes
from contracts.findings import Action, Kind, Severity
from tests.contracts.small import make_market, make_panel
from tests.contracts.test_prices import CONTRACTS, DAYS, curve, judge


def changes(settle: np.ndarray, **fields: np.ndarray) -> list[ScaleChange]:
    panel = make_panel(make_market(), CONTRACTS, DAYS, settle, **fields)
    return find_scale_changes(panel, panel.field("settle"))


@pytest.mark.parametrize(("factor", "power"), [(10.0, 1), (0.01, -2)])
@pytest.mark.parametrize("session", [40, 79])
def test_whole_market_on_another_scale_blocks_once_and_alters_nothing(factor: float, power: int, session: int) -> None:
    settle = curve()
    settle[session:] *= factor
    assert changes(settle) == [ScaleChange(session, 79, None, power)]
    clean = judge(settle)
    assert clean.verdicts == ()
    assert np.array_equal(clean.settle, settle)
    (found,) = clean.findings
    assert (found.kind, found.severity, found.contract) == (Kind.SCALE_CHANGED, Severity.BLOCK, None)
    day = {40: "2023-11-27", 79: "2024-01-19"}[session]
    assert f"[[rescaled]] before = {day}, multiply = {factor:.10g}" in found.message


def test_declared_change_of_scale_is_no_finding() -> None:
    settle = curve()
    settle[:40] *= 10
    declared = "[[rescaled]]\nbefore = 2023-11-27\nmultiply = 0.1\n"
    clean = judge(settle, extra=declared)  # type: ignore[arg-type]
    assert clean.findings == ()


def test_one_contract_on_another_scale_is_told_once_with_its_point_moved_back() -> None:
    true = curve()
    settle = true.copy()
    settle[40:60, 2] *= 100
    clean = judge(settle)
    (found,) = clean.findings
    assert (found.kind, found.severity, found.action) == (Kind.SCALE_CHANGED, Severity.BLOCK, Action.REPAIRED)
    assert (found.contract, str(found.session)) == ("NWHT-2024-09", "2023-11-27")
    assert np.allclose(clean.settle, true)
    assert clean.is_repaired[40:60, 2].all() and not clean.usable[40:60, 2].any()


def test_short_run_of_shifted_decimals_and_a_single_one_are_no_change_of_scale() -> None:
    settle = curve()
    settle[40:44, 2] /= 10
    settle[60, 1] *= 10
    assert changes(settle) == []


def test_a_wrong_price_beside_a_change_of_scale_is_still_found() -> None:
    settle = curve()
    settle[40:] *= 10
    settle[60, 1] += 300.0
    verdicts = judge(settle).verdicts
    assert [(verdict.session, verdict.contract) for verdict in verdicts] == [(60, 1)]


def test_fall_of_ninety_percent_that_traded_all_the_way_is_no_change_of_scale() -> None:
    settle = curve()
    high, low = settle + 1, settle - 1
    for values in (settle, low):
        values[60:, 0] /= 10
    high[61:, 0] /= 10
    assert changes(settle, high=high, low=low) == []
    # The same without the trade is a slip.
    high[60, 0] /= 10
    assert changes(settle, high=high, low=low) == [ScaleChange(60, 79, 0, -1)]


def test_crash_of_two_fifths_is_no_change_of_scale() -> None:
    settle = curve()
    settle[40:] *= 0.6
    assert changes(settle) == []
