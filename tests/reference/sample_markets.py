"""A published snapshot read back into plain markets, plans, ledgers and series.

Belongs here: translation from published tables and the desk. Does not belong here: any roll rule.
"""

import datetime
import pathlib
from typing import Any

import pyarrow.parquet as pq

from contracts.markets import Market
from contracts.sessions import day_of, market_days
from tests.reference.plain_market import Cell, PlainMarket, PlainPlan
from tests.reference.plain_rolls import Chain
from tests.reference.plain_splice import splice_plain
from tests.reference.plain_trend import impact_of_gap

Row = dict[str, Any]
# Other prices than the settle are published for the held contract only: they cannot be worked out again.
NOT_COMPARED = {"market", "plan", "nearby", "open", "high", "low", "findings"}


def newest_snapshot(store: pathlib.Path) -> pathlib.Path:
    """The snapshot that CURRENT names."""
    return store / "snapshots" / (store / "CURRENT").read_text(encoding="utf-8").strip()


def read_rows(snapshot: pathlib.Path, table: str, market: str) -> list[Row]:
    """One market's rows of a table, in the order of the file."""
    rows: list[Row] = pq.read_table(snapshot / table / f"{market}.parquet").to_pylist()
    return rows


def published_markets(snapshot: pathlib.Path) -> list[str]:
    """Codes of the markets with a series."""
    return sorted(path.stem for path in (snapshot / "series").glob("*.parquet"))


class Days:
    """Sessions of a market by index, counted on along its calendar before the first and after the last."""

    def __init__(self, declared: Market, used: set[datetime.date]) -> None:
        calendar = market_days(declared, min(used).year - 3, max(used).year + 3)
        self.open = [day_of(number) for number in calendar.days]
        regular = {day for day in self.open if min(used) <= day <= max(used)}
        self.sessions = sorted(regular | used)

    def index(self, day: datetime.date) -> int:
        """Index of the last session on or before the day."""
        first, last = self.sessions[0], self.sessions[-1]
        if day < first:
            return -sum(1 for other in self.open if day < other < first) - 1
        within = sum(1 for other in self.sessions if other <= day)
        return within - 1 + sum(1 for other in self.open if last < other <= day)


def read_market(snapshot: pathlib.Path, declared: Market) -> tuple[PlainMarket, Days]:
    """The market as its published bars, terms and declared repairs tell it."""
    bars = [row for row in read_rows(snapshot, "bars", declared.code) if row["status"] != "not a session"]
    terms = read_rows(snapshot, "terms", declared.code)
    declared_repairs = {
        (row["contract"], row["session"])
        for row in read_rows(snapshot, "findings", declared.code)
        if row["kind"] == "declared_repair" and row["field"] == "settle"
    }
    days = Days(declared, {row["session"] for row in bars})
    place = {day: index for index, day in enumerate(days.sessions)}
    has_notice = any(row["first_notice"] is not None for row in terms)
    cells: dict[str, dict[Cell, float]] = {name: {} for name in ("settle", "volume", "open_interest", "clean_settle")}
    market = PlainMarket(
        sessions=days.sessions,
        contracts=[row["contract"] for row in terms],
        settle=cells["settle"],
        volume=cells["volume"],
        open_interest=cells["open_interest"],
        bars=set(),
        usable=set(),
        last_trade={row["contract"]: days.index(row["last_trade"]) for row in terms},
        first_notice={row["contract"]: days.index(row["first_notice"]) for row in terms} if has_notice else None,
        open_interest_lag=declared.open_interest_lag,
        prices=cells["clean_settle"],
        unscheduled={place[day] for day in days.sessions if day not in set(days.open)},
    )
    for row in bars:
        cell = (row["contract"], place[row["session"]])
        market.bars.add(cell)
        for name, values in cells.items():
            if row[name] is not None:
                values[cell] = float(row[name])
        if row["status"] == "repaired":
            market.repaired.add(cell)
        is_spoken_for = (row["contract"], row["session"]) in declared_repairs
        if row["clean_settle"] is not None and (row["status"] == "reported" or is_spoken_for):
            market.usable.add(cell)
    return market, days


def read_plan(declared: Market, name: str, days: Days) -> PlainPlan:
    """A plan of the desk."""
    plan = declared.plans[name]
    return PlainPlan(
        name=name,
        trigger=str(plan.trigger),
        confirm=plan.confirm,
        delay=plan.delay,
        steps=plan.steps,
        backstop=plan.backstop,
        before=str(plan.before),
        incoming=str(plan.incoming),
        months=plan.months,
        nearbys=plan.nearbys,
        force=tuple((force.outgoing, days.index(force.effective)) for force in plan.force),
    )


def expected_series(market: PlainMarket, chain: Chain) -> list[Row]:
    """The chain's series with days for indices and whole numbers for counts."""
    rows = splice_plain(market, chain)
    for row in rows:
        row["session"] = market.sessions[row["session"]]
    return rows


def expected_ledger(
    market: PlainMarket, chain: Chain, terms: list[Row], series: list[Row], look_backs: tuple[int, ...]
) -> list[Row]:
    """The chain's ledger with days for indices, the outgoing's terms and each gap's impact."""
    by_name = {row["contract"]: row for row in terms}
    back_adjusted = [row["back_adjusted"] for row in series]
    rows = []
    for row in chain.rows:
        made = dict(row)
        for name in ("decided_on", "measured_on", "effective_on"):
            made[name] = None if row[name] is None else market.sessions[row[name]]
        for name in ("last_trade", "first_notice"):
            made[name] = by_name[row["outgoing"]][name]
        made["impact_sessions"] = 0
        if row["gap"] is not None and chain.start is not None:
            place = row["effective_on"] - chain.start
            made["impact_sessions"] = impact_of_gap(back_adjusted, place, row["gap"], look_backs)
        rows.append(made)
    return rows
