"""Raw text to bars and rejects: every row is one or the other, with its physical line."""

import gzip
import io
import warnings
import zipfile

import pyarrow as pa
import pytest

from contracts.errors import IntakeError
from contracts.intake import TORN, RawFile, parse_rows, split_file
from contracts.layouts import Claim, parse_layout
from contracts.unpack import list_members, unpack
from tests.contracts.small import HEADER, make_market, make_raw

NAME = "NWHT_2024_03.csv"
_REMARKS = parse_layout(
    "files = '(?P<market>[A-Z]+)_(?P<year>[0-9]+)_(?P<month>[0-9]+)[.]csv'\n"
    "[columns]\nsession = 'date'\nsettle = 'settle'\n",
    "layouts/remarks.toml",
)
_CLAIM = Claim(market="NWHT", year=2024, month=3)


def read(text: str | bytes) -> tuple[list[tuple[int, float]], list[tuple[int, str]], int]:
    """Lines and settles of the bars, lines and reasons of the rejects, rows in the file."""
    rows = split_file(make_raw(NAME, text))
    parsed = parse_rows([rows], make_market())
    bars = [(int(line), float(value)) for line, value in zip(parsed.line, parsed.values[:, 3], strict=True)]
    rejects = sorted((reject.line, reject.reason) for reject in rows.rejects)
    assert rows.row_count == len(bars) + len(rejects)
    return bars, rejects, rows.row_count


def test_rows_are_read_with_their_lines() -> None:
    text = HEADER + "2024-01-02,1,2,0.5,212.25,1 200,5000\n2024-01-03,1,2,0.5,213,,\n"
    assert read(text) == ([(2, 212.25), (3, 213.0)], [], 2)


def test_comments_blank_lines_and_repeated_headers_are_no_rows_but_count_as_lines() -> None:
    text = "# title\n\n" + HEADER + "2024-01-02,1,2,0.5,212.25,1,5\n# more\n" + HEADER + "2024-01-03,1,2,0.5,213,1,5\n"
    assert read(text) == ([(4, 212.25), (7, 213.0)], [], 2)


@pytest.mark.parametrize("ending", ["\r\n", "\r", "\n"])
def test_line_numbers_hold_for_every_line_ending(ending: str) -> None:
    text = (HEADER + "2024-01-02,1,2,0.5,212.25,1,5\n2024-01-03,1,2,0.5,x,1,5\n2024-01-04,1,2,0.5,213,1,5\n").replace(
        "\n", ending
    )
    bars, rejects, _ = read(text)
    assert bars == [(2, 212.25), (4, 213.0)]
    assert rejects == [(3, "settle: seen 'x'; expected a price (decimal, decimal mark '.')")]


def test_byte_order_mark_is_not_part_of_the_first_header() -> None:
    assert read(b"\xef\xbb\xbf" + (HEADER + "2024-01-02,1,2,0.5,212.25,1,5\n").encode())[0] == [(2, 212.25)]


def test_last_row_of_a_file_without_a_line_end_is_held_out() -> None:
    """A number cut in the middle still parses, so the row cannot be believed."""
    text = HEADER + "2024-01-02,1,2,0.5,212.25,1,5\n2024-01-03,1,2,0.5,21"
    assert read(text) == ([(2, 212.25)], [(3, TORN)], 2)


@pytest.mark.parametrize(
    ("row", "reason"),
    [
        ("2024-01-02,1,2,0.5,212.25,1", "6 fields; expected 7 as in the header"),
        ("02.01.2024,1,2,0.5,212.25,1,5", "session: seen '02.01.2024'; expected a date as %Y-%m-%d"),
        ("2024-02-30,1,2,0.5,212.25,1,5", "session: seen '2024-02-30'; expected a date as %Y-%m-%d"),
        ("2024-01-02,1,2,0.5,nan,1,5", "settle: seen 'nan'; expected a price (decimal, decimal mark '.')"),
        ("2024-01-02,1,2,0.5,212.25,1.5,5", "volume: seen '1.5'; expected a whole number of contracts"),
        ("2024-01-02,1,2,0.5,212.25,-1,5", "volume: seen '-1'; expected a whole number of contracts"),
        ("2024-01-02,,,,NA,,", "row: seen nothing; expected a value in at least one field"),
        ('2024-01-02,1,2,0.5,"212.25,1,5', "a quotation mark is opened and never closed"),
        ("2024-01-02,1,2,0.5,212\0.25,1,5", "a NUL byte"),
    ],
)
def test_row_that_cannot_be_read_is_kept_with_its_reason(row: str, reason: str) -> None:
    text = HEADER + row + "\n2024-01-03,1,2,0.5,213,1,5\n"
    assert read(text) == ([(3, 213.0)], [(2, reason)], 2)


