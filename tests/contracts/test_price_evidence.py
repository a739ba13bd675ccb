"""Each form of a wrong settle has a case that is found and one, much like it, that rightly is not."""

import numpy as np
import pytest

from contracts.checks.prices import Ruling, Verdict
from contracts.findings import Action, Finding, Kind, Severity
from contracts.quality import Quality
from contracts.repairs import Clean, clean_panel
from tests.contracts.small import make_bars_of, make_market, make_panel, weekdays
from tests.contracts.test_prices import CONTRACTS, DAYS, curve


def bars(settle: np.ndarray) -> dict[str, np.ndarray]:
    """Ranges of a point on either side, and each contract's own volume and open interest."""
    sizes = np.array([900.0, 700.0, 500.0, 300.0, 200.0])
    return {
        "high": settle + 1,
        "low": settle - 1,
        "volume": np.tile(sizes, (len(settle), 1)),
        "open_interest": np.tile(10 * sizes, (len(settle), 1)),
    }


def judge(settle: np.ndarray, extra: str = "", **fields: np.ndarray) -> Clean:
    panel = make_panel(make_market(extra), CONTRACTS, DAYS, settle, **fields)
    return clean_panel(panel, make_bars_of(panel), (), Quality())


def told(clean: Clean) -> list[tuple[int, int, Kind, Ruling]]:
    return [(verdict.session, verdict.contract, verdict.kind, verdict.ruling) for verdict in clean.verdicts]


def only(clean: Clean) -> Verdict:
    assert len(clean.verdicts) == 1
    return clean.verdicts[0]


def finding_of(clean: Clean) -> Finding:
    assert len(clean.findings) == 1
    return clean.findings[0]


def swap(price: float, first: int) -> float:
    text = list(f"{price:.2f}")
    text[first], text[first + 1] = text[first + 1], text[first]
    return float("".join(text))


def test_two_digits_changed_about_are_named_and_mended() -> None:
    """224.00 became 242.00: the two swapped back stand where the curve puts the contract."""
    true = curve()
    settle, fields = true.copy(), bars(true)
    settle[40, 2] = swap(true[40, 2], 1)
    assert (true[40, 2], settle[40, 2]) == (224.0, 242.0)
    clean = judge(settle, **fields)
    assert told(clean) == [(40, 2, Kind.DIGITS_SWAPPED, Ruling.REFUTED)]
    assert abs(clean.settle[40, 2] - true[40, 2]) <= 0.5


def test_wrong_settle_whose_digits_give_nothing_is_no_swap() -> None:
    settle = curve()
    fields = bars(settle)
    settle[40, 2] += 11.25
    assert told(judge(settle, **fields)) == [(40, 2, Kind.REVERTING_SPIKE, Ruling.REFUTED)]


def test_settle_with_the_wrong_sign_is_mended_where_prices_are_positive() -> None:
    true = curve()
    settle, fields = true.copy(), bars(true)
    settle[40, 1] *= -1
    clean = judge(settle, **fields)
    assert told(clean) == [(40, 1, Kind.SIGN_FLIPPED, Ruling.REFUTED)]
    assert abs(clean.settle[40, 1] - true[40, 1]) <= 0.5


def test_settle_with_the_wrong_sign_is_mended_where_prices_may_be_negative() -> None:
    true = curve() - 190.0
    settle, fields = true.copy(), bars(true)
    settle[40, 1] *= -1
    clean = judge(settle, extra="may_be_negative = true", **fields)
    assert told(clean) == [(40, 1, Kind.SIGN_FLIPPED, Ruling.REFUTED)]
    assert abs(clean.settle[40, 1] - true[40, 1]) <= 0.5


