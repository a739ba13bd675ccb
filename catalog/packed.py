"""How the archive packs the bytes of one file, and how it tells that they are unharmed.

Belongs here: the seal and the bytes it covers. Does not belong here: where packed files lie (`archive.py`).
"""

import hashlib
import struct

import pyarrow as pa

from contracts.unpack import LARGEST_TEXT

# Some bits of a zstd frame's header can flip and the frame still expands to the same bytes. So the packed bytes are
# sealed: their SHA-256 follows them in a skippable frame (RFC 8878, 3.1.2), which every reader of zstd passes over.
_SEAL = struct.pack("<II", 0x184D2A50, hashlib.sha256().digest_size)
# The kind of block that holds one byte and how often it is repeated.
_REPEATED = 1
_SEAL_BYTES = len(_SEAL) + hashlib.sha256().digest_size


def pack(data: bytes) -> bytes:
    """Bytes as the archive keeps them: one zstd frame, then its seal."""
    return _seal(pa.Codec("zstd").compress(data, asbytes=True))


def expand(packed: bytes, sha: str) -> bytes:
    """The bytes with this SHA-256 out of a packed file, with a seal or, as older ones are, without.

    Raises ValueError, saying what is damaged, where a single bit is another than was written; of a file without
    a seal, where it then expands to other bytes.
    """
    if not packed:
        raise ValueError("seen an empty file")
    is_sealed = packed[-_SEAL_BYTES:].startswith(_SEAL)
    if is_sealed and _seal(packed[:-_SEAL_BYTES]) != packed:
        raise ValueError("seen damaged bytes (their seal is of others)")
    try:
        data = _expand(packed)
    except (OSError, pa.ArrowException) as error:
        raise ValueError(f"seen damaged bytes ({error})") from error
    seen = hashlib.sha256(data).hexdigest()
    if seen != sha:
        raise ValueError(f"seen bytes with SHA-256 {seen}")
    if not is_sealed and _end_of_frame(packed) != len(packed):
        raise ValueError("seen damaged bytes (what follows them is no seal)")
    return data


def _seal(packed: bytes) -> bytes:
    return packed + _SEAL + hashlib.sha256(packed).digest()


def _expand(packed: bytes) -> bytes:
    with pa.CompressedInputStream(pa.BufferReader(packed), "zstd") as stream:
        return bytes(stream.read(LARGEST_TEXT + 1))


def _end_of_frame(packed: bytes) -> int:
    """Where a zstd frame ends that has expanded without an error (RFC 8878, 3.1.1)."""
    descriptor = packed[4]
    is_single = descriptor >> 5 & 1
    at = 5 + (not is_single) + (0, 1, 2, 4)[descriptor & 3] + (is_single, 2, 4, 8)[descriptor >> 6]
    is_last = 0
    while not is_last:
        header = int.from_bytes(packed[at : at + 3], "little")
        is_last, kind, size = header & 1, header >> 1 & 3, header >> 3
        at += 3 + (1 if kind == _REPEATED else size)
    return at + (4 if descriptor >> 2 & 1 else 0)
