"""Every way the trade writes a file: the raw bytes, what is declared of them, and exactly the bars and rejects.

Each case is one file. A bar is written `contract session open high low settle volume open_interest @line`, with
`.` for what is absent; a reject is (line, byte offset, reason).
"""

import json
import math
from dataclasses import dataclass, field

import pytest

from contracts.errors import DeskError
from contracts.intake import TORN, RawFile, parse_rows, split_file
from contracts.layouts import Layout, claim_file, parse_layout
from contracts.markets import parse_market
from contracts.sessions import day_of
from tests.contracts.small import MARKET

COLUMNS = {
    "session": "date", "open": "open", "high": "high", "low": "low", "settle": "settle", "volume": "volume",
    "open_interest": "oi",
}  # fmt: skip
BY_NAME = r"(?P<market>[A-Z0-9]+)_(?P<year>\d{4})_(?P<month>\d\d)\.csv"
ANY = r".*\.csv"
HEAD = b"date,open,high,low,settle,volume,oi\n"
ROW = b"2024-01-02,1,2,0.5,1.5,7,9\n"
BAR = "NWHT-2024-03 2024-01-02 1 2 0.5 1.5 7 9"
BAD = "a price (decimal, decimal mark '.')"


@dataclass
class Case:
    name: str
    text: bytes
    bars: list[str]
    rejects: list[tuple[int, int, str]] = field(default_factory=list)
    keys: dict[str, object] = field(default_factory=dict)
    columns: dict[str, str | None] = field(default_factory=dict)
    market: str = ""
    path: str = "NWHT_2024_03.csv"
    elsewhere: int = 0


def make_layout(case: Case) -> Layout:
    keys = {"files": BY_NAME, **case.keys}
    columns = {name: header for name, header in {**COLUMNS, **case.columns}.items() if header is not None}
    lines = [f"{key} = {json.dumps(value, ensure_ascii=False)}" for key, value in keys.items()]
    lines += ["[columns]", *(f"{name} = {json.dumps(header, ensure_ascii=False)}" for name, header in columns.items())]
    return parse_layout("\n".join(lines), "layouts/case.toml")


def shown(value: float) -> str:
    return "." if math.isnan(value) else format(value, ".15g")


SETTLE_ONLY = {"open": None, "high": None, "low": None, "volume": None, "open_interest": None}
SHORT = b"date,settle\n"
ONE_COLUMN = r"(?P<month_code>[A-Z])(?P<year>\d{1,2})"
MARKET_AND_CODE = r"(?P<market>.*)(?P<month_code>[A-Z])(?P<year>\d)"
AS_CODE = "expected a contract written as (?P<month_code>[A-Z])(?P<year>\\d{1,2})"
IN_CODE: dict[str, str | None] = {**SETTLE_ONLY, "contract": "contract"}
CODED = b"contract,date,settle\n"


def settle_case(name: str, price: str, value: str, **more: object) -> Case:
    """One row with a settle alone, written in the layout's encoding, or UTF-8."""
    keys = dict(more.pop("keys", {}))  # type: ignore[call-overload]
    encoding, delimiter = str(keys.get("encoding", "utf-8")), str(keys.get("delimiter", ","))
    text = f"date{delimiter}settle\n2024-01-02{delimiter}{price}\n".encode(encoding)
    bars = [f"NWHT-2024-03 2024-01-02 . . . {value} . . @2"]
    return Case(name, text, bars, keys=keys, columns=SETTLE_ONLY, **more)  # type: ignore[arg-type]


def refused(name: str, price: str, reason: str, good: str = "2.5", **more: object) -> Case:
    """A row whose settle cannot be read, and one of 2.5 that stands."""
    text = f"date,settle\n2024-01-02,{price}\n2024-01-03,{good}\n".encode()
    bars = ["NWHT-2024-03 2024-01-03 . . . 2.5 . . @3"]
    return Case(name, text, bars, [(2, 12, reason)], columns=SETTLE_ONLY, **more)  # type: ignore[arg-type]


def coded_case(name: str, code: str, day: str, contract: str, pattern: str = ONE_COLUMN, **keys: object) -> Case:
    """One row whose contract stands in a column, the market in the path."""
    text = CODED + f"{code},{day},2.5\n".encode()
    layout = {"files": r"(?P<market>[A-Z0-9]+)\.csv", "contract_code": pattern, **keys}
    return Case(name, text, [f"{contract} {day} . . . 2.5 . . @2"], keys=layout, columns=IN_CODE, path="NWHT.csv")


