"""A connection reads the published files and nothing else, and says plainly what is wrong."""

import shutil
from pathlib import Path

import duckdb
import pytest

from catalog.places import Places, write_lock
from catalog.query import how_to_open, open_catalog, run_query
from catalog.store import link_table, open_staging, publish
from contracts.errors import StoreUnsound, UsageError
from tests.catalog.small import S, draft_of, publish_small


def test_a_query_gives_its_columns_and_rows(places: Places, raw: Path) -> None:
    publish_small(places, raw)
    with open_catalog(places) as connection:
        assert run_query(connection, "select plan, gap from rolls order by step, gap desc -- or so") == (
            ["plan", "gap"], [("at_once", 9.0), ("in_halves", 4.5), ("in_halves", 5.5)],
        )  # fmt: skip
        sessions = "select session from series where plan = ? and rolled order by all"
        assert run_query(connection, sessions, ["in_halves"])[1] == [(S[3],), (S[4],)]
        assert run_query(connection, "describe rolls")[1][0][0] == "market"
        assert ("series",) in run_query(connection, "show tables")[1]


def test_text_reaches_a_query_as_a_bound_value_only(places: Places, raw: Path) -> None:
    publish_small(places, raw)
    with open_catalog(places) as connection:
        assert run_query(connection, "select ? as told", ["'; drop view series; --"])[1] == [
            ("'; drop view series; --",)
        ]


def test_an_older_snapshot_can_be_asked_too(places: Places, raw: Path) -> None:
    first = publish_small(places, raw)
    with write_lock(places):
        staging = open_staging(places)
        link_table(staging, places.snapshot(first.name), "bars/NWHT.parquet")
        second = publish(places, staging, draft_of({"bars/NWHT.parquet": first.files["bars/NWHT.parquet"]}))
    for name, rows in ((first.name, 18), (second.name, 0), (None, 0)):
        with open_catalog(places, name) as connection:
            assert run_query(connection, "select count(*) from series")[1] == [(rows,)]
            assert run_query(connection, "select name from snapshot")[1] == [(name or second.name,)]
    with pytest.raises(UsageError, match="expected a snapshot that is there"):
        open_catalog(places, "000007-0123456789ab")


def test_an_empty_store_says_that_nothing_is_published(places: Places) -> None:
    with pytest.raises(UsageError, match="nothing is published here yet; run ropewalk build first"):
        open_catalog(places)


@pytest.mark.parametrize(
    "sql, seen",
    [
        ("", "nothing"),
        ("-- only words", "nothing"),
        ("select 1; select 2", "SELECT, SELECT"),
        ("copy (select 1) to '{store}/snapshots/new.csv'", "COPY"),
        ("create table t as select 1", "CREATE"),
        ("insert into snapshot values (1)", "INSERT"),
        ("attach ':memory:' as other", "ATTACH"),
        ("set threads = 1", "SET"),
        ("install httpfs", "LOAD"),
        ("explain analyze select 1", "EXPLAIN"),
        ("export database '{store}/snapshots/out'", "EXPORT"),
    ],
)
def test_anything_but_one_reading_statement_is_refused(places: Places, raw: Path, sql: str, seen: str) -> None:
    publish_small(places, raw)
    with (
        open_catalog(places) as connection,
        pytest.raises(UsageError, match=f"^seen {seen}; expected one query"),
    ):
        run_query(connection, sql.format(store=places.store))


@pytest.mark.parametrize(
    "sql, told",
    [
        (
            "with a as (copy (select 1) to '{store}/snapshots/new.csv') select 1",
            "must be at the top level|CTE needs a SELECT",
        ),
        (
            "with a as (insert into memory.main.t values (1) returning *) from a",
            "must be at the top level|CTE needs a SELECT",
        ),
        ("from read_text('/etc/hostname')", "file system operations are disabled"),
        ("from read_text('{store}/CURRENT')", "file system operations are disabled"),
        ("from read_csv('{store}/snapshots/../CURRENT')", "file system operations are disabled"),
        ("from glob('/*')", "file system operations are disabled"),
        ("from 'https://example.com/a.parquet'", "."),
        ("selec 1", "syntax error"),
        ("from prices", "Table with name prices does not exist"),
        ("select cast('x' as integer)", "Could not convert string"),
        ("select error('\n\nLINE 1: mine')", "."),
    ],
)
def test_a_query_that_reaches_further_or_cannot_be_run_is_refused_and_leaves_nothing(
    places: Places, raw: Path, sql: str, told: str
) -> None:
    publish_small(places, raw)
    before = sorted(places.store.rglob("*"))
    with open_catalog(places) as connection:
        connection.execute("create table memory.main.t (a integer)")
        with pytest.raises(UsageError, match=told) as caught:
            run_query(connection, sql.format(store=places.store))
        assert "explain select" not in str(caught.value)
        assert run_query(connection, "select count(*) from memory.main.t")[1] == [(0,)]
    assert sorted(places.store.rglob("*")) == before