def test_bytes_of_another_encoding_reject_their_row_only() -> None:
    text = (HEADER + "2024-01-02,1,2,0.5,212.25,1,5\n").encode() + b"2024-01-03,1,2,0.5,21\xff,1,5\n"
    assert read(text) == ([(2, 212.25)], [(3, "bytes that are not of the declared encoding")], 2)


def test_quoted_field_over_two_lines_counts_both() -> None:
    text = HEADER + '2024-01-02,1,2,0.5,"212.25\n",1,5\n2024-01-03,1,2,0.5,213,1,5\n'
    assert read(text)[0] == [(2, 212.25), (4, 213.0)]


def test_rows_of_a_file_of_several_stretches_keep_their_lines_and_offsets() -> None:
    """Stretches are about a megabyte; the head is 36 bytes, a row here 31 with its line end of two."""
    row = "2024-01-02,1,2,0.5,1.5,71,5000"
    lines = [row] * 100_000
    for at in (0, 34_000, 34_001, 67_999, 99_999):
        lines[at] = "2024-01-02,1,2,0.5,x.5,71,5000"
    rows = split_file(make_raw(NAME, HEADER + "".join(f"{line}\r\n" for line in lines)))
    parsed = parse_rows([rows], make_market())
    assert [(reject.line, reject.offset, reject.text) for reject in rows.rejects] == [
        (2, 36, "2024-01-02,1,2,0.5,x.5,71,5000"),
        (34_002, 1_088_036, "2024-01-02,1,2,0.5,x.5,71,5000"),
        (34_003, 1_088_068, "2024-01-02,1,2,0.5,x.5,71,5000"),
        (68_001, 2_176_004, "2024-01-02,1,2,0.5,x.5,71,5000"),
        (100_001, 3_200_004, "2024-01-02,1,2,0.5,x.5,71,5000"),
    ]
    assert len(parsed.line) == 99_995
    refused = (2, 34_002, 34_003, 68_001, 100_001)
    assert parsed.line.tolist() == [line for line in range(2, 100_002) if line not in refused]
    assert set(parsed.values[:, 3].tolist()) == {1.5}


def test_quoted_remark_across_two_stretches_is_one_row() -> None:
    """The stretch ends within the remark of line 40,001, which runs over 17 lines."""
    head = "date,settle,remark\n"
    rows = ["2024-01-02,1.5,abcdefghij\n"] * 40_000
    long = '2024-01-03,2.5,"' + ("x" * 5_000 + "\n") * 16 + '"\n'
    split = split_file(RawFile(NAME, "a" * 64, (head + "".join(rows) + long).encode(), "x", _REMARKS, _CLAIM, 1, 0))
    parsed = parse_rows([split], make_market())
    assert (len(parsed.line), split.rejects, split.row_count) == (40_001, [], 40_001)
    assert (int(parsed.line[-1]), float(parsed.values[-1, 3])) == (40_002, 2.5)
    assert split.spans == {40_002: 17}


