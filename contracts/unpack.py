"""Raw bytes as they arrived -> the bytes of a text file, its physical lines, and the fields of a line.

Belongs here: decompression, with caps, since nothing from outside is trusted; encodings, line ends, quotation
marks and byte offsets. Does not belong here: what the fields say (`intake.py`).
"""

import codecs
import csv
import gzip
import io
import lzma
import re
import struct
import zipfile
import zlib
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from contracts.errors import IntakeError

LARGEST_TEXT = 256 * 1024 * 1024
# Daily price text packs to a tenth or so; three hundred times is padding, not prices.
LARGEST_RATIO = 300
_SMALL_TEXT = 1024 * 1024
MOST_MEMBERS = 100_000
_MEMBER_MARK = b"PK\x01\x02"
_CHUNK = 1024 * 1024
# A row of every contract's every figure side by side stays far below.
LONGEST_LINE = 32_768
_SHOWN_OF_LONG_LINE = 1000
_BLOCK = 1024 * 1024
# A quoted field may run over a few lines; past these an opening quote is taken for a slip of its own line.
_LONGEST_RECORD = 20
_LONGEST_ROW = 4 * LONGEST_LINE * _LONGEST_RECORD
_UNCLOSED = "a quotation mark is opened and never closed"
_MISPLACED = "a quotation mark within a field"
_TOO_LONG = f"a line of more than {LONGEST_LINE:,} characters, of which the first {_SHOWN_OF_LONG_LINE:,} are kept"
# What zipfile is known to raise on bytes that only look like an archive.
_ZIP_ERRORS = (
    zipfile.BadZipFile, RuntimeError, NotImplementedError, ValueError, LookupError, OverflowError, EOFError, OSError,
    struct.error, zlib.error, lzma.LZMAError,
)  # fmt: skip


def unpack(data: bytes, path: str) -> bytes:
    """The text of a raw file, decompressed by its ending (`.gz`, `.zst`, anything else as it is).

    Raises IntakeError where it does not decompress or grows past the caps in bytes or ratio.
    """
    ending = path.lower()
    if ending.endswith(".gz"):
        return _read_capped(gzip.GzipFile(fileobj=io.BytesIO(data)), len(data), path)
    if ending.endswith(".zst"):
        return _read_capped(pa.CompressedInputStream(pa.BufferReader(data), "zstd"), len(data), path)
    if len(data) > LARGEST_TEXT:
        raise IntakeError(f"{path}: seen {len(data):,} bytes; expected at most {LARGEST_TEXT:,}")
    return data


def list_members(data: bytes, path: str) -> Iterator[tuple[str, bytes]]:
    """The files of a `.zip`, name and bytes, in order of name, one at a time.

    All of them are read through once before the first is handed out, so that a damaged or swollen archive
    gives nothing. Raises IntakeError, at the call, as `unpack` does.
    """
    # Every member has this mark in the list at the end, which is counted before anything is made of it.
    marks = data.count(_MEMBER_MARK)
    if marks > MOST_MEMBERS:
        raise IntakeError(f"{path}: seen {marks:,} members; expected at most {MOST_MEMBERS:,}")
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as archive:
            infos = sorted((info for info in archive.infolist() if not info.is_dir()), key=lambda info: info.filename)
            twice = [name for name, count in Counter(info.filename for info in infos).items() if count > 1]
            if twice:
                raise IntakeError(f"{path}: seen the member {twice[0]!r} twice; expected each name once")
            total = 0
            for info in infos:
                with archive.open(info) as stream:
                    for part in _parts(stream, info.compress_size, f"{path}/{info.filename}"):
                        total += len(part)
                        if total > LARGEST_TEXT:
                            raise IntakeError(f"{path}: its members unpack to more than {LARGEST_TEXT:,} bytes")
    except _ZIP_ERRORS as error:
        raise IntakeError(f"{path}: cannot be unpacked as zip: {error}") from error
    return _hand_out(data, infos)


def _hand_out(data: bytes, infos: list[zipfile.ZipInfo]) -> Iterator[tuple[str, bytes]]:
    with zipfile.ZipFile(io.BytesIO(data)) as archive:
        for info in infos:
            with archive.open(info) as stream:
                yield info.filename, _read_capped(stream, info.compress_size, info.filename)


