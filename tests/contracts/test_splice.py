"""The arithmetic of rolls and splices, worked by hand."""

import numpy as np
import pytest

from contracts.errors import IdentityError
from contracts.markets import parse_market
from contracts.quality import Quality
from contracts.repairs import DeclaredRepair, clean_panel
from contracts.rolls import NEVER, Held, lay_rolls
from contracts.sessions import day_of
from contracts.splice import STATUS_NAMES, Series, carry_forward, check_identities, mix, splice
from contracts.trend import impact_of_gap, impact_of_prices, sign_score
from tests.contracts.small import MARKET, make_bars_of, make_panel, weekdays

CONTRACTS = ("NWHT-2024-03", "NWHT-2024-05")
DAYS = weekdays("2024-01-02", 8)
SETTLE = np.array([[100, 104], [101, 105], [99, 104], [102, 107], [103, 109], [101, 108], [104, 110], [106, 111.0]])
VOLUME = np.array([[90, 10], [90, 20], [80, 40], [70, 60], [50, 80], [30, 90], [10, 95], [5, 99.0]])


def lay(plan: str, settle: np.ndarray = SETTLE, usable: np.ndarray | None = None) -> tuple[Held, Series]:
    market = parse_market(MARKET.format(extra="") + plan, "markets/nwht.toml")
    panel = make_panel(market, CONTRACTS, DAYS, SETTLE, volume=VOLUME)
    standing = ~np.isnan(settle) if usable is None else usable
    (held,) = lay_rolls(panel, standing, settle, market.plans["tested"])
    carried, status = carry_forward(settle, np.zeros(settle.shape, dtype=bool))
    series = splice(held, carried, status)
    check_identities(series, "test")
    return held, series


def test_roll_is_measured_on_the_close_that_decides_it_and_held_from_the_next_session() -> None:
    """Volume crosses on session 4; the gap is 109 - 103 = 6, and earlier prices rise by it."""
    held, series = lay('[plans.tested]\ntrigger = "volume"\n')
    (step,) = held.steps
    assert (step.decision.decided, step.measured, step.effective, step.gap) == (4, 4, 5, 6.0)
    assert series.settle.tolist() == [100, 101, 99, 102, 103, 108, 110, 111]
    assert series.shift.tolist() == [6, 6, 6, 6, 6, 0, 0, 0]
    assert series.back_adjusted.tolist() == [106, 107, 105, 108, 109, 108, 110, 111]
    assert series.change.tolist()[1:] == [1, -2, 3, 1, -1, 2, 1]
    assert series.scale[0] == pytest.approx(109 / 103)
    assert series.simple_return[5] == pytest.approx(108 / 109 - 1)
    assert series.growth[0] == 100.0
    assert series.growth[-1] == pytest.approx(100 * series.ratio_adjusted[-1] / series.ratio_adjusted[0])
    assert series.rolled.tolist() == [False] * 5 + [True, False, False]


def test_confirm_asks_for_consecutive_sessions_and_delay_moves_the_measuring() -> None:
    held, _ = lay('[plans.tested]\ntrigger = "volume"\nconfirm = 2\ndelay = 2\n')
    (step,) = held.steps
    assert (step.decision.decided, step.measured, step.effective) == (5, 6, 7)


def test_steps_move_the_weight_in_equal_parts_with_a_ledger_row_each() -> None:
    held, series = lay('[plans.tested]\ntrigger = "volume"\nsteps = 2\n')
    assert [(s.step, s.measured, s.effective, s.weight_before, s.weight_after, s.gap) for s in held.steps] == [
        (1, 4, 5, 0.0, 0.5, 3.0),
        (2, 5, 6, 0.5, 1.0, 3.5),
    ]
    assert series.settle.tolist() == [100, 101, 99, 102, 103, 0.5 * 101 + 0.5 * 108, 110, 111]


def test_roll_waits_for_two_usable_settles() -> None:
    usable = np.ones(SETTLE.shape, dtype=bool)
    usable[4, 1] = usable[5, 0] = False
    held, _ = lay('[plans.tested]\ntrigger = "volume"\n', usable=usable)
    (step,) = held.steps
    assert (step.decision.decided, step.measured, step.effective, step.postponed, step.gap) == (4, 6, 7, 2, 6.0)


def test_leg_at_or_below_zero_leaves_no_ratio_before_the_roll_but_a_gap() -> None:
    settle = SETTLE.copy()
    settle[4, 0] = -3.0
    held, series = lay('[plans.tested]\ntrigger = "volume"\n', settle)
    assert held.steps[0].gap == 112.0
    assert np.isnan(held.steps[0].ratio)
    assert np.isnan(series.ratio_adjusted[:5]).all()
    assert np.isnan(series.scale[:5]).all()
    assert np.isnan(series.growth[:5]).all()
    assert series.growth[5] == 100.0
    assert series.back_adjusted[4] == 109.0


