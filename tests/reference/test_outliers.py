"""Robust location and scale agree with published values and with scipy, and see bad values in open data."""

import numpy as np
import pytest
from scipy import stats

from contracts.checks.robust import MAD_SCALE, modified_z, scaled_mad

# Copper in wholemeal flour, 24 determinations: data set `chem` of the R package MASS.
CHEM = np.array([
    2.9, 3.1, 3.4, 3.4, 3.7, 3.7, 2.8, 2.5, 2.4, 2.4, 2.7, 2.2, 5.28, 3.37, 3.03, 3.03, 28.95, 3.77, 3.4,
    2.2, 3.5, 3.6, 3.7, 3.7,
])  # fmt: skip
# Rosner's 54 values, as in NIST/SEMATECH e-Handbook 1.3.5.17.3 (from memory).
ROSNER = np.array([
    -0.25, 0.68, 0.94, 1.15, 1.20, 1.26, 1.26, 1.34, 1.38, 1.43, 1.49, 1.49, 1.55, 1.56, 1.58, 1.65, 1.69,
    1.70, 1.76, 1.77, 1.81, 1.91, 1.94, 1.96, 1.99, 2.06, 2.09, 2.10, 2.14, 2.15, 2.23, 2.24, 2.26, 2.35,
    2.37, 2.40, 2.47, 2.54, 2.62, 2.64, 2.90, 2.92, 2.92, 2.93, 3.21, 3.26, 3.30, 3.59, 3.68, 4.30,
    4.64, 5.34, 5.42, 6.01,
])  # fmt: skip
# Daily gold, values 765 to 775 counted from 1: data set `gold` of the R package forecast; value 770 is bad.
GOLD = np.array([483.0, 485.3, 484.5, 495.0, 502.75, 593.7, 487.05, 487.75, 484.55, 481.0, 481.6])


def test_the_scale_is_one_over_the_third_quartile_of_the_normal_distribution() -> None:
    assert pytest.approx(1.482602218505602, abs=1e-15) == MAD_SCALE
    assert pytest.approx(1 / stats.norm.ppf(0.75), abs=1e-14) == MAD_SCALE


def test_the_scaled_mad_of_the_copper_data_is_the_published_one() -> None:
    """Median 3.385 and scaled MAD 0.52632: statsmodels, robust/tests/test_scale.py."""
    assert np.median(CHEM) == pytest.approx(3.385)
    assert scaled_mad(CHEM) == pytest.approx(0.52632, abs=5e-6)


@pytest.mark.parametrize("values", [CHEM, ROSNER, GOLD, np.array([1.0]), np.array([1.0, 5.0]), np.zeros(7)])
def test_the_scaled_mad_is_scipys(values: np.ndarray) -> None:
    assert scaled_mad(values) == pytest.approx(stats.median_abs_deviation(values, scale=1 / MAD_SCALE), abs=1e-12)


def test_the_scaled_mad_of_nothing_is_not_a_number() -> None:
    assert np.isnan(scaled_mad(np.array([])))


def test_modified_scores_of_the_two_large_copper_values() -> None:
    """0.6745 (x - median) / MAD, Iglewicz and Hoaglin; values computed."""
    scores = modified_z(CHEM)
    assert scores[CHEM == 5.28] == pytest.approx([3.6005], abs=5e-5)
    assert scores[CHEM == 28.95] == pytest.approx([48.5735], abs=5e-5)


def test_three_of_rosners_values_score_above_three_and_a_half() -> None:
    """The limit of 3.5 is Iglewicz and Hoaglin's; scores computed."""
    scores = modified_z(ROSNER)
    above = np.abs(scores) > 3.5
    assert ROSNER[above].tolist() == [5.34, 5.42, 6.01]
    assert scores[above] == pytest.approx([4.0161, 4.1151, 4.8453], abs=5e-5)


def test_the_bad_gold_price_stands_thirty_scaled_mads_from_its_neighbours() -> None:
    """The R package forecast names value 770, 593.7, as bad (page of tsoutliers); distance computed."""
    distance = np.abs(GOLD - np.median(GOLD)) / scaled_mad(GOLD)
    assert distance[5] == pytest.approx(29.84, abs=0.005)
    assert int(distance.argmax()) == 5
    # The next largest is the true 502.75 beside it.
    assert np.sort(distance)[-2] < 6
