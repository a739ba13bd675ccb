"""Known bad values of two open series are found by the project's own robust statistics.

The series stand whole in `tests/reference/data/`, with their source beside them, so that false alarms count too.
"""

import csv
from pathlib import Path

import numpy as np
import pytest

from contracts.checks.robust import MAD_SCALE, row_medians, scaled_mad
from contracts.quality import Quality

DATA = Path(__file__).resolve().parent / "data"
WINDOW = 11


def read_columns(name: str, *columns: str) -> np.ndarray:
    """Columns of a file of figures, (n, k); NA is NaN."""
    lines = [line for line in (DATA / name).read_text(encoding="utf-8").splitlines() if not line.startswith("#")]
    rows = csv.DictReader(lines)
    return np.array([[np.nan if row[c] == "NA" else float(row[c]) for c in columns] for row in rows])


def distances(values: np.ndarray) -> np.ndarray:
    """How far each value lies from the median of the eleven around it, in scaled MADs of them; 0 at either end."""
    half = WINDOW // 2
    result = np.zeros(len(values))
    for place in range(half, len(values) - half):
        around = values[place - half : place + half + 1]
        away, scale = abs(values[place] - np.median(around)), scaled_mad(around)
        result[place] = away / scale if scale else np.inf * bool(away)
    return result


def test_the_gold_series_is_the_published_one() -> None:
    """1108 values of which 34 are missing; the 770th is 593.7 (R package forecast, page of tsoutliers)."""
    gold = read_columns("gold.csv", "value")[:, 0]
    assert (len(gold), int(np.isnan(gold).sum()), float(gold[769])) == (1108, 34, 593.7)


def test_of_1074_gold_prices_the_bad_one_alone_stands_beyond_the_default_score() -> None:
    """Value 770 stands 29.84 scaled MADs away, the next at 5.90 (computed); settles are doubted from 8."""
    gold = read_columns("gold.csv", "value")[:, 0]
    present = np.flatnonzero(~np.isnan(gold))
    away = distances(gold[present])
    assert Quality().refuted_score == 8.0
    assert (present[away > Quality().refuted_score] + 1).tolist() == [770]
    assert np.sort(away)[-2:] == pytest.approx([5.90, 29.84], abs=0.005)


def test_what_stands_in_the_bad_gold_prices_place_is_between_its_neighbours() -> None:
    """494.9, the mean of 502.75 and 487.05 (R package forecast, page of tsoutliers)."""
    gold = read_columns("gold.csv", "value")[:, 0]
    assert (gold[768], gold[770]) == (502.75, 487.05)
    assert row_medians(np.array([[gold[768], gold[770]]]))[0] == pytest.approx(494.9)


def test_the_300_filled_days_of_gold_and_silver_are_those_without_common_change_or_spread() -> None:
    """9132 weekdays; on 300 both metals stand (computed). On 20 and 5 days more one alone stands: no filling."""
    prices = read_columns("gold_silver.csv", "gold", "silver")
    change = np.diff(prices, axis=0)
    common = row_medians(change)
    spread = MAD_SCALE * row_medians(np.abs(change - common[:, None]))
    assert len(prices) == 9132
    filled = (common == 0) & (spread == 0)
    assert int(filled.sum()) == 300
    assert (change == 0).sum(axis=0).tolist() == [320, 305]


def test_the_filled_days_are_holidays() -> None:
    """Of the 25 years in which they fell on a weekday, 4 July and 25 December are filled in every one (computed)."""
    prices = read_columns("gold_silver.csv", "gold", "silver")
    weekdays = np.arange("1977-12-30", "2013-01-01", dtype="datetime64[D]")
    weekdays = weekdays[np.is_busday(weekdays)]
    assert len(weekdays) == len(prices)
    filled = set(weekdays[1:][row_medians(np.abs(np.diff(prices, axis=0))) == 0].astype(str))
    for feast in ("07-04", "12-25"):
        days = [day for day in weekdays.astype(str) if day.endswith(feast)]
        assert len(days) == 25
        assert [day for day in days if day not in filled] == []
