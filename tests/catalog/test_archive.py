"""What arrives is kept for ever, whole, once, and nothing from outside is trusted."""

import hashlib
import io
import json
import os
import zipfile
from pathlib import Path

import pytest

import catalog.archive
from catalog.archive import Arrival, Problem, read_archived, read_register, take_in
from catalog.places import Places
from contracts.errors import StoreError, StoreUnsound


def sha(data: bytes) -> str:
    return hashlib.sha256(data).hexdigest()


@pytest.fixture(autouse=True)
def _settled(monkeypatch: pytest.MonkeyPatch) -> None:
    # A change of a file's times cannot be dated back, so that files of a test would never count as settled.
    monkeypatch.setattr(catalog.archive, "_STEADY_NS", 0)


def count_reads(monkeypatch: pytest.MonkeyPatch) -> list[str]:
    read = []
    original = catalog.archive._read_steady

    def counting(root: int, path: str) -> tuple[bytes, os.stat_result]:
        read.append(path)
        return original(root, path)

    monkeypatch.setattr(catalog.archive, "_read_steady", counting)
    return read


def test_every_new_file_is_kept_and_registered_in_order_of_path(places: Places, raw: Path) -> None:
    (raw / "soft").mkdir(parents=True)
    (raw / "soft" / "b.csv").write_bytes(b"second")
    (raw / "a.csv").write_bytes(b"first")
    intake = take_in(raw, places)
    assert (intake.number, intake.new, intake.problems) == (1, 2, ())
    assert intake.arrivals == (
        Arrival(1, "a.csv", sha(b"first"), 5),
        Arrival(1, "soft/b.csv", sha(b"second"), 6),
    )
    assert read_register(places) == intake.arrivals
    assert read_archived(places, sha(b"second")) == b"second"
    assert places.archived(sha(b"first")) == places.archive / sha(b"first")[:2] / f"{sha(b'first')}.zst"


