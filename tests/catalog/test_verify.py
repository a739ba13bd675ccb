"""Whatever is damaged in a store is found and named, and a store that was moved can be used again."""

import json
import shutil
from collections.abc import Callable
from pathlib import Path

import duckdb
import pyarrow as pa
import pytest

from catalog.archive import take_in
from catalog.places import Places, write_lock
from catalog.query import open_catalog, run_query
from catalog.store import link_table, open_staging, publish, write_table
from catalog.verify import repoint, verify_store
from contracts.errors import StoreBusy, UsageError
from tests.catalog.small import RAW_SHA, RAW_TEXT, STAMP, draft_of, publish_small, sound_table, table_named

SERIES = "series/NWHT.parquet"


def test_a_sound_store_has_no_problem(places: Places, raw: Path) -> None:
    manifest = publish_small(places, raw)
    report = verify_store(places)
    assert report.problems == ()
    assert report.snapshot == manifest.name
    # Nine tables and one raw file.
    assert report.files_checked == 10
    assert report.rules_run >= 20
    assert verify_store(places, manifest.name) == report


def test_an_empty_store_has_nothing_to_verify(places: Places) -> None:
    with pytest.raises(UsageError, match="nothing is published here yet"):
        verify_store(places)


def test_every_single_flipped_bit_of_a_published_file_is_found(places: Places, raw: Path) -> None:
    """One bit in each of twenty places, from the first byte to the last."""
    name = publish_small(places, raw).name
    path = places.snapshot(name) / SERIES
    content = path.read_bytes()
    for step in range(20):
        at = (len(content) - 1) * step // 19
        damaged = bytearray(content)
        damaged[at] ^= 1 << step % 8
        path.unlink()
        path.write_bytes(damaged)
        problems = verify_store(places).problems
        assert problems[0].startswith(f"{name}/{SERIES}: seen SHA-256 "), at


def _rewrite(path: Path, content: bytes) -> None:
    path.unlink()
    path.write_bytes(content)


def _cut(places: Places, folder: Path) -> None:
    _rewrite(folder / SERIES, (folder / SERIES).read_bytes()[:-1])


def _remove(places: Places, folder: Path) -> None:
    (folder / SERIES).unlink()


def _add(places: Places, folder: Path) -> None:
    (folder / "series/NKRN.parquet").write_bytes(b"not ours")


def _put_link(places: Places, folder: Path) -> None:
    shutil.move(folder / SERIES, places.store / "elsewhere.parquet")
    (folder / SERIES).symlink_to(places.store / "elsewhere.parquet")


def _put_link_above(places: Places, folder: Path) -> None:
    shutil.move(folder / "series", places.store / "elsewhere")
    (folder / "series").symlink_to(places.store / "elsewhere")


def _damage_manifest(places: Places, folder: Path) -> None:
    content = json.loads((folder / "manifest.json").read_bytes())
    content["files"][SERIES]["rows"] = 17
    _rewrite(folder / "manifest.json", json.dumps(content).encode())


def _point_nowhere(places: Places, folder: Path) -> None:
    places.current.write_text("000001-000000000000\n")


def _flip_raw(places: Places, folder: Path) -> None:
    path = places.archived(RAW_SHA)
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 1
    _rewrite(path, bytes(content))


def _remove_raw(places: Places, folder: Path) -> None:
    places.archived(RAW_SHA).unlink()


def _empty_register(places: Places, folder: Path) -> None:
    places.register.write_bytes(b"")


def _damage_register(places: Places, folder: Path) -> None:
    places.register.write_bytes(b"\x00" * 100 + b"\n")


def _register_more(places: Places, folder: Path) -> None:
    record = {"taken_in": 2, "path": "b.csv", "file": "f" * 64, "bytes": 1, "container": False, "left": 0}
    with places.register.open("ab") as file:
        file.write(json.dumps(record).encode() + b"\n")


def _remove_catalog(places: Places, folder: Path) -> None:
    places.catalog.unlink()


def _change_catalog(places: Places, folder: Path) -> None:
    places.catalog.chmod(0o644)
    with duckdb.connect(str(places.catalog)) as connection:
        connection.execute("create or replace view series as select * from rolls where false")


def _rename_snapshot_in_catalog(places: Places, folder: Path) -> None:
    places.catalog.chmod(0o644)
    with duckdb.connect(str(places.catalog)) as connection:
        connection.execute("update snapshot set desk = 'another'")


