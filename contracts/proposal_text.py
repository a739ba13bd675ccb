"""The text of an unknown file: encoding, lines that are no rows, delimiter, header, and its cells.

Belongs here: where the table stands in the file. Does not belong here: what its columns hold
(`proposal_columns.py`), reading a file by a declared layout (`intake.py`).
"""

import csv
import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field

from contracts.errors import IntakeError
from contracts.proposal_columns import Columns, column_count, columns_by_name, fill_by_content
from contracts.proposal_marks import best_formats, count_formats, is_missing, is_number, read_day

_DELIMITERS = (",", ";", "\t", "|", "~", "^", " ")
_COMMENTS = ("#", "//", "--", "*", "!", "%", ";", "$", ">", "\N{SECTION SIGN}")
_PLAIN_COMMENTS = ("#", "//")
_HEAD = 200
_LINE_END = re.compile(r"\r\n|\n|\r")
_WIDEST = 500
# Some 60,000 rows; more would cost time and memory, and hardly change a choice.
LOOKED_AT = 4 * 1024 * 1024


@dataclass
class Look:
    """One file as it presents itself: `rows` have the header's width and are no comment; `strays` have not."""

    path: str
    data: bytes
    encoding: str
    is_plain: bool
    delimiter: str
    skip_lines: int
    comment: str
    header: tuple[str, ...]
    columns: Columns
    rows: list[list[str]]
    strays: list[str] = field(default_factory=list)
    is_torn: bool = False
    is_cut: bool = False
    comments: int = 0
    skipped: tuple[str, ...] = ()

    def texts(self, name: str) -> list[str]:
        """The trimmed cells of a field's column, row by row."""
        at = self.columns.places[name]
        return [row[at].strip() for row in self.rows]


def guess_encoding(data: bytes) -> tuple[str, bool]:
    """The encoding of a text, and whether all of it is plain ASCII, so that any would do."""
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        return "utf-16", False
    head = data[:4096]
    if len(head) >= 8 and head.count(0) > len(head) // 4:
        return ("utf-16-le" if head[1::2].count(0) >= head[0::2].count(0) else "utf-16-be"), False
    if data.isascii():
        return "utf-8", True
    for encoding in ("utf-8", "cp1252"):
        try:
            data.decode(encoding)
        except UnicodeDecodeError:
            continue
        return encoding, False
    return "latin-1", False


def look(path: str, data: bytes) -> Look:
    """Find the table in the unpacked bytes of one file; raises IntakeError where there is none, and says why."""
    encoding, is_plain = guess_encoding(data)
    is_cut = len(data) > LOOKED_AT
    if is_cut:
        data = _head_lines(data, encoding.startswith("utf-16"))
    text = data.decode(encoding, errors="replace").removeprefix("\N{ZERO WIDTH NO-BREAK SPACE}")
    if not text.strip():
        raise IntakeError(f"{path}: the file is empty; expected a header and rows")
    head = text[:50_000]
    strange = sum(c < " " and c not in "\t\r\n\f" for c in head) + head.count("\N{REPLACEMENT CHARACTER}")
    if strange * 50 > len(head):
        raise IntakeError(f"{path}: {strange:,} of its first {len(head):,} characters are no text; expected a table")
    is_torn = text[-1] not in "\r\n"
    lines = _LINE_END.split(text)
    at, delimiter = _find_header(lines, path)
    header = _cells(lines[at], delimiter)
    if any("\N{REPLACEMENT CHARACTER}" in name or "\0" in name for name in header):
        raise IntakeError(f"{path}:{at + 1}: the header has bytes that are no text; expected names of columns")
    found = _lay_out(path, data, encoding, is_plain, lines, at, delimiter, header)
    found.is_torn, found.is_cut = is_torn, is_cut
    return found


def _head_lines(data: bytes, is_wide: bool) -> bytes:
    """The whole lines at the beginning of a large file."""
    end = data.rfind(b"\n", 0, LOOKED_AT) + 1 or LOOKED_AT
    return data[: end + end % 2] if is_wide else data[:end]


