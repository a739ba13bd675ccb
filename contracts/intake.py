"""The text of raw files -> bars and rejected rows, each with its line number.

Belongs here: splitting text into rows, reading their fields, and saying why a row cannot be read. Does not
belong here: decompression (`unpack.py`), what becomes of two rows for one session (`arrivals.py`).
"""

import csv
import re
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from contracts.deliveries import Delivery, contract_name, parse_month, parse_year, year_of_digit
from contracts.errors import IntakeError
from contracts.layouts import (
    BAR_FIELDS,
    MARKET_CODE,
    PRICE_FIELDS,
    Claim,
    Layout,
    groups_of,
    market_in_code,
    place_columns,
    read_code,
    read_day,
    read_market,
)
from contracts.markets import Market
from contracts.notation import parse_prices
from contracts.notation import scale_prices as scale_prices
from contracts.sessions import day_number
from contracts.unpack import (
    LONGEST_LINE,
    Reject,
    Texts,
    ends_whole,
    read_blocks,
    read_quoted,
    read_record,
    recall_rows,
    split_lines,
)

MOST_ROWS = 2_000_000
# A file with more is not read as its layout says; telling them one by one would help nobody.
MOST_REJECTS = 200_000
# No price or count of anything that trades is larger; beyond it doubles no longer hold every whole number.
LARGEST_NUMBER = 2.0**53
# From so many rows on a file's columns are held in Arrow, in a tenth of the room.
_MANY_ROWS = 20_000
# Stands in the place of a byte that is not of the declared encoding.
_UNREADABLE = "\N{REPLACEMENT CHARACTER}"
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


@dataclass
class FileRows:
    """The rows of one file as text: columns by field name, physical lines, and the rows that are no rows.

    lines: first physical line of each row in `columns`; spans: lines of the rows that have more than one;
    row_count: rows below the header, unreadable ones included; elsewhere: rows that belong to other markets
    than the one the file was parsed for.
    """

    raw: RawFile
    columns: dict[str, Texts]
    lines: np.ndarray
    spans: dict[int, int]
    rejects: list[Reject] = field(default_factory=list)
    is_torn: bool = False
    row_count: int = 0
    elsewhere: int = 0

    def reject(self, reasons: dict[int, str]) -> None:
        """Add a reject for each physical line given, with the reason why its row cannot be read."""
        found = recall_rows(self.raw.text, self.raw.layout.encoding, sorted(reasons), self.spans)
        for line, offset, text in found:
            self.rejects.append(Reject(line, offset, text, reasons[line], self.raw.claim.contract))


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
    """Split one file into rows of text.

    Raises IntakeError where it has no usable header, more rows than MOST_ROWS, or more of them unreadable
    than MOST_REJECTS.
    """
    splitter = _Splitter(raw)
    waiting: list[str] = []
    number = 1
    for block, is_last in read_blocks(raw.text, raw.layout.encoding):
        lines = waiting + split_lines(block)
        used = splitter.take(lines, number, is_last)
        waiting, number = lines[used:], number + used
    return splitter.finish()


