"""A desk of one market with its raw files, made in a folder from prices that stand in a test, and one night on it."""

import datetime
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import pyarrow.parquet as pq

from catalog.places import Places
from catalog.standing import current_snapshot
from catalog.summary import Summary
from contracts.markets import Market
from tests.integration.tiny import run_night
from tests.reference.agree import row_differences
from tests.reference.plain_rolls import lay_plain
from tests.reference.sample_markets import (
    NOT_COMPARED,
    expected_ledger,
    expected_series,
    read_market,
    read_plan,
    read_rows,
)

Row = dict[str, Any]
# Session, open, high, low, settle, volume, open interest, as they stand in a file; "" is no value.
RawRow = tuple[str, ...]

LOOK_BACKS = (2, 3)
DESK = """
raw = "raw"
store = "published"
look_backs = {look_backs}
[gates]
carried_share = {carried_share}
silent_sessions = 10
"""

LAYOUT = """
files = '(?P<market>[A-Z0-9]+)_(?P<year>\\d{4})_(?P<month>\\d\\d)\\.csv'
missing = [""]
[columns]
session = "date"
open = "open"
high = "high"
low = "low"
settle = "settle"
volume = "volume"
open_interest = "oi"
"""

HEADER = "date,open,high,low,settle,volume,oi"


def write_one_market(
    folder: Path, market: str, contracts: Mapping[str, Sequence[RawRow]], carried_share: float = 0.1
) -> Path:
    """Write a desk with one market file and a raw file a contract (`"2024-03"`: rows); returns its path."""
    desk = folder / "desk"
    for name in ("markets", "layouts", "raw"):
        (desk / name).mkdir(parents=True)
    (desk / "desk.toml").write_text(DESK.format(carried_share=carried_share, look_backs=list(LOOK_BACKS)))
    (desk / "layouts" / "plain.toml").write_text(LAYOUT)
    code = market.split('"', 2)[1]
    (desk / "markets" / f"{code.lower()}.toml").write_text(market)
    for delivery, rows in contracts.items():
        text = "".join(",".join(row) + "\n" for row in [tuple(HEADER.split(",")), *rows])
        (desk / "raw" / f"{code}_{delivery.replace('-', '_')}.csv").write_text(text)
    return desk


def settles(days: Sequence[str], prices: Sequence[float | str], volume: int = 1000) -> list[RawRow]:
    """Rows whose whole bar stands at the settle; a price of "" leaves the session without a row."""
    return [
        (day, *(str(price),) * 4, str(volume), str(2 * volume))
        for day, price in zip(days, prices, strict=True)
        if price != ""
    ]  # fmt: skip


class Published:
    """One night's publication of a desk of one market."""

    def __init__(self, desk: Path, store: Path, code: str) -> None:
        self.summary: Summary = run_night(desk, store)
        self.places, self.code = Places(store), code
        name = current_snapshot(self.places)
        assert name is not None
        self.snapshot = self.places.snapshot(name)

    def table(self, name: str) -> list[Row]:
        """The market's rows of a table."""
        rows: list[Row] = pq.read_table(self.snapshot / name / f"{self.code}.parquet").to_pylist()
        return rows

    def series(self, plan: str, nearby: int = 1) -> dict[str, Row]:
        """One series by the ISO date of its session."""
        rows = self.table("series")
        return {str(row["session"]): row for row in rows if (row["plan"], row["nearby"]) == (plan, nearby)}

    def rolls(self, plan: str, nearby: int = 1) -> list[Row]:
        """One ledger."""
        return [row for row in self.table("rolls") if (row["plan"], row["nearby"]) == (plan, nearby)]

    def findings(self, *kinds: str) -> list[Row]:
        """The findings of some kinds, or all."""
        return [row for row in self.table("findings") if not kinds or row["kind"] in kinds]


def business_days(first: str, count: int) -> list[datetime.date]:
    """The first `count` Mondays to Fridays from a day on."""
    start = datetime.date.fromisoformat(first)
    days = (start + datetime.timedelta(days=number) for number in range(2 * count + 7))
    return [day for day in days if day.weekday() < 5][:count]


def differences_from_plain(published: Published, declared: Market) -> list[str]:
    """Where the published ledgers and series of every plan differ from the plain telling of the published bars."""
    snapshot, code = published.snapshot, published.code
    market, days = read_market(snapshot, declared)
    terms = read_rows(snapshot, "terms", code)
    found: list[str] = []
    for name in declared.plans:
        for nearby, chain in lay_plain(market, read_plan(declared, name, days)).chains.items():
            label = f"plan {name}, nearby {nearby}"
            expected = expected_series(market, chain)
            ledger = expected_ledger(market, chain, terms, expected, LOOK_BACKS)
            series = list(published.series(name, nearby).values())
            found += row_differences(ledger, _compared(published.rolls(name, nearby)), f"{label}, ledger")
            found += row_differences(expected, _compared(series), f"{label}, series")
    return found


def _compared(rows: list[Row]) -> list[Row]:
    return [{name: value for name, value in row.items() if name not in NOT_COMPARED} for row in rows]
