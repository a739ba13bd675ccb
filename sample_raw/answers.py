"""All rows of the exchange, and the answer key as it grows.

Belongs here: finding a row by its place on the curve, and writing down what was done to it. Does not belong here:
doing it (`faults.py`).
"""

import datetime
from bisect import bisect_right
from dataclasses import dataclass
from decimal import Decimal

from curves import Contract, MarketData
from writers import Row

Date = datetime.date


@dataclass
class Entry:
    """One line of the answer key; `row` is where it stands, `path` where there is no row."""

    number: int
    nature: str
    kind: str
    finding: str
    market: str
    contract: str
    session: str
    field: str
    reported: str
    truth: str
    note: str
    row: Row | None = None
    path: str = ""


class Book:
    """All rows of the exchange, and the answer key as it grows."""

    def __init__(self, data: dict[str, MarketData], ticks: dict[str, Decimal]) -> None:
        self.data, self.ticks = data, ticks
        self.rows: dict[str, list[list[Row]]] = {
            code: [_true_rows(code, contract, of.days) for contract in of.contracts] for code, of in data.items()
        }
        self.key: list[Entry] = []
        self.torn: list[str] = []
        self.count = 0

    def at(self, market: str, session: str | Date) -> int:
        """Index of a session of the market; raises ValueError where it is none."""
        day = Date.fromisoformat(session) if isinstance(session, str) else session
        days = self.data[market].days
        place = bisect_right(days, day) - 1
        if place < 0 or days[place] != day:
            raise ValueError(f"{market}: {day} is no session of the sample")
        return place

    def pick(self, market: str, at: int, place: int) -> int:
        """The contract at a place from the one with the most open interest on a session."""
        contracts = self.data[market].contracts
        live = [n for n, c in enumerate(contracts) if c.is_liquid and c.first <= at <= c.last]
        leader = max(live, key=lambda n: contracts[n].positions[at - contracts[n].first])
        return live[live.index(leader) + place]

    def row(self, market: str, number: int, at: int) -> Row:
        """The one row of a contract on a session."""
        day = self.data[market].days[at]
        found = [row for row in self.rows[market][number] if row.day == day]
        if len(found) != 1:
            raise ValueError(f"{market}, contract {number}, {day}: {len(found)} rows; one fault at a time")
        return found[0]

    def take(self, market: str, session: str | Date, place: int) -> tuple[Row, list[Row], int]:
        """A row to be spoilt, its contract's rows and its position; raises ValueError where it was touched already."""
        at = self.at(market, session)
        number = self.pick(market, at, place)
        row = self.row(market, number, at)
        rows = self.rows[market][number]
        where = rows.index(row)
        near = rows[max(where - 2, 0) : where + 3]
        if any(other.is_touched for other in near):
            raise ValueError(f"{row.contract}, {row.day}: a fault or event within two sessions of another")
        return row, rows, where

    def begin(self) -> None:
        """Start a new fault or event; what is noted next belongs to it."""
        self.count += 1

    def note(self, kind: str, finding: str, row: Row, name: str, reported: str, truth: str, note: str = "",
             nature: str = "fault") -> None:  # fmt: skip
        """Write down one row."""
        row.is_touched = True
        day = row.day.isoformat()
        self.key.append(
            Entry(self.count, nature, kind, finding, row.market, row.contract, day, name, reported, truth, note, row)
        )

    def note_file(self, kind: str, finding: str, path: str) -> None:
        """Write down a file that is wrong as a whole."""
        self.key.append(Entry(self.count, "fault", kind, finding, "", "", "", "", "", "", "", None, path))

    def price(self, market: str, ticks: int | None, places: int = 0) -> str:
        """A price of so many ticks on the present scale, times ten to the power of `places`."""
        return "" if ticks is None else plain(self.ticks[market] * ticks * Decimal(10) ** places)


def plain(value: Decimal) -> str:
    """A decimal number with neither exponent nor trailing noughts."""
    text = f"{value:f}"
    return text.rstrip("0").rstrip(".") if "." in text else text


def _true_rows(code: str, contract: Contract, days: list[Date]) -> list[Row]:
    rows = []
    for n, settle in enumerate(contract.settle):
        traded = contract.ranges[n]
        prices: list[int | None] = [*(traded or (None, None, None)), settle]
        day, lots, held = days[contract.first + n], contract.volume[n], contract.positions[n]
        rows.append(Row(code, contract.year, contract.month, day, prices, lots, held))
    return rows
