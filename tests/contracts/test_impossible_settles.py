"""A settle at or below zero where none can be: replaced where it is a slip, masked where its own bar says otherwise."""

import numpy as np
import pytest

from contracts.findings import Action
from contracts.quality import Quality
from contracts.repairs import clean_panel
from tests.contracts.small import make_bars_of, make_market, make_panel, weekdays

CONTRACTS = ("NWHT-2024-03", "NWHT-2024-05", "NWHT-2024-09", "NWHT-2024-12")
DAYS = weekdays("2023-11-01", 5)
SETTLES = np.array(
    [
        [18.00, 25.00, 29.00, 31.00],
        [18.50, 25.25, 29.25, 31.25],
        [18.25, 25.00, 29.00, 31.00],
        [0.00, 20.50, 26.25, 29.00],
        [10.00, 11.50, 18.50, 22.00],
    ]
)
# 18.25 and the median of the others' changes, -4.5, -2.75 and -2.0.
BY_THE_CURVE = 15.5


@pytest.mark.parametrize(
    ("settle", "low", "high", "volume", "used"),
    [
        # The bar traded from above zero down to it.
        (-37.50, -40.25, 17.75, 5000.0, None),
        # Nobody traded, or the range does not reach it: a slip.
        (-37.50, -40.25, 17.75, 0.0, BY_THE_CURVE),
        (-37.50, 14.00, 17.75, 5000.0, BY_THE_CURVE),
        # A sign that was put before the whole bar, and a bar of noughts, reach it from nowhere.
        (-15.50, -17.75, -14.00, 5000.0, BY_THE_CURVE),
        (0.00, 0.00, 0.00, 5000.0, BY_THE_CURVE),
        (0.00, 0.00, 17.75, 5000.0, BY_THE_CURVE),
    ],
)
def test_only_a_bar_that_traded_from_above_zero_below_it_keeps_a_price_from_being_put_in_its_place(
    settle: float, low: float, high: float, volume: float, used: float | None
) -> None:
    settles = SETTLES.copy()
    settles[3, 0] = settle
    lows, highs, volumes = settles - 0.5, settles + 0.5, np.full(settles.shape, 100.0)
    lows[3, 0], highs[3, 0], volumes[3, 0] = low, high, volume
    panel = make_panel(make_market(), CONTRACTS, DAYS, settles, low=lows, high=highs, volume=volumes)
    clean = clean_panel(panel, make_bars_of(panel), (), Quality())
    (finding,) = [found for found in clean.findings if found.kind in ("not_positive", "sign_flipped")]
    assert (finding.contract, finding.reported) == ("NWHT-2024-03", settle)
    assert (finding.action, finding.corrected) == (Action.MASKED if used is None else Action.REPAIRED, used)
    if used is None:
        assert np.isnan(clean.settle[3, 0])
    else:
        assert clean.settle[3, 0] == used
    assert not clean.usable[3, 0]
