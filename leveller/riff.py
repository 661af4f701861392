"""RIFF, RF64 and AIFF files at the byte level: what the header says, and chunks of our own.

libsndfile clamps a truncated file to what is there and says nothing, and knows no chunk beyond its own. This module
does those two jobs on the bytes. Nothing here decodes audio.

A chunk is an id of four bytes, a size of four bytes and a payload padded to an even length. RIFF counts little-endian,
AIFF big-endian. In RF64 and BW64 the sizes that do not fit stand in the `ds64` chunk.

References: EBU Tech 3306 and ITU-R BS.2088 (RF64, BW64); AIFF-C draft, Apple 1991 (FORM, SSND).
"""

from __future__ import annotations

import os
import struct
from collections.abc import Sequence
from pathlib import Path
from typing import BinaryIO

from leveller.errors import InputError, OutputError

UNKNOWN_SIZE = 0xFFFFFFFF  # EBU Tech 3306: the size stands in ds64; in plain RIFF it marks a stream of unknown length
RIFF_LIMIT = 0xFFFFFFFF
MOST_CHUNKS = 10_000  # our choice: files have a dozen; a file of nothing but empty chunks is not walked for hours


def read_chunks(path: Path) -> dict[bytes, tuple[int, int]]:
    """Chunk id to (offset of the payload, size in bytes as the header says); the first of a kind counts.

    Raises
    ------
    InputError
        where the file is no RIFF, RF64, BW64 or AIFF file.
    """
    with open(path, "rb") as file:
        chunks = _walk(file)
    if chunks is None:
        raise InputError(f"{path}: not a WAV or AIFF file")
    return chunks


def is_little_wav(path: Path) -> bool:
    """Whether a file is a little-endian WAV file (RIFF, RF64) with audio that can be found; RIFX is not."""
    with open(path, "rb") as file:
        little = file.read(4) in (b"RIFF", b"RF64")
        file.seek(0)
        return little and b"data" in (_walk(file) or {})


def read_chunk(path: Path, kind: bytes, *, most_bytes: int) -> bytes | None:
    """A chunk's payload as far as it is there, at most so many bytes; None where the file has no such chunk."""
    with open(path, "rb") as file:
        place = (_walk(file) or {}).get(kind)
        if place is None:
            return None
        file.seek(place[0])
        return file.read(min(place[1], most_bytes))


def missing_bytes(path: Path) -> int:
    """How many bytes of audio the header promises beyond the file's end; 0 for whole files and for other formats."""
    with open(path, "rb") as file:
        chunks = _walk(file) or {}
        length = file.seek(0, os.SEEK_END)
    for kind in (b"data", b"SSND"):
        if kind in chunks:
            offset, size = chunks[kind]
            return 0 if size == UNKNOWN_SIZE else max(0, offset + size - length)
    return 0


def append_chunks(path: Path, chunks: Sequence[tuple[bytes, bytes]]) -> None:
    """Append chunks behind the audio, word-aligned, and correct the size that the header gives.

    Raises
    ------
    OutputError
        where a plain WAV file would pass 4 GiB, or the file cannot be written.
    """
    try:
        with open(path, "r+b") as file:
            start = file.seek(0, os.SEEK_END)
            body = b"\0" * (start % 2) + b"".join(chunk(kind, payload) for kind, payload in chunks)
            _set_riff_size(file, start + len(body) - 8, path)
            file.seek(start)
            file.write(body)
    except OSError as error:
        raise OutputError(f"{path}: cannot be written ({error.strerror})") from error


def _walk(file: BinaryIO) -> dict[bytes, tuple[int, int]] | None:
    """The chunks of an open file, or None where it is of another kind."""
    head = file.read(12)
    if head[:4] in (b"RIFF", b"RF64", b"BW64") and head[8:12] == b"WAVE":
        order = "<"
    elif head[:4] == b"FORM" and head[8:12] in (b"AIFF", b"AIFC"):
        order = ">"
    else:
        return None
    length = file.seek(0, os.SEEK_END)
    chunks: dict[bytes, tuple[int, int]] = {}
    at, data_size = 12, None
    for _ in range(MOST_CHUNKS):
        if at + 8 > length:
            break
        file.seek(at)
        kind, size = struct.unpack(order + "4sI", file.read(8))
        if not all(32 <= byte < 127 for byte in kind):
            break  # not a chunk; a header that lost its size would else be searched through hours of zeros
        if kind == b"ds64" and head[:4] != b"RIFF":
            data_size = struct.unpack("<QQ", file.read(16).ljust(16, b"\0"))[1]
        if kind == b"data" and size == UNKNOWN_SIZE and data_size is not None:
            size = data_size
        chunks.setdefault(kind, (at + 8, size))
        at += 8 + size + size % 2
    return chunks


def chunk(kind: bytes, payload: bytes) -> bytes:
    """One chunk with its header and padding."""
    return struct.pack("<4sI", kind, len(payload)) + payload + b"\0" * (len(payload) % 2)


def _set_riff_size(file: BinaryIO, size: int, path: Path) -> None:
    """Write the size of everything behind the first eight bytes where this kind of file keeps it."""
    file.seek(0)
    head = file.read(20)
    if head[:4] == b"RIFF":
        if size > RIFF_LIMIT:
            raise OutputError(f"{path}: would pass 4 GiB, which a plain WAV file cannot hold")
        file.seek(4)
        file.write(struct.pack("<I", size))
    elif head[12:16] == b"ds64":
        file.seek(20)
        file.write(struct.pack("<Q", size))
    else:
        raise OutputError(f"{path}: not a WAV file, no chunk can be added")