def test_fall_through_nought_to_another_size_is_no_wrong_sign() -> None:
    settle = curve() - 190.0
    fields = bars(settle)
    settle[40, 1] = -11.0
    fields["low"][40, 1] = -12.0
    clean = judge(settle, extra="may_be_negative = true", **fields)
    assert told(clean) == [(40, 1, Kind.LONE_MOVE, Ruling.KEPT)]
    assert np.array_equal(clean.settle, settle)


def test_row_of_another_contract_is_found_and_mended() -> None:
    true = curve()
    settle, fields = true.copy(), bars(true)
    for values in (settle, *fields.values()):
        values[40, 1] = values[40, 3]
    clean = judge(settle, **fields)
    assert told(clean) == [(40, 1, Kind.NEIGHBOURS_PRICE, Ruling.REFUTED)]
    assert "those of NWHT-2024-12" in finding_of(clean).message
    assert abs(clean.settle[40, 1] - true[40, 1]) <= 0.5


def test_two_contracts_that_settle_alike_have_each_their_own_row() -> None:
    settle = curve()
    settle[:, 1] = settle[:, 2]
    assert told(judge(settle, **bars(settle))) == []


def test_settle_outside_its_own_range_is_refuted_at_once_and_for_as_long_as_it_stands_there() -> None:
    """A level shift of the settles alone: each session's range stands where the curve puts the contract."""
    true = curve()
    settle, fields = true.copy(), bars(true)
    settle[40:52, 2] += 9.0
    clean = judge(settle, **fields)
    assert {(v.session, v.contract) for v in clean.verdicts if v.ruling is Ruling.REFUTED} == {
        (session, 2) for session in range(40, 52)
    }
    assert np.abs(clean.settle - true).max() <= 1.5


def test_move_that_traded_its_way_stays_a_fact_from_its_first_session_on() -> None:
    settle = curve()
    fields = bars(settle)
    for name in ("high", "low"):
        fields[name][40:, 2] += 9.0
    settle[40:, 2] += 9.0
    fields["low"][40, 2] -= 9.0
    fields["volume"][40, 2] *= 4
    assert told(judge(settle, **fields)) == [(40, 2, Kind.LONE_MOVE, Ruling.KEPT)]


def test_whole_bar_that_stands_off_and_comes_back_is_refuted() -> None:
    true = curve()
    settle, fields = true.copy(), bars(true)
    for values in (settle, fields["high"], fields["low"]):
        values[40, 2] += 9.0
    clean = judge(settle, **fields)
    assert told(clean) == [(40, 2, Kind.REVERTING_SPIKE, Ruling.REFUTED)]


def test_contract_that_a_squeeze_holds_up_while_the_curve_falls_is_kept() -> None:
    """Its bar carries on from its last settle; the other contracts fall by twelve points and stay there."""
    settle = curve()
    fields = bars(settle)
    for values in (settle, fields["high"], fields["low"]):
        values[40:42, [0, 1, 3, 4]] -= 12.0
        values[42:] -= 12.0
    clean = judge(settle, **fields)
    assert not clean.is_repaired.any()
    assert {verdict.kind for verdict in clean.verdicts} <= {Kind.LONE_MOVE}


def test_contract_that_does_not_trade_may_stand_still_and_catch_up() -> None:
    """Every third session only is the last contract marked to the curve; between, it stands still."""
    settle = curve()
    fields = bars(settle)
    fields["volume"][:, 4] = 0.0
    for session in range(1, len(settle)):
        if session % 3:
            settle[session, 4] = settle[session - 1, 4]
    for name in ("high", "low"):
        fields[name][:, 4] = settle[:, 4]
    clean = judge(settle, **fields)
    assert np.array_equal(clean.settle, settle)
    assert told(clean) == []


def test_near_month_that_moves_half_as_much_again_as_the_others_does_not_stand_alone() -> None:
    steps = np.array([6, -4, 8, 2, -6, 4, 0, -4, 8, -2, 4, -6, 6, 2, -4, 4, -2, -6, 4, 6] * 4, dtype=float)
    steps[60] = 40.0
    settle = 212.25 + 0.25 * np.cumsum(steps)[:, None] * np.array([1.5, 1.0, 1.0, 1.0, 1.0])
    assert told(judge(settle)) == []


