"""A textbook filter on single contracts, for comparison.

Belongs here: the Hampel identifier, written apart from the checks. Does not belong here: anything the project uses.

A settle is alarmed where it lies further from the median of the eleven settles around it (five on either side) than so
many scaled median absolute deviations of them (Hampel 1974, from memory).
"""

import numpy as np

from tests.detectors.faults import PRICE_FAULTS, Planted

_HALF = 5
_SCALE = 1.482602218505602


def alarms(settle: np.ndarray, limit: float) -> np.ndarray:
    """Where the identifier alarms on each contract of (T, N) settles, NaN where there is none."""
    alarmed = np.zeros(settle.shape, dtype=bool)
    for contract in range(settle.shape[1]):
        rows = np.flatnonzero(np.isfinite(settle[:, contract]))
        if len(rows) < 2 * _HALF + 1:
            continue
        windows = np.lib.stride_tricks.sliding_window_view(settle[rows, contract], 2 * _HALF + 1)
        middle = np.median(windows, axis=1)
        scale = _SCALE * np.median(np.abs(windows - middle[:, None]), axis=1)
        away = np.abs(windows[:, _HALF] - middle)
        alarmed[rows[_HALF:-_HALF], contract] = (away > limit * scale) & (away > 0)
    return alarmed


def count_alarms(planted: Planted, limit: float) -> tuple[int, int, int, int]:
    """Wrong settles planted and alarmed, then alarms and those of them on no planted wrong settle."""
    grown = planted.grown
    alarmed = alarms(planted.values[3], limit)
    row = {int(day): place for place, day in enumerate(grown.days)}
    column = {name: place for place, name in enumerate(grown.contracts)}
    wrong = np.zeros(alarmed.shape, dtype=bool)
    seen = count = 0
    for fault in planted.faults:
        if fault.contract is None or fault.first not in row or fault.field != "settle":
            continue
        run = slice(row[fault.first], row.get(fault.last, row[fault.first]) + 1)
        wrong[run, column[fault.contract]] = True
        if fault.kind in PRICE_FAULTS:
            count += 1
            seen += bool(alarmed[run, column[fault.contract]].any())
    return count, seen, int(alarmed.sum()), int((alarmed & ~wrong).sum())
