"""Every published ledger and series of the sample is told again by plain loops from its bars alone."""

import pathlib

import duckdb
import pytest

from catalog.declarations import SAMPLE_DESK, load_desk
from tests.reference.agree import row_differences
from tests.reference.plain_rolls import lay_plain
from tests.reference.plain_trend import impact_of_prices
from tests.reference.sample_markets import (
    NOT_COMPARED,
    Row,
    expected_ledger,
    expected_series,
    newest_snapshot,
    published_markets,
    read_market,
    read_plan,
    read_rows,
)

MARKETS = ("NBND", "NCOC", "NCOP", "NEQX", "NGAS", "NKRN", "NOIL", "NVOL", "NWHT")
LEDGER = (
    "market", "plan", "nearby", "step", "decided_on", "measured_on", "effective_on", "outgoing", "incoming",
    "gap",
)  # fmt: skip


def of(rows: list[Row], plan: str, nearby: int) -> list[Row]:
    """The compared columns of one chain's rows."""
    chosen = [row for row in rows if row["plan"] == plan and row["nearby"] == nearby]
    return [{name: value for name, value in row.items() if name not in NOT_COMPARED} for row in chosen]


def test_all_nine_markets_are_published(sample_store: pathlib.Path) -> None:
    assert tuple(load_desk(SAMPLE_DESK).markets) == MARKETS
    assert tuple(published_markets(newest_snapshot(sample_store))) == MARKETS


@pytest.mark.parametrize("code", MARKETS)
def test_published_rolls_and_series_are_those_of_the_plain_telling(sample_store: pathlib.Path, code: str) -> None:
    snapshot = newest_snapshot(sample_store)
    desk = load_desk(SAMPLE_DESK)
    declared = desk.markets[code]
    market, days = read_market(snapshot, declared)
    terms = read_rows(snapshot, "terms", code)
    rolls, series = read_rows(snapshot, "rolls", code), read_rows(snapshot, "series", code)
    chains = {(row["plan"], row["nearby"]) for row in series}
    assert chains == {(name, nearby) for name, plan in declared.plans.items() for nearby in plan.nearbys}
    found: list[str] = []
    checked = 0
    for name in declared.plans:
        for nearby, chain in lay_plain(market, read_plan(declared, name, days)).chains.items():
            label = f"{code}, plan {name}, nearby {nearby}"
            expected = expected_series(market, chain)
            ledger = expected_ledger(market, chain, terms, expected, desk.look_backs)
            found += row_differences(ledger, of(rolls, name, nearby), f"{label}, ledger")
            found += row_differences(expected, of(series, name, nearby), f"{label}, series")
            checked += len(ledger)
    assert found == []
    assert checked == len(rolls) > 0


@pytest.mark.parametrize("code", MARKETS)
def test_a_repaired_settle_counts_the_sessions_whose_score_it_would_have_turned(
    sample_store: pathlib.Path, code: str
) -> None:
    """The worst of the market's plans, told again with the reported prices (on the present scale) in place.

    Replaced settles of a contract on its sessions one after another stand together.
    """
    snapshot, desk = newest_snapshot(sample_store), load_desk(SAMPLE_DESK)
    declared = desk.markets[code]
    market, days = read_market(snapshot, declared)
    laid = [lay_plain(market, read_plan(declared, name, days)).chains[1] for name in declared.plans]
    bars = [row for row in read_rows(snapshot, "bars", code) if row["status"] != "not a session"]
    day_at = {days.index(row["session"]): row["session"] for row in bars}
    replaced = {
        (row["contract"], days.index(row["session"])) for row in bars if row["status"] in ("repaired", "masked")
    }
    found = {}
    for row in read_rows(snapshot, "findings", code):
        if row["field"] != "settle" or row["action"] not in ("repaired", "masked") or row["session"] is None:
            continue
        contract, place = row["contract"], days.index(row["session"])
        priced = [at for at in sorted(day_at) if market.settle.get((contract, at)) is not None]
        run = {place}
        for way in (priced[priced.index(place) + 1 :], priced[: priced.index(place)][::-1]):
            for at in way:
                if (contract, at) not in replaced:
                    break
                run.add(at)
        reported = {}
        for at in run:
            reported[at] = market.settle[(contract, at)]
            for change in declared.rescaled:
                if day_at[at] < change.before:
                    reported[at] *= change.multiply
        worst = max(impact_of_prices(market, chain, contract, reported, desk.look_backs) for chain in laid)
        found[(row["contract"], row["session"], row["kind"])] = (worst, row["impact_sessions"])
    assert found, f"{code}: the sample has no repaired or masked settle"
    assert {key: told for key, (_, told) in found.items()} == {key: worst for key, (worst, _) in found.items()}
    assert sum(worst for worst, _ in found.values()) > 0


def test_the_catalog_shows_the_rolls_that_were_told_again(sample_store: pathlib.Path) -> None:
    """The ledger read through DuckDB's view is the one in the files."""
    snapshot = newest_snapshot(sample_store)
    with duckdb.connect(str(sample_store / "catalog.duckdb"), read_only=True) as connection:
        shown = connection.execute(f"select {', '.join(LEDGER)} from rolls").fetchall()
    in_files = [tuple(row[name] for name in LEDGER) for code in MARKETS for row in read_rows(snapshot, "rolls", code)]
    assert sorted(shown, key=str) == sorted(in_files, key=str)
    assert len(shown) > 500