def coded_reject(name: str, code: str, reason: str, pattern: str = ONE_COLUMN, day: str = "2024-01-02") -> Case:
    text = CODED + f"{code},{day},2.5\n".encode()
    layout = {"files": r"(?P<market>[A-Z0-9]+)\.csv", "contract_code": pattern}
    return Case(name, text, [], [(2, 21, reason)], keys=layout, columns=IN_CODE, path="NWHT.csv")


THIRTY_SECONDS, SIXTY_FOURTHS, EIGHTHS = (f'price_notation = "{name}"' for name in ("32nds", "64ths", "8ths"))
NEGATIVE = "may_be_negative = true"

DELIMITERS = [
    Case(f"delimiter {mark!r}", (HEAD + ROW).replace(b",", mark.encode()), [f"{BAR} @2"], keys={"delimiter": mark})
    for mark in (",", ";", "\t", "|", "^")
]

ENCODINGS = [
    Case("utf-8 without a mark", HEAD + ROW, [f"{BAR} @2"], keys={"encoding": "utf-8"}),
    Case("utf-8 with a mark", b"\xef\xbb\xbf" + HEAD + ROW, [f"{BAR} @2"], keys={"encoding": "utf-8"}),
    Case(
        "utf-8 with a mark: offsets count it",
        b"\xef\xbb\xbf" + HEAD + b"2024-01-02,1,2,0.5,x,7,9\n" + ROW,
        [f"{BAR} @3"],
        [(2, 39, f"settle: seen 'x'; expected {BAD}")],
    ),
    Case("utf-8-sig", b"\xef\xbb\xbf" + HEAD + ROW, [f"{BAR} @2"], keys={"encoding": "utf-8-sig"}),
    Case(
        "utf-8: offsets are bytes, not characters",
        "date,settle\n2024-01-02,€€\n2024-01-03,–\n2024-01-04,2.5\n".encode(),
        ["NWHT-2024-03 2024-01-04 . . . 2.5 . . @4"],
        [(2, 12, f"settle: seen '€€'; expected {BAD}"), (3, 30, f"settle: seen '–'; expected {BAD}")],
        columns=SETTLE_ONLY,
    ),
    Case(
        "utf-16 little-endian by its mark",
        b"\xff\xfe" + "date,settle\n2024-01-02,x\n2024-01-03,2.5\n".encode("utf-16-le"),
        ["NWHT-2024-03 2024-01-03 . . . 2.5 . . @3"],
        [(2, 26, f"settle: seen 'x'; expected {BAD}")],
        keys={"encoding": "utf-16"},
        columns=SETTLE_ONLY,
    ),
    Case(
        "utf-16 big-endian by its mark",
        b"\xfe\xff" + "date,settle\r\n2024-01-02,x\r\n2024-01-03,2.5\r\n".encode("utf-16-be"),
        ["NWHT-2024-03 2024-01-03 . . . 2.5 . . @3"],
        [(2, 28, f"settle: seen 'x'; expected {BAD}")],
        keys={"encoding": "utf-16"},
        columns=SETTLE_ONLY,
    ),
    Case(
        "utf-16-le without a mark; a letter whose byte is a line end's is none",
        "date,settle\n2024-01-02,Ċ\n2024-01-03,2.5\n".encode("utf-16-le"),
        ["NWHT-2024-03 2024-01-03 . . . 2.5 . . @3"],
        [(2, 24, f"settle: seen 'Ċ'; expected {BAD}")],
        keys={"encoding": "utf-16-le"},
        columns=SETTLE_ONLY,
    ),
    Case(
        "utf-16-be without a mark",
        "date,settle\r2024-01-02,2.5\r".encode("utf-16-be"),
        ["NWHT-2024-03 2024-01-02 . . . 2.5 . . @2"],
        keys={"encoding": "utf-16-be"},
        columns=SETTLE_ONLY,
    ),
    Case(
        "utf-16 cut within a character",
        b"\xff\xfe" + "date,settle\n2024-01-02,2.5\n".encode("utf-16-le")[:-1],
        [],
        [(2, 26, TORN)],
        keys={"encoding": "utf-16"},
        columns=SETTLE_ONLY,
    ),
    Case(
        "latin-1",
        "jour,règlement\n2024-01-02,2.5\n".encode("latin-1"),
        ["NWHT-2024-03 2024-01-02 . . . 2.5 . . @2"],
        keys={"encoding": "latin-1"},
        columns={**SETTLE_ONLY, "session": "jour", "settle": "règlement"},
    ),
    settle_case("cp1252 with an en dash for a minus", "–2.5", "-2.5", keys={"encoding": "cp1252"}, market=NEGATIVE),
    Case(
        "bytes that are not of the encoding reject their row",
        b"date,settle\n2024-01-02,2\xe9\n2024-01-03,2.5\n",
        ["NWHT-2024-03 2024-01-03 . . . 2.5 . . @3"],
        [(2, 12, "bytes that are not of the declared encoding")],
        columns=SETTLE_ONLY,
    ),
]

