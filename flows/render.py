"""Text, tables and JSON on standard output.

Belongs here: how a value is shown, and that nothing from a file can steer a terminal. Does not belong here:
which values (`commands.py`).
"""

import datetime
import json
import math
import os
import re
import sys
from collections.abc import Iterable, Sequence
from typing import Any

# Control characters, and those that turn the direction of writing: in a raw line they could move the cursor,
# set the terminal's title or make a number read backwards.
_STEERING = re.compile("[\x00-\x1f\x7f-\x9f\u061c\u200e\u200f\u2028-\u202e\u2066-\u2069\ud800-\udfff\ufeff]")
_GAP = "  "
_LONGEST_WORD = 24


def plain(text: str) -> str:
    """The text with every character that could steer a terminal written as an escape."""
    return _STEERING.sub(_escape, text)


def _escape(match: re.Match[str]) -> str:
    named = {"\n": "\\n", "\r": "\\r", "\t": "\\t"}
    number = ord(match[0])
    return named.get(match[0]) or (f"\\x{number:02x}" if number < 256 else f"\\u{number:04x}")


def say(lines: Iterable[str]) -> None:
    """Write lines to standard output; a reader that has had enough is no error."""
    _write("".join(f"{plain(line)}\n" for line in lines))


def say_json(value: Any) -> None:
    """Write one JSON document; days become ISO 8601, numbers that JSON does not have become null."""
    _write(json.dumps(_jsonable(value), ensure_ascii=True, allow_nan=False) + "\n")


def complain(text: str) -> None:
    """Write a message to standard error, its lines kept apart."""
    try:
        sys.stderr.write("".join(f"{plain(line)}\n" for line in text.split("\n")))
        sys.stderr.flush()
    except BrokenPipeError:
        _silence(sys.stderr)


def say_table(columns: Sequence[str], rows: Sequence[Sequence[Any]]) -> None:
    """Write a table: drawn where standard output is a terminal, aligned text elsewhere."""
    if sys.stdout.isatty():
        _draw(columns, rows)
    else:
        _write("".join(f"{line}\n" for line in aligned(columns, rows)))


def aligned(columns: Sequence[str], rows: Sequence[Sequence[Any]]) -> list[str]:
    """The table as lines of text: numbers to the right, all else to the left."""
    shown = [[show(value) for value in row] for row in rows]
    is_number = [_is_number_column(rows, at) for at in range(len(columns))]
    heads = [plain(column) for column in columns]
    widths = [max(len(heads[at]), *(len(row[at]) for row in shown), 0) for at in range(len(columns))]
    lines = []
    for cells in (heads, *shown):
        padded = [
            cell.rjust(width) if number else cell.ljust(width)
            for cell, width, number in zip(cells, widths, is_number, strict=True)
        ]
        lines.append(_GAP.join(padded).rstrip())
    return lines


def show(value: Any) -> str:
    """One cell: nothing for null, days in ISO 8601, numbers as short as they are exact to ten digits."""
    if value is None:
        return ""
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return f"{value:.10g}"
    return plain(str(value))


def _draw(columns: Sequence[str], rows: Sequence[Sequence[Any]]) -> None:
    from rich.box import SIMPLE_HEAD
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    table = Table(box=SIMPLE_HEAD, pad_edge=False)
    lengths = [max((len(show(row[at])) for row in rows), default=0) for at in range(len(columns))]
    for at, column in enumerate(columns):
        # On a narrow terminal only sentences break; a broken price or name cannot be read.
        table.add_column(
            Text(plain(column)),
            justify="right" if _is_number_column(rows, at) else "left",
            no_wrap=lengths[at] <= _LONGEST_WORD,
            min_width=min(lengths[at], _LONGEST_WORD),
        )
    for row in rows:
        table.add_row(*(Text(show(value)) for value in row))
    console = Console()
    with console.capture() as drawn:
        console.print(table)
    _write(drawn.get())


def _is_number_column(rows: Sequence[Sequence[Any]], at: int) -> bool:
    values = [row[at] for row in rows if row[at] is not None]
    return bool(values) and all(isinstance(value, int | float) and not isinstance(value, bool) for value in values)


def _jsonable(value: Any) -> Any:
    if isinstance(value, dict):
        return {str(key): _jsonable(inner) for key, inner in value.items()}
    if isinstance(value, list | tuple | set | frozenset):
        return [_jsonable(inner) for inner in value]
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if value is None or isinstance(value, bool | int):
        return value
    if isinstance(value, datetime.date | datetime.time):
        return value.isoformat()
    if isinstance(value, bytes):
        return value.hex()
    return str(value)


def _write(text: str) -> None:
    try:
        sys.stdout.write(text)
        sys.stdout.flush()
    except BrokenPipeError:
        _silence(sys.stdout)


def _silence(stream: Any) -> None:
    """Send the rest of a stream nowhere, so that the interpreter's own flush at the end does not complain
    either."""
    nowhere = os.open(os.devnull, os.O_WRONLY)
    os.dup2(nowhere, stream.fileno())
    os.close(nowhere)
