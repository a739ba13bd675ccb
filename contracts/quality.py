"""Thresholds of the checks and gates, as the desk declares them for all markets.

Belongs here: the numbers a desk may turn. Does not belong here: what is done with them.
"""

from typing import Annotated

from pydantic import BeforeValidator, Field

from contracts.declared import Declared


def _number(value: object) -> object:
    return float(value) if isinstance(value, int) and not isinstance(value, bool) else value


Share = Annotated[float, BeforeValidator(_number), Field(ge=0, le=1)]


class Quality(Declared):
    """From where on a check reports."""

    # Scaled MADs by which a settle must stand away from what the rest of the curve says.
    refuted_score: Annotated[float, BeforeValidator(_number), Field(ge=1, le=1000)] = 8.0
    # ... and ticks, so that a quiet curve does not make a tick look large.
    refuted_ticks: Annotated[float, BeforeValidator(_number), Field(ge=1, le=100000)] = 6.0
    # Scales, by the root of the sessions it took, by which a contract must have drifted off its neighbours.
    kinked_score: Annotated[float, BeforeValidator(_number), Field(ge=1, le=1000)] = 4.0
    # Contracts of the curve that are asked, the nearest in delivery.
    nearest_contracts: Annotated[int, Field(ge=2, le=50)] = 5
    # Sessions a settle may stand unchanged while the rest of the curve moves.
    stale_sessions: Annotated[int, Field(ge=2, le=250)] = 5


class Gates(Declared):
    """From where on a market is held back."""

    # Largest share of a market's rows that may be rejected.
    rejected_share: Share = 0.05
    # Largest share of the last 60 sessions on which a plan may carry a price or lack one.
    carried_share: Share = 0.1
    # Most unwaived block findings in the last 60 sessions of a held contract.
    block_findings: Annotated[int, Field(ge=0)] = 0
    # Most sessions without a bar, up to the newest session of any market.
    silent_sessions: Annotated[int, Field(ge=0)] = 10
    # Most rows a file may lack against an earlier version of itself.
    lost_rows: Annotated[int, Field(ge=0)] = 0