def _lay_out(
    path: str,
    data: bytes,
    encoding: str,
    is_plain: bool,
    lines: list[str],
    at: int,
    delimiter: str,
    header: list[str],
) -> Look:
    body = [(line, _cells(line, delimiter)) for line in lines[at + 1 :] if line.strip()]
    rows = [cells for _, cells in body if len(cells) == len(header) and cells != header]
    if not rows:
        widths = Counter(len(cells) for _, cells in body).most_common(1)
        seen = f"{widths[0][0]} fields in most lines after it" if widths else "no line after it"
        raise IntakeError(f"{path}:{at + 1}: the header has {len(header)} fields; seen {seen}; expected as many")
    columns = columns_by_name(header)
    fill_by_content(columns, header, rows)
    session = columns.places.get("session")
    if session is None:
        raise IntakeError(f"{path}: no column holds dates ({', '.join(header)[:200]}); expected one with the sessions")
    formats = best_formats([row[session].strip() for row in rows])

    def is_row(cells: list[str]) -> bool:
        return len(cells) == len(header) and any(read_day(cells[session].strip(), f) is not None for f in formats)

    preamble = [line for line in lines[:at] if line.strip()]
    apart = [line for line, cells in body if cells != header and not is_row(cells)]
    # A line with a row's number of fields is a row with a fault rather than a comment, unless it is plainly marked.
    marked, taken = list(preamble), list[str]()
    for line, cells in body:
        is_marked = len(cells) != len(header) or (line.startswith(_PLAIN_COMMENTS) and not is_row(cells))
        (marked if is_marked else taken).append(line)
    comment = _comment_mark(lines[at], marked, taken, delimiter)
    is_comment = [bool(comment) and line.startswith(comment) for line in preamble]
    kept = [
        cells
        for line, cells in body
        if len(cells) == len(header) and cells != header and not (comment and line.startswith(comment))
    ]
    return Look(
        path=path,
        data=data,
        encoding=encoding,
        is_plain=is_plain,
        delimiter=delimiter,
        skip_lines=0 if all(is_comment) else at,
        comment=comment,
        header=tuple(header),
        columns=columns,
        rows=kept,
        strays=[line for line in apart if not (comment and line.startswith(comment))],
        comments=sum(bool(comment) and line.startswith(comment) for line in (*preamble, *apart)),
        skipped=() if all(is_comment) else tuple(preamble),
    )


def _cells(line: str, delimiter: str) -> list[str]:
    if '"' not in line:
        return line.split(delimiter)
    try:
        return next(csv.reader([line], delimiter=delimiter), [])
    except csv.Error:
        return [line]


def _find_header(lines: Sequence[str], path: str) -> tuple[int, str]:
    """Index of the header line and the delimiter: by known names, else by standing above columns of values."""
    head = [(at, line) for at, line in enumerate(lines[: _HEAD * 5]) if line.strip()][:_HEAD]
    best: tuple[int, float, int, str] | None = None
    lonely: int | None = None
    for delimiter in _DELIMITERS:
        cells = [(at, _cells(line, delimiter)) for at, line in head]
        for place, (at, names) in enumerate(cells[: _HEAD // 2]):
            if not 2 <= len(names) <= _WIDEST:
                continue
            known = column_count(names)
            after = cells[place + 1 :]
            share = sum(len(row) == len(names) for _, row in after) / len(after) if after else 0.0
            if known >= 2 and share == 0:
                lonely = at
            if known >= 2 and share > 0 and (best is None or (known, share) > best[:2]):
                best = (known, share, at, delimiter)
    if best is not None:
        return best[2], best[3]
    if lonely is not None:
        raise IntakeError(f"{path}:{lonely + 1}: a header, and no line after it with as many fields; expected rows")
    is_headless = False
    for delimiter in _DELIMITERS:
        cells = [(at, _cells(line, delimiter)) for at, line in head]
        width = Counter(len(row) for _, row in cells).most_common(1)[0][0]
        table = [(at, row) for at, row in cells if len(row) == width]
        if not 2 <= width <= _WIDEST or len(table) < 2:
            continue
        if not any(best_formats([row[at].strip() for _, row in table[1:]]) for at in range(width)):
            continue
        if any(_is_value(name.strip()) for name in table[0][1]):
            is_headless = True
            continue
        return table[0][0], delimiter
    if is_headless:
        raise IntakeError(f"{path}: no header: its first line already holds values; expected names above columns")
    raise IntakeError(f"{path}: no line of it reads as a header above columns with dates; expected a table")


def _is_value(text: str) -> bool:
    return bool(text) and not is_missing(text) and (is_number(text) or bool(count_formats([text])))


def _comment_mark(header: str, apart: list[str], rows: list[str], delimiter: str) -> str:
    """The mark at the beginning of most lines that are no rows; none where a row or the header begins with it."""
    found = {mark: sum(line.startswith(mark) for line in apart) for mark in _COMMENTS if mark != delimiter}
    usable = [
        mark
        for mark in found
        if found[mark] and not header.startswith(mark) and not any(line.startswith(mark) for line in rows)
    ]
    return max(usable, key=lambda mark: found[mark], default="")
