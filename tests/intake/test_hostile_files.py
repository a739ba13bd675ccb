"""Files made to do harm end in a clear error or in accounted rows, below a gibibyte of memory.

Each is read in a process of its own, whose peak is printed and held to the limit.
"""

import json
import os
import subprocess
import sys
import textwrap
from pathlib import Path

import pytest

from contracts.errors import IntakeError
from contracts.intake import parse_rows, split_file
from contracts.unpack import LARGEST_TEXT
from tests.contracts.small import HEADER, make_market, make_raw

ROOT = Path(__file__).resolve().parents[2]
LIMIT = 1024 * 1024 * 1024
# The most a file may have takes eight seconds.
MANY_ROWS = 2_000_000 if os.environ.get("ROPEWALK_LONG") else 600_000
MEASURE = """
import io, json, os, resource, sys, zipfile, zlib
sys.path.insert(0, {root!r})
from contracts.errors import IntakeError
from contracts.intake import RawFile, parse_rows, split_file
from contracts.unpack import list_members, unpack
from tests.contracts.small import HEADER, make_market, make_raw

def read(text, name="NWHT_2024_03.csv"):
    raw = make_raw(name, text)
    del text
    rows = split_file(raw)
    parsed = parse_rows([rows], make_market())
    assert rows.row_count == len(parsed.line) + len(rows.rejects) + rows.elsewhere
    return f"{{len(parsed.line):,}} bars, {{len(rows.rejects):,}} rejects"

def packed(size, line, wbits=31):
    packer = zlib.compressobj(9, zlib.DEFLATED, wbits)
    block = line * (1024 * 1024 // len(line))
    parts = [packer.compress(block) for _ in range(size // len(block))]
    return b"".join([*parts, packer.flush()])

def work():
{body}

try:
    said = work()
except IntakeError as error:
    said = f"IntakeError: {{error}}"
peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
# Linux lets a process inherit the peak of the one that started it; its own is told apart.
if os.path.exists("/proc/self/status"):
    with open("/proc/self/status") as status:
        peak = next(int(line.split()[1]) * 1024 for line in status if line.startswith("VmHWM"))
print(json.dumps([peak, said]))
"""


def measure(body: str) -> tuple[int, str]:
    """Peak bytes of a process that does the work, and what came of it."""
    script = MEASURE.format(root=str(ROOT), body=textwrap.indent(textwrap.dedent(body), "    "))
    done = subprocess.run([sys.executable, "-c", script], check=True, capture_output=True, text=True, timeout=120)
    peak, said = json.loads(done.stdout)
    return peak, said


HARMS = [
    (
        "gzip of half a gigabyte in half a megabyte",
        "return unpack(packed(500 << 20, b'0' * 1024), 'x.csv.gz')",
        "IntakeError: x.csv.gz: unpacks to more than",
    ),
    (
        "gzip that stays below the ratio and swells past the largest text",
        """
        import gzip, random
        row = random.Random(1).randbytes(4000).hex().encode() + b"0" * 400_000
        return unpack(packed(264 << 20, row), "x.csv.gz")
        """,
        "IntakeError: x.csv.gz: unpacks to more than 268,435,456 bytes",
    ),
    (
        "zstd of half a gigabyte",
        """
        import pyarrow as pa
        return unpack(pa.compress(b"0" * (300 << 20), codec="zstd", asbytes=True), "x.csv.zst")
        """,
        "IntakeError: x.csv.zst: unpacks to more than",
    ),
    (
        "zip of one swollen member",
        """
        buffer = io.BytesIO()
        with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as archive, archive.open("a.csv", "w") as member:
            for _ in range(300):
                member.write(b"0" * (1 << 20))
        return [name for name, _ in list_members(buffer.getvalue(), "x.zip")]
        """,
        "IntakeError: x.zip/a.csv: unpacks to more than",
    ),
    (
        "zip whose members swell together",
        """
        buffer = io.BytesIO()
        with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as archive:
            for number in range(260):
                archive.writestr(f"{number}.csv", b"0" * (1 << 20))
        return [name for name, _ in list_members(buffer.getvalue(), "x.zip")]
        """,
        "IntakeError: x.zip: its members unpack to more than 268,435,456 bytes",
    ),
    (
        "zip of very many members",
        """
        entry = b"PK\\x01\\x02" + b"\\0" * 24 + b"\\1\\0" + b"\\0" * 16 + b"a"
        listing = entry * 1_000_000
        end = b"PK\\x05\\x06" + b"\\0" * 4 + b"\\xff\\xff" * 2 + len(listing).to_bytes(4, "little") + b"\\0" * 6
        return [name for name, _ in list_members(listing + end, "x.zip")]
        """,
        "IntakeError: x.zip: seen 1,000,000 members; expected at most 100,000",
    ),
    (
        "as many rows as are read",
        f"return read(HEADER.encode() + b'2024-01-02,201.25,202.25,200.25,201.5,1 200,35000\\n' * {MANY_ROWS})",
        f"{MANY_ROWS:,} bars, 0 rejects",
    ),
    (
        "nothing but rows that cannot be read",
        "return read(HEADER.encode() + b',\\n' * 50_000_000)",
        "IntakeError: NWHT_2024_03.csv: seen 524,270 rows that cannot be read, the first in line 2: 2 fields",
    ),
    (
        "nothing but prices that cannot be read",
        f"return read(HEADER.encode() + b'2024-01-02,201.25,202.25,200.25,x,1 200,35000\\n' * {MANY_ROWS})",
        f"IntakeError: NWHT_2024_03.csv:2: the first of {MANY_ROWS:,} rows of its market that cannot be read; settle",
    ),
    (
        "blank lines alone",
        "return read(HEADER.encode() + b'\\n' * (60 << 20))",
        "0 bars, 0 rejects",
    ),
    (
        "one line of the largest size",
        "return read(HEADER.encode() + b',' * (120 << 20) + b'\\n2024-01-02,1,2,1,1.5,1,5\\n')",
        "1 bars, 1 rejects",
    ),
    (
        "NULs alone",
        "return read(b'\\0' * (60 << 20))",
        "IntakeError: NWHT_2024_03.csv:1: a line of more than 32,768 characters",
    ),
    (
        "quotation marks alone",
        "return read(HEADER.encode() + (b'\"' * 999 + b'\\n') * 20_000)",
        "0 bars, 20,000 rejects",
    ),
]


