"""Damage that a night meets: what it mends, what it drops, what it says, and with which code it ends."""

import errno
import os
import re
from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from catalog.places import Places, write_lock
from catalog.query import open_catalog, run_query
from catalog.standing import current_snapshot, list_snapshots, read_manifest
from catalog.verify import verify_store
from contracts.errors import StoreError
from tests.catalog.small import lay_raw, publish_small
from tests.catalog.stopped import work
from tests.integration.tiny import run_night, write_desk, write_raw


def ropewalk(desk: Path, *words: str) -> Result:
    from flows.commands import main

    return CliRunner().invoke(main, [*words, "--desk", str(desk)])


@pytest.fixture
def desk(tmp_path: Path) -> Path:
    """TINA and TINB, published once."""
    desk = write_desk(tmp_path)
    write_raw(desk, 90)
    run_night(desk, desk / "published")
    return desk


@pytest.fixture
def places(desk: Path) -> Places:
    return Places(desk / "published")


def newest(places: Places) -> str:
    return str(current_snapshot(places))


def overwrite(path: Path, content: bytes) -> bytes:
    """Damage a file in place, as a disk does, and so in every snapshot that links to it; returns what it held."""
    sound = path.read_bytes()
    path.chmod(0o644)
    path.write_bytes(content)
    return sound


def ask(places: Places, query: str) -> list[tuple]:  # type: ignore[type-arg]
    with open_catalog(places) as connection:
        return run_query(connection, query)[1]


# A table whose market has no news.

SHA = "[0-9a-f]{64}"
BYTES = "[0-9,]+"


@pytest.mark.parametrize(
    ("damage", "seen"),
    [
        (lambda path: overwrite(path, path.read_bytes()[:-1] + b"?"), f"seen SHA-256 {SHA}; expected {SHA}"),
        (lambda path: path.unlink(), "cannot be read: No such file or directory"),
        (lambda path: (path.unlink(), path.symlink_to("/etc/hostname")), "cannot be read: Too many levels of .*"),
    ],
    ids=["flipped", "gone", "a link"],
)  # fmt: skip
def test_a_damaged_table_of_a_market_without_news_is_made_again_byte_for_byte(
    desk: Path, places: Places, damage: Callable[[Path], object], seen: str
) -> None:
    first = newest(places)
    path = places.snapshot(first) / "series" / "TINB.parquet"
    sound = path.read_bytes()
    damage(path)
    write_raw(desk, 91, ("TINA",))
    result = ropewalk(desk, "build")
    assert (result.exit_code, result.stderr) == (0, "")
    told = rf"  TINB: 1 of its tables in {first} is damaged \(series/TINB\.parquet: {seen}\); "
    assert re.search(rf"^{told}made again from the archive as published$", result.stdout, re.M), result.stdout
    assert (places.snapshot(newest(places)) / "series" / "TINB.parquet").read_bytes() == sound
    assert ropewalk(desk, "verify", "--deep").exit_code == 0


@pytest.mark.parametrize("path", ["rolls/TINA.parquet", "coverage/_desk.parquet"])
def test_without_news_damage_stays_until_rehash_mends_it(desk: Path, places: Places, path: str) -> None:
    sound = overwrite(places.snapshot(newest(places)) / path, b"damaged")
    quiet = ropewalk(desk, "build")
    assert (quiet.exit_code, quiet.stdout[:12]) == (0, "nothing new:")
    assert ropewalk(desk, "verify").exit_code == 5
    mended = ropewalk(desk, "build", "--rehash")
    assert (mended.exit_code, mended.stdout[:28]) == (0, "published snapshot 000002-" + mended.stdout[26:28])
    assert (places.snapshot(newest(places)) / path).read_bytes() == sound
    assert ropewalk(desk, "verify").exit_code == 0
    assert ropewalk(desk, "build", "--rehash").stdout.startswith("nothing new: snapshot 000002-")


