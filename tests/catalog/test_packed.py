"""Whatever bit or end of an archived file is lost, it is noticed, and every reader of zstd can read it."""

import hashlib
import random
import shutil
import subprocess
from pathlib import Path

import duckdb
import pyarrow as pa
import pytest

from catalog.packed import expand, pack

LINES = b"session,settle\n" + b"".join(b"2024-01-%02d,%d.25\n" % (day, 200 + day) for day in range(1, 29))
NOISE = random.Random(3).randbytes(300)
TEXTS = {"empty": b"", "one byte": b"7", "lines": LINES, "noise": NOISE, "one byte repeated": b"0" * 400_000}


def sha(data: bytes) -> str:
    return hashlib.sha256(data).hexdigest()


def is_taken(packed: bytes, data: bytes) -> bool:
    try:
        return expand(packed, sha(data)) == data
    except ValueError:
        return False


@pytest.mark.parametrize("name", TEXTS)
def test_what_is_packed_expands_to_itself(name: str) -> None:
    assert expand(pack(TEXTS[name]), sha(TEXTS[name])) == TEXTS[name]


@pytest.mark.parametrize("name", TEXTS)
def test_no_bit_of_a_packed_file_can_flip_unseen(name: str) -> None:
    packed = pack(TEXTS[name])
    unseen = []
    for at in range(len(packed)):
        for bit in range(8):
            flipped = packed[:at] + bytes([packed[at] ^ 1 << bit]) + packed[at + 1 :]
            if is_taken(flipped, TEXTS[name]):
                unseen.append((at, bit))
    assert unseen == []


def test_without_a_seal_a_bit_of_the_header_can_flip_unseen() -> None:
    """Why there is one: bit 4 of the frame's first header byte is unused."""
    packed = pack(LINES)[:-40]
    assert expand(packed, sha(LINES)) == LINES
    unseen = [bit for bit in range(8) if is_taken(packed[:4] + bytes([packed[4] ^ 1 << bit]) + packed[5:], LINES)]
    assert unseen == [4]


@pytest.mark.parametrize("name", TEXTS)
def test_a_packed_file_cut_short_is_noticed_at_every_length_but_that_of_an_older_file(name: str) -> None:
    """Files of before there were seals end with the frame, and stay valid."""
    packed = pack(TEXTS[name])
    taken = [length for length in range(len(packed)) if is_taken(packed[:length], TEXTS[name])]
    assert taken == [len(packed) - 40]


@pytest.mark.parametrize("more", [b"\0", b"more", pack(b""), b"\x50\x2a\x4d\x18\x00\x00\x00\x00"])
def test_what_follows_a_packed_file_is_noticed(more: bytes) -> None:
    for packed in (pack(LINES), pack(LINES)[:-40]):
        assert not is_taken(packed + more, LINES)


def test_a_seal_of_other_bytes_is_told(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match=r"^seen damaged bytes \(their seal is of others\)$"):
        expand(pack(LINES)[:-40] + pack(NOISE)[-40:], sha(LINES))
    with pytest.raises(ValueError, match=f"^seen bytes with SHA-256 {sha(NOISE)}$"):
        expand(pack(NOISE), sha(LINES))


def test_other_readers_of_zstd_pass_over_the_seal(tmp_path: Path) -> None:
    path = tmp_path / "a.csv.zst"
    path.write_bytes(pack(LINES))
    assert pa.CompressedInputStream(pa.OSFile(str(path)), "zstd").read() == LINES
    rows = duckdb.sql(f"select count(*), max(settle) from read_csv('{path}')").fetchall()
    assert rows == [(28, 228.25)]


@pytest.mark.skipif(shutil.which("zstd") is None, reason="the program zstd is not here")
def test_the_program_zstd_passes_over_the_seal(tmp_path: Path) -> None:
    path = tmp_path / "a.csv.zst"
    path.write_bytes(pack(LINES))
    told = subprocess.run(["zstd", "-dc", path], capture_output=True, check=True)
    assert (told.stdout, told.stderr) == (LINES, b"")
    assert subprocess.run(["zstd", "-tq", path], check=False).returncode == 0