def test_daily_limit_holds_a_contract_back_for_two_sessions() -> None:
    """The curve falls by seven; the front, limited to four a session, follows over two."""
    settle = curve()
    fields = bars(settle)
    for values in (settle, fields["high"], fields["low"]):
        values[40:, 1:] -= 7.0
    drop = np.zeros(len(settle))
    settle[40, 0] = settle[39, 0] - 4.0
    drop[41:] = 7.0
    settle[41:, 0] -= drop[41:]
    clean = judge(settle, extra="daily_limit = 4.0")
    assert not clean.is_repaired[:, 0].any()


def test_of_two_contracts_the_one_that_leapt_alone_is_refuted() -> None:
    true = curve()[:, :2]
    settle = true.copy()
    settle[40, 0] += 12.5
    panel = make_panel(make_market(), CONTRACTS[:2], DAYS, settle)
    clean = clean_panel(panel, make_bars_of(panel), (), Quality())
    assert told(clean) == [(40, 0, Kind.REVERTING_SPIKE, Ruling.REFUTED)]


@pytest.mark.parametrize(("stands", "kind", "action"), [
    (False, Kind.REVERTING_SPIKE, Action.REPAIRED), (True, Kind.CURVE_BREAK, Action.KEPT),
])  # fmt: skip
def test_finding_keeps_its_identity_when_tomorrow_confirms_or_withdraws_the_repair(
    stands: bool, kind: Kind, action: Action
) -> None:
    """On the evening itself the settle is repaired; the next session shows whether it came back."""
    settle = curve()
    settle[40, 2] += 12.5
    if stands:
        settle[41:, 2] += 12.5
    panel = make_panel(make_market(), CONTRACTS, weekdays("2023-10-02", 41), settle[:41])
    tonight = finding_of(clean_panel(panel, make_bars_of(panel), (), Quality()))
    later = finding_of(judge(settle))
    assert (tonight.kind, tonight.action) == (Kind.CURVE_BREAK, Action.REPAIRED)
    assert (later.kind, later.action) == (kind, action)
    assert later.identity == tonight.identity


def test_finding_carries_its_evidence_and_the_error_of_its_repair() -> None:
    settle = curve()
    settle[40, 2] += 12.5
    found = finding_of(judge(settle))
    assert found.reported == settle[40, 2]
    assert found.corrected == found.expected
    assert found.score is not None
    assert found.threshold == 8.0
    assert found.score > found.threshold
    assert "within about" in found.message


def drifting(start: int, length: int, size: float) -> np.ndarray:
    settle = curve()
    ramp = np.clip((np.arange(len(settle)) - start) / length, 0.0, 1.0)
    settle[:, 2] += np.round(size * ramp / 0.25) * 0.25
    return settle


def test_slow_drift_off_the_neighbours_is_told_and_kept() -> None:
    settle = drifting(45, 20, 20.0)
    clean = judge(settle)
    kinks = [found for found in clean.findings if found.kind is Kind.CURVE_KINKED]
    assert [found.contract for found in kinks] == ["NWHT-2024-09"]
    assert kinks[0].action is Action.KEPT
    assert np.array_equal(clean.settle, settle)


@pytest.mark.parametrize("size", [0.0, 2.0])
def test_curve_in_its_ordinary_shape_has_no_kink(size: float) -> None:
    clean = judge(drifting(45, 20, size))
    assert [found for found in clean.findings if found.kind is Kind.CURVE_KINKED] == []


def test_leap_is_no_drift() -> None:
    clean = judge(drifting(59, 1, 20.0))
    assert [found.kind for found in clean.findings] == [Kind.CURVE_BREAK]
    assert clean.findings[0].severity is Severity.REVIEW