def test_the_connection_cannot_be_opened_up_again(places: Places, raw: Path) -> None:
    publish_small(places, raw)
    with open_catalog(places) as connection:
        for statement in (
            "set enable_external_access = true",
            "set allowed_directories = ['/']",
            "reset lock_configuration",
            "drop view series",
            f"attach '{places.store}/other.duckdb' as other",
        ):
            with pytest.raises(duckdb.Error):
                connection.execute(statement)


def test_python_variables_are_out_of_reach(places: Places, raw: Path) -> None:
    import pyarrow as pa

    publish_small(places, raw)
    secret = pa.table({"a": [1]})
    assert secret.num_rows == 1
    with open_catalog(places) as connection, pytest.raises(UsageError, match="secret does not exist"):
        run_query(connection, "from secret")


def test_a_store_that_was_moved_says_so_and_names_the_remedy(places: Places, raw: Path, tmp_path: Path) -> None:
    name = publish_small(places, raw).name
    moved = Places(tmp_path / "moved")
    shutil.move(places.store, moved.store)
    with pytest.raises(StoreUnsound) as caught:
        open_catalog(moved)
    assert str(caught.value) == (
        f"{moved.catalog}: its views name files in {places.snapshot(name)}, and the store is at "
        f"{moved.store}: it was moved or copied; run ropewalk verify --repoint"
    )


def test_a_copied_store_does_not_quietly_serve_the_original(places: Places, raw: Path, tmp_path: Path) -> None:
    publish_small(places, raw)
    copied = Places(tmp_path / "copied")
    shutil.copytree(places.store, copied.store)
    with pytest.raises(StoreUnsound, match="it was moved or copied"):
        open_catalog(copied)


def test_a_catalog_that_is_gone_or_damaged_says_so(places: Places, raw: Path) -> None:
    publish_small(places, raw)
    content = places.catalog.read_bytes()
    for damaged in (b"", b"not a database", content[:5000], content[:8] + b"DOCK" + content[12:]):
        places.catalog.unlink()
        places.catalog.write_bytes(damaged)
        with pytest.raises(StoreUnsound, match=r"catalog\.duckdb: .*run ropewalk verify --repoint"):
            open_catalog(places)
    places.catalog.unlink()
    with pytest.raises(StoreUnsound, match="the catalog is gone; run ropewalk verify --repoint"):
        open_catalog(places)
    assert not places.catalog.exists()


@pytest.mark.parametrize("content", [None, b"", b"not a Parquet file at all", b"PAR1" + b"\x00" * 40 + b"PAR1"])
def test_a_published_file_that_cannot_be_read_is_no_wrong_query(
    places: Places, raw: Path, content: bytes | None
) -> None:
    name = publish_small(places, raw).name
    path = places.snapshot(name) / "series/NWHT.parquet"
    path.unlink()
    if content is not None:
        path.write_bytes(content)
    with (
        open_catalog(places) as connection,
        pytest.raises(StoreUnsound, match=r"a published file cannot be read: .*ropewalk verify"),
    ):
        run_query(connection, "select sum(settle) from series")


def test_two_readers_of_one_process_do_not_meet(places: Places, raw: Path) -> None:
    publish_small(places, raw)
    plain = duckdb.connect(str(places.catalog), read_only=True)
    with plain, open_catalog(places) as one, open_catalog(places) as other:
        for connection in (plain, one, other):
            assert connection.execute("select count(*) from series").fetchone() == (18,)


def test_how_to_open_it_is_told_for_any_client(places: Places) -> None:
    lines = how_to_open(places).splitlines()
    assert f"duckdb.connect({str(places.catalog)!r}, read_only=True)" in lines[2]
    assert lines[4] == f"  shell   duckdb -readonly {places.catalog}"


def test_how_to_open_it_names_every_view_and_macro_that_is_there(places: Places, raw: Path) -> None:
    publish_small(places, raw)
    told = how_to_open(places)
    with duckdb.connect(str(places.catalog), read_only=True) as connection:
        views = connection.execute("select view_name from duckdb_views() where not internal").fetchall()
        macros = connection.execute("select function_name from duckdb_functions() where database_name = 'catalog'")
        names = {row[0] for row in macros.fetchall() if row[0].removesuffix("_of") not in {view[0] for view in views}}
    assert len(views) == 14
    assert [view for (view,) in views if view not in told] == []
    assert names == {"session_of", "curve_of", "price_trace"}
    assert all(name in told for name in (*names, "series_of", "curve_slope_of('...')"))
