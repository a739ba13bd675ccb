"""The text of raw files -> bars and rejected rows, each with its line number.

Belongs here: splitting text into rows, reading their fields, and saying why a row cannot be read. Does not
belong here: decompression (`unpack.py`), what becomes of two rows for one session (`arrivals.py`).
"""

import csv
import datetime
import re
from dataclasses import dataclass, field

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from contracts.deliveries import Delivery, contract_name, parse_month, parse_year
from contracts.errors import IntakeError
from contracts.layouts import BAR_FIELDS, PRICE_FIELDS, Claim, Layout
from contracts.markets import Market
from contracts.notation import parse_prices
from contracts.sessions import day_number

MOST_ROWS = 20_000_000
# No price or count of anything that trades is larger; beyond it doubles no longer hold every whole number.
LARGEST_NUMBER = 2.0**53
_LINE_END = re.compile(r"\r\n|\n|\r")
# A quoted field may run over a few lines; past these an opening quote is taken for a slip of its own line.
_LONGEST_RECORD = 20
# Stands in the place of a byte that is not of the declared encoding.
_UNREADABLE = "�"
TORN = "the file ends without a line end, so its last row may be cut; held out until the file comes whole"


@dataclass(frozen=True)
class RawFile:
    """One raw file: where it came from, its unpacked text, and what its layout and path say of it."""

    path: str
    file: str
    text: bytes
    layout_name: str
    layout: Layout
    claim: Claim
    taken_in: int
    size: int
    # A file of several markets is read for each of them; what it holds as a whole is told by one of them.
    is_told_here: bool = True


@dataclass(frozen=True)
class Reject:
    """A row that could not be read, whole."""

    line: int
    text: str
    reason: str
    contract: str | None = None


@dataclass
class FileRows:
    """The rows of one file as text: columns by field name, physical lines, and the rows that are no rows."""

    raw: RawFile
    columns: dict[str, list[str]]
    lines: list[int]
    texts: list[str]
    rejects: list[Reject] = field(default_factory=list)
    is_torn: bool = False
    row_count: int = 0


@dataclass(frozen=True)
class ParsedRows:
    """Rows read into numbers, in order of file and line.

    contract: indices into `contracts`, (n,); session: day numbers, (n,); values: (n, 6) in the order of
    BAR_FIELDS, NaN where absent; source: index of the file in the call, (n,); line: (n,).
    """

    contracts: tuple[str, ...]
    contract: np.ndarray
    session: np.ndarray
    values: np.ndarray
    source: np.ndarray
    line: np.ndarray


def split_file(raw: RawFile) -> FileRows:
    """Split one file into rows of text; raises IntakeError where it has no usable header."""
    text = raw.text.decode(raw.layout.encoding, errors="replace").removeprefix("﻿")
    if not text:
        raise IntakeError(f"{raw.path}: the file is empty; expected a header and rows")
    is_torn = text[-1] not in "\r\n"
    lines = _LINE_END.split(text)
    if not is_torn:
        lines.pop()
    records = _records(lines, raw.layout)
    position, header_line, header = _find_header(records, raw)
    places = _places(header, raw, header_line)
    rows = FileRows(raw, {name: [] for name in places}, [], [], is_torn=is_torn)
    width = len(header)
    kept: list[list[str]] = []
    last_line = len(lines)
    for line, line_text, fields in records[position + 1 :]:
        if fields == header:
            continue
        rows.row_count += 1
        reason = _row_trouble(fields, width, line_text)
        if is_torn and line + line_text.count("\n") == last_line:
            reason = TORN
        if reason or fields is None:
            rows.rejects.append(Reject(line, line_text, reason or "", raw.claim.contract))
            continue
        rows.lines.append(line)
        rows.texts.append(line_text)
        kept.append(fields)
    if not raw.is_told_here:
        rows.rejects.clear()
    if rows.row_count > MOST_ROWS:
        raise IntakeError(f"{raw.path}: seen {rows.row_count:,} rows; expected at most {MOST_ROWS:,}")
    turned = list(zip(*kept, strict=True)) if kept else [()] * width
    rows.columns = {name: list(turned[place]) for name, place in places.items()}
    return rows


def _row_trouble(fields: list[str] | None, width: int, text: str) -> str | None:
    if fields is None:
        return "a quotation mark is opened and never closed"
    if _UNREADABLE in text:
        return "bytes that are not of the declared encoding"
    if "\0" in text:
        return "a NUL byte"
    if len(fields) != width:
        return f"{len(fields)} fields; expected {width} as in the header"
    return None