def _read_capped(stream: object, packed: int, path: str) -> bytes:
    """Read a stream to its end, never holding more than the caps allow."""
    # Its value is handed over without a second copy.
    whole = io.BytesIO()
    try:
        for part in _parts(stream, packed, path):
            whole.write(part)
    except (OSError, EOFError, zlib.error, pa.ArrowException) as error:
        raise IntakeError(f"{path}: cannot be unpacked: {error}") from error
    return whole.getvalue()


def _parts(stream: object, packed: int, path: str) -> Iterator[bytes]:
    largest = min(LARGEST_TEXT, max(_SMALL_TEXT, packed * LARGEST_RATIO))
    total = 0
    while chunk := stream.read(_CHUNK):  # type: ignore[attr-defined]
        total += len(chunk)
        if total > largest:
            raise IntakeError(f"{path}: unpacks to more than {largest:,} bytes from {packed:,}; nothing of it is read")
        yield chunk


def settle_codec(text: bytes, encoding: str) -> str:
    """The codec that reads any stretch of the text by itself: byte order settled by the mark at its start.

    UTF-16 without a mark is little-endian: common practice, no source.
    """
    name = codecs.lookup(encoding).name
    if name == "utf-16":
        return "utf-16-be" if text.startswith(codecs.BOM_UTF16_BE) else "utf-16-le"
    return "utf-8" if name == "utf-8-sig" else name


def ends_whole(text: bytes, encoding: str) -> bool:
    """Whether the text ends with a line end; where it does not, its last line may be cut."""
    codec = settle_codec(text, encoding)
    marks = ("\n".encode(codec), "\r".encode(codec))
    return len(text) % len(marks[0]) == 0 and text.endswith(marks)


def read_blocks(text: bytes, encoding: str) -> Iterator[tuple[str, bool]]:
    """The text in stretches of whole physical lines, about a megabyte each, and whether it is the last.

    Bytes that mean nothing in the encoding are replaced. A line longer than a stretch comes alone, cut to a
    little over LONGEST_LINE characters.
    """
    codec, start, first = settle_codec(text, encoding), 0, True
    while start < len(text):
        end = _block_end(text, start, codec)
        is_overlong = end - start > _BLOCK
        block = text[start : start + 4 * LONGEST_LINE + 8 if is_overlong else end].decode(codec, errors="replace")
        if is_overlong:
            block = block[: LONGEST_LINE + 2] + ("\n" if end < len(text) or ends_whole(text, encoding) else "")
        start = end
        block = block.removeprefix("\N{ZERO WIDTH NO-BREAK SPACE}") if first else block
        yield block, end == len(text)
        first = False