MARKS = [
    settle_case("decimal comma", "212,25", "212.25", keys={"decimal": ",", "delimiter": ";"}),
    settle_case("comma for thousands, quoted", '"1,212.25"', "1212.25", keys={"thousands": ","}),
    settle_case(
        "dot for thousands beside a decimal comma",
        "1.212,25",
        "1212.25",
        keys={"decimal": ",", "thousands": ".", "delimiter": ";"},
    ),
    settle_case("blank for thousands", "1 212 250.5", "1212250.5", keys={"thousands": " "}),
    settle_case("no-break space for thousands", "1\u00a0212.25", "1212.25", keys={"thousands": "\u00a0"}),
    settle_case("narrow no-break space for thousands", "1\u202f212.25", "1212.25", keys={"thousands": "\u202f"}),
    settle_case(
        "a declared blank means the no-break ones too", "1\u202f212\u00a0250", "1212250", keys={"thousands": " "}
    ),
    settle_case("apostrophe for thousands", "1'212.25", "1212.25", keys={"thousands": "'"}),
    settle_case("typographic apostrophe for thousands", "1’212.25", "1212.25", keys={"thousands": "'"}),
    refused(
        "thousands that are not in threes", "1 21.5", f"settle: seen '1 21.5'; expected {BAD}", keys={"thousands": " "}
    ),
    refused("a thousands mark nobody declared", "1 212", f"settle: seen '1 212'; expected {BAD}"),
    settle_case("scientific notation", "2.1225E+02", "212.25"),
    settle_case("scientific notation, small", "25e-1", "2.5"),
    refused("a power too large for any price", "1e300", f"settle: seen '1e300'; expected {BAD}"),
    refused("a power too small to be kept", "1e-400", f"settle: seen '1e-400'; expected {BAD}"),
    settle_case("hyphen for a minus", "-2.5", "-2.5", market=NEGATIVE),
    settle_case("Unicode minus", "\u22122.5", "-2.5", market=NEGATIVE),
    settle_case("en dash for a minus", "\u20132.5", "-2.5", market=NEGATIVE),
    settle_case("em dash for a minus", "\u20142.5", "-2.5", market=NEGATIVE),
    settle_case("minus parted from its number", "- 2.5", "-2.5", market=NEGATIVE),
    settle_case("plus sign", "+2.5", "2.5"),
    settle_case("a half", "212½", "212.5"),
    settle_case("a quarter", "212¼", "212.25"),
    settle_case("three quarters, parted", "212 ¾", "212.75"),
    settle_case("an eighth alone", "⅛", "0.125"),
    settle_case("minus a half", "−½", "-0.5", market=NEGATIVE),
    refused("a fraction behind decimals", "212.5½", f"settle: seen '212.5½'; expected {BAD}"),
    settle_case("number that begins with its mark", ".5", "0.5"),
    settle_case("number that ends with its mark", "212.", "212"),
    settle_case("blanks around a number", "  212.25 ", "212.25"),
    settle_case("hundredths", "21225", "212.25", keys={"price_scale": 0.01}),
    settle_case("a price of a market quoted ten times too small", "21.225", "212.25", keys={"price_scale": 10}),
    refused("two decimal marks", "2.1.2", f"settle: seen '2.1.2'; expected {BAD}"),
    refused("not a number by name", "nan", f"settle: seen 'nan'; expected {BAD}"),
    refused("infinity by name", "inf", f"settle: seen 'inf'; expected {BAD}"),
    refused("hexadecimal", "0x1F", f"settle: seen '0x1F'; expected {BAD}"),
    refused("digits grouped by underscores", "1_000", f"settle: seen '1_000'; expected {BAD}"),
    refused("a formula", "=1+1", f"settle: seen '=1+1'; expected {BAD}"),
    refused("a tag", "<b>1</b>", f"settle: seen '<b>1</b>'; expected {BAD}"),
]