def _records(lines: list[str], layout: Layout) -> list[tuple[int, str, list[str] | None]]:
    """Physical line number, text and fields of every line that is neither blank, comment nor skipped."""
    records: list[tuple[int, str, list[str] | None]] = []
    comment, delimiter = layout.comment, layout.delimiter
    at = layout.skip_lines
    while at < len(lines):
        text, number = lines[at], at + 1
        at += 1
        if not text.strip() or (comment and text.startswith(comment)):
            continue
        if '"' not in text:
            records.append((number, text, text.split(delimiter)))
            continue
        ahead = at
        while text.count('"') % 2 and ahead < min(len(lines), at + _LONGEST_RECORD):
            text += "\n" + lines[ahead]
            ahead += 1
        if text.count('"') % 2:
            records.append((number, lines[number - 1], None))
            continue
        at = ahead
        parsed = list(csv.reader(text.splitlines(keepends=True), delimiter=delimiter))
        records.append((number, text, [field for row in parsed for field in row] if len(parsed) != 1 else parsed[0]))
    return records


def _find_header(records: list[tuple[int, str, list[str] | None]], raw: RawFile) -> tuple[int, int, list[str]]:
    if not records:
        raise IntakeError(f"{raw.path}: nothing after {raw.layout.skip_lines} skipped lines; expected a header")
    line, _, fields = records[0]
    if fields is None:
        raise IntakeError(f"{raw.path}:{line}: an unclosed quotation mark; expected a header")
    return 0, line, fields


def _places(header: list[str], raw: RawFile, line: int) -> dict[str, int]:
    """Where each declared column stands in the header."""
    names = [name.strip() for name in header]
    places: dict[str, int] = {}
    for name, wanted in raw.layout.columns.model_dump().items():
        if wanted is None:
            continue
        count = names.count(wanted)
        if count != 1:
            there = "".join(mark if mark.isprintable() else _UNREADABLE for mark in ", ".join(names)[:200])
            seen = "twice" if count else f"not among {there}"
            raise IntakeError(
                f"{raw.path}:{line}: column {wanted!r} ({name}) is {seen}; "
                f"expected once, as layout {raw.layout_name} says"
            )
        places[name] = names.index(wanted)
    return places


def parse_rows(files: list[FileRows], market: Market) -> ParsedRows:
    """Read the text of all files of one market into numbers; what cannot be read is added to each file's rejects.

    Files of one layout are read together. Rows of other markets (where the market is a column) are left out.
    """
    by_layout: dict[str, list[int]] = {}
    for index, rows in enumerate(files):
        if rows.lines:
            by_layout.setdefault(rows.raw.layout_name, []).append(index)
    parts = [_parse_layout(files, indices, market) for indices in by_layout.values()]
    names = sorted({name for part in parts for name in part.contracts})
    if not parts:
        empty = np.empty(0, dtype=np.int64)
        return ParsedRows((), empty, empty, np.empty((0, len(BAR_FIELDS))), empty, empty)
    contract = np.concatenate(
        [np.array([names.index(name) for name in part.contracts], dtype=np.int64)[part.contract] for part in parts]
    )
    source = np.concatenate([part.source for part in parts])
    line = np.concatenate([part.line for part in parts])
    order = np.lexsort((line, source))
    return ParsedRows(
        tuple(names),
        contract[order],
        np.concatenate([part.session for part in parts])[order],
        np.concatenate([part.values for part in parts])[order],
        source[order],
        line[order],
    )


class _Reader:
    """Fields of many rows of one layout, with the reason why each unreadable row is so."""

    def __init__(self, files: list[FileRows], indices: list[int], layout: Layout) -> None:
        self.files, self.indices, self.layout = files, indices, layout
        counts = [len(files[index].lines) for index in indices]
        self.source = np.repeat(np.array(indices, dtype=np.int64), counts)
        self.within = np.concatenate([np.arange(count) for count in counts])
        self.reasons: dict[int, str] = {}
        self.size = len(self.source)

    def texts(self, name: str) -> pa.Array:
        """A column of trimmed texts, null where it holds one of the layout's missing marks."""
        parts = [text for index in self.indices for text in self.files[index].columns[name]]
        bare = pc.utf8_trim_whitespace(pa.array(parts, type=pa.string()))
        missing = pc.is_in(bare, value_set=pa.array(self.layout.missing, type=pa.string()))
        return pc.if_else(missing, pa.scalar(None, pa.string()), bare)

    def refuse(self, rows: np.ndarray, texts: pa.Array | None, name: str, expected: str) -> None:
        """Note for each row of the mask why it cannot be read; the first reason of a row stands."""
        for row in np.flatnonzero(rows):
            seen = "nothing" if texts is None or not texts[int(row)].is_valid else repr(texts[int(row)].as_py())
            self.reasons.setdefault(int(row), f"{name}: seen {seen[:80]}; expected {expected}")

    def mapped(self, name: str, convert: "object", kind: str) -> np.ndarray:
        """A column through a function of its texts, called once a different text; -1 where it raises ValueError."""
        texts = self.texts(name)
        coded = texts.dictionary_encode()
        known = np.full(len(coded.dictionary) + 1, -1, dtype=np.int64)
        for index, text in enumerate(coded.dictionary.to_pylist()):
            try:
                known[index] = convert(text)  # type: ignore[operator]
            except ValueError:
                continue
        codes = coded.indices.fill_null(len(coded.dictionary)).to_numpy(zero_copy_only=False)
        values: np.ndarray = known[codes]
        self.refuse(values < 0, texts, name, kind)
        return values