class _Splitter:
    """The rows of one file, taken a stretch of lines at a time."""

    def __init__(self, raw: RawFile) -> None:
        self.raw, self.layout = raw, raw.layout
        self.is_torn = not ends_whole(raw.text, raw.layout.encoding)
        self.not_rows = re.compile(raw.layout.not_rows) if raw.layout.not_rows is not None else None
        self.header: list[str] | None = None
        self.places: dict[str, int] = {}
        self.columns: dict[str, Texts] = {}
        self.lines: list[np.ndarray] = []
        self.spans: dict[int, int] = {}
        self.reasons: dict[int, str] = {}
        self.row_count = 0
        self.is_anything_there = False

    def take(self, lines: list[str], first: int, is_last: bool) -> int:
        """Take lines, of which the first has the number `first`; returns how many need not be offered again."""
        self.is_anything_there |= bool(lines)
        at = 0
        if self.header is None:
            at = self._find_header(lines, first, is_last)
            if self.header is None:
                return at
        is_cut = is_last and self.is_torn
        whole = lines[at : len(lines) - is_cut]
        if self._take_all(whole, first + at):
            at += len(whole)
        used = at + self._take_each(lines[at:], first + at, is_last)
        if self.row_count > MOST_ROWS:
            raise IntakeError(f"{self.raw.path}: seen more than {MOST_ROWS:,} rows; expected at most that many")
        if len(self.reasons) > MOST_REJECTS:
            line, reason = next(iter(self.reasons.items()))
            seen = f"{len(self.reasons):,} rows that cannot be read, the first in line {line}: {reason}"
            raise IntakeError(f"{self.raw.path}: seen {seen}; expected at most {MOST_REJECTS:,}")
        return used

    def _find_header(self, lines: list[str], first: int, is_last: bool) -> int:
        for at in range(max(0, self.layout.skip_lines + 1 - first), len(lines)):
            if self._is_remark(lines[at]):
                continue
            record = read_record(lines, at, self.layout.delimiter, is_last)
            if record is None:
                return at
            fields, reason, span = record
            if fields is None:
                raise IntakeError(f"{self.raw.path}:{first + at}: {reason}; expected a header")
            self.header = [name.strip() for name in fields]
            try:
                self.places = place_columns(self.layout.columns, self.header)
            except ValueError as error:
                where = f"{self.raw.path}:{first + at}: {error}"
                raise IntakeError(f"{where}, as layout {self.raw.layout_name} says") from None
            self.columns = {name: Texts() for name in self.places}
            return at + span
        return len(lines)

    def _is_remark(self, text: str) -> bool:
        comment = self.layout.comment
        return not text.strip() or (comment != "" and text.startswith(comment))

    def _is_no_row(self, text: str) -> bool:
        return self._is_remark(text) or (self.not_rows is not None and self.not_rows.match(text) is not None)

    def _take_all(self, lines: list[str], first: int) -> bool:
        """Take lines together, where nothing in them needs a closer look; returns whether that was so."""
        text = "\n".join(lines)
        if not text or text.isspace():
            return True
        if _UNREADABLE in text or "\0" in text or self.layout.columns.session in text:
            return False
        numbers = np.arange(first, first + len(lines))
        if self.layout.comment or self.not_rows or self.layout.delimiter.isspace() or "" in lines:
            is_row = [not self._is_no_row(line) for line in lines]
            lines = [line for line, keep in zip(lines, is_row, strict=True) if keep]
            numbers = numbers[is_row]
        if not lines:
            return True
        if max(map(len, lines)) > LONGEST_LINE:
            return False
        if '"' in text:
            try:
                rows = list(read_quoted(lines, self.layout.delimiter))
            except csv.Error:
                return False
        else:
            delimiter = self.layout.delimiter
            rows = [line.split(delimiter) for line in lines]
        if len(rows) < len(lines) or set(map(len, rows)) != {len(self.header or ())}:
            return False
        self.row_count += len(rows)
        self._keep(rows, numbers)
        return True

    def _take_each(self, lines: list[str], first: int, is_last: bool) -> int:
        """Take lines one by one; returns how many were taken, the rest waiting for the quotation mark that closes."""
        rows: list[list[str]] = []
        numbers: list[int] = []
        at = 0
        while at < len(lines):
            if self._is_no_row(lines[at]):
                at += 1
                continue
            record = read_record(lines, at, self.layout.delimiter, is_last, self._fits)
            if record is None:
                break
            fields, reason, span = record
            number, text = first + at, "\n".join(lines[at : at + span])
            at += span
            if fields is not None and self._is_header(fields):
                continue
            self.row_count += 1
            if span > 1:
                self.spans[number] = span
            if is_last and self.is_torn and at == len(lines):
                reason = TORN
            reason = reason or self._trouble(fields or [], text)
            if reason:
                self.reasons[number] = reason
            else:
                rows.append(fields or [])
                numbers.append(number)
        if rows:
            self._keep(rows, np.array(numbers))
        return at

    def _is_header(self, fields: list[str]) -> bool:
        bare = [name.strip() for name in fields]
        bare[0] = bare[0].removeprefix("\N{ZERO WIDTH NO-BREAK SPACE}")
        return bare == self.header

    def _fits(self, fields: list[str]) -> bool:
        """Whether a record of several lines is one row: it has every field, and none that is read runs on."""
        is_wide = len(fields) == len(self.header or ())
        return is_wide and not any("\n" in fields[place].strip() for place in self.places.values())

    def _trouble(self, fields: list[str], text: str) -> str | None:
        if _UNREADABLE in text:
            return "bytes that are not of the declared encoding"
        if "\0" in text:
            return "a NUL byte"
        width = len(self.header or ())
        return None if len(fields) == width else f"{len(fields)} fields; expected {width} as in the header"

    def _keep(self, rows: list[list[str]], numbers: np.ndarray) -> None:
        turned = list(zip(*rows, strict=True))
        for name, place in self.places.items():
            self.columns[name].pieces.append(turned[place])
        self.lines.append(numbers)
        if self.row_count > _MANY_ROWS:
            for column in self.columns.values():
                column.pack()

    def finish(self) -> FileRows:
        """All rows of the file; raises IntakeError where there was no header."""
        if not self.is_anything_there:
            raise IntakeError(f"{self.raw.path}: the file is empty; expected a header and rows")
        if self.header is None:
            raise IntakeError(
                f"{self.raw.path}: nothing after {self.layout.skip_lines} skipped lines; expected a header"
            )
        lines = np.concatenate([np.empty(0, dtype=np.int64), *self.lines])
        rows = FileRows(self.raw, self.columns, lines, self.spans, is_torn=self.is_torn, row_count=self.row_count)
        if "market" in groups_of(self.layout.contract_code):
            contracts = self.columns["contract"]
            named = {text: market_in_code(self.layout, text) for text in set(contracts)}
            rows.columns["market"] = Texts([[named[text] for text in contracts]])
        if self.raw.is_told_here:
            rows.reject(self.reasons)
        else:
            rows.elsewhere = len(self.reasons)
        return rows


