"""Settles that stand still while the rest of the curve moves.

Belongs here: telling a price that was not updated from a market that did not move. Does not belong here:
prices that stand apart from the curve (`prices.py`).

The statistic is the length of the run in sessions, of which the median move of the contracts that did move is at least
two ticks on six in ten, and the contract itself traded on six in ten: common practice, no source.
"""

from dataclasses import dataclass

import numpy as np

from contracts.checks.robust import row_medians
from contracts.panel import Panel
from contracts.quality import Quality

# The rest of the curve has to move so many ticks on a session for a standing price to be strange on it,
_LEAST_TICKS = 2.0
# and on so large a share of the run.
_LEAST_SHARE = 0.6
# and the contract has to trade on so large a share of it.
_LEAST_TRADED = 0.6


@dataclass(frozen=True)
class StaleRun:
    """A run of unchanged settles: first and last session, contract, how far the curve moved meanwhile, and the
    settles that would have moved with it."""

    first: int
    last: int
    contract: int
    moved: float
    path: tuple[float, ...]


def find_stale_runs(panel: Panel, settle: np.ndarray, quality: Quality) -> list[StaleRun]:
    """Runs of at least `stale_sessions` unchanged settles (after their first) in a curve that moves.

    `settle` (T, N), NaN where absent. A contract that hardly trades through the run stands still for want of
    trade, and its standing price is a fact. Where a market reports no volume, its rows count as trade.
    """
    change = np.full(settle.shape, np.nan)
    change[1:] = settle[1:] - settle[:-1]
    common = row_medians(np.where(change == 0.0, np.nan, change))
    moves = np.abs(common) >= _LEAST_TICKS * panel.market.tick_size
    volume = panel.field("volume")
    runs: list[StaleRun] = []
    for contract in np.flatnonzero((change == 0.0).any(axis=0)):
        still = np.concatenate(([False], change[:, contract] == 0.0, [False]))
        edges = np.flatnonzero(np.diff(still.astype(np.int8)))
        for first, end in zip(edges[::2], edges[1::2], strict=True):
            if end - first < quality.stale_sessions or moves[first:end].mean() < _LEAST_SHARE:
                continue
            if not (volume[first:end, contract] <= 0).mean() <= 1 - _LEAST_TRADED:
                continue
            path = np.cumsum(np.nan_to_num(common[first:end]))
            expected = tuple((settle[first, contract] + path).tolist())
            runs.append(StaleRun(int(first), int(end) - 1, int(contract), float(path[-1]), expected))
    return runs
