"""The derived views, each number worked by hand on rows written here."""

import datetime
import math
from pathlib import Path
from typing import Any

import duckdb
import pytest

from catalog.places import Places, write_lock
from catalog.store import open_staging, publish, write_table
from contracts.tables import DERIVED, make_table
from tests.catalog.small import STAMP, S, draft_of, table_named

FEB, MAR, APR, MAY = (f"NWHT-2024-{month:02d}" for month in (2, 3, 4, 5))
# 30, 70 and 100 calendar days after the first session, 2024-01-08; April ends trading on March's day.
LAST = {
    FEB: datetime.date(2024, 2, 7),
    MAR: datetime.date(2024, 3, 18),
    APR: datetime.date(2024, 3, 18),
    MAY: datetime.date(2024, 4, 17),
}
Rows = list[tuple[Any, ...]]


def series_row(
    nearby: int, session: datetime.date, contract: str, settle: float | None, status: str = "reported",
    incoming: str | None = None, weight: float = 0.0, plan: str = "tested", **more: Any,
) -> dict[str, Any]:  # fmt: skip
    return {
        "market": contract[:4], "plan": plan, "nearby": nearby, "session": session, "contract": contract,
        "incoming": incoming, "incoming_weight": weight, "settle": settle, "status": status, "change": None,
        "back_adjusted": None, **more,
    }  # fmt: skip


def bar_row(
    session: datetime.date, contract: str, settle: float | None, status: str = "reported", scale: float = 1.0
) -> dict[str, Any]:
    """A bar; `settle` is the clean one, the reported one is on another scale where told."""
    reported = None if settle is None else settle * scale
    return {"market": contract[:4], "contract": contract, "session": session, "settle": reported,
            "clean_settle": settle, "status": status}  # fmt: skip


def term_rows(last: dict[str, datetime.date | None]) -> list[dict[str, Any]]:
    return [
        {"market": contract[:4], "contract": contract, "currency": "EUR", "point_value": 50.0, "last_trade": day}
        for contract, day in last.items()
    ]


def publish_rows(
    places: Places,
    series: list[dict[str, Any]] | None = None,
    bars: list[dict[str, Any]] | None = None,
    terms: list[dict[str, Any]] | None = None,
) -> duckdb.DuckDBPyConnection:
    """Publish rows of markets, each in its files; returns the catalog as any client opens it."""
    tables = {"series": series or [], "bars": bars or [], "terms": term_rows(LAST) if terms is None else terms}
    with write_lock(places):
        staging = open_staging(places)
        files = {}
        for name, rows in tables.items():
            for market in sorted({row["market"] for row in rows}):
                own = [row for row in rows if row["market"] == market]
                columns = {key: [row[key] for row in own] for key in own[0]}
                stored = write_table(staging, table_named(name), market, make_table(table_named(name), columns), STAMP)
                files[stored.path] = stored
        publish(places, staging, draft_of(files))
    return duckdb.connect(str(places.catalog), read_only=True)


def ask(connection: duckdb.DuckDBPyConnection, columns: str, view: str) -> Rows:
    """A view's rows in order, and the same of its macro."""
    rows: Rows = connection.execute(f"select {columns} from {view} order by all").fetchall()
    assert connection.execute(f"select {columns} from {view}_of('NWHT') order by all").fetchall() == rows
    return rows


# The slope of the curve.

SLOPE = "near_contract, far_contract, days_between, roll_yield, annualised_slope, status"


def slope_of(places: Places, *series: dict[str, Any], last: dict[str, datetime.date | None] | None = None) -> Rows:
    with publish_rows(places, list(series), terms=term_rows(last or dict(LAST))) as connection:
        return [row[1:] for row in ask(connection, f"session, {SLOPE}", "curve_slope")]


def test_slope_is_the_log_difference_a_year_and_roll_yield_what_the_farther_gains(places: Places) -> None:
    """February 100, March 110, 40 calendar days between their last trading sessions."""
    assert slope_of(places, series_row(1, S[0], FEB, 100.0), series_row(2, S[0], MAR, 110.0)) == [
        (FEB, MAR, 40.0, 100 / 110 - 1, pytest.approx(0.8697054, abs=1e-7), "reported")
    ]


def test_a_dearer_nearer_contract_has_a_roll_yield_above_zero_and_a_slope_below(places: Places) -> None:
    ((*_, roll_yield, slope, _),) = slope_of(places, series_row(1, S[0], FEB, 110.0), series_row(2, S[0], MAR, 88.0))
    assert roll_yield == 0.25
    assert slope == pytest.approx(-math.log(1.25) * 365 / 40)


