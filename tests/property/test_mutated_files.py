"""Files spoiled in every way end in accounted rows or a clear error, and never in a wrong number from a whole row."""

import csv
import datetime
import gzip
import io
import os
import re
import zipfile
from dataclasses import dataclass

import pyarrow as pa
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from contracts.errors import IntakeError
from contracts.intake import TORN, FileRows, RawFile, parse_rows, split_file
from contracts.layouts import Layout, claim_file, parse_layout
from contracts.markets import parse_market
from contracts.sessions import day_of
from contracts.unpack import list_members, unpack
from tests.contracts.small import MARKET

MANY = 100_000 if os.environ.get("ROPEWALK_LONG") else 2_000
PATH = "NWHT_2024_03.csv"
NWHT = parse_market(MARKET.format(extra="may_be_negative = true"), "markets/nwht.toml")
TOP = r"files = '(?P<market>[A-Z0-9]+)_(?P<year>\d{4})_(?P<month>\d\d)\.csv'"
ALL = """
[columns]
session = "date"
open = "open"
high = "high"
low = "low"
settle = "settle"
volume = "volume"
open_interest = "oi"
"""
Bar = tuple[int, str, tuple[float, ...]]


@dataclass(frozen=True)
class Kind:
    """A good file: its layout, how it is encoded, its lines without ends, and the bars they hold by line."""

    layout: Layout
    codec: str
    ending: str
    lines: tuple[str, ...]
    bars: tuple[Bar, ...]
    # In these every column is read, so that no quoted remark can rightly take in other lines.
    is_read_whole: bool = True

    @property
    def text(self) -> bytes:
        return "".join(line + self.ending for line in self.lines).encode(self.codec)


NAN = float("nan")
PLAIN = Kind(
    parse_layout(f"{TOP}\nmissing = ['', 'NA']\ncomment = '#'\n{ALL}", "plain.toml"),
    "utf-8",
    "\n",
    (
        "# prices",
        "date,open,high,low,settle,volume,oi",
        "2024-01-02,210.25,213,209.5,212.25,1200,35000",
        "2024-01-03,212.5,214.75,212,214.5,980,35210",
        "",
        "2024-01-04,,,,213.75,0,35190",
        "# a remark",
        "2024-01-05,NA,NA,NA,-1.5,NA,35001",
        "2024-01-08,1.5e2,160,149,155.25,7,9",
    ),
    (
        (3, "2024-01-02", (210.25, 213.0, 209.5, 212.25, 1200.0, 35000.0)),
        (4, "2024-01-03", (212.5, 214.75, 212.0, 214.5, 980.0, 35210.0)),
        (6, "2024-01-04", (NAN, NAN, NAN, 213.75, 0.0, 35190.0)),
        (8, "2024-01-05", (NAN, NAN, NAN, -1.5, NAN, 35001.0)),
        (9, "2024-01-08", (150.0, 160.0, 149.0, 155.25, 7.0, 9.0)),
    ),
)
QUOTED = Kind(
    parse_layout(f"{TOP}\nthousands = ','\nencoding = 'cp1252'\nskip_lines = 1\n{ALL}", "quoted.toml"),
    "cp1252",
    "\r\n",
    (
        "Prix de règlement",
        '"date","open","high","low","settle","volume","oi"',
        '"2024-01-02","1,210.25","1,213","1,209.5","1,212.25","1,200","35,000"',
        '2024-01-03,"1,212.5","1,214.75","1,212","1,214.5",980,"35,210"',
        '"date","open","high","low","settle","volume","oi"',
        '"2024-01-04",,,,"1,213.75",,"35,190"',
    ),
    (
        (3, "2024-01-02", (1210.25, 1213.0, 1209.5, 1212.25, 1200.0, 35000.0)),
        (4, "2024-01-03", (1212.5, 1214.75, 1212.0, 1214.5, 980.0, 35210.0)),
        (6, "2024-01-04", (NAN, NAN, NAN, 1213.75, NAN, 35190.0)),
    ),
)
WIDE = Kind(
    parse_layout(f"{TOP}\ndecimal = ','\ndelimiter = ';'\nencoding = 'utf-16-le'\n{ALL}", "wide.toml"),
    "utf-16-le",
    "\r\n",
    (
        "date;open;high;low;settle;volume;oi",
        "2024-01-02;210,25;213;209,5;212,25;1200;35000",
        "2024-01-03;212,5;214¾;212;−214,5;980;35210",
        "2024-01-04;;;;213,75;;35190",
    ),
    (
        (2, "2024-01-02", (210.25, 213.0, 209.5, 212.25, 1200.0, 35000.0)),
        (3, "2024-01-03", (212.5, 214.75, 212.0, -214.5, 980.0, 35210.0)),
        (4, "2024-01-04", (NAN, NAN, NAN, 213.75, NAN, 35190.0)),
    ),
)
REMARKS = Kind(
    parse_layout(f"{TOP}\nnot_rows = 'Total'\n{ALL}", "remarks.toml"),
    "utf-8",
    "\n",
    (
        "date,open,high,low,settle,volume,oi,remark",
        '2024-01-02,210.25,213,209.5,212.25,1200,35000,"first',
        'and ""second"" line"',
        "2024-01-03,212.5,214.75,212,214.5,980,35210,—",
        "Total,,,,,2180,,",
    ),
    (
        (2, "2024-01-02", (210.25, 213.0, 209.5, 212.25, 1200.0, 35000.0)),
        (4, "2024-01-03", (212.5, 214.75, 212.0, 214.5, 980.0, 35210.0)),
    ),
    is_read_whole=False,
)
KINDS = (PLAIN, QUOTED, WIDE, REMARKS)


