"""Every row of every derived view is what plain loops over the published files make of it.

On the sample, and on a small desk that rolls in steps and publishes three nearbys.
"""

import datetime
import math
from collections import Counter, defaultdict
from collections.abc import Iterator
from functools import lru_cache
from pathlib import Path
from typing import Any

import duckdb
import pyarrow.parquet as pq
import pytest

from tests.integration.tiny import run_night, write_desk, write_raw

Row = dict[str, Any]
WORST = ("missing", "carried", "repaired", "reported")


class Published:
    """One market's tables as lists of rows, read without the catalog."""

    def __init__(self, snapshot: Path, market: str) -> None:
        tables = ("bars", "series", "terms")
        self.bars, self.series, terms = (self.read(snapshot / name / f"{market}.parquet") for name in tables)
        self.last_trade = {row["contract"]: row["last_trade"] for row in terms}
        self.point_value, self.currency = terms[0]["point_value"], terms[0]["currency"]
        self.held: dict[tuple[str, datetime.date], dict[int, Row]] = defaultdict(dict)
        for row in self.series:
            self.held[row["plan"], row["session"]][row["nearby"]] = row

    @staticmethod
    def read(path: Path) -> list[Row]:
        rows: list[Row] = pq.read_table(path).to_pylist()
        return rows

    def mean_last_day(self, row: Row) -> float:
        day = float(self.last_trade[row["contract"]].toordinal())
        if row["incoming"] is not None:
            other = self.last_trade[row["incoming"]].toordinal()
            day += row["incoming_weight"] * (other - day)
        return day


@lru_cache(maxsize=2)
def published(store: Path) -> dict[str, Published]:
    snapshot = store / "snapshots" / (store / "CURRENT").read_text().strip()
    return {path.stem: Published(snapshot, path.stem) for path in sorted((snapshot / "series").glob("*.parquet"))}


def build_in_steps(folder: Path) -> Path:
    """The tiny desk with rolls of four steps and three nearbys."""
    desk = write_desk(folder)
    for file in (desk / "markets").glob("*.toml"):
        file.write_text(file.read_text() + "steps = 4\nnearbys = [1, 2, 3]\n")
    run_night(desk, folder / "published", write_raw(desk, 200))
    return folder / "published"