@pytest.mark.parametrize(
    "break_it, told",
    [
        (_cut, "series/NWHT.parquet: seen [0-9,]+ bytes; expected [0-9,]+"),
        (_remove, "series/NWHT.parquet: cannot be read: No such file"),
        (_add, "series/NKRN.parquet: is not listed in the manifest"),
        (_put_link, "series/NWHT.parquet: cannot be read: Too many levels of symbolic links"),
        (_put_link_above, "series: is a link; expected a folder"),
        (_damage_manifest, "manifest.json: seen the name '.+' and content that makes"),
        (_point_nowhere, "CURRENT: seen '000001-000000000000'; expected the name of a snapshot"),
        (_flip_raw, f"{RAW_SHA}.zst: seen "),
        (_remove_raw, f"the raw file {RAW_SHA} is not in the archive"),
        (_empty_register, f"NWHT.csv with SHA-256 {RAW_SHA} is in the snapshot and not in the register"),
        (_damage_register, "register.jsonl:1: seen "),
        (_register_more, f"{'f' * 64}.zst: is registered and not there"),
        (_remove_catalog, "catalog.duckdb: the catalog is gone"),
        (_change_catalog, "series: seen 0 rows; expected 18 by the manifest"),
        (_rename_snapshot_in_catalog, "catalog.duckdb: seen the snapshot .*another.*; expected"),
    ],
)
def test_each_kind_of_damage_is_named(
    places: Places, raw: Path, break_it: Callable[[Places, Path], None], told: str
) -> None:
    name = publish_small(places, raw).name
    break_it(places, places.snapshot(name))
    problems = verify_store(places).problems
    assert any(_found(told, problem) for problem in problems), problems


def _found(pattern: str, text: str) -> bool:
    import re

    return re.search(pattern, text) is not None


def test_a_raw_file_that_is_registered_and_not_of_the_snapshot_is_hashed_too(places: Places, raw: Path) -> None:
    publish_small(places, raw)
    (raw / "later.csv").write_bytes(b"later")
    with write_lock(places):
        later = take_in(raw, places).arrivals[-1]
    assert later.path == "later.csv"
    assert (verify_store(places).problems, verify_store(places).files_checked) == ((), 11)
    path = places.archived(later.file)
    content = path.read_bytes()
    _rewrite(path, content[:20] + bytes([content[20] ^ 1]) + content[21:])
    assert [problem.partition(": ")[0] for problem in verify_store(places).problems] == [str(path)]


def test_numbers_that_do_not_add_up_are_found_though_every_hash_is_right(places: Places, raw: Path) -> None:
    first = publish_small(places, raw)
    data = sound_table("rolls")
    place = data.schema.get_field_index("gap")
    wrong = data.set_column(place, data.schema.field(place), pa.array([9.0, 4.5, 5.0]))
    with write_lock(places):
        staging = open_staging(places)
        stored = write_table(staging, table_named("rolls"), "NWHT", wrong, STAMP)
        for path in first.files.keys() - {stored.path}:
            link_table(staging, places.snapshot(first.name), path)
        publish(places, staging, draft_of({**first.files, stored.path: stored}))
    rules = sorted(problem.partition(":")[0] for problem in verify_store(places).problems)
    assert rules == ["gap_is_weighted_difference", "shift_is_sum_of_later_gaps"]
    assert verify_store(places, first.name).problems == ()


def test_more_problems_than_one_are_all_told(places: Places, raw: Path) -> None:
    name = publish_small(places, raw).name
    for path in (SERIES, "rolls/NWHT.parquet"):
        (places.snapshot(name) / path).unlink()
    _remove_raw(places, places.snapshot(name))
    problems = verify_store(places).problems
    for part in ("series/NWHT.parquet: cannot", "rolls/NWHT.parquet: cannot", f"the raw file {RAW_SHA}"):
        assert any(part in problem for problem in problems), part


def test_a_moved_store_is_pointed_to_where_it_lies(places: Places, raw: Path, tmp_path: Path) -> None:
    name = publish_small(places, raw).name
    moved = Places(tmp_path / "moved")
    shutil.move(places.store, moved.store)
    assert any("it was moved or copied" in problem for problem in verify_store(moved).problems)
    assert repoint(moved).name == name
    assert verify_store(moved).problems == ()
    with open_catalog(moved) as connection:
        assert run_query(connection, "select count(*) from series_of('NWHT')")[1] == [(18,)]


def test_a_store_in_use_is_not_pointed_elsewhere(places: Places, raw: Path) -> None:
    publish_small(places, raw)
    with write_lock(places), pytest.raises(StoreBusy):
        repoint(places)


def test_verifying_changes_nothing(places: Places, raw: Path) -> None:
    publish_small(places, raw)
    before = {path: path.read_bytes() for path in places.store.rglob("*") if path.is_file()}
    verify_store(places)
    assert {path: path.read_bytes() for path in places.store.rglob("*") if path.is_file()} == before
    assert RAW_TEXT == b"session,settle\n2024-01-08,100\n"
