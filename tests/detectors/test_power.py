"""Floors under what the checks find on the bench, measured on the reported seeds only.

Thresholds are chosen by the tuning seeds (`python -m tests.detectors.report --seeds tuning`); the markets and faults
of the reported seeds are other draws, and nothing is tuned on them.
"""

import os

import pytest

from tests.detectors.bench import ALL, measure_histories, measure_last_sessions, online_precision, plant
from tests.detectors.score import Tally
from tests.detectors.terms import FEW

IS_LONG = os.environ.get("ROPEWALK_LONG") == "1"
CODES = ALL if IS_LONG else FEW
# A kind's own floor is held where so many of it were planted.
ENOUGH = 20


@pytest.fixture(scope="module")
def markets():  # type: ignore[no-untyped-def]
    return plant(CODES, "reported")


@pytest.fixture(scope="module")
def histories(markets) -> Tally:  # type: ignore[no-untyped-def]
    return measure_histories(markets, "reported")


def test_of_all_faults_98_of_100_are_found(histories: Tally) -> None:
    assert histories.recall >= 0.98


def test_of_each_kind_of_fault_95_of_100_are_found(histories: Tally) -> None:
    poor = {
        kind: (histories.found[kind], count)
        for kind, count in histories.planted.items()
        if count >= ENOUGH and histories.recall_of(kind) < 0.95
    }
    assert poor == {}


def test_of_all_review_and_block_findings_98_of_100_are_right(histories: Tally) -> None:
    assert histories.precision >= 0.98


def test_no_true_event_is_altered(histories: Tally) -> None:
    assert histories.altered == []


def test_repaired_settles_lie_near_the_truth(histories: Tally) -> None:
    """Within 3 ticks or 0.3% at the median, within 1% at the 95th percentile."""
    errors = histories.repair_errors()
    assert errors["count"] > 30
    assert errors["median_ticks"] <= 3 or errors["median_percent"] <= 0.3
    assert errors["p95_percent"] <= 1.0


def test_on_the_last_session_90_of_100_are_found_at_the_same_precision(markets, histories: Tally) -> None:  # type: ignore[no-untyped-def]
    with_fault, without = measure_last_sessions(markets, "reported", 400 if IS_LONG else 30)
    assert with_fault.recall >= 0.90
    assert online_precision(with_fault, without, histories) >= 0.98
