"""Raw text to bars and rejects: every row is one or the other, with its physical line."""

import gzip

import pyarrow as pa
import pytest

from contracts.errors import IntakeError
from contracts.intake import TORN, parse_rows, split_file
from contracts.unpack import list_members, unpack
from tests.contracts.small import HEADER, make_market, make_raw

NAME = "NWHT_2024_03.csv"


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


def test_zip_that_is_none_is_refused() -> None:
    with pytest.raises(IntakeError, match="cannot be unpacked as zip"):
        list_members(b"PK nothing", "x.zip")
