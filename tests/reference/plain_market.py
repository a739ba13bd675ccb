"""One market and one plan as plain dictionaries, for the slow telling of the rules.

Belongs here: data without behaviour of the craft. Does not belong here: any import from `contracts/`.
"""

import datetime
from dataclasses import dataclass, field, replace
from functools import cached_property

Cell = tuple[str, int]


@dataclass
class PlainMarket:
    """Bars of one market by (contract, session index); a cell that is not there has no value.

    `contracts` stand in delivery order and end in their month, as in `NWHT-2025-03`. `settle` is as reported,
    `prices` is clean before anything is carried, `usable` are the settles a gap may be measured on,
    `repaired` the clean prices that are not the reported ones. `last_trade` and `first_notice` are session
    indices that may lie before 0 or after the last session; they count `unscheduled` sessions like any other.
    """

    sessions: list[datetime.date]
    contracts: list[str]
    settle: dict[Cell, float]
    volume: dict[Cell, float]
    open_interest: dict[Cell, float]
    bars: set[Cell]
    usable: set[Cell]
    last_trade: dict[str, int]
    first_notice: dict[str, int] | None
    open_interest_lag: int
    prices: dict[Cell, float]
    open: dict[Cell, float] = field(default_factory=dict)
    high: dict[Cell, float] = field(default_factory=dict)
    low: dict[Cell, float] = field(default_factory=dict)
    repaired: set[Cell] = field(default_factory=set)
    # Sessions the calendar called closed: nobody knew of them until they came.
    unscheduled: set[int] = field(default_factory=set)

    @cached_property
    def first_bar(self) -> dict[str, int]:
        """Session of each contract's first bar; a contract without one is not in it."""
        first: dict[str, int] = {}
        for contract, t in self.bars:
            first[contract] = min(t, first.get(contract, t))
        return first

    @cached_property
    def place(self) -> dict[str, int]:
        """Each contract's place in delivery order."""
        return {contract: number for number, contract in enumerate(self.contracts)}


@dataclass(frozen=True)
class PlainPlan:
    """A roll plan; `force` holds (outgoing contract, index of the effective session)."""

    name: str
    trigger: str
    confirm: int = 1
    delay: int = 1
    steps: int = 1
    backstop: int = 0
    before: str = "last trade"
    incoming: str = "next"
    months: tuple[int, ...] | None = None
    nearbys: tuple[int, ...] = (1,)
    force: tuple[tuple[str, int], ...] = ()


def truncate(market: PlainMarket, last: int) -> PlainMarket:
    """The market as it was known at the close of session `last`."""

    def cut(cells: dict[Cell, float]) -> dict[Cell, float]:
        return {cell: value for cell, value in cells.items() if cell[1] <= last}

    def cut_set(cells: set[Cell]) -> set[Cell]:
        return {cell for cell in cells if cell[1] <= last}

    def seen(ends: dict[str, int]) -> dict[str, int]:
        return {name: end - sum(last < day <= end for day in market.unscheduled) for name, end in ends.items()}

    return replace(
        market,
        sessions=market.sessions[: last + 1],
        last_trade=seen(market.last_trade),
        first_notice=None if market.first_notice is None else seen(market.first_notice),
        unscheduled={day for day in market.unscheduled if day <= last},
        settle=cut(market.settle),
        volume=cut(market.volume),
        open_interest=cut(market.open_interest),
        prices=cut(market.prices),
        open=cut(market.open),
        high=cut(market.high),
        low=cut(market.low),
        bars=cut_set(market.bars),
        usable=cut_set(market.usable),
        repaired=cut_set(market.repaired),
    )
