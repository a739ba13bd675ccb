"""Sessions on which the whole curve moved far out of its ordinary size.

Belongs here: telling a true shock, so that nobody has to wonder whether it is one. Does not belong here:
contracts that move alone (`prices.py`).
"""

import numpy as np

from contracts.checks.robust import MAD_SCALE, row_medians
from contracts.findings import Finding, Kind, Severity
from contracts.panel import Panel
from contracts.sessions import day_of

# Scaled MADs of the past year's common changes; a fact however large, so the score only chooses what to tell.
_TOLD_FROM = 6.0
_YEAR = 250
_LEAST_HISTORY = 40
_LEAST_CONTRACTS = 3


def check_shocks(panel: Panel, settle: np.ndarray) -> list[Finding]:
    """Sessions whose median change of the curve is far beyond those of the year before.

    `settle` (T, N) are clean settles; every finding is a note, for the price of a shock is right.
    """
    change = np.full(settle.shape, np.nan)
    change[1:] = settle[1:] - settle[:-1]
    common = row_medians(change)
    count = np.count_nonzero(~np.isnan(change), axis=1)
    found = []
    for session in np.flatnonzero(count >= _LEAST_CONTRACTS):
        past = common[max(0, session - _YEAR) : session]
        past = past[~np.isnan(past)]
        if len(past) < _LEAST_HISTORY:
            continue
        scale = max(float(MAD_SCALE * np.median(np.abs(past))), panel.market.tick_size)
        score = abs(float(common[session])) / scale
        if score < _TOLD_FROM:
            continue
        day, market = day_of(panel.sessions[session]), panel.market.code
        moved = round(float(common[session]), 10)
        message = f"{market}, {day}: the whole curve moved {moved:+.10g} ({count[session]} contracts); a fact, kept"
        found.append(
            Finding(
                Kind.MARKET_SHOCK, Severity.NOTE, message, market, session=day, field="settle", score=score,
                threshold=_TOLD_FROM,
            )
        )  # fmt: skip
    return found