def test_in_a_roll_of_several_steps_price_and_time_are_both_the_mixes(places: Places) -> None:
    """Half February and March, a quarter of May beside March: 0.5 x 40 + 0.25 x 30 days."""
    near = series_row(1, S[0], FEB, 105.0, incoming=MAR, weight=0.5)
    far = series_row(2, S[0], MAR, 112.0, incoming=MAY, weight=0.25)
    assert slope_of(places, near, far) == [
        (FEB, MAR, 27.5, 105 / 112 - 1, pytest.approx(math.log(112 / 105) * 365 / 27.5), "reported")
    ]


def test_without_two_settles_above_zero_there_is_neither(places: Places) -> None:
    near = (0.0, -8.62, 100.0, 100.0, -5.0, None)
    far = (110.0, 110.0, 0.0, -1.0, -4.0, 110.0)
    rows = [series_row(1, day, FEB, price) for day, price in zip(S, near, strict=True)]
    rows += [series_row(2, day, MAR, price) for day, price in zip(S, far, strict=True)]
    assert slope_of(places, *rows) == [(FEB, MAR, 40.0, None, None, "reported")] * 6


def test_where_nearby_2_is_not_held_the_session_stands_with_nulls(places: Places) -> None:
    """Not on the first session, and never in a plan that has no nearby 2; another plan's is not taken."""
    rows = slope_of(
        places,
        series_row(1, S[0], FEB, 100.0),
        series_row(1, S[1], FEB, 100.0),
        series_row(2, S[1], MAR, 125.0),
        series_row(1, S[1], FEB, 100.0, plan="lone"),
    )
    assert rows == [
        (FEB, None, None, None, None, "missing"),
        (FEB, MAR, 40.0, 100 / 125 - 1, pytest.approx(math.log(1.25) * 365 / 40), "reported"),
        (FEB, None, None, None, None, "missing"),
    ]


def test_no_time_between_last_trading_sessions_leaves_no_slope(places: Places) -> None:
    """Nearby 1 has rolled and nearby 2 still waits in the same contract; then two contracts that end on one day."""
    rows = [series_row(1, day, MAR, 100.0) for day in S[:2]]
    rows += [series_row(2, S[0], MAR, 100.0), series_row(2, S[1], APR, 104.0)]
    assert slope_of(places, *rows) == [(MAR, far, 0.0, None, None, "reported") for far in (MAR, APR)]


def test_an_unknown_last_trading_session_leaves_no_slope(places: Places) -> None:
    last: dict[str, datetime.date | None] = {FEB: LAST[FEB], MAR: None}
    rows = slope_of(places, series_row(1, S[0], FEB, 100.0), series_row(2, S[0], MAR, 110.0), last=last)
    assert rows == [(FEB, MAR, None, None, None, "reported")]


def test_status_is_the_worse_of_the_two(places: Places) -> None:
    """A carried settle is of another day, and is shown as in series, with its status beside it."""
    near = ("reported", "repaired", "carried", "reported", "carried", "missing")
    far = ("repaired", "reported", "repaired", "carried", "missing", "reported")
    told = ("repaired", "repaired", "carried", "carried", "missing", "missing")
    rows = [
        series_row(nearby, day, contract, None if status == "missing" else 100.0, status)
        for nearby, contract, statuses in ((1, FEB, near), (2, MAR, far))
        for day, status in zip(S, statuses, strict=True)
    ]
    with publish_rows(places, rows) as connection:
        for view in ("curve_slope", "calendar_spread", "calendar_spread_in_currency"):
            assert ask(connection, "session, status", view) == list(zip(S, told, strict=True))
        expected = [0.0, 0.0, 0.0, 0.0, None, None]
        slopes = ask(connection, "session, roll_yield, annualised_slope", "curve_slope")
        assert slopes == list(zip(S, expected, expected, strict=True))
        assert ask(connection, "session, spread", "calendar_spread") == list(zip(S, expected, strict=True))


# Constant maturity.

MATURITY = "days, near_contract, far_contract, near_settle, far_settle, far_weight, price"


def maturities_of(places: Places, *bars: dict[str, Any]) -> Rows:
    with publish_rows(places, bars=list(bars)) as connection:
        return [row[1:] for row in ask(connection, f"session, {MATURITY}", "constant_maturity")]