NOTATIONS = [
    settle_case("32nds", "117'16", "117.5", market=THIRTY_SECONDS),
    settle_case("32nds with a hyphen", "97-12", "97.375", market=THIRTY_SECONDS),
    settle_case("32nds with a half as plus", "97-12+", "97.390625", market=THIRTY_SECONDS),
    settle_case("32nds with a half as five", "117'165", "117.515625", market=THIRTY_SECONDS),
    settle_case("32nds with a quarter", "117'162", "117.5078125", market=THIRTY_SECONDS),
    settle_case("32nds with three quarters", "117'167", "117.5234375", market=THIRTY_SECONDS),
    settle_case("32nds with a typographic apostrophe", "117’160", "117.5", market=THIRTY_SECONDS),
    refused(
        "a 32nd too many",
        "117'32",
        "settle: seen \"117'32\"; expected a price (32nds, decimal mark '.')",
        good="2'16",
        market=THIRTY_SECONDS,
    ),
    refused(
        "a third digit that is no quarter",
        "117'163",
        "settle: seen \"117'163\"; expected a price (32nds, decimal mark '.')",
        good="2'16",
        market=THIRTY_SECONDS,
    ),
    settle_case("64ths", "1-05", "1.078125", market=SIXTY_FOURTHS),
    refused(
        "64ths of one digit",
        "1-5",
        "settle: seen '1-5'; expected a price (64ths, decimal mark '.')",
        good="2-32",
        market=SIXTY_FOURTHS,
    ),
    settle_case("eighths", "523'6", "523.75", market=EIGHTHS),
    refused(
        "an eighth too many",
        "523'8",
        "settle: seen \"523'8\"; expected a price (8ths, decimal mark '.')",
        good="2'4",
        market=EIGHTHS,
    ),
    Case(
        "counts stay decimal where prices are in 32nds",
        b"date,settle,volume\n2024-01-02,117'16,1 200\n",
        ["NWHT-2024-03 2024-01-02 . . . 117.5 1200 . @2"],
        keys={"thousands": " "},
        columns={**SETTLE_ONLY, "volume": "volume"},
        market=THIRTY_SECONDS,
    ),
]


def dated(name: str, written: str, date_format: str, day: str = "2024-01-02") -> Case:
    text = f"date,settle\n{written},2.5\n".encode()
    bars = [f"NWHT-2024-03 {day} . . . 2.5 . . @2"]
    return Case(name, text, bars, keys={"date_format": date_format}, columns=SETTLE_ONLY)


def undated(name: str, written: str, date_format: str) -> Case:
    text = f"date,settle\n{written},2.5\n".encode()
    reason = f"session: seen {written!r}; expected a date as {date_format}"
    return Case(name, text, [], [(2, 12, reason)], keys={"date_format": date_format}, columns=SETTLE_ONLY)


DATES = [
    dated("day first with dots", "02.01.2024", "%d.%m.%Y"),
    dated("day first with strokes, without noughts", "2/1/2024", "%d/%m/%Y"),
    dated("month first", "01/02/2024", "%m/%d/%Y"),
    dated("compact", "20240102", "%Y%m%d"),
    dated("compact with a year of two digits", "020124", "%d%m%y"),
    dated("month by name", "02-Jan-2024", "%d-%b-%Y"),
    dated("date with a time", "2024-01-02 00:00:00", "%Y-%m-%d %H:%M:%S"),
    dated("a session before 1970", "1969-12-31", "%Y-%m-%d", "1969-12-31"),
    undated("compact with a digit missing", "2024112", "%Y%m%d"),
    undated("day that does not exist", "31.02.2024", "%d.%m.%Y"),
    undated("month first where the day comes first", "01/23/2024", "%d/%m/%Y"),
    undated("date followed by something", "2024-01-02x", "%Y-%m-%d"),
]

