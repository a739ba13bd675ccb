"""Named faults of disk, memory, clock and company, each with its exact outcome.

Where a fault has its test elsewhere it stands there: a failed fsync, a write that lies, leftovers and a switch
cut off in tests/catalog/test_store.py; a stale lock in test_places.py; a source folder gone and a file that
changes while it is read in test_archive.py; damaged manifest and CURRENT in test_verify.py; `prune` under a
reader in test_prune.py; SIGTERM in tests/flows/test_exits.py; a kill at any call in test_crash.py.
The small versions run every day, the large ones with ROPEWALK_LONG=1; pytest -s shows their counts.
"""

import json
import multiprocessing
import os
import random
import shutil
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from catalog.places import Places
from catalog.query import open_catalog, run_query
from catalog.standing import current_snapshot, list_snapshots
from catalog.verify import verify_store
from contracts.errors import StoreBusy
from tests.integration.tiny import run_night, write_desk, write_raw

ROOT = Path(__file__).resolve().parents[2]
IS_LONG = "ROPEWALK_LONG" in os.environ
ROUNDS = 25 if IS_LONG else 1
SWITCHES, QUERIES = (500, 10_000) if IS_LONG else (4, 40)
FLIPS = 10_000 if IS_LONG else 30

_FORK = multiprocessing.get_context("forkserver")
_FORK.set_forkserver_preload(["tests.integration.tiny", "catalog.night", "catalog.query", "duckdb", "pyarrow.parquet"])
MEGABYTES = [350, 600, 900, 1400] if IS_LONG else [900]


def tell(text: str) -> None:
    sys.stdout.write(f"{text}\n")


@pytest.fixture
def desk(tmp_path: Path) -> Path:
    desk = write_desk(tmp_path)
    write_raw(desk, 70)
    return desk


@pytest.fixture
def store(desk: Path) -> Path:
    run_night(desk, desk / "published")
    return desk / "published"


# Full and read-only disks, for which a mount of our own is made in a namespace of our own.


def can_mount() -> bool:
    if shutil.which("unshare") is None:
        return False
    tried = subprocess.run(["unshare", "-rm", "sh", "-c", "mount -t tmpfs none /mnt"], capture_output=True, check=False)
    return tried.returncode == 0


needs_mount = pytest.mark.skipif(not can_mount(), reason="no file system can be mounted here (unshare -rm)")


def in_mount(script: str, **names: Path) -> list[str]:
    """Lines a shell script prints, run where it may mount; `ropewalk` is the command line."""
    ropewalk = f'ropewalk() {{ "{sys.executable}" -m flows.commands "$@"; }}\n'
    told = subprocess.run(
        ["unshare", "-rm", "sh", "-c", ropewalk + script],
        capture_output=True, text=True, cwd=ROOT, check=False,
        env={**os.environ, "PYTHONPATH": str(ROOT), **{name: str(path) for name, path in names.items()}},
    )  # fmt: skip
    return (told.stdout + told.stderr).splitlines()


@needs_mount
def test_a_disk_that_is_full_is_4_and_what_was_published_is_still_read(desk: Path, tmp_path: Path) -> None:
    for folder in ("disk", "more"):
        (tmp_path / folder).mkdir()
    more = write_raw(write_desk(tmp_path / "more"), 71)
    lines = in_mount(
        """
        mount -t tmpfs -o size=60k none "$DISK"
        ropewalk build --desk "$DESK" --store "$DISK/store" >/dev/null; echo "too small: $?"
        mount -o remount,size=20m "$DISK"
        ropewalk build --desk "$DESK" --store "$DISK/store" >/dev/null; echo "large enough: $?"
        head -c 100m /dev/zero > "$DISK/filler" 2>/dev/null
        ropewalk build --desk "$DESK" --raw "$MORE" --store "$DISK/store" >/dev/null; echo "filled: $?"
        ropewalk sql "select count(*) as n, max(session)::varchar as d from series" --store "$DISK/store" --json; echo
        ropewalk verify --store "$DISK/store" >/dev/null; echo "verify: $?"
        rm "$DISK/filler"
        ropewalk build --desk "$DESK" --raw "$MORE" --store "$DISK/store" >/dev/null; echo "room again: $?"
        ropewalk verify --store "$DISK/store" >/dev/null; echo "verify: $?"
        """,
        DISK=tmp_path / "disk", DESK=desk, MORE=more,
    )  # fmt: skip
    codes = [line for line in lines if line[-1:].isdigit() and ": " in line and "No space" not in line]
    assert codes == ["too small: 4", "large enough: 0", "filled: 4", "verify: 0", "room again: 0", "verify: 0"], lines
    assert sum("No space left on device" in line for line in lines) == 2, lines
    (answer,) = [json.loads(line) for line in lines if line.startswith("{")]
    assert answer["rows"] == [[140, "2024-02-06"]]