def test_a_table_that_neither_disk_nor_archive_has_is_served_no_more_and_stops_nobody(
    desk: Path, places: Places
) -> None:
    first = newest(places)
    overwrite(places.snapshot(first) / "series" / "TINB.parquet", b"")
    kept = next(arrival for arrival in _arrivals(places) if arrival.path == "TINB_2024_06.csv")
    overwrite(places.archived(kept.file), b"")
    write_raw(desk, 91, ("TINA",))
    result = ropewalk(desk, "build")
    assert result.exit_code == 3
    assert re.search(
        rf"^  held back: TINB: 1 of its tables in {first} is damaged \(series/TINB.parquet: seen 0 bytes; "
        rf"expected {BYTES}\) and cannot be made again \(the archive no longer gives them: .*{kept.file}.zst: seen "
        rf"an empty file; expected the raw file {kept.file}\): nothing sound to serve; nothing of it is served$",
        result.stdout, re.M,
    ), result.stdout  # fmt: skip
    assert ask(places, "select distinct market from series") == [("TINA",)]
    assert ask(places, "select state, last_good_snapshot from coverage where market = 'TINB'") == [("held back", None)]
    assert [problem for problem in verify_store(places).problems if kept.file not in problem] == []
    # The raw folder still has the file.
    mended = ropewalk(desk, "build", "--rehash")
    assert (mended.exit_code, "published: TINA, TINB\n" in mended.stdout) == (0, True)
    assert ropewalk(desk, "verify", "--deep").exit_code == 0


def _arrivals(places: Places):  # type: ignore[no-untyped-def]
    from catalog.archive import read_register

    return read_register(places)


def test_a_damaged_raw_file_in_the_archive_holds_back_its_market_alone(desk: Path, places: Places) -> None:
    (kept,) = (arrival for arrival in _arrivals(places) if arrival.path == "TINB_2024_06.csv")
    overwrite(places.archived(kept.file), b"")
    write_raw(desk, 91, ("TINA",))
    later = desk / "raw" / "TINB_2024_12.csv"
    later.write_text(later.read_text() + "2024-03-06,250.00,249.00,249.50,500,1000\n")
    for _ in range(2):
        # Every night tries again, though nothing new came after the first.
        result = ropewalk(desk, "build")
        assert result.exit_code == 3
        (line,) = [line for line in result.stdout.splitlines() if line.startswith("  held back: ")]
        assert line.startswith(f"  held back: TINB: {places.archived(kept.file)}: seen an empty file; ")
        assert "; build --rehash writes it anew where the raw folder still has it; served as of 000001-" in line
        assert "\n  published: TINA\n" in result.stdout
    mended = ropewalk(desk, "build", "--rehash")
    assert (mended.exit_code, "published: TINA, TINB\n" in mended.stdout) == (0, True)
    assert ropewalk(desk, "verify").exit_code == 0


# A market that is held back.


@pytest.fixture
def held(desk: Path, places: Places) -> Path:
    """TINB was published, then came with five rows fewer, and its last good tables are served; returns the file."""
    file = desk / "raw" / "TINB_2024_06.csv"
    lines = file.read_text().splitlines(keepends=True)
    file.write_text("".join(lines[:40] + lines[45:]))
    assert ropewalk(desk, "build").exit_code == 3
    write_raw(desk, 91, ("TINA",))
    return file


def test_damaged_tables_of_a_market_held_back_are_made_again_with_the_desk_that_made_them(
    desk: Path, places: Places, held: Path
) -> None:
    first, second = list_snapshots(places)
    names = ("series", "rolls")
    paths = [places.snapshot(second) / name / "TINB.parquet" for name in names]
    sound = [overwrite(path, b"") for path in paths]
    # The desk has moved on since; what is served is what was published.
    market = desk / "markets" / "tinb.toml"
    market.write_text(market.read_text().replace("backstop = 3", "backstop = 4"))
    result = ropewalk(desk, "build")
    assert result.exit_code == 3
    told = rf"^  TINB: 2 of its tables in {second} are damaged \(.*\); made again from the archive as published$"
    assert re.search(told, result.stdout, re.M), result.stdout
    assert f"; served as of {first}, to " in result.stdout
    folder = places.snapshot(newest(places))
    assert [(folder / name / "TINB.parquet").read_bytes() for name in names] == sound
    assert ropewalk(desk, "verify").exit_code == 0


