"""The bench itself: its markets are what they say, its faults are where they say, and scoring can fail."""

import os

import numpy as np
import pytest

from contracts.sessions import day_of
from tests.detectors.bench import ALL, SEEDS
from tests.detectors.chain import Found, Outcome, raw_text
from tests.detectors.curves import HIGH, LOW, OPEN, SETTLE, VOLUME, grow
from tests.detectors.faults import NAMES, Fault, Planted
from tests.detectors.hampel import alarms
from tests.detectors.mix import plant_cells, plant_whole
from tests.detectors.report import gather, say
from tests.detectors.score import Tally, tally_history
from tests.detectors.terms import FEW, terms_of

SEED = 5
_MARKETS = ALL if os.environ.get("ROPEWALK_LONG") == "1" else FEW


def test_seeds_for_tuning_and_for_reporting_differ_and_so_do_their_markets() -> None:
    assert SEEDS["tuning"] != SEEDS["reported"]
    one, other = (grow(terms_of("BWHA"), seed) for seed in SEEDS.values())
    count = min(len(one.days), len(other.days))
    assert not np.array_equal(one.values[SETTLE, :count, 3], other.values[SETTLE, :count, 3], equal_nan=True)


def test_there_are_at_least_twenty_markets_and_the_same_seed_gives_the_same_one() -> None:
    assert len(ALL) >= 20
    one, other = (plant_cells(grow(terms_of("BGLD"), SEED), SEED) for _ in range(2))
    assert raw_text(one) == raw_text(other)
    assert one.faults == other.faults


@pytest.mark.parametrize("code", _MARKETS)
def test_true_settles_lie_on_ticks_within_the_limit_and_traded_bars_agree_with_them(code: str) -> None:
    grown = grow(terms_of(code), SEED)
    settle, tick = grown.values[SETTLE], grown.terms.tick
    assert np.nanmax(np.abs(settle / tick - np.round(settle / tick))) < 1e-6
    assert np.nanmin(settle) > 0 or grown.terms.may_be_negative
    if grown.market.daily_limit is not None:
        assert np.nanmax(np.abs(np.diff(settle, axis=0))) <= grown.market.daily_limit + 1e-9
    busy = grown.values[VOLUME] >= 30
    for place in (OPEN, SETTLE):
        assert (grown.values[place][busy] <= grown.values[HIGH][busy] + 1e-9).all()
        assert (grown.values[place][busy] >= grown.values[LOW][busy] - 1e-9).all()


@pytest.mark.parametrize("code", _MARKETS)
def test_the_market_moves_as_much_as_its_terms_say(code: str) -> None:
    """The near contract's daily moves have the declared standard deviation, to within a factor of two."""
    grown = grow(terms_of(code), SEED)
    settle, terms = grown.values[SETTLE], grown.terms
    moves = []
    for day in range(1, len(settle)):
        live = np.flatnonzero(np.isfinite(settle[day - 1]) & np.isfinite(settle[day]) & (grown.ends - day >= 6))
        if len(live):
            base = terms.level if terms.may_be_negative else settle[day - 1, live[0]]
            moves.append((settle[day, live[0]] - settle[day - 1, live[0]]) / base)
    assert 0.5 * terms.vol < np.std(moves) < 2 * terms.vol


def test_the_bench_has_negative_prices_idle_back_months_limit_days_squeezes_and_shocks() -> None:
    markets = {code: grow(terms_of(code), SEEDS["reported"]) for code in ("BPWR", "BRIC", "BHOG")}
    assert np.nanmin(markets["BPWR"].values[SETTLE]) < -1
    assert np.mean(markets["BRIC"].values[VOLUME][np.isfinite(markets["BRIC"].values[SETTLE])] == 0) > 0.15
    natures = {event.nature for grown in markets.values() for event in grown.events}
    assert natures == {"shock", "squeeze", "lone move", "limit"}


@pytest.mark.parametrize("code", FEW)
def test_values_differ_from_the_truth_on_faults_and_nowhere_else(code: str) -> None:
    planted = plant_cells(grow(terms_of(code), SEED), SEED)
    grown = planted.grown
    differs = ~np.isclose(planted.values, grown.values, rtol=0, atol=1e-12, equal_nan=True).all(axis=0)
    spanned = np.zeros(differs.shape, dtype=bool)
    on_days = {"not_a_session", "outside_listing", "calendar_disagrees"}
    for fault in planted.faults:
        days = (grown.days >= fault.first) & (grown.days <= fault.last)
        columns = np.array([fault.contract in (None, name) for name in grown.contracts])
        cells = np.ix_(days, columns)
        assert fault.kind in on_days or differs[cells].any(), fault
        spanned[cells] = True
    assert not (differs & ~spanned).any()


