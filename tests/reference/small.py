"""Small markets written out as lists, for tests whose data stand in the test.

Belongs here: lists to a PlainMarket. Does not belong here: randomness (`tests/property/strategies.py`).
"""

import datetime
from collections.abc import Mapping, Sequence

from tests.reference.plain_market import Cell, PlainMarket

Values = Mapping[str, Sequence[float | None]]


def weekdays(count: int, first: datetime.date = datetime.date(2024, 1, 1)) -> list[datetime.date]:
    """The first `count` Mondays to Fridays from a day on."""
    days: list[datetime.date] = []
    day = first
    while len(days) < count:
        if day.weekday() < 5:
            days.append(day)
        day += datetime.timedelta(days=1)
    return days


def cells(values: Values | None) -> dict[Cell, float]:
    """(contract, index) -> value of lists in which None is no value."""
    found: dict[Cell, float] = {}
    for contract, row in (values or {}).items():
        for index, value in enumerate(row):
            if value is not None:
                found[(contract, index)] = float(value)
    return found


def small_market(
    settle: Values,
    last_trade: dict[str, int],
    volume: Values | None = None,
    open_interest: Values | None = None,
    first_notice: dict[str, int] | None = None,
    lag: int = 0,
    unusable: tuple[Cell, ...] = (),
    repaired: dict[Cell, float] | None = None,
    masked: tuple[Cell, ...] = (),
    bars: tuple[Cell, ...] = (),
) -> PlainMarket:
    """A market of lists by contract, one value a session; contracts sort in delivery order by their names.

    A settle that is there is usable and its own clean price unless it is named in `unusable`, `repaired` or
    `masked`; `bars` are bars without a settle.
    """
    reported = cells(settle)
    fixed = repaired or {}
    prices = {cell: value for cell, value in {**reported, **fixed}.items() if cell not in masked}
    return PlainMarket(
        sessions=weekdays(max(len(row) for row in settle.values())),
        contracts=sorted(settle),
        settle=reported,
        volume=cells(volume),
        open_interest=cells(open_interest),
        bars=set(reported) | set(fixed) | set(bars),
        usable={cell for cell in reported if cell not in unusable and cell not in fixed and cell not in masked},
        last_trade=last_trade,
        first_notice=first_notice,
        open_interest_lag=lag,
        prices=prices,
        repaired=set(fixed),
    )