def test_price_lies_on_the_line_between_the_contracts_around_the_day(places: Places) -> None:
    """30 days ahead is February's own last trading session, 60 three quarters on to March, 90 two thirds to May."""
    rows = maturities_of(places, bar_row(S[0], FEB, 100.0), bar_row(S[0], MAR, 110.0), bar_row(S[0], MAY, 116.0))
    assert rows == [
        (30, FEB, FEB, 100.0, 100.0, 0.0, 100.0),
        (60, FEB, MAR, 100.0, 110.0, 0.75, 107.5),
        (90, MAR, MAY, 110.0, 116.0, pytest.approx(2 / 3), pytest.approx(114.0)),
    ]


def test_days_are_calendar_days_from_each_session(places: Places) -> None:
    """A session later 29, 69; after the weekend 23, 63."""
    rows = maturities_of(
        places, *(bar_row(day, name, price) for day in (S[1], S[5]) for name, price in ((FEB, 100.0), (MAR, 140.0)))
    )
    assert [row[-1] for row in rows] == [101.0, 131.0, None, 107.0, 137.0, None]


def test_nothing_is_extrapolated(places: Places) -> None:
    """Of March alone there is no price on either side, and the contract on the one side is shown."""
    assert maturities_of(places, bar_row(S[0], MAR, 110.0)) == [
        (30, None, MAR, None, 110.0, None, None),
        (60, None, MAR, None, 110.0, None, None),
        (90, MAR, None, 110.0, None, None, None),
    ]


def test_a_session_without_a_clean_settle_borrows_none(places: Places) -> None:
    """On the second session February is masked: neither its settle of the day before nor another's takes its place."""
    rows = maturities_of(
        places,
        bar_row(S[0], FEB, 100.0), bar_row(S[0], MAR, 110.0),
        bar_row(S[1], FEB, None, "masked"), bar_row(S[1], MAR, 111.0),
        bar_row(S[2], FEB, None, "masked"),
    )  # fmt: skip
    assert [row[:3] + row[-1:] for row in rows[3:]] == [
        (30, None, MAR, None), (60, None, MAR, None), (90, MAR, None, None),
        (30, None, None, None), (60, None, None, None), (90, None, None, None),
    ]  # fmt: skip


def test_a_repaired_settle_counts_and_a_contract_between_without_one_is_passed_over(places: Places) -> None:
    """February to May is 70 days; 60 days ahead is 30 of them on."""
    rows = maturities_of(
        places, bar_row(S[0], FEB, 100.0, "repaired"), bar_row(S[0], MAR, None, "masked"), bar_row(S[0], MAY, 170.0)
    )
    assert rows[1] == (60, FEB, MAY, 100.0, 170.0, pytest.approx(3 / 7), pytest.approx(130.0))


def test_of_contracts_with_one_last_trading_session_the_earliest_delivery_counts(places: Places) -> None:
    """March and April both end on 18 March. On the second session March has no settle, so April stands in."""
    rows = maturities_of(
        places,
        bar_row(S[0], APR, 500.0), bar_row(S[0], MAR, 110.0), bar_row(S[0], FEB, 100.0), bar_row(S[0], MAY, 116.0),
        bar_row(S[1], APR, 140.0), bar_row(S[1], FEB, 100.0), bar_row(S[1], MAY, 200.0),
    )  # fmt: skip
    assert [row[1:3] for row in rows] == [(FEB, FEB), (FEB, MAR), (MAR, MAY), (FEB, APR), (FEB, APR), (APR, MAY)]
    assert [row[-1] for row in rows] == [100.0, 107.5, pytest.approx(114.0), 101.0, 131.0, pytest.approx(182.0)]


def test_a_contract_counts_on_its_last_trading_session_and_not_after_it(places: Places) -> None:
    """From 7 February, February's last, March is 40 days away; the day after, only it is left."""
    last, after = LAST[FEB], LAST[FEB] + datetime.timedelta(days=1)
    rows = maturities_of(
        places, *(bar_row(day, name, price) for day in (last, after) for name, price in ((FEB, 100.0), (MAR, 140.0)))
    )
    assert rows[0] == (30, FEB, MAR, 100.0, 140.0, 0.75, 130.0)
    assert rows[3] == (30, None, MAR, None, 140.0, None, None)