def test_damaged_tables_of_a_market_held_back_that_other_code_made_are_dropped_until_it_is_well(
    desk: Path, places: Places, held: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    first, second = list_snapshots(places)
    overwrite(places.snapshot(second) / "series" / "TINB.parquet", b"")
    with monkeypatch.context() as patch:
        patch.setattr("catalog.mending.code_digest", lambda: "other")
        result = ropewalk(desk, "build")
    assert result.exit_code == 3
    assert re.search(
        r"^  held back: TINB: TINB_2024_06\.csv.* 5 rows of its version of intake 1 are missing .*; "
        rf"1 of its tables in {second} is damaged \(series/TINB\.parquet: seen 0 bytes; expected {BYTES}\) "
        rf"and cannot be made again \(other code made them in {first}\): nothing sound to serve; "
        "nothing of it is served$",
        result.stdout, re.M,
    ), result.stdout  # fmt: skip
    assert "\n  published: TINA\n" in result.stdout
    assert ask(places, "select distinct market from series") == [("TINA",)]
    assert ask(places, "select count(*) > 0 from findings where market = 'TINB'") == [(True,)]
    assert ropewalk(desk, "verify").exit_code == 0
    changes = ropewalk(desk, "changes")
    assert (changes.exit_code, "series/TINB.parquet" in changes.stderr) == (5, True)
    write_raw(desk, 91)
    again = ropewalk(desk, "build")
    assert (again.exit_code, "published: TINA, TINB\n" in again.stdout) == (0, True)
    assert ropewalk(desk, "verify", "--deep").exit_code == 0


# CURRENT and the newest manifest.


@pytest.mark.parametrize("content", [b"", b"\xff\xfe\x00"])
def test_a_damaged_current_is_5_and_repointing_mends_it(desk: Path, places: Places, content: bytes) -> None:
    name = newest(places)
    places.current.write_bytes(content)
    shown = ascii(content.decode("ascii", "replace").removesuffix("\n"))
    told = (
        f"{places.current}: seen {shown}; expected the name of a snapshot that is there (newest there: {name}); "
        "ropewalk verify --repoint --from N points to one"
    )
    for words in (("build",), ("sql", "from series limit 1"), ("verify", "--repoint")):
        result = ropewalk(desk, *words)
        assert (result.exit_code, told in result.stderr) == (5, True), result.output
    assert ropewalk(desk, "verify", "--from", "1").exit_code == 0
    assert ropewalk(desk, "verify", "--repoint", "--from", "1").exit_code == 0
    assert places.current.read_bytes() == f"{name}\n".encode()
    assert ropewalk(desk, "build").stdout == f"nothing new: snapshot {name} stands\n"


def test_from_a_damaged_newest_manifest_one_goes_back_and_the_next_night_goes_on(desk: Path, places: Places) -> None:
    write_raw(desk, 91, ("TINA",))
    assert ropewalk(desk, "build").exit_code == 0
    first, second = list_snapshots(places)
    overwrite(places.snapshot(second) / "manifest.json", b"{}")
    result = ropewalk(desk, "build")
    assert result.exit_code == 5
    assert "manifest.json: files: Field required; expected a manifest as published" in result.stderr
    assert ropewalk(desk, "verify", "--repoint", "--from", "1").exit_code == 0
    assert newest(places) == first
    assert ropewalk(desk, "build").exit_code == 0
    assert [int(name[:6]) for name in list_snapshots(places)] == [1, 2, 3]
    assert ask(places, "select max(session)::varchar from series where market = 'TINA'") == [("2024-03-06",)]
    assert ropewalk(desk, "verify").exit_code == 0


def test_no_snapshot_is_pointed_to_that_is_not_what_was_published(desk: Path, places: Places) -> None:
    name = newest(places)
    overwrite(places.snapshot(name) / "series" / "TINA.parquet", b"")
    places.current.write_bytes(b"")
    result = ropewalk(desk, "verify", "--repoint", "--from", "1")
    assert result.exit_code == 5
    assert f"{name}/series/TINA.parquet: seen 0 bytes; expected " in result.stderr
    assert "; it was not pointed to, choose another snapshot" in result.stderr
    assert places.current.read_bytes() == b""
    missing = ropewalk(desk, "verify", "--repoint", "--from", "7")
    assert (missing.exit_code, f"seen '7'; expected a snapshot that is there, by name or number (newest: {name})" in
            missing.stderr) == (2, True)  # fmt: skip


# After the switch, and words DuckDB has no name for.


def test_a_log_of_runs_that_cannot_be_written_does_not_unsay_the_snapshot(
    desk: Path, places: Places, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(*_: object) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr("catalog.night.record_run", full)
    write_raw(desk, 91, ("TINA",))
    result = ropewalk(desk, "build")
    assert (result.exit_code, result.stderr) == (0, "")
    lines = result.stdout.splitlines()
    assert lines[0].startswith(f"published snapshot {newest(places)}: 2 markets, ")
    assert f"  published, but the log of runs could not be written: No space left on device ({places.runs})" in lines
    assert ropewalk(desk, "verify").exit_code == 0


def test_a_lock_that_cannot_be_emptied_after_the_switch_is_no_failure(
    desk: Path, places: Places, monkeypatch: pytest.MonkeyPatch
) -> None:
    original, first = os.ftruncate, newest(places)
    failed = []

    def fail(opened: int, length: int) -> None:
        if os.path.samestat(os.fstat(opened), places.lock.stat()) and newest(places) != first:
            failed.append(opened)
            raise OSError(errno.EIO, os.strerror(errno.EIO))
        original(opened, length)

    write_raw(desk, 91, ("TINA",))
    with monkeypatch.context() as patch:
        patch.setattr(os, "ftruncate", fail)
        result = ropewalk(desk, "build")
    assert (result.exit_code, result.stderr, len(failed)) == (0, "", 1)
    assert newest(places).startswith("000002-")
    # Nobody holds it, whatever it says.
    assert ropewalk(desk, "build").exit_code == 0


@pytest.mark.parametrize("query", ["update extensions", "UPDATE EXTENSIONS (httpfs)"])
def test_a_statement_duckdb_has_no_name_for_is_2_and_says_what_is_expected(desk: Path, query: str) -> None:
    result = ropewalk(desk, "sql", query)
    assert result.exit_code == 2
    expected = "seen a statement of no known kind; expected one query that only reads, such as: from series limit 5"
    assert expected in result.stderr
    assert "Traceback" not in result.stderr


# A disk that keeps other bytes than it was given.


def test_every_write_of_a_night_is_read_back(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The n-th write of a night keeps a wrong last byte, for every n; the night then publishes nothing."""
    places, raw = Places(tmp_path / "store"), tmp_path / "raw"
    publish_small(places, raw)
    original, first = os.write, newest(places)
    lying, count, number = 1, 0, 0

    def write(opened: int, data: bytes) -> int:
        nonlocal count
        count += 1
        if count == lying:
            data = bytes(data)
            return original(opened, data[:-1] + bytes([data[-1] ^ 1]))
        return original(opened, data)

    monkeypatch.setattr(os, "write", write)
    while True:
        count, number = 0, number + 1
        # A new file each time, so that every night has one to archive.
        lay_raw(raw, text=f"night {number}\n".encode())
        try:
            work(places, raw)
        except StoreError as error:
            assert "what is read back differs from what was written; is the disk sound?" in str(error)
            assert newest(places) == first
            lying += 1
            continue
        break
    monkeypatch.setattr(os, "write", original)
    # An archived file, the register, two tables, the manifest, the hashes of the catalog, CURRENT.
    assert lying - 1 == 7
    with write_lock(places):
        assert read_manifest(places).parent == first
    assert verify_store(places).problems == ()