@pytest.mark.parametrize(("name", "body", "said"), HARMS, ids=[name for name, _, _ in HARMS])
def test_harmful_file_is_read_or_refused_within_a_gibibyte(
    name: str, body: str, said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    peak, came = measure(body)
    with capsys.disabled():
        sys.stdout.write(f"\n{name}: peak {peak / 1024 / 1024:,.0f} MiB; {came[:150]}")
    assert came.startswith(said)
    assert peak < LIMIT


def test_plain_file_of_two_gigabytes_is_refused_by_its_size_before_it_is_read(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    raw, store = tmp_path / "raw", tmp_path / "store"
    raw.mkdir()
    with (raw / "huge.csv").open("wb") as file:
        os.truncate(file.fileno(), 2 << 30)
    (raw / "good.csv").write_bytes(b"date,settle\n")
    peak, said = measure(f"""
        from pathlib import Path
        from catalog.archive import take_in
        from catalog.places import Places
        Path({str(store)!r}).mkdir()
        intake = take_in(Path({str(raw)!r}), Places(Path({str(store)!r})))
        return [[arrival.path for arrival in intake.arrivals], [str(p.reason) for p in intake.problems]]
    """)
    with capsys.disabled():
        sys.stdout.write(f"\nplain file of 2 GB: peak {peak / 1024 / 1024:,.0f} MiB; {said}")
    assert said == [["good.csv"], ["seen 2,147,483,648 bytes; expected at most 268,435,456"]]
    assert LARGEST_TEXT == 268_435_456
    assert peak < LIMIT // 2


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "NWHT_2024_03.csv: the file is empty; expected a header and rows"),
        ("\ufeff", "NWHT_2024_03.csv: the file is empty; expected a header and rows"),
        ("2024-01-02,1,2,0.5,1.5,7,9\n", "NWHT_2024_03.csv:1: column 'date' \\(session\\) is not among 2024-01-02, 1"),
        (HEADER.replace("oi", "settle"), "NWHT_2024_03.csv:1: column 'settle' \\(settle\\) is twice"),
        ("\0\0\0\n", "NWHT_2024_03.csv:1: column 'date' \\(session\\) is not among \ufffd\ufffd\ufffd"),
        ('"date,open\n', "NWHT_2024_03.csv:1: a quotation mark is opened and never closed; expected a header"),
    ],
)
def test_file_without_a_header_that_can_be_used_is_refused_with_what_was_seen(text: str, message: str) -> None:
    with pytest.raises(IntakeError, match=message):
        split_file(make_raw("NWHT_2024_03.csv", text))


def test_more_rows_than_a_file_may_have_are_refused_whole(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("contracts.intake.MOST_ROWS", 3)
    row = "2024-01-02,1,2,0.5,1.5,7,9\n"
    assert split_file(make_raw("NWHT_2024_03.csv", HEADER + row * 3)).row_count == 3
    with pytest.raises(IntakeError, match=r"NWHT_2024_03.csv: seen more than 3 rows; expected at most that many"):
        split_file(make_raw("NWHT_2024_03.csv", HEADER + row * 4))


def test_more_unreadable_rows_than_are_told_one_by_one_are_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    """Both where a row does not split and where a field does not read."""
    monkeypatch.setattr("contracts.intake.MOST_REJECTS", 2)
    path, narrow, wrong = "NWHT_2024_03.csv", "2024-01-02,1\n", "2024-01-02,1,2,0.5,x,7,9\n"
    rows = split_file(make_raw(path, HEADER + narrow * 2 + wrong * 2))
    assert len(parse_rows([rows], make_market()).line) == 0
    assert [reject.line for reject in rows.rejects] == [2, 3, 4, 5]
    with pytest.raises(IntakeError, match=f"{path}: seen 3 rows that cannot be read, the first in line 2: 2 fields"):
        split_file(make_raw(path, HEADER + narrow * 3))
    with pytest.raises(IntakeError, match=f"{path}:2: the first of 3 rows of its market that cannot be read; settle"):
        parse_rows([split_file(make_raw(path, HEADER + wrong * 3))], make_market())


def test_formulas_and_markup_in_cells_stay_text_in_a_reject() -> None:
    row = '2024-01-02,"=HYPERLINK(""http://x"")",2,0.5,<script>,7,9'
    rows = split_file(make_raw("NWHT_2024_03.csv", HEADER + row + "\n"))
    assert len(parse_rows([rows], make_market()).line) == 0
    assert [(reject.line, reject.offset, reject.text) for reject in rows.rejects] == [(2, 36, row)]