def test_a_night_without_anything_new_registers_and_reads_nothing(
    places: Places, raw: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first")
    first = take_in(raw, places)
    before = places.register.read_bytes()
    read = count_reads(monkeypatch)
    second = take_in(raw, places)
    assert (second.number, second.new, second.arrivals) == (1, 0, first.arrivals)
    assert read == []
    assert places.register.read_bytes() == before


def test_only_a_changed_file_is_read_and_its_new_version_comes_after_the_old(
    places: Places, raw: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first")
    (raw / "b.csv").write_bytes(b"other")
    take_in(raw, places)
    (raw / "a.csv").write_bytes(b"first and more")
    read = count_reads(monkeypatch)
    intake = take_in(raw, places)
    assert read == ["a.csv"]
    assert intake.arrivals[2:] == (Arrival(2, "a.csv", sha(b"first and more"), 14),)
    assert read_archived(places, sha(b"first")) == b"first"


def test_a_change_that_keeps_size_and_time_is_noticed(places: Places, raw: Path) -> None:
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first")
    status = (raw / "a.csv").stat()
    take_in(raw, places)
    (raw / "a.csv").write_bytes(b"FIRST")
    os.utime(raw / "a.csv", ns=(status.st_atime_ns, status.st_mtime_ns))
    assert take_in(raw, places).arrivals[1] == Arrival(2, "a.csv", sha(b"FIRST"), 5)


def test_a_file_written_moments_ago_is_read_again_next_time(
    places: Places, raw: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Within one tick of the clock a second write would leave size and times as they were."""
    monkeypatch.setattr(catalog.archive, "_STEADY_NS", 2_000_000_000)
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first")
    take_in(raw, places)
    read = count_reads(monkeypatch)
    assert take_in(raw, places).new == 0
    assert read == ["a.csv"]


def test_a_file_that_goes_back_to_an_older_version_arrives_again(places: Places, raw: Path) -> None:
    raw.mkdir()
    for text in (b"old", b"newer", b"old"):
        (raw / "a.csv").write_bytes(text)
        intake = take_in(raw, places)
    assert [(arrival.taken_in, arrival.file) for arrival in intake.arrivals] == [
        (1, sha(b"old")), (2, sha(b"newer")), (3, sha(b"old")),
    ]  # fmt: skip


def test_the_same_bytes_under_two_paths_are_kept_once(places: Places, raw: Path) -> None:
    raw.mkdir()
    for name in ("a.csv", "b.csv", "c.csv"):
        (raw / name).write_bytes(b"same")
    assert take_in(raw, places).new == 3
    assert len(list(places.archive.glob("??/*"))) == 1


def test_without_a_raw_folder_the_archive_alone_is_used(places: Places, raw: Path) -> None:
    missing = take_in(raw, places)
    assert missing.number == 0
    assert missing.problems == (
        Problem(".", f"the raw folder {raw} cannot be read: No such file or directory; the archive alone is used"),
    )
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first")
    arrivals = take_in(raw, places).arrivals
    (raw / "a.csv").unlink()
    empty = take_in(raw, places)
    assert empty.arrivals == arrivals
    assert empty.problems == (
        Problem(".", f"the raw folder {raw} holds no file to take in; the archive alone is used"),
    )


def test_what_is_no_regular_file_of_a_plain_name_is_a_problem_and_is_not_read(places: Places, raw: Path) -> None:
    raw.mkdir()
    (raw / "secret").write_bytes(b"secret")
    (raw / "link.csv").symlink_to(raw / "secret")
    (raw / "folder").symlink_to("/")
    os.mkfifo(raw / "pipe.csv")
    (raw / "it's.csv").write_bytes(b"quote")
    (raw / ".hidden").write_bytes(b"hidden")
    (raw / "two\nlines.csv").write_bytes(b"lines")
    (raw / "a..b.csv").write_bytes(b"dots")
    with open(os.fsencode(raw) + b"/\xff.csv", "wb") as file:
        file.write(b"bytes")
    intake = take_in(raw, places)
    assert [arrival.path for arrival in intake.arrivals] == ["secret"]
    name = "its name is not plain: expected letters, digits and . _ - + @ = , & ( ) ~ and inner spaces"
    assert intake.problems == (
        Problem(".hidden", name),
        Problem("\\udcff.csv", name),
        Problem("a..b.csv", name),
        Problem("folder", "is a link; expected a regular file or a folder"),
        Problem("it's.csv", name),
        Problem("link.csv", "is a link; expected a regular file or a folder"),
        Problem("pipe.csv", "is neither a regular file nor a folder"),
        Problem("two\\nlines.csv", name),
    )
    assert take_in(raw, places).problems == intake.problems


def test_a_link_put_in_since_the_walk_is_not_followed(
    places: Places, raw: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (raw / "in").mkdir(parents=True)
    (raw / "in" / "a.csv").write_bytes(b"first")
    (tmp_path / "elsewhere").mkdir()
    (tmp_path / "elsewhere" / "a.csv").write_bytes(b"secret")
    original = catalog.archive._keep_files

    def swapping(*arguments: object) -> object:
        (raw / "in").rename(raw / "was")
        (raw / "in").symlink_to(tmp_path / "elsewhere")
        return original(*arguments)  # type: ignore[arg-type]

    monkeypatch.setattr(catalog.archive, "_keep_files", swapping)
    intake = take_in(raw, places)
    assert intake.arrivals == ()
    assert intake.problems == (Problem("in/a.csv", "cannot be read: Not a directory; it is left for the next night"),)


def test_a_store_within_the_raw_folder_is_not_taken_in(raw: Path) -> None:
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first")
    places = Places(raw / "published")
    for _ in range(2):
        intake = take_in(raw, places)
        assert [arrival.path for arrival in intake.arrivals] == ["a.csv"]
        assert intake.problems == (Problem("published", "the store itself lies in the raw folder; it was not entered"),)


def test_a_file_larger_than_can_be_read_is_a_problem(
    places: Places, raw: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(catalog.archive, "_LARGEST_FILE", 4)
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first")
    intake = take_in(raw, places)
    assert intake.problems[1:] == (Problem("a.csv", "seen 5 bytes; expected at most 4"),)
    assert intake.arrivals == ()


def make_zip(members: dict[str, bytes]) -> bytes:
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as file:
        for name, data in members.items():
            file.writestr(zipfile.ZipInfo(name, (2024, 1, 8, 0, 0, 0)), data)
    return buffer.getvalue()


def test_members_of_a_zip_arrive_beside_it(places: Places, raw: Path) -> None:
    raw.mkdir()
    packed = make_zip({"b.csv": b"second", "in/a.csv": b"first"})
    (raw / "X.zip").write_bytes(packed)
    intake = take_in(raw, places)
    assert intake.arrivals == (
        Arrival(1, "X.zip", sha(packed), len(packed), container=True),
        Arrival(1, "X.zip/b.csv", sha(b"second"), 6),
        Arrival(1, "X.zip/in/a.csv", sha(b"first"), 5),
    )
    assert read_archived(places, sha(packed)) == packed
    more = make_zip({"b.csv": b"second", "in/a.csv": b"first!"})
    (raw / "X.zip").write_bytes(more)
    assert [arrival.path for arrival in take_in(raw, places).arrivals[3:]] == ["X.zip", "X.zip/in/a.csv"]


def test_a_member_that_would_lie_elsewhere_is_a_problem_every_night(places: Places, raw: Path) -> None:
    raw.mkdir()
    inner = make_zip({"a.csv": b"a"})
    packed = make_zip({"../up.csv": b"up", "/root.csv": b"root", "in.zip": inner, "ok.csv": b"ok"})
    (raw / "X.zip").write_bytes(packed)
    for _ in range(2):
        intake = take_in(raw, places)
        assert [arrival.path for arrival in intake.arrivals] == ["X.zip", "X.zip/ok.csv"]
        assert intake.problems == (
            Problem("X.zip/../up.csv", "a member whose name is not plain; it was not taken out"),
            Problem("X.zip//root.csv", "a member whose name is not plain; it was not taken out"),
            Problem("X.zip/in.zip", "a .zip within a .zip; it was not opened"),
        )


def test_a_zip_that_cannot_be_opened_is_kept_and_is_a_problem_every_night(places: Places, raw: Path) -> None:
    raw.mkdir()
    (raw / "X.zip").write_bytes(b"PK but torn")
    for _ in range(2):
        intake = take_in(raw, places)
        assert intake.arrivals == (Arrival(1, "X.zip", sha(b"PK but torn"), 11, container=True),)
        (problem,) = intake.problems
        assert problem.path == "X.zip"
        assert "cannot be unpacked as zip" in problem.reason


def test_a_file_that_keeps_changing_is_left_for_the_next_night(
    places: Places, raw: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first")
    (raw / "b.csv").write_bytes(b"other")
    attempts = []
    original = catalog.archive._read_up_to

    def growing(file: io.FileIO, most: int) -> bytes:
        data = original(file, most)
        if data.startswith(b"first"):
            attempts.append(data)
            with (raw / "a.csv").open("ab") as writer:
                writer.write(b"!")
        return data

    monkeypatch.setattr(catalog.archive, "_read_up_to", growing)
    intake = take_in(raw, places)
    assert attempts == [b"first", b"first!"]
    assert [arrival.path for arrival in intake.arrivals] == ["b.csv"]
    assert intake.problems == (Problem("a.csv", "changed twice while it was read; it is left for the next night"),)
    monkeypatch.undo()
    assert take_in(raw, places).arrivals[1] == Arrival(2, "a.csv", sha(b"first!!"), 7)


def test_a_file_that_changed_once_while_it_was_read_is_read_again(
    places: Places, raw: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first")
    attempts = []
    original = catalog.archive._read_up_to

    def growing(file: io.FileIO, most: int) -> bytes:
        data = original(file, most)
        attempts.append(data)
        if len(attempts) == 1:
            (raw / "a.csv").write_bytes(b"second")
        return data

    monkeypatch.setattr(catalog.archive, "_read_up_to", growing)
    assert take_in(raw, places).arrivals == (Arrival(1, "a.csv", sha(b"second"), 6),)


def test_an_intake_that_was_cut_off_does_not_count_and_is_written_over(places: Places, raw: Path) -> None:
    """Two of three lines of the second intake reached the disk, the second one torn."""
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first")
    first = take_in(raw, places)
    whole = places.register.read_bytes()
    for name in ("b.csv", "c.csv", "d.csv"):
        (raw / name).write_bytes(name.encode())
    second = take_in(raw, places)
    complete = places.register.read_bytes()
    lines = complete[len(whole) :].splitlines(keepends=True)
    for torn in (lines[0][:20], lines[0], lines[0] + lines[1][:-1], lines[0] + lines[1]):
        places.register.write_bytes(whole + torn)
        assert read_register(places) == first.arrivals
        again = take_in(raw, places)
        assert again == second
        assert places.register.read_bytes() == complete


def test_a_damaged_line_of_the_register_is_named(places: Places, raw: Path) -> None:
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first")
    (raw / "b.csv").write_bytes(b"other")
    take_in(raw, places)
    lines = places.register.read_bytes().splitlines(keepends=True)
    places.register.write_bytes(lines[0][:10] + b"\x00\x00" + lines[0][12:] + lines[1])
    with pytest.raises(StoreUnsound, match=r"register\.jsonl:1: seen '.*'; expected one arrival as a JSON object"):
        take_in(raw, places)
    record = json.loads(lines[1])
    places.register.write_bytes(lines[0] + json.dumps({**record, "file": "../../etc"}).encode() + b"\n")
    with pytest.raises(StoreUnsound, match=r"register\.jsonl:2: "):
        read_register(places)


def test_a_damaged_memory_costs_time_and_nothing_else(
    places: Places, raw: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first")
    first = take_in(raw, places)
    read = count_reads(monkeypatch)
    for text in (b"", b"{", b'{"format": 1, "files": []}', b'{"format": 1, "files": {"a.csv": [1]}}', b"[1]"):
        (places.intake / "seen.json").write_bytes(text)
        assert take_in(raw, places).arrivals == first.arrivals
    assert read == ["a.csv"] * 5


@pytest.mark.parametrize("damage", ["flip", "cut", "empty", "gone", "other"])
def test_damage_to_the_archive_is_noticed_and_mended_from_the_raw_folder(
    places: Places, raw: Path, damage: str
) -> None:
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first " * 100)
    (raw / "b.csv").write_bytes(b"other")
    digest = sha(b"first " * 100)
    take_in(raw, places)
    path = places.archived(digest)
    packed = bytearray(path.read_bytes())
    packed[len(packed) // 2] ^= 1
    broken = {
        "flip": bytes(packed),
        "cut": bytes(packed[:-4]),
        "empty": b"",
        "other": places.archived(sha(b"other")).read_bytes(),
    }
    path.unlink()
    if damage != "gone":
        path.write_bytes(broken[damage])
    with pytest.raises(StoreUnsound, match=digest):
        read_archived(places, digest)
    assert take_in(raw, places, rehash=True).new == 0
    assert read_archived(places, digest) == b"first " * 100


def test_only_a_hash_names_an_archived_file(places: Places) -> None:
    for name in ("../../etc/passwd", "", "A" * 64, "a" * 63):
        with pytest.raises(StoreUnsound, match="64 hexadecimal digits"):
            read_archived(places, name)


def test_an_archive_that_cannot_be_forced_to_the_disk_registers_nothing(
    places: Places, raw: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first")

    def fail(opened: int) -> None:
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr(os, "fsync", fail)
        with pytest.raises(StoreError, match=r"a\.csv could not be archived: No space left on device"):
            take_in(raw, places)
    assert read_register(places) == ()
    assert list(places.archive.glob("??/*")) == list(places.archive.glob("??/.*")) == []
    assert take_in(raw, places).new == 1


def test_parts_of_a_stopped_intake_are_swept(places: Places, raw: Path) -> None:
    raw.mkdir()
    (raw / "a.csv").write_bytes(b"first")
    take_in(raw, places)
    part = places.archived(sha(b"first")).parent / f".{'0' * 64}-1.part"
    part.write_bytes(b"half")
    places.arriving.touch()
    take_in(raw, places)
    assert not part.exists()
    assert not places.arriving.exists()
    assert read_archived(places, sha(b"first")) == b"first"