def test_every_kind_of_fault_is_planted_somewhere() -> None:
    kinds: set[str] = set()
    for code in ALL:
        grown = grow(terms_of(code), SEEDS["reported"])
        kinds |= {fault.kind for fault in plant_cells(grown, SEEDS["reported"]).faults}
        kinds |= {fault.kind for whole in plant_whole(grown, SEEDS["reported"]) for fault in whole.faults}
        if kinds == set(NAMES):
            break
    assert kinds == set(NAMES)


def test_faults_of_settles_lie_five_to_a_hundred_sessions_before_expiry_and_spikes_are_of_4_to_15_percent() -> None:
    count = 0
    for code in FEW:
        planted = plant_cells(grow(terms_of(code), SEED), SEED)
        grown = planted.grown
        for fault in planted.faults:
            if fault.kind != "reverting_spike" or fault.contract is None:
                continue
            session = int(np.searchsorted(grown.days, fault.first))
            base = grown.terms.level if grown.terms.may_be_negative else fault.truth[0]
            assert 5 <= grown.ends[grown.contracts.index(fault.contract)] - session <= 100
            assert 0.04 <= abs(fault.size) / base <= 0.15
            count += 1
    assert count > 20


def _small() -> tuple[Planted, Fault]:
    planted = plant_cells(grow(terms_of("BWHA"), SEED), SEED)
    fault = next(fault for fault in planted.faults if fault.kind == "reverting_spike")
    planted.faults = [fault]
    return planted, fault


def _tally(planted: Planted, *found: Found, clean: dict[tuple[str, int], tuple[float, str]] | None = None) -> Tally:
    tally = Tally()
    tally_history(planted, Outcome(list(found), clean or {}), tally)
    return tally


def test_scoring_counts_a_hit_a_miss_and_a_false_alarm() -> None:
    planted, fault = _small()
    hit = Found("reverting_spike", "review", fault.contract, fault.first, "kept", "")
    noted = Found("lone_move", "note", fault.contract, fault.first, "kept", "")
    beside = Found("curve_break", "review", fault.contract, fault.first + 1, "kept", "")
    elsewhere = Found("curve_break", "block", "BWHA-1999-03", fault.first, "kept", "")
    assert (_tally(planted, hit, hit).recall, _tally(planted, hit, hit).precision) == (1.0, 1.0)
    assert sum(_tally(planted, hit, hit).right.values()) == 1
    assert _tally(planted, noted).recall == 0.0
    assert _tally(planted).missed == [fault]
    assert _tally(planted, hit, beside, elsewhere).precision == pytest.approx(1 / 3)


def test_scoring_names_only_what_is_called_by_its_name() -> None:
    planted, fault = _small()
    called = Found("digits_swapped", "review", fault.contract, fault.first, "kept", "")
    tally = _tally(planted, called)
    assert (tally.found["reverting_spike"], tally.named["reverting_spike"]) == (1, 0)


def test_scoring_sees_a_true_event_altered_and_how_far_a_repair_is_off() -> None:
    planted, fault = _small()
    grown = planted.grown
    event = next(event for event in grown.events if event.nature == "squeeze")
    name, day = grown.contracts[event.contracts[0]], int(grown.days[event.sessions[0]])
    assert fault.contract is not None
    repaired = (fault.truth[0] + 2 * grown.terms.tick, "repaired")
    tally = _tally(planted, clean={(name, day): (1.0, "masked"), (fault.contract, fault.first): repaired})
    assert len(tally.altered) == 1
    assert tally.altered[0].startswith(f"squeeze: {name} day {day}")
    assert tally.off_ticks == [pytest.approx(2.0)]
    assert tally.left == 0


def test_the_textbook_filter_alarms_on_a_lone_wrong_price_and_not_on_a_straight_line() -> None:
    settle = np.arange(100.0, 130.0)[:, None].copy()
    assert not alarms(settle, 3.0).any()
    settle[15] = 150.0
    assert np.argwhere(alarms(settle, 3.0)).tolist() == [[15, 0]]


def test_a_cut_market_ends_on_the_wanted_session_and_knows_no_later_open_interest() -> None:
    planted = plant_cells(grow(terms_of("BWHA"), SEED), SEED)
    cut = planted.cut(100, 400)
    assert len(cut.grown.days) == 301
    assert day_of(cut.grown.days[-1]) == day_of(planted.grown.days[400])
    assert np.isnan(cut.values[5, -1]).all()
    assert np.isfinite(cut.values[5, -2]).any()
    assert all(fault.first <= cut.grown.days[-1] for fault in cut.faults)


def test_the_report_prints_every_kind_planted_the_power_curve_and_the_textbook_filter(
    capsys: pytest.CaptureFixture[str],
) -> None:
    result = gather("tuning", ("BBND",), sample=2, last_sessions=1)
    say(result, misses=3)
    text = capsys.readouterr().out
    assert [kind for kind in result["kinds"] if f"  {kind} " not in text] == []
    assert "tuning seed (11)" in text
    assert "15 %" in text
    assert "textbook filter (Hampel, window 11) at 8 scaled MADs" in text
