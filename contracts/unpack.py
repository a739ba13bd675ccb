"""Raw bytes as they arrived -> the bytes of a text file.

Belongs here: decompression, with caps, since nothing from outside is trusted. Does not belong here: what the
text says (`intake.py`).
"""

import gzip
import io
import zipfile
import zlib

import pyarrow as pa

from contracts.errors import IntakeError

LARGEST_TEXT = 512 * 1024 * 1024
# Daily price text packs to a tenth or so; three hundred times is padding, not prices.
LARGEST_RATIO = 300
_SMALL_TEXT = 1024 * 1024
MOST_MEMBERS = 100_000
_CHUNK = 1024 * 1024


def unpack(data: bytes, path: str) -> bytes:
    """The text of a raw file, decompressed by its ending (`.gz`, `.zst`, anything else as it is).

    Raises IntakeError where it does not decompress or grows past the caps in bytes or ratio.
    """
    if path.endswith(".gz"):
        return _read_capped(gzip.GzipFile(fileobj=io.BytesIO(data)), len(data), path)
    if path.endswith(".zst"):
        return _read_capped(pa.CompressedInputStream(pa.BufferReader(data), "zstd"), len(data), path)
    if len(data) > LARGEST_TEXT:
        raise IntakeError(f"{path}: seen {len(data):,} bytes; expected at most {LARGEST_TEXT:,}")
    return data


def list_members(data: bytes, path: str) -> list[tuple[str, bytes]]:
    """The files of a `.zip`, name and bytes, in order of name; raises IntakeError as `unpack` does."""
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as archive:
            infos = sorted((info for info in archive.infolist() if not info.is_dir()), key=lambda info: info.filename)
            if len(infos) > MOST_MEMBERS:
                raise IntakeError(f"{path}: seen {len(infos):,} members; expected at most {MOST_MEMBERS:,}")
            names = [info.filename for info in infos]
            twice = sorted({name for name in names if names.count(name) > 1}) if len(set(names)) < len(names) else []
            if twice:
                raise IntakeError(f"{path}: seen the member {twice[0]!r} twice; expected each name once")
            members, total = [], 0
            for info in infos:
                with archive.open(info) as stream:
                    text = _read_capped(stream, info.compress_size, f"{path}/{info.filename}")
                total += len(text)
                if total > LARGEST_TEXT:
                    raise IntakeError(f"{path}: its members unpack to more than {LARGEST_TEXT:,} bytes")
                members.append((info.filename, text))
            return members
    except (zipfile.BadZipFile, RuntimeError, NotImplementedError) as error:
        raise IntakeError(f"{path}: cannot be unpacked as zip: {error}") from error


def _read_capped(stream: object, packed: int, path: str) -> bytes:
    """Read a stream to its end, never holding more than the caps allow."""
    largest = min(LARGEST_TEXT, max(_SMALL_TEXT, packed * LARGEST_RATIO))
    parts, total = [], 0
    try:
        while chunk := stream.read(_CHUNK):  # type: ignore[attr-defined]
            total += len(chunk)
            if total > largest:
                raise IntakeError(
                    f"{path}: unpacks to more than {largest:,} bytes from {packed:,}; nothing of it is read"
                )
            parts.append(bytes(chunk))
    except (OSError, EOFError, zlib.error, pa.ArrowException) as error:
        raise IntakeError(f"{path}: cannot be unpacked: {error}") from error
    return b"".join(parts)
