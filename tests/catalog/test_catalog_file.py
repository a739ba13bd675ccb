"""The catalog shows one snapshot to any client, and names its files one by one."""

import subprocess
import sys
from pathlib import Path

import duckdb
import pytest

from catalog.catalog_file import SnapshotFacts, build_catalog, lay_views, quote_text
from catalog.manifest import Manifest
from catalog.places import Places, write_lock
from catalog.standing import read_manifest
from catalog.store import link_table, open_staging, publish, write_table
from catalog.verify import verify_store
from contracts.errors import StoreError
from contracts.tables import DERIVED, TABLES, make_table
from tests.catalog.small import (
    STAMP,
    S,
    draft_of,
    publish_small,
    sound_rows,
    sound_table,
    stage_small,
    table_named,
)


def publish_two(places: Places, raw: Path) -> Manifest:
    """A snapshot of two markets."""
    first = publish_small(places, raw)
    with write_lock(places):
        staging = open_staging(places)
        files = stage_small(staging, "NKRN", "0" * 64)
        for path in first.files:
            link_table(staging, places.snapshot(first.name), path)
        return publish(places, staging, draft_of({**files, **first.files}))


def connect(places: Places) -> duckdb.DuckDBPyConnection:
    """As any client does."""
    return duckdb.connect(str(places.catalog), read_only=True)


def test_any_client_counts_the_sessions_of_every_plan(places: Places, raw: Path) -> None:
    publish_two(places, raw)
    query = "select market, plan, count(*), min(session), max(session) from series group by all order by all"
    with connect(places) as connection:
        assert connection.execute(query).fetchall() == [
            (market, plan, 6, S[0], S[5]) for market in ("NKRN", "NWHT") for plan in ("at_once", "in_halves", "still")
        ]


def test_every_table_has_a_view_with_its_columns_and_types(places: Places, raw: Path) -> None:
    publish_two(places, raw)
    with connect(places) as connection:
        for table in (*TABLES, *DERIVED):
            described = connection.execute(f"describe {table.name}").fetchall()
            assert tuple(row[0] for row in described) == table.columns
        listed = connection.execute('select "table", "column", "type" from dictionary order by rowid').fetchall()
        seen = [
            (table.name, row[0], row[1].lower())
            for table in (*TABLES, *DERIVED)
            for row in connection.execute(f"describe {table.name}").fetchall()
        ]
    assert listed == seen


def test_the_dictionary_says_what_every_column_means(places: Places, raw: Path) -> None:
    publish_small(places, raw)
    with connect(places) as connection:
        query = 'select * from dictionary where "table" = ? and "column" = ?'
        assert connection.execute(query, ["series", "shift"]).fetchall() == [
            (
                "series",
                "shift",
                "double",
                "market currency per unit",
                "sum of the gaps of all later rolls: makes differences true when added to a price, "
                "and percentages wrong",
                "continuous series of each plan and nearby",
            ),
        ]  # fmt: skip
        assert connection.execute("select count(*) from dictionary where meaning = ''").fetchone() == (0,)


def test_the_catalog_says_which_snapshot_it_shows(places: Places, raw: Path) -> None:
    manifest = publish_two(places, raw)
    with connect(places) as connection:
        assert connection.execute("from snapshot").fetchall() == [
            (manifest.name, 2, manifest.parent, "a desk", "some code", str(places.snapshot(manifest.name)))
        ]


def test_macros_are_in_reach_from_a_database_of_the_callers_own(places: Places, raw: Path, tmp_path: Path) -> None:
    """A macro looks names up where it is called, hence none of them names a view."""
    publish_two(places, raw)
    with duckdb.connect(str(tmp_path / "own.duckdb")) as connection:
        connection.execute(f"attach {quote_text(str(places.catalog))} as catalog (read_only)")
        count = "select count(*), min(market), max(market) from"
        assert connection.execute(f"{count} catalog.series_of('NKRN')").fetchone() == (18, "NKRN", "NKRN")
        assert connection.execute(f"{count} catalog.session_of('2024-01-09')").fetchone() == (
            6,
            "NKRN",
            "NWHT",
        )
        assert connection.execute(f"{count} catalog.session_of(date '2024-01-09')").fetchone() == (
            6,
            "NKRN",
            "NWHT",
        )
        assert connection.execute("from catalog.curve_of('NWHT', '2024-01-09')").fetchall() == [
            ("NWHT-2024-03", 101.0, 101.0, "reported", None, None),
            ("NWHT-2024-05", 112.0, 112.0, "reported", None, None),
        ]


def test_a_file_that_is_missing_is_an_error_and_not_a_short_answer(places: Places, raw: Path) -> None:
    manifest = publish_two(places, raw)
    (places.snapshot(manifest.name) / "series/NKRN.parquet").unlink()
    with connect(places) as connection, pytest.raises(duckdb.IOException, match=r"series/NKRN\.parquet"):
        connection.execute("select count(*) from series").fetchall()


def test_a_file_that_is_put_beside_the_others_is_not_seen(places: Places, raw: Path) -> None:
    manifest = publish_small(places, raw)
    folder = places.snapshot(manifest.name) / "series"
    (folder / "NKRN.parquet").write_bytes((folder / "NWHT.parquet").read_bytes())
    with connect(places) as connection:
        assert connection.execute("select count(*) from series").fetchone() == (18,)