@needs_mount
def test_a_store_on_a_read_only_disk_is_4_and_can_be_read_and_verified(store: Path, desk: Path) -> None:
    write_raw(desk, 71)
    lines = in_mount(
        """
        mount --bind "$STORE" "$STORE"; mount -o remount,ro,bind "$STORE"
        ropewalk build --desk "$DESK" >/dev/null; echo "build: $?"
        ropewalk sql "select count(*) from series" --desk "$DESK" >/dev/null; echo "sql: $?"
        ropewalk trace TINA 2024-01-23 --desk "$DESK" >/dev/null; echo "trace: $?"
        ropewalk verify --desk "$DESK" >/dev/null; echo "verify: $?"
        ropewalk verify --deep --store "$STORE" >/dev/null; echo "deep: $?"
        """,
        STORE=store, DESK=desk,
    )  # fmt: skip
    assert [line for line in lines if ": " in line and line[-1].isdigit()] == [
        "build: 4", "sql: 0", "trace: 0", "verify: 0", "deep: 0",
    ], lines  # fmt: skip
    assert any("Read-only file system" in line for line in lines)


# Several at once.


def one_writer(desk: str, store: str, gate: Any, answers: Any) -> None:
    gate.wait()
    try:
        summary = run_night(Path(desk), Path(store))
        answers.put("nothing new" if summary.nothing_new else "published")
    except StoreBusy as error:
        answers.put("busy" if "is being written by process" in str(error) else str(error))
    except BaseException as error:
        answers.put(f"wrong: {error!r}")


def test_of_eight_writers_one_publishes_and_no_number_is_lost(desk: Path, store: Path) -> None:
    """The others are told who holds the store, or come after it and find nothing new."""
    for turn in range(ROUNDS):
        write_raw(desk, 71 + turn % 30)
        gate, answers = _FORK.Barrier(8), _FORK.Queue()
        writers = [_FORK.Process(target=one_writer, args=(str(desk), str(store), gate, answers)) for _ in range(8)]
        for writer in writers:
            writer.start()
        told = sorted(answers.get(timeout=120) for _ in writers)
        for writer in writers:
            writer.join()
        assert told.count("published") == 1, told
        assert set(told) <= {"published", "busy", "nothing new"}, told
    places = Places(store)
    assert [int(name[:6]) for name in list_snapshots(places)] == list(range(1, ROUNDS + 2))
    assert verify_store(places).problems == ()
    tell(f"8 writers x {ROUNDS} runs: {ROUNDS} published, numbers 1 to {ROUNDS + 1}")


COUNTED = "select (select name from snapshot), count(*), sum(settle), count(distinct market) from series"


def one_reader(store: str, allowed: dict[str, list[Any]], stop: Any, answers: Any) -> None:
    """Ask again and again until told to stop; anything but a whole snapshot is wrong."""
    asked, wrong = 0, []
    while not stop.is_set():
        try:
            with open_catalog(Places(Path(store))) as connection:
                for _ in range(5):
                    (row,) = run_query(connection, COUNTED)[1]
                    asked += 1
                    # Even and odd nights differ in one restated settle.
                    if list(row[1:]) != allowed[str(int(row[0][:6]) % 2)]:
                        wrong.append(row)
        except Exception as error:
            wrong.append(repr(error))
    answers.put((asked, wrong[:3]))


def test_readers_across_switches_see_one_whole_snapshot_each_time(desk: Path, store: Path) -> None:
    """None mixed, none short, none failed."""
    raw = desk / "raw" / "TINA_2024_03.csv"
    texts = [raw.read_text(), raw.read_text().replace("200.00,865,1000", "200.25,865,1000")]
    assert texts[0] != texts[1]
    allowed = {}
    places = Places(store)
    for number in (1, 0):
        # The first night was the odd one.
        with open_catalog(places) as connection:
            (row,) = run_query(connection, COUNTED)[1]
        allowed[str(int(row[0][:6]) % 2)] = list(row[1:])
        raw.write_text(texts[number])
        run_night(desk, store)
    assert allowed["0"] != allowed["1"]
    stop, answers = _FORK.Event(), _FORK.Queue()
    readers = [_FORK.Process(target=one_reader, args=(str(store), allowed, stop, answers)) for _ in range(4)]
    for reader in readers:
        reader.start()
    for switch in range(SWITCHES):
        raw.write_text(texts[(switch + 1) % 2])
        run_night(desk, store)
    stop.set()
    told = [answers.get(timeout=120) for _ in readers]
    for reader in readers:
        reader.join()
    assert [wrong for _, wrong in told if wrong] == []
    asked = sum(count for count, _ in told)
    tell(f"4 readers, {SWITCHES} switches, {asked:,} queries: none mixed, none short, none failed")
    assert asked >= QUERIES