def test_settle_is_carried_for_three_sessions_and_then_missing() -> None:
    settle = np.array([[1.0], [np.nan], [np.nan], [np.nan], [np.nan], [2.0]])
    carried, status = carry_forward(settle, np.zeros((6, 1), dtype=bool))
    assert carried[:4, 0].tolist() == [1.0, 1.0, 1.0, 1.0]
    assert np.isnan(carried[4, 0])
    assert status[:, 0].tolist() == [0, 2, 2, 2, 3, 0]


def test_each_contract_carries_its_own_settle_and_says_how_it_stands() -> None:
    """The first begins late and is repaired once, the second never had a settle."""
    nan = np.nan
    settle = np.array([[nan, nan], [5.0, nan], [nan, nan], [7.0, nan], [nan, nan]])
    is_repaired = np.zeros((5, 2), dtype=bool)
    is_repaired[3, 0] = True
    carried, status = carry_forward(settle, is_repaired)
    assert carried[1:, 0].tolist() == [5.0, 5.0, 7.0, 7.0]
    assert np.isnan(carried[0, 0])
    assert np.isnan(carried[:, 1]).all()
    assert [STATUS_NAMES[at] for at in status[:, 0]] == ["missing", "reported", "carried", "repaired", "carried"]
    assert [STATUS_NAMES[at] for at in status[:, 1]] == ["missing"] * 5


def test_a_field_of_what_is_held_is_mixed_by_weight_and_missing_where_a_leg_is() -> None:
    """Held from session 1: contract 0, then 1/4 of contract 1, then contract 1 alone; contract 2 is never looked at."""
    nan = np.nan
    held = Held(
        1, 1, np.array([-1, 0, 0, 0, 1]), np.array([-1, -1, 1, 1, -1]), np.array([0.0, 0.0, 0.25, 0.25, 0.0])
    )  # fmt: skip
    values = np.array([[1.0, 2.0, nan], [10.0, nan, nan], [10.0, 20.0, nan], [10.0, nan, nan], [nan, 30.0, nan]])
    mixed = mix(held, values)
    assert mixed[[0, 1, 3]].tolist() == [10.0, 12.5, 30.0]
    assert np.isnan(mixed[2])


def test_nothing_held_is_no_series() -> None:
    nothing = np.full(3, NEVER)
    with pytest.raises(ValueError, match="nothing was held"):
        splice(Held(1, NEVER, nothing, nothing, np.zeros(3)), SETTLE[:3], np.zeros((3, 2), dtype=np.int64))


def make_series(back: list[float], change: list[float], ratio: list[float], simple_return: list[float]) -> Series:
    """A series of which only the four columns of the identities matter."""
    some = np.zeros(len(back))
    columns = [np.array(values) for values in (back, ratio, change, simple_return)]
    return Series(0, some, some, some, columns[0], columns[1], columns[2], columns[3], some, some, some)


@pytest.mark.parametrize(("at", "off"), [(1, 0.001), (3, -0.001), (4, 0.001)])
def test_a_wrong_change_is_refused_and_its_session_named(at: int, off: float) -> None:
    """Session 2 has no price: the change on 3 is counted from 1."""
    nan = np.nan
    change = [nan, 1.0, nan, 3.0, -5.0]
    check_identities(make_series([0.5, 1.5, nan, 4.5, -0.5], change, [nan] * 5, [nan] * 5), "NWHT, plan p, nearby 1")
    change[at] += off
    with pytest.raises(
        IdentityError, match=f"^NWHT, plan p, nearby 1, session {at} of the series: back-adjusted change"
    ):
        check_identities(
            make_series([0.5, 1.5, nan, 4.5, -0.5], change, [nan] * 5, [nan] * 5), "NWHT, plan p, nearby 1"
        )


@pytest.mark.parametrize(("at", "off"), [(1, 0.001), (2, -0.001), (4, 0.001), (7, 0.001)])
def test_a_wrong_return_is_refused_and_its_session_named(at: int, off: float) -> None:
    """Session 3 has no price, so that the return on 4 is counted from 2; 5 and 6 have none, around a price of zero."""
    nan = np.nan
    ratio = [2.0, 3.0, 1.5, nan, 6.0, 0.0, 4.0, 5.0]
    returns = [nan, 0.5, -0.5, nan, 3.0, nan, nan, 0.25]
    check_identities(make_series([nan] * 8, [nan] * 8, ratio, returns), "p")
    returns[at] += off
    with pytest.raises(IdentityError, match=f"^p, session {at} of the series: ratio-adjusted return"):
        check_identities(make_series([nan] * 8, [nan] * 8, ratio, returns), "p")