def read(kind: Kind, text: bytes) -> tuple[FileRows, list[Bar]]:
    """Split and parse one file; raises IntakeError as the build does."""
    claim = claim_file(kind.layout, PATH)
    assert claim is not None
    rows = split_file(RawFile(PATH, "a" * 64, text, "kind", kind.layout, claim, 1, len(text)))
    parsed = parse_rows([rows], NWHT)
    bars = [
        (int(line), str(day_of(session)), tuple(values.tolist()))
        for line, session, values in zip(parsed.line, parsed.session, parsed.values, strict=True)
    ]
    return rows, bars


def same(first: Bar, second: Bar) -> bool:
    return first[:2] == second[:2] and all(
        a == b or (a != a and b != b) for a, b in zip(first[2], second[2], strict=True)
    )


def physical_lines(kind: Kind, text: bytes) -> list[str]:
    """The lines as the bytes have them, found by other means than the intake's."""
    lines = re.split(r"\r\n|\r|\n", text.decode(kind.codec, errors="replace").removeprefix("\ufeff"))
    return lines[:-1] if lines[-1] == "" else lines


def read_names(lines: list[str], delimiter: str) -> tuple[list[str], int]:
    """The header that begins on the first of the lines, and how many lines it takes."""
    reader = csv.reader((line + "\n" for line in lines), delimiter=delimiter, skipinitialspace=True)
    names = [name.strip().removeprefix("\ufeff") for name in next(reader)]
    return names, reader.line_num


def check_accounts(kind: Kind, text: bytes, rows: FileRows, bars: list[Bar]) -> None:
    """Every line below the header is in exactly one row, or is visibly none; every row is a bar or a reject."""
    lines = physical_lines(kind, text)
    assert rows.row_count == len(bars) + len(rows.rejects)
    taken: list[int] = []
    for line in [bar[0] for bar in bars] + [reject.line for reject in rows.rejects]:
        taken += range(line, line + rows.spans.get(line, 1))
    assert len(taken) == len(set(taken))
    loose = [number for number in range(1, len(lines) + 1) if number not in set(taken)]
    header: list[str] | None = None
    while loose:
        number = loose[0]
        line = lines[number - 1]
        is_footer = header is not None and kind.layout.not_rows is not None and line.startswith(kind.layout.not_rows)
        is_remark = not line.strip() or (kind.layout.comment != "" and line.startswith(kind.layout.comment))
        if number <= kind.layout.skip_lines or is_remark or is_footer:
            loose.pop(0)
            continue
        names, count = read_names(lines[number - 1 :], kind.layout.delimiter)
        assert header in (None, names), (number, line)
        header = names
        assert loose[:count] == list(range(number, number + count))
        loose = loose[count:]
    assert header is not None
    assert {"date", "open", "high", "low", "settle", "volume", "oi"} <= set(header)
    for reject in rows.rejects:
        there = text[reject.offset :].decode(kind.codec, errors="replace")
        assert re.sub(r"\r\n?", "\n", there).startswith(reject.text)