# Damage.


def test_a_flipped_bit_in_any_kind_of_file_is_found(store: Path) -> None:
    places = Places(store)
    snapshot = places.snapshot(str(current_snapshot(places)))
    kinds: dict[str, list[Path]] = {
        folder.name: sorted(folder.glob("*.parquet")) for folder in sorted(snapshot.iterdir()) if folder.is_dir()
    }
    kinds |= {
        "manifest": [snapshot / "manifest.json"], "CURRENT": [places.current], "catalog": [places.catalog],
        "catalog hashes": [places.catalog_hashes], "register": [places.register],
        "archive": sorted(places.archive.glob("??/*.zst")),
    }  # fmt: skip
    assert len(kinds) == 15
    chance = random.Random(7)
    for count in range(FLIPS):
        kind = [*kinds][count % len(kinds)]
        path = chance.choice(kinds[kind])
        sound = path.read_bytes()
        mode = path.stat().st_mode
        damaged = bytearray(sound)
        at = chance.randrange(len(damaged))
        damaged[at] ^= 1 << chance.randrange(8)
        path.chmod(0o644)
        path.write_bytes(damaged)
        assert verify_store(places).problems, f"{kind}: byte {at} of {path} flipped and not found"
        path.write_bytes(sound)
        path.chmod(mode)
    assert verify_store(places).problems == ()
    tell(f"{FLIPS:,} flips in {len(kinds)} kinds of file, all found")


@pytest.mark.parametrize(
    ("damage", "told"),
    [
        (lambda path: path.write_bytes(b""), "seen 0 bytes"),
        (lambda path: path.write_bytes(path.read_bytes()[:-200]), "expected"),
        (lambda path: path.unlink(), "cannot be read: No such file"),
    ],
    ids=["empty", "cut short", "gone"],
)
def test_a_damaged_table_is_named_and_the_next_night_publishes_around_it(
    desk: Path, store: Path, damage: Callable[[Path], object], told: str
) -> None:
    places = Places(store)
    path = places.snapshot(str(current_snapshot(places))) / "series" / "TINA.parquet"
    path.chmod(0o644)
    damage(path)
    assert any("series/TINA.parquet" in problem and told in problem for problem in verify_store(places).problems)
    write_raw(desk, 71)
    run_night(desk, store)
    assert verify_store(places).problems == ()


# Clock and memory.


def test_a_clock_set_back_a_day_changes_no_number_and_no_order(
    desk: Path, store: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    import catalog.night

    monkeypatch.setattr(catalog.night, "_now", lambda: "2001-01-01T00:00:00+00:00")
    write_raw(desk, 71)
    summary = run_night(desk, store)
    places = Places(store)
    assert summary.current == current_snapshot(places)
    assert [int(name[:6]) for name in list_snapshots(places)] == [1, 2]
    assert verify_store(places).problems == ()
    with open_catalog(places) as connection:
        assert run_query(connection, "select max(session)::varchar from series")[1] == [("2024-02-07",)]


@pytest.mark.parametrize("megabytes", MEGABYTES)
def test_too_little_memory_publishes_whole_or_not_at_all(desk: Path, store: Path, megabytes: int) -> None:
    """Refused with code 4, or ended by the system; never a half snapshot, and the next night is clean."""
    write_raw(desk, 71)
    limited = (
        f"import resource; resource.setrlimit(resource.RLIMIT_AS, ({megabytes << 20}, {megabytes << 20}));"
        "import sys; from flows.commands import main; main(sys.argv[1:])"
    )
    run = subprocess.run(
        [sys.executable, "-c", limited, "build", "--desk", str(desk)],
        capture_output=True, text=True, cwd=ROOT, env={**os.environ, "PYTHONPATH": str(ROOT)}, check=False,
    )  # fmt: skip
    places = Places(store)
    tell(f"{megabytes} MiB of address space: code {run.returncode}: {run.stderr.strip()[-300:]}")
    assert run.returncode in (0, 4) or run.returncode < 0, run.stderr
    assert verify_store(places).problems == ()
    run_night(desk, store)
    assert verify_store(places).problems == ()
    assert [path.name for path in places.snapshots.glob(".*")] == []