def test_rows_of_no_readable_market_are_told_once() -> None:
    """A file of several markets is read for each; one of the readings tells what belongs to none."""
    layout = parse_layout(
        "files = 'all.csv'\ncontract_code = '(?P<market>[A-Z]+)-(?P<year>[0-9]+)-(?P<month>[0-9]+)'\n"
        "[columns]\nsession = 'date'\ncontract = 'contract'\nsettle = 'settle'\n",
        "layouts/all.toml",
    )
    head, rows = "contract,date,settle\n", "NWHT-24-3,2024-01-02,1.5\nNOIL-24-4,2024-01-02,2.5\n"
    text = head + rows + "?,2024-01-02,3.5\nNWHT-24-5,,4.5\n,\n"
    told, other = (
        split_file(RawFile("all.csv", "a" * 64, text.encode(), "all", layout, Claim(), 1, 0, is_told_here=told))
        for told in (True, False)
    )
    oil = make_market().model_copy(update={"code": "NOIL", "delivery_months": (4,)})
    assert parse_rows([told], make_market()).line.tolist() == [2]
    assert parse_rows([other], oil).line.tolist() == [3]
    assert [reject.line for reject in told.rejects] == [6, 4, 5]
    assert other.rejects == []
    assert (told.row_count, told.elsewhere) == (5, 1)
    assert (other.row_count, other.elsewhere) == (5, 4)
    assert set(told.columns["market"]) == {"NWHT", "NOIL", ""}


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "the file is empty"),
        ("\n\n", "expected a header"),
        ("date,open,high,low,volume,oi\n", "column 'settle' \\(settle\\) is not among date, open"),
        ("date,open,high,low,settle,settle,volume,oi\n", "column 'settle' \\(settle\\) is twice"),
    ],
)
def test_file_without_a_usable_header_is_refused_whole(text: str, message: str) -> None:
    with pytest.raises(IntakeError, match=message):
        split_file(make_raw(NAME, text))


def test_unpacking_by_the_ending_of_the_path() -> None:
    assert unpack(b"abc", "x.csv") == b"abc"
    assert unpack(gzip.compress(b"abc"), "x.csv.gz") == b"abc"
    assert unpack(pa.compress(b"abc", codec="zstd", asbytes=True), "x.csv.zst") == b"abc"


@pytest.mark.parametrize(
    ("data", "path", "message"),
    [
        (gzip.compress(b"0" * 50_000_000), "x.gz", "nothing of it is read"),
        (gzip.compress(b"abc" * 99)[:-9], "x.gz", "cannot be unpacked"),
        (b"abc", "x.zst", "cannot be unpacked"),
    ],
)
def test_what_does_not_unpack_or_grows_too_large_is_refused(data: bytes, path: str, message: str) -> None:
    with pytest.raises(IntakeError, match=message):
        unpack(data, path)


def test_ending_in_capitals_is_an_ending() -> None:
    assert unpack(gzip.compress(b"abc"), "X.CSV.GZ") == b"abc"


def test_zip_that_is_none_is_refused() -> None:
    with pytest.raises(IntakeError, match="cannot be unpacked as zip"):
        list_members(b"PK nothing", "x.zip")


def make_zip(*members: tuple[str, bytes]) -> bytes:
    buffer = io.BytesIO()
    with warnings.catch_warnings(), zipfile.ZipFile(buffer, "w") as archive:
        warnings.simplefilter("ignore")
        for name, data in members:
            archive.writestr(name, data)
    return buffer.getvalue()


def test_zip_gives_its_members_in_order_of_name() -> None:
    members = list_members(make_zip(("b.csv", b"second"), ("a.csv", b"first")), "x.zip")
    assert list(members) == [("a.csv", b"first"), ("b.csv", b"second")]


def test_zip_with_one_damaged_member_gives_none() -> None:
    data = make_zip(("a.csv", b"first"), ("b.csv", b"second")).replace(b"second", b"sec0nd")
    with pytest.raises(IntakeError, match=r"x\.zip: cannot be unpacked as zip: Bad CRC-32 for file 'b\.csv'"):
        list_members(data, "x.zip")


def test_zip_with_a_name_twice_is_refused() -> None:
    with pytest.raises(IntakeError, match=r"x\.zip: seen the member 'a\.csv' twice; expected each name once"):
        list_members(make_zip(("a.csv", b"first"), ("a.csv", b"second")), "x.zip")