ABSENT = [
    Case(
        "blank and NA-like marks",
        HEAD + b"2024-01-02,,NA,n/a,2.5,-, \n",
        ["NWHT-2024-03 2024-01-02 . . . 2.5 . . @2"],
        keys={"missing": ["", "NA", "n/a", "-"]},
    ),
    Case(
        "a mark nobody declared is no number",
        HEAD + b"2024-01-02,1,2,0.5,NA,7,9\n" + ROW,
        [f"{BAR} @3"],
        [(2, 36, f"settle: seen 'NA'; expected {BAD}")],
    ),
    Case(
        "zero for missing, only where declared",
        HEAD + b"2024-01-02,0,0.00,0,2.5,0,0\n",
        ["NWHT-2024-03 2024-01-02 . . . 2.5 0 0 @2"],
        keys={"zero_is_missing": ["open", "high", "low"]},
    ),
    Case(
        "zero stays where it may be a price",
        HEAD + b"2024-01-02,0,0,0,0,0,0\n",
        ["NWHT-2024-03 2024-01-02 0 0 0 0 0 0 @2"],
    ),
    Case("open interest alone", HEAD + b"2024-01-02,,,,,,9\n", ["NWHT-2024-03 2024-01-02 . . . . . 9 @2"]),
    settle_case("settle without open, high and low", "2.5", "2.5"),
    Case(
        "a row with nothing in it",
        HEAD + b"2024-01-02,,,,,,\n" + ROW,
        [f"{BAR} @3"],
        [(2, 36, "row: seen nothing; expected a value in at least one field")],
    ),
    Case(
        "a row without a date",
        HEAD + b",1,2,0.5,1.5,7,9\n" + ROW,
        [f"{BAR} @3"],
        [(2, 36, "session: seen nothing; expected a date as %Y-%m-%d")],
    ),
    Case(
        "counts in decimals and in powers",
        HEAD + b"2024-01-02,1,2,0.5,1.5,7.0,1.2e3\n",
        ["NWHT-2024-03 2024-01-02 1 2 0.5 1.5 7 1200 @2"],
    ),
    Case(
        "a count below zero, and a part of a contract",
        HEAD + b"2024-01-02,1,2,0.5,1.5,-7,9\n2024-01-03,1,2,0.5,1.5,7,9.5\n",
        [],
        [
            (2, 36, "volume: seen '-7'; expected a whole number of contracts"),
            (3, 64, "open_interest: seen '9.5'; expected a whole number of contracts"),
        ],
    ),
]

LINES = [
    Case("CR LF", (HEAD + b"2024-01-02,,,,x,,\n" + ROW).replace(b"\n", b"\r\n"), [f"{BAR} @3"],
         [(2, 37, f"settle: seen 'x'; expected {BAD}")]),
    Case("CR alone", (HEAD + b"2024-01-02,,,,x,,\n" + ROW).replace(b"\n", b"\r"), [f"{BAR} @3"],
         [(2, 36, f"settle: seen 'x'; expected {BAD}")]),
    Case("line ends mixed", HEAD[:-1] + b"\r\n" + b"2024-01-02,,,,x,,\r" + b"\n" + b"\r" + ROW, [f"{BAR} @4"],
         [(2, 37, f"settle: seen 'x'; expected {BAD}")]),
    Case("title lines", b"Northmark\n\nprices, all of them\n" + HEAD + ROW, [f"{BAR} @5"], keys={"skip_lines": 3}),
    Case("comments above, between and below", b"# title\n" + HEAD + b"# more\n" + ROW + b"# end\n", [f"{BAR} @4"],
         keys={"comment": "#"}),
    Case("a comment of two marks", HEAD + b"//, more\n" + ROW, [f"{BAR} @3"], keys={"comment": "//"}),
    Case("blank lines, also of blanks", b"\n" + HEAD + b"   \n\n" + ROW + b"\n\n", [f"{BAR} @5"]),
    Case("repeated header", HEAD + ROW + HEAD + b"2024-01-03,1,2,0.5,1.5,7,9\n",
         [f"{BAR} @2", "NWHT-2024-03 2024-01-03 1 2 0.5 1.5 7 9 @4"]),
    Case("repeated header behind a mark, with other blanks", HEAD + ROW + b"\xef\xbb\xbf" + HEAD.replace(b",", b" , "),
         [f"{BAR} @2"]),
    Case("footer with totals", HEAD + ROW + b"Total,,,,,7,9\n", [f"{BAR} @2"], keys={"not_rows": "Total"}),
    Case("source note of its own width", HEAD + ROW + b"Source: exchange, delayed\n", [f"{BAR} @2"],
         keys={"not_rows": "(Total|Source)"}),
    Case("footer that nobody declared", HEAD + ROW + b"Total,,,,,7,9\n", [f"{BAR} @2"],
         [(3, 63, "session: seen 'Total'; expected a date as %Y-%m-%d")]),
    Case("footer whose mark stands further on is a row", HEAD + ROW + b"Sum Total,,,,,7,9\n", [f"{BAR} @2"],
         [(3, 63, "session: seen 'Sum Total'; expected a date as %Y-%m-%d")], keys={"not_rows": "Total"}),
    Case("footer without a line end", HEAD + ROW + b"Total,,,,,7,9", [f"{BAR} @2"], keys={"not_rows": "Total"}),
    Case("footer cut short", HEAD + ROW + b"Tot", [f"{BAR} @2"], [(3, 63, TORN)], keys={"not_rows": "Total"}),
    Case("no final line end", HEAD + ROW + b"2024-01-03,1,2,0.5,1.5,7,9", [f"{BAR} @2"], [(3, 63, TORN)]),
    Case("header alone", HEAD, []),
    Case("a field too few and one too many", HEAD + ROW[:-3] + b"\n" + ROW[:-1] + b",5\n" + ROW, [f"{BAR} @4"],
         [(2, 36, "6 fields; expected 7 as in the header"), (3, 61, "8 fields; expected 7 as in the header")]),
    Case("a NUL", HEAD + b"2024-01-02,1,2,0.5,1\0.5,7,9\n" + ROW, [f"{BAR} @3"], [(2, 36, "a NUL byte")]),
    Case("a form feed parts no line", HEAD + b"2024-01-02,1,2,0.5,1\x0c5,\"7\",9\n" + ROW, [f"{BAR} @3"],
         [(2, 36, f"settle: seen '1\\x0c5'; expected {BAD}")]),
    Case("a line beyond any row", HEAD + b"9" * 40_000 + b"\n" + ROW, [f"{BAR} @3"],
         [(2, 36, "a line of more than 32,768 characters, of which the first 1,000 are kept")]),
]  # fmt: skip

