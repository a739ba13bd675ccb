"""Which faults go where.

Belongs here: how many of each kind a market gets, and how far apart. Does not belong here: what they look like.
"""

import numpy as np

from tests.detectors import planting, rows
from tests.detectors.curves import Grown
from tests.detectors.faults import Plant, Planted, Planter

# Kinds, and how often each is drawn.
CELLS: tuple[tuple[Plant, float], ...] = (
    (planting.decimal_shift, 1.0), (planting.reverting_spike, 1.6), (planting.curve_break, 1.0),
    (planting.digits_swapped, 1.2), (planting.sign_flipped, 0.8), (planting.neighbours_price, 1.2),
    (planting.not_positive, 0.6), (planting.limit_exceeded, 1.6), (planting.stale_price, 1.4),
    (planting.curve_kinked, 1.0), (rows.off_tick, 0.8), (rows.range_broken, 0.8), (rows.settle_outside_range, 0.8),
    (rows.volume_implausible, 0.8), (rows.open_interest_implausible, 0.8), (rows.session_missing, 0.5),
    (rows.sessions_missing, 0.4), (rows.market_silent, 0.4), (rows.contract_missing, 0.8), (rows.ended_early, 0.7),
    (rows.calendar_disagrees, 0.5), (rows.not_a_session, 0.6), (rows.outside_listing, 0.7),
)  # fmt: skip
WHOLE: tuple[Plant, ...] = (rows.scale_changed, rows.open_interest_lag_wrong)
_FIRST = 70
_APART = 15
_WHOLE_SESSIONS = 420


def plant_cells(grown: Grown, seed: int) -> Planted:
    """Faults of every kind but those of the whole history, one every fifteen sessions or so of the market."""
    rng = np.random.default_rng([seed, 1, *grown.terms.code.encode()])
    planter = Planter(grown, rng)
    weights = np.array([weight for _, weight in CELLS])
    session = _FIRST
    while session < len(grown.days) - 10:
        for _ in range(6):
            plant = CELLS[int(rng.choice(len(CELLS), p=weights / weights.sum()))][0]
            if plant(planter, session):
                break
        session += int(rng.integers(_APART - 6, _APART + 7))
    planter.planted.faults.sort(key=lambda fault: (fault.first, fault.contract or ""))
    return planter.planted


def plant_whole(grown: Grown, seed: int) -> list[Planted]:
    """A cut of the market for each kind that concerns all of it, with that fault alone."""
    rng = np.random.default_rng([seed, 2, *grown.terms.code.encode()])
    result = []
    for plant in WHOLE:
        start = int(rng.integers(0, len(grown.days) - _WHOLE_SESSIONS))
        cut = Planted(grown, grown.values, [], lag=grown.terms.lag).cut(start, start + _WHOLE_SESSIONS - 1)
        planter = Planter(cut.grown, rng)
        if plant(planter, int(rng.integers(120, 300))):
            result.append(planter.planted)
    return result
