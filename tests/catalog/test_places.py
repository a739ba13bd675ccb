"""Where things are in a store, who may write it, and how a file gets into it."""

import fcntl
import os
import signal
import subprocess
import sys
import textwrap
import threading
import time
from pathlib import Path

import pytest

from catalog.places import (
    Places,
    hash_file,
    prepare_part,
    sequence_of,
    table_path,
    write_lock,
    write_new,
    write_whole,
)
from contracts.errors import StoreBusy, StoreError


def test_a_store_path_is_absolute_and_free_of_links(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "real").mkdir()
    (tmp_path / "link").symlink_to(tmp_path / "real")
    monkeypatch.chdir(tmp_path)
    assert Places(Path("link/store")).store == tmp_path / "real" / "store"


@pytest.mark.parametrize("name", ["a*b", "a?b", "a[1]", "line\nbreak"])
def test_a_store_path_that_would_stand_for_other_paths_is_refused(tmp_path: Path, name: str) -> None:
    with pytest.raises(StoreError, match="choose another folder"):
        Places(tmp_path / name)


def test_a_table_of_a_market_and_of_the_whole_desk_have_their_paths() -> None:
    assert table_path("series", "NWHT") == "series/NWHT.parquet"
    assert table_path("coverage", None) == table_path("coverage", "_desk") == "coverage/_desk.parquet"


@pytest.mark.parametrize(
    "table, market", [("series", "../NWHT"), ("series", "nwht"), ("series", "N" * 13), ("../a", "N")]
)
def test_a_name_no_path_may_be_made_of_is_refused(table: str, market: str) -> None:
    with pytest.raises(StoreError, match="expected"):
        table_path(table, market)


def test_a_snapshot_has_a_number_and_a_hash(places: Places) -> None:
    assert sequence_of("000042-0123456789ab") == 42
    assert sequence_of("1000000-0123456789ab") == 1_000_000
    assert [sequence_of(name) for name in ("42-0123456789ab", ".staging-1", "000042-xyz", "000042-0123456789ab\n")] == [
        None
    ] * 4
    with pytest.raises(StoreError, match="expected the name of a snapshot"):
        places.snapshot("../elsewhere")


def test_a_new_file_never_replaces_one(tmp_path: Path) -> None:
    write_new(tmp_path / "file", b"first")
    with pytest.raises(FileExistsError):
        write_new(tmp_path / "file", b"second")
    assert (tmp_path / "file").read_bytes() == b"first"