QUOTES = [
    Case(
        "all quoted",
        b'"date","settle"\n"2024-01-02","2.5"\n',
        ["NWHT-2024-03 2024-01-02 . . . 2.5 . . @2"],
        columns=SETTLE_ONLY,
    ),
    Case(
        "blanks around headers",
        b" date , settle \n2024-01-02,2.5\n",
        ["NWHT-2024-03 2024-01-02 . . . 2.5 . . @2"],
        columns=SETTLE_ONLY,
    ),
    Case(
        "blanks around quotation marks",
        b' "date" , "settle" \n "2024-01-02" , "2.5" \n',
        ["NWHT-2024-03 2024-01-02 . . . 2.5 . . @2"],
        columns=SETTLE_ONLY,
    ),
    Case(
        "delimiter within quotation marks",
        b'date;"settle; cents"\n2024-01-02;"2.5"\n',
        ["NWHT-2024-03 2024-01-02 . . . 2.5 . . @2"],
        keys={"delimiter": ";"},
        columns={**SETTLE_ONLY, "settle": "settle; cents"},
    ),
    Case(
        "doubled quotation marks",
        b'date,"the ""settle"""\n2024-01-02,2.5\n',
        ["NWHT-2024-03 2024-01-02 . . . 2.5 . . @2"],
        columns={**SETTLE_ONLY, "settle": 'the "settle"'},
    ),
    Case(
        "header over two lines",
        b'date,"settle\nEUR"\n2024-01-02,2.5\n',
        ["NWHT-2024-03 2024-01-02 . . . 2.5 . . @3"],
        columns={**SETTLE_ONLY, "settle": "settle\nEUR"},
    ),
    Case(
        "remark over two lines in a column that is not read",
        b'date,settle,remark\n2024-01-02,2.5,"a\nb"\n2024-01-03,x,"c\r\nd"\n',
        ["NWHT-2024-03 2024-01-02 . . . 2.5 . . @2"],
        [(4, 40, f"settle: seen 'x'; expected {BAD}")],
        columns=SETTLE_ONLY,
    ),
    Case(
        "a quotation mark that never closes",
        b'date,settle\n2024-01-02,"2.5\n2024-01-03,2.5\n',
        ["NWHT-2024-03 2024-01-03 . . . 2.5 . . @3"],
        [(2, 12, "a quotation mark is opened and never closed")],
        columns=SETTLE_ONLY,
    ),
    Case(
        "a quotation mark that would swallow rows",
        b'date,settle\n2024-01-02,"2.5\n2024-01-03,2.5\n2024-01-04,2.5"\n',
        ["NWHT-2024-03 2024-01-03 . . . 2.5 . . @3"],
        [(2, 12, "a quotation mark is opened and never closed"), (4, 43, f"settle: seen '2.5\"'; expected {BAD}")],
        columns=SETTLE_ONLY,
    ),
    Case(
        "text behind a closing quotation mark",
        b'date,settle\n2024-01-02,"21"2.5\n',
        [],
        [(2, 12, "a quotation mark within a field")],
        columns=SETTLE_ONLY,
    ),
]