def _block_end(text: bytes, start: int, codec: str) -> int:
    """Where the last line ends that lies within one stretch from here, or else where the first one ends."""
    if start + _BLOCK >= len(text):
        return len(text)
    width = _unit(codec).itemsize
    for at in range(start // width, len(text) // width, _BLOCK // width):
        ends = _ends(text, codec, at, _BLOCK // width)
        if len(ends):
            return (at + int(ends[-1 if at == start // width else 0]) + 1) * width
    return len(text)


def split_lines(block: str) -> list[str]:
    """The physical lines of a stretch, without their ends: CR LF, LF and CR each end one."""
    lines = block.replace("\r\n", "\n").replace("\r", "\n").split("\n")
    if not lines[-1]:
        lines.pop()
    return lines


def read_quoted(lines: list[str], delimiter: str) -> Iterator[list[str]]:
    """The fields of lines in which quotation marks may stand; raises csv.Error where one stands wrong."""
    return csv.reader(lines, delimiter=delimiter, strict=True, skipinitialspace=delimiter != " ")


def read_record(
    lines: list[str], at: int, delimiter: str, is_last: bool, fits: Callable[[list[str]], bool] = lambda _: True
) -> tuple[list[str] | None, str | None, int] | None:
    """The fields of the row that begins on a line, or why it has none, and how many lines it takes.

    None where a quotation mark is open and lines are still to come. A mark that never closes, or that closes
    where no row comes of it, is a slip of its own line, and the lines below are read for themselves.
    """
    text = lines[at]
    if len(text) > LONGEST_LINE:
        return None, _TOO_LONG, 1
    if '"' not in text:
        return text.split(delimiter), None, 1
    fields, is_open = _split_quoted(text, delimiter)
    if not is_open:
        return fields, None if fields is not None else _MISPLACED, 1
    for span in range(2, _LONGEST_RECORD + 1):
        if at + span > len(lines):
            return (None, _UNCLOSED, 1) if is_last else None
        more = lines[at + span - 1]
        if len(more) > LONGEST_LINE:
            break
        text += "\n" + more
        if '"' not in more:
            continue
        fields, is_open = _split_quoted(text, delimiter)
        if not is_open:
            return (fields, None, span) if fields is not None and fits(fields) else (None, _UNCLOSED, 1)
    return None, _UNCLOSED, 1


def _split_quoted(text: str, delimiter: str) -> tuple[list[str] | None, bool]:
    """The fields of a text with quotation marks, None where they stand wrong; and whether one is left open."""
    for attempt in (text, re.sub(rf'"[ \t]+(?={re.escape(delimiter)}|$)', '"', text)):
        try:
            rows = list(read_quoted([attempt], delimiter))
        except csv.Error as error:
            if "unexpected end of data" in str(error):
                return None, True
            continue
        return rows[0], False
    return None, False


@dataclass(frozen=True, slots=True)
class Reject:
    """A row that could not be read, whole: its first physical line, and the byte of the text it begins at."""

    line: int
    offset: int
    text: str
    reason: str
    contract: str | None = None


class Texts:
    """A column of texts in order of rows; of large files it is held in Arrow. Iterating gives each as str."""

    def __init__(self, pieces: Sequence[Sequence[str] | pa.Array] = ()) -> None:
        self.pieces: list[Sequence[str] | pa.Array] = list(pieces)

    def __iter__(self) -> Iterator[str]:
        for piece in self.pieces:
            yield from piece.to_pylist() if isinstance(piece, pa.Array) else piece

    def pack(self) -> None:
        """Hold all so far in Arrow."""
        self.pieces = [
            piece if isinstance(piece, pa.Array) else pa.array(piece, type=pa.string()) for piece in self.pieces
        ]


def recall_rows(text: bytes, encoding: str, lines: list[int], spans: dict[int, int]) -> Iterator[tuple[int, int, str]]:
    """Line, byte offset and text of the rows that begin on these physical lines.

    `spans` says which rows take more than one line. Of a line above LONGEST_LINE the beginning is given.
    """
    codec = settle_codec(text, encoding)
    places = line_offsets(text, codec, lines + [line + spans.get(line, 1) for line in lines])
    for line, start, end in zip(lines, places, places[len(lines) :], strict=False):
        row = "\n".join(split_lines(text[start : min(end, start + _LONGEST_ROW)].decode(codec, errors="replace")))
        yield line, start, row if len(row) <= LONGEST_LINE or line in spans else row[:_SHOWN_OF_LONG_LINE]


def line_offsets(text: bytes, codec: str, lines: list[int]) -> list[int]:
    """The byte at which each physical line begins (lines from 1, bytes from 0); the length where there is none."""
    width = _unit(codec).itemsize
    wanted = np.array(sorted({line for line in lines if line > 1}), dtype=np.int64)
    found = [np.empty(0, dtype=np.int64)]
    before, done = 0, 0
    for at in range(0, len(text) // width, _BLOCK):
        if done == len(wanted):
            break
        ends = _ends(text, codec, at, _BLOCK)
        until = int(np.searchsorted(wanted, before + len(ends) + 1, side="right"))
        found.append((at + ends[wanted[done:until] - 2 - before] + 1) * width)
        before, done = before + len(ends), until
    offsets = dict(zip(wanted.tolist(), np.concatenate(found).tolist(), strict=False))
    return [0 if line <= 1 else offsets.get(line, len(text)) for line in lines]


def _ends(text: bytes, codec: str, at: int, count: int) -> np.ndarray:
    """Places of line ends among `count` units from unit `at` on, counted from there."""
    unit = _unit(codec)
    there = len(text) // unit.itemsize - at
    units = np.frombuffer(text, unit, min(count + 1, there), at * unit.itemsize) if there > 0 else np.empty(0, unit)
    is_return = units == 13
    is_end = (units == 10) | is_return
    is_end[:-1] &= ~(is_return[:-1] & (units[1:] == 10))
    return np.flatnonzero(is_end[:count])


def _unit(codec: str) -> np.dtype:
    """The smallest piece of a text that can be a line end."""
    return np.dtype({"utf-16-le": "<u2", "utf-16-be": ">u2"}.get(codec, "u1"))
