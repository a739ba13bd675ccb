"""What one bar says of itself and of its market's terms."""

import numpy as np

from contracts.checks.rows import check_rows
from contracts.checks.stale import find_stale_runs
from contracts.findings import Action, Finding, Kind, Severity
from contracts.quality import Quality
from contracts.repairs import clean_panel
from tests.contracts.small import make_bars_of, make_market, make_panel
from tests.contracts.test_prices import CONTRACTS, DAYS, curve


def rows(settle: np.ndarray, extra: str = "", **fields: np.ndarray) -> list[Finding]:
    panel = make_panel(make_market(extra), CONTRACTS, DAYS, settle, **fields)
    clean = clean_panel(panel, make_bars_of(panel), (), Quality())
    return check_rows(panel, clean.prices, clean.levels, clean.is_repaired & ~clean.usable)


def bars(settle: np.ndarray) -> dict[str, np.ndarray]:
    volume = np.full(settle.shape, 500.0)
    return {"open": settle.copy(), "high": settle + 1, "low": settle - 1, "volume": volume}


def test_clean_bars_are_not_told() -> None:
    assert rows(curve(), **bars(curve())) == []


def test_price_between_ticks_is_noted_with_the_nearest_tick() -> None:
    settle = curve()
    fields = bars(settle)
    fields["open"][40, 1] += 0.1
    (found,) = rows(settle, **fields)
    assert (found.kind, found.severity, found.field) == (Kind.OFF_TICK, Severity.NOTE, "open")
    assert (found.reported, found.expected) == (fields["open"][40, 1], settle[40, 1])


def test_many_prices_between_ticks_are_told_once_with_their_count() -> None:
    settle = curve()
    fields = bars(settle)
    fields["open"][40:50, 1] += 0.1
    (found,) = rows(settle, **fields)
    assert found.score == 10.0


def test_high_below_low_and_open_outside_are_left_out_of_the_clean_bar() -> None:
    settle = curve()
    fields = bars(settle)
    fields["high"][40, 1], fields["low"][40, 1] = fields["low"][40, 1], fields["high"][40, 1]
    fields["open"][50, 2] += 3
    found = rows(settle, **fields)
    assert {(f.kind, f.field, f.action) for f in found if f.kind is not Kind.SETTLE_OUTSIDE_RANGE} == {
        (Kind.RANGE_BROKEN, "high", Action.MASKED),
        (Kind.RANGE_BROKEN, "low", Action.MASKED),
        (Kind.RANGE_BROKEN, "open", Action.MASKED),
    }


def test_open_of_nought_is_not_positive_but_may_be_where_prices_may_be_negative() -> None:
    settle = curve()
    fields = bars(settle)
    fields["open"][40, 1] = 0.0
    (found,) = rows(settle, **fields)
    assert (found.kind, found.severity, found.reported) == (Kind.NOT_POSITIVE, Severity.REVIEW, 0.0)
    near = settle - 212.0
    fields = bars(near)
    fields["open"][40, 1] = near[40, 1]
    assert Kind.NOT_POSITIVE not in {f.kind for f in rows(near, "may_be_negative = true", **fields)}


def test_settle_outside_what_traded_is_a_note_and_nothing_without_trade_or_on_the_last_session() -> None:
    settle = curve()
    fields = bars(settle)
    fields["high"][40, 1] = settle[40, 1] - 0.5
    fields["open"][40, 1] = settle[40, 1] - 0.75
    (found,) = rows(settle, **fields)
    assert (found.kind, found.severity, found.expected) == (
        Kind.SETTLE_OUTSIDE_RANGE, Severity.NOTE, settle[40, 1] - 0.5,
    )  # fmt: skip
    fields["volume"][40, 1] = 0.0
    assert rows(settle, **fields) == []


LIMIT = "daily_limit = 4.0"


def test_lone_settle_beyond_the_limit_is_told_on_its_way_out_alone() -> None:
    settle = curve()
    # Its bars traded all the way there, so that it is kept; past the limit there and back all the same.
    settle[40:42, 1] += 5.0
    fields = bars(settle)
    fields["low"][40:42, 1] -= 6.0
    fields["open"][40, 1] -= 5.0
    told = [(f.kind, f.severity, str(f.session)) for f in rows(settle, LIMIT, **fields)]
    assert told == [(Kind.LIMIT_EXCEEDED, Severity.REVIEW, "2023-11-27")]


def test_curve_that_goes_beyond_the_limit_together_is_a_note() -> None:
    settle = curve()
    settle[40:] += 12.0
    told = [(f.kind, f.severity, f.contract) for f in rows(settle, LIMIT, **bars(settle))]
    assert told == [(Kind.LIMIT_EXCEEDED, Severity.NOTE, None)]


def test_curve_that_closes_at_its_limit_is_a_note_that_it_was_locked() -> None:
    settle = np.repeat(curve()[:1], 80, axis=0)
    settle[40:] += 4.0
    told = [(f.kind, f.severity, f.contract) for f in rows(settle, LIMIT, **bars(settle))]
    assert told == [(Kind.LIMIT_LOCKED, Severity.NOTE, None)]


def test_settle_that_stands_while_the_curve_moves_is_stale_where_it_trades() -> None:
    settle = curve()
    settle[50:56, 1] = settle[49, 1]
    for volume, runs in ((500.0, [(50, 55, 1)]), (0.0, [])):
        counts = np.full(settle.shape, 500.0)
        counts[:, 1] = volume
        panel = make_panel(make_market(), CONTRACTS, DAYS, settle, volume=counts)
        found = find_stale_runs(panel, settle, Quality())
        assert [(run.first, run.last, run.contract) for run in found] == runs
        assert all(len(run.path) == 6 and run.path[-1] == settle[49, 1] + run.moved for run in found)


def test_settle_that_stands_in_a_curve_that_stands_is_not_stale() -> None:
    settle = np.repeat(curve()[:1], 80, axis=0)
    panel = make_panel(make_market(), CONTRACTS, DAYS, settle, volume=np.full(settle.shape, 500.0))
    assert find_stale_runs(panel, settle, Quality()) == []
