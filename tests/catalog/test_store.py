"""A snapshot is whole, checked and named before anything points to it."""

import hashlib
import json
import os
import shutil
from collections.abc import Callable
from pathlib import Path

import duckdb
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from catalog.manifest import Manifest
from catalog.places import Places, write_lock
from catalog.standing import current_snapshot, next_sequence, read_manifest
from catalog.store import clean_leftovers, link_table, open_staging, publish, write_table
from catalog.verify import verify_store
from contracts.errors import StoreError, StoreUnsound, UsageError
from contracts.tables import BARS, FINDINGS, SERIES, make_table
from tests.catalog.small import STAMP, S, draft_of, publish_small, sound_rows, sound_table, stage_small


def add_snapshot(places: Places) -> Manifest:
    """One more snapshot, all of whose files are links to the current one's."""
    current = read_manifest(places)
    staging = open_staging(places)
    for path in current.files:
        link_table(staging, places.snapshot(current.name), path)
    return publish(places, staging, draft_of(current.files))


def names_in(places: Places) -> list[str]:
    return sorted(path.name for path in places.snapshots.iterdir())


# One table.


def test_the_bytes_of_a_table_depend_on_its_rows_and_stamp_alone(tmp_path: Path) -> None:
    table = sound_table("series")
    pieces = pa.concat_tables([table.slice(0, 5), table.slice(5, 1), table.slice(6)])
    one = write_table(tmp_path / "one", SERIES, "NWHT", table, {"desk": "d", "code": "c"})
    other = write_table(tmp_path / "other", SERIES, "NWHT", pieces, {"code": "c", "desk": "d"})
    assert one == other
    assert (tmp_path / "one" / one.path).read_bytes() == (tmp_path / "other" / one.path).read_bytes()


def test_a_table_is_stamped_and_its_columns_carry_unit_and_meaning(tmp_path: Path) -> None:
    stored = write_table(tmp_path, SERIES, "NWHT", sound_table("series"), STAMP)
    assert stored.path == "series/NWHT.parquet"
    assert stored.rows == 18
    content = (tmp_path / stored.path).read_bytes()
    assert (stored.bytes, stored.sha256) == (len(content), hashlib.sha256(content).hexdigest())
    schema = pq.read_schema(tmp_path / stored.path)
    assert schema.metadata == {b"code": b"some code", b"desk": b"a desk"}
    assert schema.field("shift").metadata[b"unit"] == b"market currency per unit"
    assert schema.field("shift").metadata[b"meaning"] == (
        b"sum of the gaps of all later rolls: makes differences true when added to a price, and percentages wrong"
    )
    group = pq.ParquetFile(tmp_path / stored.path).metadata.row_group(0)
    assert group.column(0).compression == "ZSTD"
    assert [column.column_index for column in group.sorting_columns] == [0, 1, 2, 3]
    assert group.column(3).statistics.max == S[5]


def test_a_flipped_bit_in_a_page_fails_its_checksum(tmp_path: Path) -> None:
    stored = write_table(tmp_path, SERIES, "NWHT", sound_table("series"), STAMP)
    content = bytearray((tmp_path / stored.path).read_bytes())
    settle = pq.ParquetFile(tmp_path / stored.path).metadata.row_group(0).column(10)
    assert settle.path_in_schema == "settle"
    content[settle.dictionary_page_offset + settle.total_compressed_size - 1] ^= 1
    with pytest.raises(OSError, match="CRC checksum verification failed"):
        pq.read_table(pa.BufferReader(bytes(content)), page_checksum_verification=True)


def test_a_published_file_is_not_writable(tmp_path: Path) -> None:
    stored = write_table(tmp_path, SERIES, "NWHT", sound_table("series"), STAMP)
    assert (tmp_path / stored.path).stat().st_mode & 0o222 == 0


def test_writing_a_table_again_leaves_the_snapshot_alone_that_it_was_linked_to(tmp_path: Path) -> None:
    write_table(tmp_path / "old", SERIES, "NWHT", sound_table("series"), STAMP)
    before = (tmp_path / "old/series/NWHT.parquet").read_bytes()
    link_table(tmp_path / "new", tmp_path / "old", "series/NWHT.parquet")
    assert (tmp_path / "new/series/NWHT.parquet").samefile(tmp_path / "old/series/NWHT.parquet")
    write_table(tmp_path / "new", SERIES, "NWHT", sound_table("series").slice(0, 6), STAMP)
    assert (tmp_path / "old/series/NWHT.parquet").read_bytes() == before
    assert pq.read_metadata(tmp_path / "new/series/NWHT.parquet").num_rows == 6