def test_rounding_is_allowed_for_in_proportion_and_absolutely_below_one() -> None:
    """A billionth of 1e6 is 0.001; of anything below one it is a billionth of one."""
    check_identities(make_series([1e6, 1e6], [np.nan, 0.0009], [np.nan] * 2, [np.nan] * 2), "p")
    check_identities(make_series([0.001, 0.001], [np.nan, 9e-10], [np.nan] * 2, [np.nan] * 2), "p")
    check_identities(make_series([np.nan] * 2, [np.nan] * 2, [1.0, 1e6 + 1], [0.0, 1e6 + 0.0009]), "p")
    check_identities(make_series([np.nan] * 2, [np.nan] * 2, [1.0, 1.0], [0.0, 9e-10]), "p")
    for back, change in (([1e6, 1e6], 0.0011), ([0.001, 0.001], 1.1e-9), ([-1e6, 0.0], 1e6 + 1.1e-9)):
        with pytest.raises(IdentityError):
            check_identities(make_series(back, [np.nan, change], [np.nan] * 2, [np.nan] * 2), "p")
    for ratio, simple_return in (([1.0, 1e6 + 1], 1e6 + 0.0011), ([1.0, 1.0], 1.1e-9)):
        with pytest.raises(IdentityError):
            check_identities(make_series([np.nan] * 2, [np.nan] * 2, ratio, [0.0, simple_return]), "p")


def test_of_several_wrong_sessions_the_first_is_named() -> None:
    wrong, nothing = [1.0, 2.0, 3.0, 4.0], [np.nan] * 4
    with pytest.raises(IdentityError, match=r"^p, session 1 of the series"):
        check_identities(make_series(wrong, [np.nan, 5.0, 1.0, 5.0], nothing, nothing), "p")
    with pytest.raises(IdentityError, match=r"^p, session 2 of the series"):
        check_identities(make_series(nothing, nothing, wrong, [np.nan, 1.0, 5.0, 5.0]), "p")


def test_a_series_without_prices_holds_together() -> None:
    check_identities(make_series([], [], [], []), "p")
    check_identities(make_series([np.nan] * 3, [np.nan] * 3, [np.nan] * 3, [np.nan] * 3), "p")


def test_identities_are_checked_for_real() -> None:
    _, series = lay('[plans.tested]\ntrigger = "volume"\n')
    series.back_adjusted[3] += 0.25
    with pytest.raises(IdentityError, match="back-adjusted change is not the held position's change"):
        check_identities(series, "test")


def test_ratio_identity_is_checked_for_real() -> None:
    _, series = lay('[plans.tested]\ntrigger = "volume"\n')
    series.ratio_adjusted[3] *= 1.001
    with pytest.raises(IdentityError, match="ratio-adjusted return is not its return"):
        check_identities(series, "test")


def test_sign_score_adds_the_signs_of_the_look_backs() -> None:
    prices = np.array([10.0, 11, 12, 11, 10, 12])
    assert sign_score(prices, (1, 2))[2:].tolist() == [2.0, -1.0, -2.0, 2.0]
    assert np.isnan(sign_score(prices, (1, 2))[:2]).all()


def test_impact_counts_the_sessions_whose_score_would_differ() -> None:
    """A steady rise; one price ten too high turns its own down-look-backs and the ones that start from it."""
    prices = np.arange(20.0)
    assert impact_of_prices(prices, np.array([10]), np.array([10.0]), (1, 2)) == 2
    assert impact_of_prices(prices, np.array([10]), np.array([0.1]), (1, 2)) == 0
    assert impact_of_gap(prices, 10, 5.0, (1, 2)) == 0
    assert impact_of_gap(prices, 10, -5.0, (1, 2)) == 2


def test_declared_repair_of_a_volume_reaches_the_trigger() -> None:
    """The incoming's volume of 80 on session 4 was typed as 8; corrected, the roll is decided there."""
    market = parse_market(MARKET.format(extra="") + '[plans.tested]\ntrigger = "volume"\n', "markets/nwht.toml")
    volume = VOLUME.copy()
    volume[4, 1] = 8
    panel = make_panel(market, CONTRACTS, DAYS, SETTLE, volume=volume)
    repair = DeclaredRepair(
        contract=CONTRACTS[1], session=day_of(DAYS[4]), field="volume", reported=8, corrected=80,
        reason="a figure was lost", by="desk", on=day_of(DAYS[7]),
    )  # fmt: skip
    decided = []
    for repairs in ((), (repair,)):
        clean = clean_panel(panel, make_bars_of(panel), repairs, Quality())
        (held,) = lay_rolls(clean.traded(panel), clean.usable, clean.settle, market.plans["tested"])
        decided.append(held.steps[0].decision.decided)
    assert decided == [5, 4]