CONTRACTS = [
    coded_case("code of letter and two digits", "H25", "2024-01-02", "NWHT-2025-03"),
    coded_case("code in lower case", " h25 ", "2024-01-02", "NWHT-2025-03"),
    coded_case("name and two digits", "MAR-25", "2024-01-02", "NWHT-2025-03", r"(?P<month>[A-Z]{3})-(?P<year>\d\d)"),
    coded_case(
        "long name and four digits", "March 2025", "2024-01-02", "NWHT-2025-03", r"(?P<month>[A-Z]+) (?P<year>\d{4})"
    ),
    coded_case("year and month", "202503", "2024-01-02", "NWHT-2025-03", r"(?P<year>\d{4})(?P<month>\d\d)"),
    coded_case("two digits of the last century", "H99", "1998-01-02", "NWHT-1999-03"),
    coded_case("two digits by a window", "H25", "1924-01-02", "NWHT-1925-03", year_window=1900),
    coded_case("one digit, this year", "H4", "2024-01-02", "NWHT-2024-03"),
    coded_case("one digit, next year", "H5", "2024-12-30", "NWHT-2025-03"),
    coded_case("one digit, in the month of delivery", "H4", "2024-03-28", "NWHT-2024-03"),
    coded_case("one digit, in the month after delivery", "H4", "2024-04-02", "NWHT-2024-03"),
    coded_case("one digit, two months after delivery: ten years on", "H4", "2024-05-02", "NWHT-2034-03"),
    coded_case("one digit across a decade", "H1", "2019-12-02", "NWHT-2021-03"),
    coded_case("one digit, delivered in the December before", "Z3", "2024-01-02", "NWHT-2023-12"),
    coded_reject("code of no month", "A25", f"contract: seen 'A25'; {AS_CODE}"),
    coded_reject("code with something behind it", "H25x", f"contract: seen 'H25x'; {AS_CODE}"),
    coded_reject("no code", "", f"contract: seen nothing; {AS_CODE}"),
    coded_reject(
        "a month the market does not list", "F25", "month: seen nothing; expected a delivery month among [3, 5, 9, 12]"
    ),
    coded_reject(
        "one digit without a date to settle it by",
        "H5",
        "session: seen 'soon'; expected a date as %Y-%m-%d",
        day="soon",
    ),
    Case(
        "several contracts a file, by one digit",
        CODED + b"H4,2024-01-02,1.5\nK4,2024-01-02,2.5\nH5,2024-01-02,3.5\nH4,2024-01-03,4.5\n",
        [
            "NWHT-2024-03 2024-01-02 . . . 1.5 . . @2",
            "NWHT-2024-05 2024-01-02 . . . 2.5 . . @3",
            "NWHT-2025-03 2024-01-02 . . . 3.5 . . @4",
            "NWHT-2024-03 2024-01-03 . . . 4.5 . . @5",
        ],
        keys={"files": r"(?P<market>[A-Z0-9]+)\.csv", "contract_code": ONE_COLUMN},
        columns=IN_CODE,
        path="NWHT.csv",
    ),
    Case(
        "several markets a file, in the code",
        CODED + b"NWHTH4,2024-01-02,1.5\nNOILH4,2024-01-02,2.5\nnwhtK4,2024-01-02,3.5\n??H4,2024-01-02,4.5\n",
        ["NWHT-2024-03 2024-01-02 . . . 1.5 . . @2", "NWHT-2024-05 2024-01-02 . . . 3.5 . . @4"],
        [
            (
                5,
                87,
                f"contract: seen '??H4'; expected a contract written as {MARKET_AND_CODE}",
            )
        ],
        keys={"files": ANY, "contract_code": MARKET_AND_CODE},
        columns=IN_CODE,
        path="all.csv",
        elsewhere=1,
    ),
    Case(
        "several markets and contracts a file, in columns of their own",
        b"m,y,mo,date,settle\nNWHT,24,H,2024-01-02,1.5\nNOIL,24,4,2024-01-02,2.5\nN-1,24,H,2024-01-02,2.5\n"
        b"NWHT,2024,May,2024-01-02,3.5\n,24,H,2024-01-02,2.5\n",
        ["NWHT-2024-03 2024-01-02 . . . 1.5 . . @2", "NWHT-2024-05 2024-01-02 . . . 3.5 . . @5"],
        [
            (4, 69, "market: seen 'N-1'; expected a market code of A-Z and 0-9, at most 12"),
            (6, 122, "market: seen nothing; expected a market code of A-Z and 0-9, at most 12"),
        ],
        keys={"files": ANY},
        columns={**SETTLE_ONLY, "market": "m", "year": "y", "month": "mo"},
        path="all.csv",
        elsewhere=1,
    ),
    Case(
        "month in a column, year in the path",
        b"mo,date,settle\n12,2024-01-02,1.5\n13,2024-01-02,2.5\n",
        ["NWHT-2024-12 2024-01-02 . . . 1.5 . . @2"],
        [(3, 33, "month: seen '13'; expected a delivery month as number, code or name")],
        keys={"files": r"(?P<market>[A-Z0-9]+)_(?P<year>\d{4})\.csv"},
        columns={**SETTLE_ONLY, "month": "mo"},
        path="NWHT_2024.csv",
    ),
]