def _parse_layout(files: list[FileRows], indices: list[int], market: Market) -> ParsedRows:
    layout = files[indices[0]].raw.layout
    reader = _Reader(files, indices, layout)
    ours = np.ones(reader.size, dtype=bool)
    if layout.columns.market is not None:
        ours = pc.equal(reader.texts("market"), market.code).fill_null(False).to_numpy(zero_copy_only=False)
    year, month = _deliveries(reader)
    listed = np.isin(month, market.delivery_months) | (month < 0)
    reader.refuse(~listed, None, "month", f"a delivery month among {list(market.delivery_months)}")
    session = reader.mapped(
        "session", lambda text: _read_day(text, layout.date_format), f"a date as {layout.date_format}"
    )
    values = np.full((reader.size, len(BAR_FIELDS)), np.nan)
    for place, name in enumerate(BAR_FIELDS):
        if getattr(layout.columns, name) is not None:
            values[:, place] = _numbers(reader, name, market)
    empty = np.isnan(values).all(axis=1)
    reader.refuse(empty, None, "row", "a value in at least one field")
    good = ours.copy()
    for row, reason in sorted(reader.reasons.items()):
        if ours[row]:
            rows, at = files[reader.source[row]], int(reader.within[row])
            rows.rejects.append(Reject(rows.lines[at], rows.texts[at], reason, rows.raw.claim.contract))
        good[row] = False
    codes = year[good] * 12 + month[good] - 1
    uniques, contract = np.unique(codes, return_inverse=True)
    names = tuple(contract_name(market.code, Delivery(int(code) // 12, int(code) % 12 + 1)) for code in uniques)
    lines = np.concatenate([np.array(files[index].lines, dtype=np.int64) for index in indices])
    return ParsedRows(names, contract, session[good], values[good], reader.source[good], lines[good])


def _deliveries(reader: _Reader) -> tuple[np.ndarray, np.ndarray]:
    """Delivery year and month of every row, from the file's path or from columns."""
    columns = reader.layout.columns
    parts = []
    for name, convert, kind in (
        ("year", lambda text: parse_year(text, reader.layout.year_window), "a year of four or two digits"),
        ("month", parse_month, "a delivery month as number, code or name"),
    ):
        if getattr(columns, name) is not None:
            parts.append(reader.mapped(name, convert, kind))
            continue
        claimed = {index: getattr(reader.files[index].raw.claim, name) for index in reader.indices}
        parts.append(np.array([claimed[int(index)] for index in reader.source], dtype=np.int64))
    return parts[0], parts[1]


def _read_day(text: str, date_format: str) -> int:
    return day_number(datetime.datetime.strptime(text, date_format).date())


def _numbers(reader: _Reader, name: str, market: Market) -> np.ndarray:
    """One field of every row, NaN where absent; unreadable rows are refused."""
    layout, texts = reader.layout, reader.texts(name)
    is_price = name in PRICE_FIELDS
    notation = market.price_notation if is_price else "decimal"
    values, bad = parse_prices(texts, notation, layout.decimal, layout.thousands)
    expected = f"a price ({notation}, decimal mark {layout.decimal!r})" if is_price else "a whole number of contracts"
    if not is_price:
        with np.errstate(invalid="ignore"):
            bad |= ~np.isnan(values) & ((values < 0) | (values != np.floor(values)))
    with np.errstate(invalid="ignore"):
        bad |= np.abs(values) > LARGEST_NUMBER
    reader.refuse(bad, texts, name, expected)
    if is_price and layout.price_scale != 1.0:
        values = scale_prices(values, layout.price_scale)
    if name in layout.zero_is_missing:
        values = np.where(values == 0.0, np.nan, values)
    return values


def scale_prices(values: np.ndarray, factor: float) -> np.ndarray:
    """Prices times a factor; a factor such as 0.01 divides by 100, so that decimal prices stay the nearest doubles."""
    inverse = round(1.0 / factor)
    is_inverse = factor < 1.0 and abs(inverse * factor - 1.0) < 1e-12
    scaled = values / inverse if is_inverse else values * factor
    # Ten decimals of a number below 100,000 are still exact, so that rounding gives the nearest double.
    with np.errstate(invalid="ignore"):
        return np.where(np.abs(scaled) < 1e5, np.round(scaled, 10), scaled)