def check_numbers(kind: Kind, text: bytes, rows: FileRows, bars: list[Bar]) -> None:
    """Whole rows that nothing happened to are bars as they were; others hold what their line says."""
    lines = physical_lines(kind, text)
    true = {kind.lines[line - 1]: (day, values) for line, day, values in kind.bars}
    read_by_line = {bar[0]: bar for bar in bars}
    header = kind.lines[kind.layout.skip_lines + (kind is PLAIN)]
    at = next(
        (number for number, line in enumerate(lines) if line == header and number >= kind.layout.skip_lines), None
    )
    is_torn = not text.decode(kind.codec, errors="replace").endswith(("\n", "\r"))
    before = [line for line in lines[kind.layout.skip_lines : at] if line.strip() and not line.startswith("#")]
    if kind.is_read_whole and at is not None and not before:
        for number, line in enumerate(lines, 1):
            if line in true and number > at + 1 and not (is_torn and number == len(lines)):
                assert number in read_by_line, (number, line, rows.rejects)
                assert same(read_by_line[number], (number, *true[line]))
    for number, day, values in bars:
        line = lines[number - 1]
        if kind is not PLAIN or '"' in line or len(line.split(",")) != 7 or header not in lines[: number - 1]:
            continue
        fields = [field.strip() for field in line.split(",")]
        assert day == str(datetime.datetime.strptime(fields[0], "%Y-%m-%d").date())
        for field, value in zip(fields[1:], values, strict=True):
            if re.fullmatch(r"[+-]?[0-9.eE+-]+", field):
                assert float(field) == value, (field, value)
            elif field in ("", "NA"):
                assert value != value


MARKS = [
    b'"',
    b",",
    b";",
    b"\n",
    b"\r",
    b"\r\n",
    b"\0",
    b"'",
    b"#",
    b"\xff",
    b"\xef\xbb\xbf",
    b"9",
    b"-",
    b" ",
    b'""',
    b"\x1a",
]
POSITIONS = st.integers(0, 100_000)
CHANGES = st.one_of(
    st.tuples(st.just("flip"), POSITIONS, st.integers(0, 7)),
    st.tuples(st.just("set"), POSITIONS, st.integers(0, 255)),
    st.tuples(st.just("insert"), POSITIONS, st.sampled_from(MARKS)),
    st.tuples(st.just("delete"), POSITIONS, st.integers(1, 40)),
    st.tuples(st.just("cut"), POSITIONS, st.just(0)),
    st.tuples(st.just("swap lines"), POSITIONS, POSITIONS),
    st.tuples(st.just("double line"), POSITIONS, POSITIONS),
    st.tuples(st.just("copy"), POSITIONS, POSITIONS),
)


def spoil(kind: Kind, change: tuple[str, int, object], text: bytes) -> bytes:
    """One change to a file's bytes."""
    what, where, how = change
    if not text:
        return text
    at = where % len(text)
    if what == "insert":
        assert isinstance(how, bytes)
        mark = how.decode("latin-1").encode(kind.codec) if kind is WIDE and where % 2 else how
        return text[:at] + mark + text[at:]
    assert isinstance(how, int)
    if what == "flip":
        return text[:at] + bytes([text[at] ^ (1 << how)]) + text[at + 1 :]
    if what == "set":
        return text[:at] + bytes([how]) + text[at + 1 :]
    if what == "delete":
        return text[:at] + text[at + how :]
    if what == "cut":
        return text[:at]
    if what == "copy":
        return text[:at] + text[how % len(text) :]
    end = kind.ending.encode(kind.codec)
    lines = text.split(end)
    first, second = where % len(lines), how % len(lines)
    if what == "swap lines":
        lines[first], lines[second] = lines[second], lines[first]
    else:
        lines.insert(second, lines[first])
    return end.join(lines)