def parse_rows(files: list[FileRows], market: Market) -> ParsedRows:
    """Read the text of all files of one market into numbers; what cannot be read is added to each file's rejects.

    Files of one layout are read together. Rows of other markets (where the market is a column) are left out.
    Raises IntakeError where more than MOST_REJECTS rows cannot be read.
    """
    by_layout: dict[str, list[int]] = {}
    for index, rows in enumerate(files):
        if len(rows.lines):
            by_layout.setdefault(rows.raw.layout_name, []).append(index)
    parts = [_parse_layout(files, indices, market) for indices in by_layout.values()]
    if not parts:
        empty = np.empty(0, dtype=np.int64)
        return ParsedRows((), empty, empty, np.empty((0, len(BAR_FIELDS))), empty, empty)
    if len(parts) == 1:
        return parts[0]
    names = sorted({name for part in parts for name in part.contracts})
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
        self.line = np.concatenate([files[index].lines for index in indices])
        self.reasons: dict[int, str] = {}
        self.size = len(self.source)
        # Rows of other markets are nobody's to refuse, once it is known which they are.
        self.ours = np.ones(self.size, dtype=bool)

    def texts(self, name: str) -> pa.Array:
        """A column of trimmed texts, null where it holds one of the layout's missing marks."""
        parts: list[pa.Array] = []
        loose: list[str] = []
        for index in self.indices:
            for piece in self.files[index].columns[name].pieces:
                if isinstance(piece, pa.Array):
                    parts += [pa.array(loose, type=pa.string()), piece]
                    loose = []
                else:
                    loose.extend(piece)
        parts.append(pa.array(loose, type=pa.string()))
        bare = pc.utf8_trim_whitespace(pa.concat_arrays(parts) if len(parts) > 1 else parts[0])
        missing = pc.is_in(bare, value_set=pa.array(self.layout.missing, type=pa.string()))
        return pc.if_else(missing, pa.scalar(None, pa.string()), bare)

    def refuse(self, rows: np.ndarray, texts: pa.Array | None, name: str, expected: str) -> None:
        """Note for each of our rows in the mask why it cannot be read; the first reason of a row stands.

        Raises IntakeError where they are more than MOST_REJECTS.
        """
        refused = np.flatnonzero(rows & self.ours)
        for row in refused[:MOST_REJECTS].tolist():
            seen = "nothing" if texts is None or not texts[row].is_valid else repr(texts[row].as_py())
            self.reasons.setdefault(row, f"{name}: seen {seen[:80]}; expected {expected}")
        if len(refused) > MOST_REJECTS:
            place = f"{self.files[self.source[refused[0]]].raw.path}:{self.line[refused[0]]}"
            many = f"the first of {len(refused):,} rows of its market that cannot be read"
            raise IntakeError(f"{place}: {many}; {self.reasons[int(refused[0])]}")

    def mapped(self, name: str, convert: Callable[[str], int], kind: str) -> np.ndarray:
        """A column through a function of its texts, called once a different text; -1 where it raises ValueError."""
        return self.spread(name, lambda text: (convert(text),), 1, kind)[0]

    def spread(self, name: str, convert: Callable[[str], tuple[int, ...]], width: int, kind: str) -> np.ndarray:
        """Several numbers a text, (width, n); all -1 where the function raises ValueError, and the row is refused."""
        texts = self.texts(name)
        coded = texts.dictionary_encode()
        known = np.full((width, len(coded.dictionary) + 1), -1, dtype=np.int64)
        is_read = np.zeros(len(coded.dictionary) + 1, dtype=bool)
        for index, text in enumerate(coded.dictionary.to_pylist()):
            try:
                known[:, index] = convert(text)
            except ValueError:
                continue
            is_read[index] = True
        codes = coded.indices.fill_null(len(coded.dictionary)).to_numpy(zero_copy_only=False)
        self.refuse(~is_read[codes], texts, name, kind)
        return known[:, codes]