def test_asking_for_one_market_opens_no_other_markets_file(places: Places, raw: Path) -> None:
    manifest = publish_two(places, raw)
    other = places.snapshot(manifest.name) / "series/NWHT.parquet"
    other.unlink()
    other.write_bytes(b"not a Parquet file")
    for question in ("series where market = 'NKRN'", "series_of('NKRN')"):
        with connect(places) as connection:
            assert connection.execute(f"select count(*) from {question}").fetchone() == (18,)


def test_a_raw_file_of_several_markets_is_shown_without_one(places: Places, raw: Path) -> None:
    """It is told in the table of one of its markets, and must not seem to be that market's alone."""
    publish_small(places, raw)
    with write_lock(places):
        staging = open_staging(places)
        rows = {**sound_rows()["files"], "market": [None]}
        stored = write_table(staging, table_named("files"), "NWHT", make_table(table_named("files"), rows), STAMP)
        publish(places, staging, draft_of({stored.path: stored}))
    with connect(places) as connection:
        assert connection.execute("select path, market from files").fetchall() == [("NWHT.csv", None)]


def test_tables_without_any_file_are_empty_and_typed(places: Places, raw: Path) -> None:
    publish_small(places, raw)
    with write_lock(places):
        staging = open_staging(places)
        stored = write_table(staging, TABLES[0], "NWHT", sound_table("bars"), STAMP)
        publish(places, staging, draft_of({stored.path: stored}))
    with connect(places) as connection:
        for table in TABLES[1:]:
            described = connection.execute(f"describe {table.name}").fetchall()
            assert tuple(row[0] for row in described) == table.columns
            assert connection.execute(f"select count(*) from {table.name}").fetchone() == (0,)
        assert connection.execute("describe series").fetchall()[3][1] == "DATE"
        assert connection.execute("select count(*) from series_of('NWHT')").fetchone() == (0,)
        assert connection.execute("select * from bars where market = 'NWHT' limit 1").fetchall()[0][0] == "NWHT"


@pytest.mark.parametrize("folder", ["year=2024", "it's", 'a "b"', "a b", "%24{series}", "$series", "é"])
def test_folders_of_any_name_above_the_store_change_nothing(tmp_path: Path, raw: Path, folder: str) -> None:
    places = Places(tmp_path / folder / "store")
    publish_small(places, raw)
    with connect(places) as connection:
        described = connection.execute("describe series").fetchall()
        assert len(described) == 23
        assert connection.execute("select count(*) from series_of('NWHT')").fetchone() == (18,)
    assert verify_store(places).problems == ()


def test_a_reader_keeps_the_snapshot_it_opened_while_the_next_one_is_published(places: Places, raw: Path) -> None:
    first = publish_small(places, raw)
    with connect(places) as early:
        assert early.execute("select count(*) from series").fetchone() == (18,)
        second = publish_two_after(places, first)
        assert early.execute("select count(*) from series").fetchone() == (18,)
        assert early.execute("select name from snapshot").fetchone() == (first.name,)
    with connect(places) as late:
        assert late.execute("select count(*) from series").fetchone() == (36,)
        assert late.execute("select name from snapshot").fetchone() == (second.name,)


def publish_two_after(places: Places, first: Manifest) -> Manifest:
    """The next snapshot, with one more market."""
    with write_lock(places):
        staging = open_staging(places)
        files = stage_small(staging, "NKRN", "0" * 64)
        for path in first.files:
            link_table(staging, places.snapshot(first.name), path)
        return publish(places, staging, draft_of({**files, **first.files}))


def test_the_catalog_is_written_for_older_clients(places: Places, raw: Path, tmp_path: Path) -> None:
    """Client 1.2.0 opens storage version 65; what 2.0 writes unasked no older client does."""
    publish_small(places, raw)
    duckdb.connect(str(tmp_path / "unasked.duckdb")).close()
    versions = []
    for path in (places.catalog, tmp_path / "unasked.duckdb"):
        header = path.read_bytes()[:20]
        assert header[8:12] == b"DUCK"
        versions.append(int.from_bytes(header[12:20], "little"))
    assert versions[0] == 65
    assert duckdb.__version__ < "2" or versions[1] > 65


def test_a_catalog_whose_files_are_not_there_is_not_built(places: Places, raw: Path, tmp_path: Path) -> None:
    manifest = publish_small(places, raw)
    facts = SnapshotFacts("a", 1, None, "", "", tmp_path / "nowhere", tuple(manifest.files))
    with pytest.raises(StoreError, match="the catalog could not be built"):
        build_catalog(tmp_path / "made.duckdb", facts)
    assert not (tmp_path / "made.duckdb").exists()


def test_views_can_be_laid_in_memory(places: Places, raw: Path) -> None:
    publish_small(places, raw)
    manifest = read_manifest(places)
    facts = SnapshotFacts(manifest.name, 1, None, "", "", places.snapshot(manifest.name), tuple(manifest.files))
    with duckdb.connect() as connection:
        lay_views(connection, "memory", facts)
        assert connection.execute("select count(*) from rolls").fetchone() == (3,)


def loaded_by(modules: str) -> set[str]:
    """The large libraries that importing some modules loads."""
    script = f"import sys, {modules}; print(*{{'duckdb', 'pyarrow', 'pandas', 'numpy'}} & set(sys.modules))"
    root = Path(__file__).parents[2]
    run = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, cwd=root, check=True)
    return set(run.stdout.split())


def test_importing_the_store_loads_no_duckdb() -> None:
    modules = "catalog.store, catalog.query, catalog.verify, catalog.catalog_file"
    assert "pyarrow" in loaded_by(modules)
    assert "duckdb" not in loaded_by(modules)


def test_importing_the_places_loads_no_table_library() -> None:
    assert loaded_by("catalog.places") == set()