@settings(max_examples=MANY, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(kind=st.sampled_from(KINDS), changes=st.lists(CHANGES, min_size=1, max_size=6))
def test_spoiled_file_ends_in_accounted_rows_or_a_clear_error(
    kind: Kind, changes: list[tuple[str, int, object]]
) -> None:
    text = kind.text
    for change in changes:
        text = spoil(kind, change, text)
    try:
        rows, bars = read(kind, text)
    except IntakeError as error:
        assert str(error).startswith(PATH)
        return
    check_accounts(kind, text, rows, bars)
    check_numbers(kind, text, rows, bars)


@settings(max_examples=MANY // 4, deadline=None)
@given(kind=st.sampled_from(KINDS), text=st.binary(max_size=200), is_headed=st.booleans())
def test_any_bytes_end_in_accounted_rows_or_a_clear_error(kind: Kind, text: bytes, is_headed: bool) -> None:
    """Also below a good header, so that the bytes are read as rows."""
    whole = "".join(line + kind.ending for line in kind.lines[:2]).encode(kind.codec) if is_headed else b""
    try:
        rows, bars = read(kind, whole + text)
    except IntakeError as error:
        assert str(error).startswith(PATH)
        return
    check_accounts(kind, whole + text, rows, bars)


@pytest.mark.parametrize("kind", KINDS, ids=lambda kind: kind.layout.encoding + kind.layout.delimiter)
def test_whole_file_gives_its_bars(kind: Kind) -> None:
    rows, bars = read(kind, kind.text)
    assert len(bars) == len(kind.bars)
    assert all(map(same, bars, kind.bars))
    assert rows.rejects == []


@pytest.mark.parametrize("kind", KINDS, ids=lambda kind: kind.layout.encoding + kind.layout.delimiter)
def test_file_cut_anywhere_gives_the_rows_before_the_cut_and_at_most_its_last_row_held_out(kind: Kind) -> None:
    width = 2 if kind is WIDE else 1
    header_end = len("".join(line + kind.ending for line in kind.lines[: kind.bars[0][0] - 1]).encode(kind.codec))
    for cut in range(len(kind.text)):
        text = kind.text[:cut]
        try:
            rows, bars = read(kind, text)
        except IntakeError:
            assert cut < header_end
            continue
        assert all(map(same, bars, kind.bars))
        held_out = {reject.line for reject in rows.rejects}
        whole = sum(
            len("".join(line + kind.ending for line in kind.lines[:last]).encode(kind.codec))
            - len(kind.ending) * width
            + width
            <= cut
            for last in [bar[0] + (kind is REMARKS and bar[0] == 2) for bar in kind.bars]
        )
        assert len(bars) == whole
        assert len(held_out) <= (2 if kind is REMARKS else 1)
        if not text.decode(kind.codec, errors="replace").endswith(("\n", "\r")) and held_out:
            assert TORN in {reject.reason for reject in rows.rejects}


PACKED = {
    "x.csv.gz": gzip.compress(PLAIN.text * 20, mtime=0),
    "x.csv.zst": pa.compress(PLAIN.text * 20, codec="zstd", asbytes=True),
}


@pytest.mark.parametrize("path", sorted(PACKED))
def test_packed_file_cut_anywhere_gives_nothing_but_an_error(path: str) -> None:
    for cut in range(1, len(PACKED[path])):
        with pytest.raises(IntakeError, match=path):
            unpack(PACKED[path][:cut], path)


def zipped() -> bytes:
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as archive:
        for name in ("a.csv", "b.csv"):
            archive.writestr(zipfile.ZipInfo(name, (2024, 1, 8, 0, 0, 0)), PLAIN.text * 5)
    return buffer.getvalue()


@settings(max_examples=MANY // 4, deadline=None)
@given(
    path=st.sampled_from(["x.csv.gz", "x.csv.zst", "x.zip"]),
    changes=st.lists(CHANGES, min_size=1, max_size=3),
)
def test_spoiled_packed_file_gives_what_it_held_or_a_clear_error(
    path: str, changes: list[tuple[str, int, object]]
) -> None:
    """gzip and zip carry a checksum, so that no other text comes of them; zstd as written here does not."""
    data = zipped() if path == "x.zip" else PACKED[path]
    for change in changes:
        data = spoil(PLAIN, change, data)
    try:
        if path == "x.zip":
            for _, text in list_members(data, path):
                assert text == PLAIN.text * 5
        elif path == "x.csv.gz" and data:
            assert unpack(data, path) in (b"", PLAIN.text * 20, PLAIN.text * 40)
        else:
            unpack(data, path)
    except IntakeError as error:
        assert path in str(error)
