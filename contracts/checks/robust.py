"""Location and scale that a few wrong values cannot move.

Belongs here: the statistics, with their sources. Does not belong here: thresholds.
"""

import numpy as np

# 1 / Phi^-1(3/4): makes the median absolute deviation estimate the standard deviation of normal data
# (Hampel 1974, from memory; the value: scipy.stats.norm.ppf).
MAD_SCALE = 1.482602218505602


def scaled_mad(values: np.ndarray) -> float:
    """Scaled median absolute deviation from the median, in the unit of the values; NaN for no values."""
    if len(values) == 0:
        return float("nan")
    return float(MAD_SCALE * np.median(np.abs(values - np.median(values))))


def modified_z(values: np.ndarray) -> np.ndarray:
    """0.6745 (x - median) / MAD of every value, (n,) (Iglewicz and Hoaglin 1993, from memory).

    Infinite for a value off the median of data whose MAD is zero.
    """
    centre = np.median(values)
    deviation = np.median(np.abs(values - centre))
    with np.errstate(divide="ignore", invalid="ignore"):
        scores = 0.6745 * (values - centre) / deviation
    return np.where(values == centre, 0.0, scores)


def row_medians(values: np.ndarray) -> np.ndarray:
    """Median of each row without its NaNs, (T,); NaN for a row of none."""
    ordered = np.sort(values, axis=1)
    count = np.count_nonzero(~np.isnan(ordered), axis=1)
    rows = np.arange(len(values))
    low, high = np.maximum((count - 1) // 2, 0), np.maximum(count // 2, 0)
    if not values.shape[1]:
        return np.full(len(values), np.nan)
    middle = 0.5 * (ordered[rows, low] + ordered[rows, np.minimum(high, values.shape[1] - 1)])
    return np.where(count > 0, middle, np.nan)


def weighted_medians(values: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """Weighted median of each column, (n,): the least value up to which half of the weight lies.

    `values`, `weights` (k, n); a value of no weight does not count, and a column of none gives nought.
    """
    order = np.argsort(values, axis=0)
    ordered = np.take_along_axis(values, order, axis=0)
    summed = np.cumsum(np.take_along_axis(weights, order, axis=0), axis=0)
    reached = summed >= 0.5 * summed[-1]
    found = ordered[reached.argmax(axis=0), np.arange(values.shape[1])]
    return np.where(summed[-1] > 0, found, 0.0)


def weighted_median(values: list[float], weights: list[float]) -> float:
    """Weighted median of a few values: the least up to which half of the weight lies."""
    half = 0.5 * sum(weights)
    summed = 0.0
    for value, weight in sorted(zip(values, weights, strict=True)):
        summed += weight
        if summed >= half:
            return value
    return max(values)