CASES = [*DELIMITERS, *ENCODINGS, *MARKS, *NOTATIONS, *DATES, *ABSENT, *LINES, *QUOTES, *CONTRACTS]


@dataclass
class Came:
    """What became of a case: bars as they are written above, rejects, and rows of other markets."""

    bars: list[str]
    rejects: list[tuple[int, int, str]]
    texts: list[tuple[int, str]]
    elsewhere: int
    row_count: int


def read(case: Case) -> Came:
    layout = make_layout(case)
    claim = claim_file(layout, case.path)
    assert claim is not None
    rows = split_file(RawFile(case.path, "a" * 64, case.text, "case", layout, claim, 1, len(case.text)))
    parsed = parse_rows([rows], parse_market(MARKET.format(extra=case.market), "markets/nwht.toml"))
    bars = [
        " ".join([parsed.contracts[contract], str(day_of(session)), *map(shown, values), f"@{line}"])
        for contract, session, values, line in zip(
            parsed.contract, parsed.session, parsed.values, parsed.line, strict=True
        )
    ]
    rejects = sorted((reject.line, reject.offset, reject.reason) for reject in rows.rejects)
    texts = [(reject.offset, reject.text) for reject in rows.rejects]
    return Came(bars, rejects, texts, rows.elsewhere, rows.row_count)


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_variant_gives_exactly_its_bars_and_rejects(case: Case) -> None:
    came = read(case)
    assert came.bars == case.bars
    assert came.rejects == case.rejects
    assert came.elsewhere == case.elsewhere
    assert came.row_count == len(case.bars) + len(case.rejects) + case.elsewhere


def test_there_are_at_least_sixty_variants_of_different_names() -> None:
    assert len({case.name for case in CASES}) == len(CASES) >= 60


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_text_of_a_reject_stands_at_its_offset(case: Case) -> None:
    """The offset is one of the unpacked text's bytes, and what stands there is the reject's text."""
    encoding = str(case.keys.get("encoding", "utf-8"))
    wide = "utf-16-be" if case.text.startswith(b"\xfe\xff") else "utf-16-le"
    codec = wide if encoding == "utf-16" else encoding
    for offset, text in read(case).texts:
        there = case.text[offset:].decode(codec, errors="replace").replace("\r\n", "\n")
        assert there.startswith(text)
        assert text != ""


@pytest.mark.parametrize("case", [case for case in CASES if len(case.text) < 2000], ids=lambda case: case.name)
def test_variant_is_read_the_same_in_small_stretches(case: Case, monkeypatch: pytest.MonkeyPatch) -> None:
    """Large files are read a megabyte at a time; where a stretch ends must not show."""
    whole = read(case)
    for size in (96, 100, 102):
        monkeypatch.setattr("contracts.unpack._BLOCK", size)
        monkeypatch.setattr("contracts.intake._MANY_ROWS", 0)
        assert read(case) == whole


@pytest.mark.parametrize(
    ("keys", "columns", "told"),
    [
        ({"contract_code": "[A-Z"}, {"contract": "c"}, "contract_code"),
        ({"contract_code": "(?P<letter>.)"}, {"contract": "c"}, "contract_code"),
        ({"contract_code": "(?P<year>.)"}, {}, "contract_code"),
        ({"contract_code": "(?P<year>.)"}, {"contract": "c"}, "contract_code"),
        ({}, {"contract": "c"}, "columns.contract"),
        ({"not_rows": "Total|"}, {}, "not_rows"),
        ({"not_rows": "(Total"}, {}, "not_rows"),
        ({"encoding": "utf-7"}, {}, "encoding"),
        ({"encoding": "cp037"}, {}, "encoding"),
        ({"delimiter": '"'}, {}, "delimiter"),
    ],
)
def test_layout_that_cannot_be_meant_is_told_at_its_key(
    keys: dict[str, object], columns: dict[str, str | None], told: str
) -> None:
    with pytest.raises(DeskError) as caught:
        make_layout(Case("", b"", [], keys=keys, columns=columns))
    assert {mistake.key for mistake in caught.value.mistakes} == {told}