def test_a_file_that_cannot_be_forced_to_the_disk_is_gone_and_not_tried_again(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    calls = []

    def fail(opened: int) -> None:
        calls.append(opened)
        raise OSError(5, "Input/output error")

    (tmp_path / "file").write_bytes(b"before")
    monkeypatch.setattr(os, "fsync", fail)
    with pytest.raises(OSError, match="Input/output error"):
        write_whole(tmp_path / "file", b"after")
    assert len(calls) == 1
    assert [path.name for path in tmp_path.iterdir()] == ["file"]
    assert (tmp_path / "file").read_bytes() == b"before"


def test_a_part_left_by_a_dead_run_is_no_obstacle(tmp_path: Path) -> None:
    part = prepare_part(tmp_path / "file")
    part.write_bytes(b"half of")
    write_whole(tmp_path / "file", b"whole")
    assert [path.name for path in tmp_path.iterdir()] == ["file"]
    assert (tmp_path / "file").read_bytes() == b"whole"


def test_hashing_follows_no_link_and_waits_for_no_pipe(tmp_path: Path) -> None:
    (tmp_path / "file").write_bytes(b"")
    empty = "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855"
    assert hash_file(tmp_path / "file") == (0, empty)
    (tmp_path / "link").symlink_to("file")
    os.mkfifo(tmp_path / "pipe")
    for name in ("link", "pipe", "gone"):
        with pytest.raises(OSError):
            hash_file(tmp_path / name)


def _start(store: Path, body: str) -> subprocess.Popen[str]:
    """Another process that holds the store's lock; it prints a line once it does."""
    script = f"""
    import os, sys, time
    from pathlib import Path
    from catalog.places import Places, write_lock
    with write_lock(Places(Path({str(store)!r}))):
        {body}
        print("held", flush=True)
        time.sleep(60)
    """
    root = Path(__file__).parents[2]
    process = subprocess.Popen(
        [sys.executable, "-c", textwrap.dedent(script)], stdout=subprocess.PIPE, text=True, cwd=root,
        env={**os.environ, "PYTHONPATH": str(root)},
    )  # fmt: skip
    assert process.stdout is not None
    assert process.stdout.readline() == "held\n"
    return process


def test_a_second_writer_is_refused_and_told_who_holds_the_store(places: Places) -> None:
    process = _start(places.store, "pass")
    try:
        with (
            pytest.raises(StoreBusy, match=rf"is being written by process {process.pid} on .+ since \d{{4}}-"),
            write_lock(places),
        ):
            pass
    finally:
        process.kill()
        process.communicate()


def test_a_second_writer_in_the_same_process_is_refused(places: Places) -> None:
    with write_lock(places), pytest.raises(StoreBusy, match=f"process {os.getpid()}"), write_lock(places):
        pass
    with write_lock(places):
        pass


def test_the_lock_of_a_killed_process_is_no_obstacle(places: Places) -> None:
    process = _start(places.store, "pass")
    process.send_signal(signal.SIGKILL)
    process.communicate()
    assert f'"pid": {process.pid}' in places.lock.read_text()
    with write_lock(places):
        assert f'"pid": {os.getpid()}' in places.lock.read_text()
    assert places.lock.read_text() == ""


def test_a_worker_that_outlives_its_killed_parent_does_not_hold_the_lock(places: Places, tmp_path: Path) -> None:
    """The forked child keeps running and would share the parent's lock if it kept its file open."""
    note = tmp_path / "child"
    body = (
        "child = os.fork()\n"
        "        if child == 0:\n"
        "            os.close(1); time.sleep(60); os._exit(0)\n"
        f"        Path({str(note)!r}).write_text(str(child))"
    )
    process = _start(places.store, body)
    process.send_signal(signal.SIGKILL)
    process.communicate()
    child = int(note.read_text())
    os.kill(child, 0)
    try:
        for _ in range(50):
            try:
                with write_lock(places):
                    break
            except StoreBusy:
                time.sleep(0.1)
        else:
            pytest.fail("the orphan holds the lock")
    finally:
        os.kill(child, signal.SIGKILL)


def test_a_lock_file_that_says_nonsense_is_told_as_it_is(places: Places) -> None:
    with write_lock(places):
        places.lock.write_bytes(b"\xff\x00 not json")
        with pytest.raises(StoreBusy, match="by another process"), write_lock(places):
            pass


def test_a_store_that_is_a_file_is_an_error_in_words(tmp_path: Path) -> None:
    (tmp_path / "store").write_text("")
    with (
        pytest.raises(StoreError, match="cannot be written: File exists"),
        write_lock(Places(tmp_path / "store")),
    ):
        pass


def test_a_lock_that_is_a_link_is_refused(places: Places, tmp_path: Path) -> None:
    places.store.mkdir()
    (tmp_path / "precious").write_text("precious")
    places.lock.symlink_to(tmp_path / "precious")
    with pytest.raises(StoreError, match="cannot be written"), write_lock(places):
        pass
    assert (tmp_path / "precious").read_text() == "precious"


def test_the_name_of_a_holder_that_has_just_come_is_waited_for(places: Places) -> None:
    """Between taking the lock and writing who took it nobody is named there."""
    with write_lock(places):
        named = places.lock.read_bytes()
        places.lock.write_bytes(b"")
        later = threading.Timer(0.2, places.lock.write_bytes, [named])
        later.start()
        with pytest.raises(StoreBusy, match=f"by process {os.getpid()} on "), write_lock(places):
            pytest.fail("two writers hold the store")
        later.join()


def test_a_holder_that_goes_while_its_name_is_waited_for_is_followed(places: Places) -> None:
    places.store.mkdir(exist_ok=True)
    opened = os.open(places.lock, os.O_RDWR | os.O_CREAT)
    fcntl.flock(opened, fcntl.LOCK_EX)
    later = threading.Timer(0.2, os.close, [opened])
    later.start()
    with write_lock(places):
        assert str(os.getpid()) in places.lock.read_text()
    later.join()