def test_where_no_link_can_be_made_the_file_is_copied(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    write_table(tmp_path / "old", SERIES, "NWHT", sound_table("series"), STAMP)

    def refuse(*arguments: object, **named: object) -> None:
        raise OSError(18, "Invalid cross-device link")

    monkeypatch.setattr(os, "link", refuse)
    link_table(tmp_path / "new", tmp_path / "old", "series/NWHT.parquet")
    old, new = tmp_path / "old/series/NWHT.parquet", tmp_path / "new/series/NWHT.parquet"
    assert new.read_bytes() == old.read_bytes()
    assert not new.samefile(old)


def test_a_link_in_the_place_of_a_published_file_is_not_linked_on(tmp_path: Path) -> None:
    (tmp_path / "old/series").mkdir(parents=True)
    (tmp_path / "old/series/NWHT.parquet").symlink_to("/etc/hostname")
    with pytest.raises(StoreUnsound, match="expected a regular file"):
        link_table(tmp_path / "new", tmp_path / "old", "series/NWHT.parquet")


def _with_settle(value: float) -> pa.Table:
    table = sound_table("bars")
    return table.set_column(6, BARS.schema.field("settle"), pa.array([value] * 12))


def _with_bare_columns() -> pa.Table:
    bare = [pa.field(field.name, field.type, field.nullable) for field in BARS.schema]
    return pa.table(sound_table("bars").columns, schema=pa.schema(bare))


def _with_short_floats() -> pa.Table:
    table = sound_table("bars")
    return table.cast(table.schema.set(3, pa.field("open", pa.float32())))


@pytest.mark.parametrize(
    "data, message",
    [
        (sound_table("bars").drop_columns(["line"]), "seen the columns market string not null"),
        (_with_short_floats(), "open float,"),
        (_with_bare_columns(), "without their unit and meaning"),
        (make_table(BARS, {**sound_rows()["bars"], "contract": [None] * 12}), "contract is part of the key"),
        (pa.concat_tables([sound_table("bars"), sound_table("bars").slice(11)]), "keys, 1 of 13 rows"),
        (pa.concat_tables([sound_table("bars").slice(1), sound_table("bars").slice(0, 1)]),
         "row 12 sorts before row 11 by contract"),
        (_with_settle(float("nan")), "settle holds a number that is not finite"),
        (_with_settle(float("inf")), "settle holds a number that is not finite"),
        (sound_table("bars", "NKRN"), "holds rows of another market"),
    ],
)  # fmt: skip
def test_a_table_that_is_not_what_it_is_called_is_refused(tmp_path: Path, data: pa.Table, message: str) -> None:
    with pytest.raises(StoreError, match=message):
        write_table(tmp_path, BARS, "NWHT", data, STAMP)
    assert list(tmp_path.iterdir()) == []


def test_findings_are_sorted_by_place_with_those_of_no_place_last_and_still_have_unique_keys(
    tmp_path: Path,
) -> None:
    columns = {"finding": ["c", "b", "a"], "market": [None, None, "NWHT"], "kind": ["x", "y", "z"]}
    table = make_table(FINDINGS, columns)
    assert table["finding"].to_pylist() == ["a", "c", "b"]
    assert write_table(tmp_path, FINDINGS, None, table, STAMP).path == "findings/_desk.parquet"
    twice = make_table(FINDINGS, {**columns, "finding": ["c", "b", "c"]})
    with pytest.raises(StoreError, match="seen repeated keys, 1 of 3 rows; expected finding to be unique"):
        write_table(tmp_path, FINDINGS, None, twice, STAMP)
    with pytest.raises(StoreError, match="row 2 sorts before row 1 by market"):
        write_table(tmp_path, FINDINGS, None, table.take([1, 0, 2]), STAMP)


def test_a_disk_that_gives_back_other_bytes_is_noticed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    original = Path.read_bytes
    monkeypatch.setattr(Path, "read_bytes", lambda path: original(path)[:-1] + b"?")
    with pytest.raises(StoreError, match="what is read back differs from what was written"):
        write_table(tmp_path, SERIES, "NWHT", sound_table("series"), STAMP)


# Publishing.


def test_snapshots_are_numbered_in_sequence_and_name_their_parent(places: Places, raw: Path) -> None:
    first = publish_small(places, raw)
    with write_lock(places):
        second = add_snapshot(places)
    assert (first.sequence, first.parent) == (1, None)
    assert (second.sequence, second.parent) == (2, first.name)
    assert first.name.startswith("000001-")
    assert current_snapshot(places) == second.name
    assert places.current.read_bytes() == f"{second.name}\n".encode()
    assert read_manifest(places) == second
    assert read_manifest(places, first.name) == first
    assert next_sequence(places) == 3
    series = "series/NWHT.parquet"
    assert (places.snapshot(first.name) / series).samefile(places.snapshot(second.name) / series)


def test_the_same_content_has_the_same_name(places: Places, tmp_path: Path, raw: Path) -> None:
    assert publish_small(places, raw).name == publish_small(Places(tmp_path / "other"), raw).name


def test_the_manifest_is_its_own_witness(places: Places, raw: Path) -> None:
    name = publish_small(places, raw).name
    path = places.snapshot(name) / "manifest.json"
    content = json.loads(path.read_bytes())
    assert content["files"]["rolls/NWHT.parquet"]["rows"] == 3
    path.chmod(0o644)
    for change in ({"desk": "another"}, {"sequence": 2}, {"name": "000001-000000000000"}):
        path.write_text(json.dumps({**content, **change}))
        with pytest.raises(StoreUnsound, match=rf"expected both to be '{name}'"):
            read_manifest(places)
    for text in ("", "{", json.dumps({**content, "extra": 1}), path.read_text()[:-40]):
        path.write_text(text)
        with pytest.raises(StoreUnsound, match="expected a manifest as published"):
            read_manifest(places)
    path.unlink()
    with pytest.raises(StoreUnsound, match="cannot be read"):
        read_manifest(places)


def test_what_is_not_there_is_said(places: Places, raw: Path) -> None:
    assert current_snapshot(places) is None
    with pytest.raises(UsageError, match="nothing is published here yet"):
        read_manifest(places)
    name = publish_small(places, raw).name
    for wrong in ("000009-0123456789ab", "../..", ""):
        with pytest.raises(UsageError, match=f"expected a snapshot that is there .newest: {name}."):
            read_manifest(places, wrong)


@pytest.mark.parametrize("text", [b"", b"000001-0123456789ab\n", b"..\n", b"\xff\xfe", b"a\nb\n"])
def test_a_current_that_names_no_snapshot_is_unsound(places: Places, raw: Path, text: bytes) -> None:
    name = publish_small(places, raw).name
    places.current.write_bytes(text)
    with pytest.raises(StoreUnsound, match=f"expected the name of a snapshot that is there .newest there: {name}"):
        current_snapshot(places)


def test_nothing_is_published_that_differs_from_what_is_listed(places: Places, raw: Path) -> None:
    first = publish_small(places, raw)
    series = "series/NWHT.parquet"

    def flip(staging: Path) -> None:
        content = bytearray((staging / series).read_bytes())
        content[100] ^= 1
        (staging / series).unlink()
        (staging / series).write_bytes(content)

    def cut(staging: Path) -> None:
        content = (staging / series).read_bytes()
        (staging / series).unlink()
        (staging / series).write_bytes(content[:-1])

    def link(staging: Path) -> None:
        shutil.move(staging / series, staging.parent.parent / "elsewhere.parquet")
        (staging / series).symlink_to(staging.parent.parent / "elsewhere.parquet")

    breaks: dict[str, Callable[[Path], object]] = {
        "seen SHA-256": flip,
        "bytes; expected": cut,
        "cannot be read": link,
        "series/NWHT.parquet: cannot be read: No such file": lambda staging: (staging / series).unlink(),
        "series/NEW.parquet: is not listed": lambda staging: (staging / "series/NEW.parquet").write_bytes(b"new"),
    }
    with write_lock(places):
        for message, break_it in breaks.items():
            staging = open_staging(places)
            files = stage_small(staging, "NWHT", "0" * 64)
            break_it(staging)
            with pytest.raises(StoreError, match=message):
                publish(places, staging, draft_of(files))
            assert names_in(places) == [first.name]
            assert current_snapshot(places) == first.name


def test_a_failed_fsync_abandons_the_snapshot_whichever_it_is(
    places: Places, raw: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The n-th fsync of a publication fails, for every n; none is called again for the same file."""
    first = publish_small(places, raw)
    original = os.fsync
    failing, count = 1, 0

    def fsync(opened: int) -> None:
        nonlocal count
        count += 1
        if count == failing:
            raise OSError(5, "Input/output error")
        original(opened)

    monkeypatch.setattr(os, "fsync", fsync)
    last_failed = 0
    with write_lock(places):
        while True:
            count = 0
            try:
                second = add_snapshot(places)
            except StoreError as error:
                assert "Input/output error" in str(error)
                # Removing what was staged forces nothing more to the disk.
                assert count == failing
                last_failed = failing
                if str(error).startswith("the snapshot is switched to, and the disk does not confirm it: "):
                    assert current_snapshot(places) != first.name
                    break
                assert names_in(places) == [first.name]
                assert current_snapshot(places) == first.name
                assert not list(places.store.glob(".*"))
                failing += 1
                continue
            pytest.fail(f"published {second.name} though an fsync failed")
        monkeypatch.setattr(os, "fsync", original)
        assert last_failed > 8
        assert clean_leftovers(places) == []
    assert read_manifest(places).sequence == 2
    assert verify_store(places).problems == ()


def test_the_catalog_that_cannot_be_built_leaves_the_last_snapshot(
    places: Places, raw: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    first = publish_small(places, raw)

    def fail(*arguments: object, **named: object) -> None:
        raise duckdb.IOException("IO Error: Could not write file: No space left on device")

    with write_lock(places):
        with monkeypatch.context() as patch:
            patch.setattr(duckdb, "connect", fail)
            with pytest.raises(StoreError, match=r"catalog could not be built: .*No space left"):
                add_snapshot(places)
        assert names_in(places) == [first.name]
        assert current_snapshot(places) == first.name
        assert add_snapshot(places).sequence == 2
    assert verify_store(places).problems == ()


# What a stopped run leaves.


def test_leftovers_of_dead_runs_are_removed(places: Places, raw: Path) -> None:
    first = publish_small(places, raw)
    (places.snapshots / ".staging-99-0" / "series").mkdir(parents=True)
    (places.snapshots / ".staging-99-0" / "series" / "NWHT.parquet").write_bytes(b"half")
    (places.store / ".CURRENT.part").write_bytes(b"0000")
    (places.store / ".catalog.duckdb.part").write_bytes(b"half")
    (places.store / ".catalog.duckdb.part.wal").write_bytes(b"half")
    with write_lock(places):
        assert clean_leftovers(places) == [
            "removed .CURRENT.part", "removed .catalog.duckdb.part", "removed .catalog.duckdb.part.wal",
            "removed .staging-99-0",
        ]  # fmt: skip
        assert clean_leftovers(places) == []
    assert names_in(places) == [first.name]
    assert verify_store(places).problems == ()


def test_a_switch_that_was_cut_off_is_finished(places: Places, raw: Path) -> None:
    """CURRENT names the first snapshot, the second is complete, and the catalog may show either."""
    first = publish_small(places, raw)
    old_catalog = places.catalog.read_bytes()
    with write_lock(places):
        second = add_snapshot(places)
        new_catalog = places.catalog.read_bytes()
        for catalog_bytes in (old_catalog, new_catalog):
            places.current.write_text(f"{first.name}\n")
            places.catalog.unlink()
            places.catalog.write_bytes(catalog_bytes)
            message = f"switched to {second.name}, which a stopped run had completed"
            assert clean_leftovers(places) == [message]
            assert current_snapshot(places) == second.name
            assert verify_store(places).problems == ()


def test_the_first_switch_is_finished_too(places: Places, raw: Path) -> None:
    first = publish_small(places, raw)
    places.current.unlink()
    places.catalog.unlink()
    with write_lock(places):
        assert clean_leftovers(places) == [f"switched to {first.name}, which a stopped run had completed"]
    assert verify_store(places).problems == ()


def test_a_newer_snapshot_that_is_not_whole_is_never_switched_to(places: Places, raw: Path) -> None:
    first = publish_small(places, raw)
    with write_lock(places):
        second = add_snapshot(places)
        places.current.write_text(f"{first.name}\n")
        (places.snapshot(second.name) / "series/NWHT.parquet").unlink()
        (message,) = clean_leftovers(places)
        assert message.startswith(f"left {second.name}, which nothing points to, as it is: series/NWHT.parquet: ")
        assert current_snapshot(places) == first.name
        # Its number is not given away again.
        assert add_snapshot(places).sequence == 3
        assert clean_leftovers(places) == []


def test_a_catalog_that_is_gone_is_built_again(places: Places, raw: Path) -> None:
    publish_small(places, raw)
    places.catalog.unlink()
    with write_lock(places):
        assert clean_leftovers(places) == ["built the catalog again"]
    assert verify_store(places).problems == ()


def test_the_log_of_somebody_who_wrote_the_old_catalog_is_not_replayed(places: Places, raw: Path) -> None:
    publish_small(places, raw)
    log = places.store / "catalog.duckdb.wal"
    log.write_bytes(b"a log of another file")
    with write_lock(places):
        add_snapshot(places)
    assert not log.exists()
    assert verify_store(places).problems == ()