def test_bars_of_a_closed_day_make_no_session(places: Places) -> None:
    closed = datetime.date(2024, 1, 13)
    rows = maturities_of(places, bar_row(closed, FEB, None, "not a session"), bar_row(S[0], FEB, 1.0))
    assert len(rows) == 3


def test_prices_at_or_below_zero_interpolate_as_any_other(places: Places) -> None:
    rows = maturities_of(places, bar_row(S[0], FEB, -10.0), bar_row(S[0], MAR, 10.0))
    assert [row[-1] for row in rows] == [-10.0, 5.0, None]


def test_prices_of_an_older_scale_are_taken_on_the_present_one(places: Places) -> None:
    rows = maturities_of(places, bar_row(S[0], FEB, 13.0, scale=10.0), bar_row(S[0], MAR, 14.0, scale=10.0))
    assert [row[-1] for row in rows] == [13.0, 13.75, None]


# Calendar spreads, and currency.

SPREAD = "nearby, far_nearby, near_contract, far_contract, near_settle, far_settle, spread, status"


def test_every_pair_of_a_plans_nearbys_has_its_spread_of_settles(places: Places) -> None:
    """Nearer less farther, of unadjusted settles; on the second session nearby 3 is not held."""
    rows = [
        series_row(1, S[0], FEB, 100.0, back_adjusted=190.0), series_row(2, S[0], MAR, 110.0, back_adjusted=180.0),
        series_row(3, S[0], MAY, 98.5, back_adjusted=98.5),
        series_row(1, S[1], FEB, -2.0), series_row(2, S[1], MAR, 4.0),
        series_row(2, S[0], MAY, 1.0, plan="other"),
    ]  # fmt: skip
    with publish_rows(places, rows) as connection:
        assert ask(connection, SPREAD, "calendar_spread") == [
            (1, 2, FEB, MAR, -2.0, 4.0, -6.0, "reported"),
            (1, 2, FEB, MAR, 100.0, 110.0, -10.0, "reported"),
            (1, 3, FEB, MAY, 100.0, 98.5, 1.5, "reported"),
            (2, 3, MAR, MAY, 110.0, 98.5, 11.5, "reported"),
        ]
        money = "session, nearby, far_nearby, currency, point_value, spread_value"
        assert ask(connection, money, "calendar_spread_in_currency") == [
            (S[0], 1, 2, "EUR", 50.0, -500.0), (S[0], 1, 3, "EUR", 50.0, 75.0), (S[0], 2, 3, "EUR", 50.0, 575.0),
            (S[1], 1, 2, "EUR", 50.0, -300.0),
        ]  # fmt: skip


def test_a_contract_against_itself_is_no_spread_and_a_mix_against_it_is(places: Places) -> None:
    """Nearby 2 waits in March while nearby 1 goes there in two steps; then both are in the same mix."""
    rows = [
        series_row(1, S[0], FEB, 104.0, incoming=MAR, weight=0.5), series_row(2, S[0], MAR, 108.0),
        series_row(1, S[1], MAR, 109.0), series_row(2, S[1], MAR, 109.0),
        series_row(1, S[2], MAR, 110.0), series_row(2, S[2], MAR, 112.0, incoming=MAY, weight=0.5),
        series_row(1, S[3], MAR, 110.0, incoming=MAY, weight=0.5),
        series_row(2, S[3], MAR, 110.0, incoming=MAY, weight=0.5),
    ]  # fmt: skip
    with publish_rows(places, rows) as connection:
        assert ask(connection, "session, spread", "calendar_spread") == [
            (S[0], -4.0), (S[1], None), (S[2], -2.0), (S[3], None),
        ]  # fmt: skip
        assert ask(connection, "session, spread_value", "calendar_spread_in_currency")[:2] == [
            (S[0], -200.0), (S[1], None),
        ]  # fmt: skip


def test_changes_and_back_adjusted_prices_are_worth_their_points(places: Places) -> None:
    rows = [
        series_row(1, S[0], FEB, 100.0, change=None, back_adjusted=90.0),
        series_row(1, S[1], FEB, 100.5, change=0.5, back_adjusted=90.5),
        series_row(1, S[2], FEB, None, "missing"),
        series_row(1, S[3], MAR, 112.0, change=-1.25, back_adjusted=89.25),
    ]
    with publish_rows(places, rows) as connection:
        columns = "session, nearby, currency, point_value, change_value, back_adjusted_value, status"
        assert ask(connection, columns, "series_in_currency") == [
            (S[0], 1, "EUR", 50.0, None, 4500.0, "reported"),
            (S[1], 1, "EUR", 50.0, 25.0, 4525.0, "reported"),
            (S[2], 1, "EUR", 50.0, None, None, "missing"),
            (S[3], 1, "EUR", 50.0, -62.5, 4462.5, "reported"),
        ]