@pytest.fixture(scope="module")
def in_steps(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return build_in_steps(tmp_path_factory.mktemp("in_steps"))


@pytest.fixture(params=["sample_store", "in_steps"])
def store(request: pytest.FixtureRequest) -> Path:
    return Path(request.getfixturevalue(request.param))


@pytest.fixture
def markets(store: Path) -> dict[str, Published]:
    return published(store)


@pytest.fixture
def catalog(store: Path) -> Iterator[duckdb.DuckDBPyConnection]:
    with duckdb.connect(str(store / "catalog.duckdb"), read_only=True) as connection:
        yield connection


@pytest.fixture
def sample(sample_store: Path) -> Iterator[duckdb.DuckDBPyConnection]:
    with duckdb.connect(str(sample_store / "catalog.duckdb"), read_only=True) as connection:
        yield connection


def view(catalog: duckdb.DuckDBPyConnection, name: str, key: str) -> dict[Any, Row]:
    """Rows of a view by its key, which is unique."""
    rows = catalog.sql(f"from {name}").to_arrow_table().to_pylist()
    found = {tuple(row[part] for part in key.split()): row for row in rows}
    assert len(found) == len(rows) > 100
    return found


def same(seen: float | None, expected: float | None) -> bool:
    if seen is None or expected is None:
        return seen is expected
    return math.isclose(seen, expected, rel_tol=1e-12, abs_tol=1e-12)


def test_curve_slope_is_what_loops_make_of_nearbys_1_and_2(
    catalog: duckdb.DuckDBPyConnection, markets: dict[str, Published]
) -> None:
    rows = view(catalog, "curve_slope", "market plan session")
    seen: Counter[str] = Counter()
    for code, market in markets.items():
        for (plan, session), held in market.held.items():
            if 1 not in held:
                continue
            seen["rows"] += 1
            row, near, far = rows[code, plan, session], held[1], held.get(2)
            if far is None:
                seen["nearby 2 not held"] += 1
                told = (row["far_contract"], row["far_settle"], row["days_between"], row["roll_yield"], row["status"])
                assert told == (None, None, None, None, "missing"), row
                assert row["annualised_slope"] is None
                continue
            days = market.mean_last_day(far) - market.mean_last_day(near)
            assert same(row["days_between"], days) or abs(row["days_between"] - days) < 1e-9, row
            assert row["status"] == min(near["status"], far["status"], key=WORST.index), row
            assert (row["near_settle"], row["far_settle"]) == (near["settle"], far["settle"])
            assert (row["near_contract"], row["far_contract"]) == (near["contract"], far["contract"])
            seen["mixes"] += near["incoming"] is not None
            seen["the same contract"] += days == 0
            a, b = near["settle"], far["settle"]
            if a is not None and b is not None and a > 0 and b > 0 and days > 1e-9:
                assert same(row["roll_yield"], a / b - 1), row
                assert math.isclose(row["annualised_slope"], math.log(b / a) * 365 / days, rel_tol=1e-9, abs_tol=1e-12)
            else:
                assert row["roll_yield"] is None and row["annualised_slope"] is None, row
    assert len(rows) == seen["rows"]
    # The sample's plans of two nearbys roll at once; the desk in steps always has a nearby 2.
    assert seen["mixes"] > 4 or min(seen["nearby 2 not held"], seen["the same contract"]) > 0, seen


def test_constant_maturity_is_what_loops_make_of_the_clean_settles_of_bars(
    catalog: duckdb.DuckDBPyConnection, markets: dict[str, Published]
) -> None:
    rows = view(catalog, "constant_maturity", "market session days")
    expected, exact, priced, bare = 0, 0, 0, 0
    for code, market in markets.items():
        sessions: dict[datetime.date, list[tuple[datetime.date, str, float]]] = {}
        for bar in market.bars:
            if bar["status"] == "not a session":
                continue
            live = sessions.setdefault(bar["session"], [])
            last = market.last_trade[bar["contract"]]
            if bar["clean_settle"] is not None and last >= bar["session"]:
                live.append((last, bar["contract"], bar["clean_settle"]))
        for session, live in sessions.items():
            live.sort()
            for days in (30, 60, 90):
                expected += 1
                row = rows[code, session, days]
                wanted = session + datetime.timedelta(days=days)
                near = far = None
                for leg in live:
                    if leg[0] <= wanted and (near is None or leg[0] > near[0]):
                        near = leg
                    if leg[0] >= wanted and far is None:
                        far = leg
                assert (row["near_contract"], row["near_settle"]) == (near[1:] if near else (None, None)), row
                assert (row["far_contract"], row["far_settle"]) == (far[1:] if far else (None, None)), row
                if near is None or far is None:
                    bare += 1
                    assert row["price"] is None and row["far_weight"] is None, row
                    continue
                priced += 1
                exact += near == far
                span = (far[0] - near[0]).days
                share = (wanted - near[0]).days / span if span else 0.0
                assert same(row["far_weight"], share)
                assert same(row["price"], near[2] + share * (far[2] - near[2])), row
    assert len(rows) == expected
    assert min(exact, priced, bare) > 0


def test_calendar_spread_is_the_difference_of_the_held_contracts_own_settles(
    catalog: duckdb.DuckDBPyConnection, markets: dict[str, Published]
) -> None:
    rows = view(catalog, "calendar_spread", "market plan nearby far_nearby session")
    money = view(catalog, "calendar_spread_in_currency", "market plan nearby far_nearby session")
    assert money.keys() == rows.keys()
    expected, itself = 0, 0
    for code, market in markets.items():
        clean = {(bar["contract"], bar["session"]): bar["clean_settle"] for bar in market.bars}
        for (plan, session), held in market.held.items():
            for nearby in held:
                for farther in held:
                    if nearby >= farther:
                        continue
                    expected += 1
                    key = (code, plan, nearby, farther, session)
                    row, near, far = rows[key], held[nearby], held[farther]
                    parts = ("contract", "incoming", "incoming_weight")
                    if [near[part] for part in parts] == [far[part] for part in parts]:
                        itself += 1
                        assert row["spread"] is None and money[key]["spread_value"] is None
                        continue
                    if near["settle"] is None or far["settle"] is None:
                        assert row["spread"] is None
                        continue
                    assert row["spread"] == near["settle"] - far["settle"]
                    assert money[key]["spread_value"] == row["spread"] * market.point_value
                    assert money[key]["currency"] == market.currency
                    if row["status"] in ("reported", "repaired") and near["incoming"] is far["incoming"] is None:
                        own = clean[near["contract"], session] - clean[far["contract"], session]
                        assert row["spread"] == own
    assert len(rows) == expected
    assert itself > 0 or {key[2:4] for key in rows} == {(1, 2), (1, 3), (2, 3)}


def test_currency_is_the_series_times_the_markets_point_value(
    catalog: duckdb.DuckDBPyConnection, markets: dict[str, Published]
) -> None:
    rows = view(catalog, "series_in_currency", "market plan nearby session")
    assert len(rows) == sum(len(market.series) for market in markets.values())
    for code, market in markets.items():
        for own in market.series:
            row = rows[code, own["plan"], own["nearby"], own["session"]]
            assert (row["currency"], row["point_value"]) == (market.currency, market.point_value)
            for name, source in (("change_value", "change"), ("back_adjusted_value", "back_adjusted")):
                assert row[name] == (None if own[source] is None else own[source] * market.point_value)


def test_rescaled_prices_reach_no_derived_number_on_their_old_scale(sample: duckdb.DuckDBPyConnection) -> None:
    """NVOL was quoted ten times as high before 2017-03-27; its point value is for the scale since."""
    before = "session < date '2017-03-27'"
    reported = sample.execute(
        f"select min(settle) from bars where market = 'NVOL' and status = 'reported' and {before}"
    ).fetchone()
    prices = sample.execute(f"select max(price) from constant_maturity_of('NVOL') where {before}").fetchone()
    moves = sample.execute(
        f"select max(abs(change_value)) from series_in_currency_of('NVOL') where {before}"
    ).fetchone()
    assert reported[0] > 100 and prices[0] < 40 and moves[0] < 10 * 1000  # type: ignore[index]


def test_note_on_percentages_tells_the_sessions_that_the_series_show(sample: duckdb.DuckDBPyConnection) -> None:
    """NGAS alone, whose gaps add up to more than its early prices."""
    shown = sample.execute(
        "select market, plan, nearby, count(*), min(session), max(session) from series "
        "where back_adjusted <= 0 and settle > 0 group by all order by all"
    ).fetchall()
    told = sample.execute(
        "select message from findings where kind = 'percent_of_back_adjusted_undefined' order by all"
    ).fetchall()
    assert {row[0] for row in shown} == {"NGAS"}
    assert [message.partition(" whose")[0] for (message,) in told] == [
        f"{market}: plan {plan}, nearby {nearby}: back_adjusted is at or below zero on {count} sessions "
        f"from {first} to {last}"
        for market, plan, nearby, count, first, last in shown
    ]