def _parse_layout(files: list[FileRows], indices: list[int], market: Market) -> ParsedRows:
    layout = files[indices[0]].raw.layout
    reader = _Reader(files, indices, layout)
    codes = _read_codes(reader, market)
    ours = reader.ours = _ours(reader, codes, market)
    year, month = (_delivery_part(reader, codes, name) for name in ("year", "month"))
    listed = np.isin(month, market.delivery_months) | (month < 0)
    reader.refuse(~listed, None, "month", f"a delivery month among {list(market.delivery_months)}")
    session = reader.mapped(
        "session", lambda text: day_number(read_day(text, layout.date_format)), f"a date as {layout.date_format}"
    )
    if codes is not None and (codes["digit"] >= 0).any():
        day = session.astype("datetime64[D]").astype("datetime64[M]").astype(np.int64) + 1970 * 12
        year = np.where(codes["digit"] >= 0, year_of_digit(codes["digit"], month, day), year)
    values = np.full((reader.size, len(BAR_FIELDS)), np.nan)
    for place, name in enumerate(BAR_FIELDS):
        if getattr(layout.columns, name) is not None:
            values[:, place] = _numbers(reader, name, market)
    empty = np.isnan(values).all(axis=1)
    reader.refuse(empty, None, "row", "a value in at least one field")
    good = ours.copy()
    reasons: dict[int, dict[int, str]] = {}
    for row, reason in reader.reasons.items():
        if ours[row]:
            reasons.setdefault(int(reader.source[row]), {})[int(reader.line[row])] = reason
            good[row] = False
    for index, of_file in sorted(reasons.items()):
        files[index].reject(of_file)
    for index, count in enumerate(np.bincount(reader.source[~ours], minlength=len(files)).tolist()):
        files[index].elsewhere += count
    kept: np.ndarray | slice = slice(None) if good.all() else good
    uniques, contract = np.unique(year[kept] * 12 + month[kept] - 1, return_inverse=True)
    names = tuple(contract_name(market.code, Delivery(int(code) // 12, int(code) % 12 + 1)) for code in uniques)
    return ParsedRows(names, contract, session[kept], values[kept], reader.source[kept], reader.line[kept])


def _ours(reader: _Reader, codes: dict[str, np.ndarray] | None, market: Market) -> np.ndarray:
    """Rows that are read for this market; those of no readable market are refused where the file is told."""
    is_told = np.array([rows.raw.is_told_here for rows in reader.files])[reader.source]
    if reader.layout.columns.market is not None:
        kind = reader.mapped("market", lambda text: int(read_market(text) == market.code), MARKET_CODE)
    elif codes is not None and "market" in groups_of(reader.layout.contract_code):
        kind = codes["market"]
    else:
        return np.ones(reader.size, dtype=bool)
    return (kind == 1) | ((kind < 0) & is_told)


def _read_codes(reader: _Reader, market: Market) -> dict[str, np.ndarray] | None:
    """What the column of contract codes says of each row: market (1 this one, 0 another), year, its last digit, month.

    -1 where a code does not say it; a code that cannot be read is refused.
    """
    layout = reader.layout
    if layout.contract_code is None:
        return None

    def read(text: str) -> tuple[int, ...]:
        code = read_code(layout, text)
        kind = -1 if code.market is None else int(code.market == market.code)
        return (kind, *(-1 if part is None else part for part in (code.year, code.digit, code.month)))

    parts = reader.spread("contract", read, 4, f"a contract written as {layout.contract_code}")
    return dict(zip(("market", "year", "digit", "month"), parts, strict=True))


def _delivery_part(reader: _Reader, codes: dict[str, np.ndarray] | None, name: str) -> np.ndarray:
    """Delivery year or month of every row, from the file's path, a column, or the contract's code."""
    if getattr(reader.layout.columns, name) is not None:
        if name == "month":
            return reader.mapped(name, parse_month, "a delivery month as number, code or name")
        window = reader.layout.year_window
        return reader.mapped(name, lambda text: parse_year(text, window), "a year of four or two digits")
    if codes is not None and {name, f"{name}_code"} & groups_of(reader.layout.contract_code):
        return codes[name]
    claimed = [getattr(rows.raw.claim, name) for rows in reader.files]
    return np.array([-1 if part is None else part for part in claimed], dtype=np.int64)[reader.source]


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
