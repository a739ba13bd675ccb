"""Every published number derived again from archive, desk and code, and what is said when one of them is another."""

from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from catalog.declarations import load_desk
from catalog.deep import rederive
from catalog.places import Places
from catalog.standing import current_snapshot, read_manifest
from contracts.errors import StoreUnsound
from tests.integration.tiny import run_night, write_desk, write_raw


@pytest.fixture
def desk(tmp_path: Path) -> Path:
    desk = write_desk(tmp_path)
    write_raw(desk, 90)
    run_night(desk, tmp_path / "published")
    return desk


@pytest.fixture
def places(tmp_path: Path, desk: Path) -> Places:
    return Places(tmp_path / "published")


def test_any_kept_snapshot_is_derived_again_with_the_desk_that_made_it(places: Places, desk: Path) -> None:
    first = current_snapshot(places)
    market = desk / "markets" / "tina.toml"
    market.write_text(market.read_text().replace("backstop = 3", "backstop = 30"))
    write_raw(desk, 91)
    run_night(desk, places.store)
    assert rederive(places) == ()
    assert rederive(places, snapshot=first) == ()
    # Comments of the desk are part of its digest; with the desk of today the newest holds, too.
    assert rederive(places, load_desk(desk)) == ()


def test_an_altered_key_of_the_desk_is_named_with_the_first_row_it_moves(places: Places, desk: Path) -> None:
    market = desk / "markets" / "tina.toml"
    market.write_text(market.read_text().replace("backstop = 3", "backstop = 30"))
    problems = rederive(places, load_desk(desk))
    assert problems[0] == "the desk is another: markets/tina.toml plans.by_volume.backstop: 3 -> 30"
    row = next(problem for problem in problems if problem.startswith("series/TINA.parquet, row "))
    assert "by_volume" in row and "published" in row and "derived" in row


def test_an_altered_published_value_is_named_with_its_row(places: Places) -> None:
    path = places.snapshot(str(current_snapshot(places))) / "series" / "TINB.parquet"
    rows = pq.read_table(path)
    values = rows["settle"].to_pylist()
    values[7] += 0.25
    path.chmod(0o644)
    altered = rows.set_column(rows.schema.get_field_index("settle"), rows.schema.field("settle"), pa.array(values))
    pq.write_table(altered, path)
    (problem,) = rederive(places)
    assert problem.startswith("series/TINB.parquet, row 7: settle 2")
    assert "TINB" in problem and "by_volume" in problem


def test_an_altered_raw_byte_is_named_with_its_market_and_file(places: Places) -> None:
    rows = pq.read_table(places.snapshot(str(current_snapshot(places))) / "bars" / "TINA.parquet")
    archived = places.archived(rows["file"][0].as_py())
    content = bytearray(archived.read_bytes())
    content[len(content) // 2] ^= 1
    archived.chmod(0o644)
    archived.write_bytes(content)
    (problem,) = rederive(places)
    assert problem.startswith("TINA: cannot be built again: ") and str(archived) in problem


def test_an_altered_file_of_the_archived_desk_is_refused(places: Places) -> None:
    manifest = read_manifest(places)
    archived = places.archived(manifest.desk_files["markets/tina.toml"])
    archived.chmod(0o644)
    archived.write_bytes(archived.read_bytes()[:-3])
    with pytest.raises(StoreUnsound, match=archived.name):
        rederive(places)