# The views themselves.

TWO = [
    series_row(nearby, S[0], contract.replace("NWHT", market), 100.0 + nearby, change=1.0, back_adjusted=100.0)
    for market in ("NKRN", "NWHT")
    for nearby, contract in ((1, FEB), (2, MAR))
]
TWO_BARS = [
    bar_row(S[0], contract.replace("NWHT", market), 100.0) for market in ("NKRN", "NWHT") for contract in (FEB, MAR)
]
TWO_TERMS = term_rows({name.replace("NWHT", market): day for market in ("NKRN", "NWHT") for name, day in LAST.items()})
ROWS = {"curve_slope": 1, "constant_maturity": 3, "calendar_spread": 1, "series_in_currency": 2,
        "calendar_spread_in_currency": 1}  # fmt: skip


def test_views_show_all_markets_and_macros_one(places: Places) -> None:
    with publish_rows(places, TWO, TWO_BARS, TWO_TERMS) as connection:
        assert [view.name for view in DERIVED] == list(ROWS)
        for view, count in ROWS.items():
            markets = f"select market, count(*) from {view} group by all order by all"
            assert connection.execute(markets).fetchall() == [("NKRN", count), ("NWHT", count)]
            markets = f"select market, count(*) from {view}_of('NWHT') group by all"
            assert connection.execute(markets).fetchall() == [("NWHT", count)]


def test_asking_a_derived_view_for_one_market_opens_no_other_markets_file(places: Places) -> None:
    publish_rows(places, TWO, TWO_BARS, TWO_TERMS).close()
    for path in places.snapshots.glob("*/*/NWHT.parquet"):
        path.unlink()
        path.write_bytes(b"not a Parquet file")
    for view, count in ROWS.items():
        for question in (f"{view}_of('NKRN')", f"{view} where market = 'NKRN'"):
            with duckdb.connect(str(places.catalog), read_only=True) as connection:
                assert connection.execute(f"select * from {question}").fetchall()[0][0] == "NKRN"
                assert connection.execute(f"select count(*) from {question}").fetchone() == (count,)


def test_views_and_macros_mean_the_catalogs_tables_whatever_the_caller_has(places: Places, tmp_path: Path) -> None:
    publish_rows(places, TWO, TWO_BARS, TWO_TERMS).close()
    with duckdb.connect(str(tmp_path / "own.duckdb")) as connection:
        for name in ("series", "bars", "terms", "calendar_spread"):
            connection.execute(f"create table {name} as select 1 as mine")
        connection.execute(f"attach '{places.catalog}' as elsewhere (read_only)")
        for view, count in ROWS.items():
            assert connection.execute(f"select count(*) from elsewhere.{view}").fetchone() == (2 * count,)
            assert connection.execute(f"select count(*) from elsewhere.{view}_of('NWHT')").fetchone() == (count,)


def test_dictionary_lists_each_derived_column_with_its_type_and_formula(places: Places) -> None:
    with publish_rows(places, TWO, TWO_BARS, TWO_TERMS) as connection:
        for view in DERIVED:
            described = connection.execute(f"describe {view.name}").fetchall()
            listed = connection.execute('select * from dictionary where "table" = ? order by rowid', [view.name])
            told = listed.fetchall()
            assert [(row[1], row[2]) for row in told] == [(row[0], row[1].lower()) for row in described]
            assert [row[0] for row in described] == list(view.columns)
        formulas = connection.execute(
            "select \"column\", unit, meaning from dictionary where \"column\" in ('annualised_slope', 'roll_yield')"
        ).fetchall()
        assert [(name, unit, meaning.partition(",")[0]) for name, unit, meaning in formulas] == [
            ("roll_yield", "1", "near_settle / far_settle - 1"),
            (
                "annualised_slope",
                "1 per year of 365 calendar days",
                "ln(far_settle / near_settle) x 365 / days_between",
            ),
        ]


def test_derived_views_of_a_store_without_rows_are_empty(places: Places) -> None:
    with publish_rows(places) as connection:
        for view in DERIVED:
            assert ask(connection, "*", view.name) == []
