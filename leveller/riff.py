"""RIFF, RF64 and AIFF files at the byte level: what the header says, chunks of our own, scaling in place.

libsndfile clamps a truncated file to what is there and says nothing, stamps a clock time into the PEAK chunk of float
files, and knows no chunk beyond its own. This module does those three jobs on the bytes. Nothing here decodes audio.

A chunk is an id of four bytes, a size of four bytes and a payload padded to an even length. RIFF counts little-endian,
AIFF big-endian. In RF64 and BW64 the sizes that do not fit stand in the `ds64` chunk.

References: EBU Tech 3306 and ITU-R BS.2088 (RF64, BW64); AIFF-C draft, Apple 1991 (FORM, SSND).
"""

from __future__ import annotations

import os
import struct
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
import numpy.typing as npt

from leveller.errors import InputError, OutputError

UNKNOWN_SIZE = 0xFFFFFFFF  # EBU Tech 3306: the size stands in ds64; in plain RIFF it marks a stream of unknown length
RIFF_LIMIT = 0xFFFFFFFF
MOST_CHUNKS = 10_000  # our choice: files have a dozen; a file of nothing but empty chunks is not walked for hours

Samples = npt.NDArray[np.float32]


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
            body = b"\0" * (start % 2) + b"".join(_chunk(kind, payload) for kind, payload in chunks)
            _set_riff_size(file, start + len(body) - 8, path)
            file.seek(start)
            file.write(body)
    except OSError as error:
        raise OutputError(f"{path}: cannot be written ({error.strerror})") from error


class FloatWav:
    """A finished 32-bit float WAV file, walked block by block; a block may be put back changed. A context manager."""

    def __init__(self, path: Path, channels: int) -> None:
        self.path = path
        self._channels = channels
        self._chunks = read_chunks(path)
        self._offset, size = self._chunks[b"data"]
        self.frames = size // (4 * channels)
        self._at, self._last = 0, 0  # frames: of the next block, of the one read last
        try:
            self._file = open(path, "r+b", buffering=0)  # noqa: SIM115 (closed by close)
        except OSError as error:
            raise OutputError(f"{path}: cannot be opened ({error.strerror})") from error

    def __enter__(self) -> FloatWav:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def rewind(self) -> None:
        """Start again at the first frame."""
        self._at = 0

    def read(self, frames: int) -> Samples:
        """The next frames in a new array, `(frames,)` or `(frames, channels)`; fewer at the end."""
        count = min(frames, self.frames - self._at)
        block = np.empty((count,) if self._channels == 1 else (count, self._channels), "<f4")
        try:
            self._seek(self._at)
            _read_all(self._file, _bytes_of(block), self.path)
        except OSError as error:
            raise OutputError(f"{self.path}: cannot be read back ({error.strerror})") from error
        self._last, self._at = self._at, self._at + count
        return block

    def put_back(self, block: Samples) -> None:
        """Write the block in the place of the one read last, whose shape it has."""
        try:
            self._seek(self._last)
            _write_all(self._file, _bytes_of(np.ascontiguousarray(block, "<f4")))
        except OSError as error:
            raise OutputError(f"{self.path}: cannot be written ({error.strerror})") from error

    def scale_peaks(self, factor: float) -> None:
        """Scale the peak of each channel that the file notes in its PEAK chunk: version, time, (value, frame) each."""
        offset, size = self._chunks.get(b"PEAK", (0, 0))
        for at in range(offset + 8, offset + size - 7, 8):
            self._file.seek(at)
            (value,) = struct.unpack("<f", self._file.read(4))
            self._file.seek(at)
            self._file.write(struct.pack("<f", abs(np.float32(value) * np.float32(factor))))

    def close(self) -> None:
        """Close the file; closing twice does no harm."""
        self._file.close()

    def _seek(self, frame: int) -> None:
        """Go to a frame of the audio."""
        self._file.seek(self._offset + 4 * self._channels * frame)


def clear_peak_time(path: Path) -> None:
    """Zero the clock time in the PEAK chunk, so that two runs write the same bytes."""
    place = read_chunks(path).get(b"PEAK")
    if place is not None:
        with open(path, "r+b") as file:
            file.seek(place[0] + 4)
            file.write(b"\0\0\0\0")


class FloatSpill:
    """A temporary file of raw float32 frames: append blocks, then walk them from the start; a context manager."""

    def __init__(self, path: Path, channels: int = 1) -> None:
        self.path, self.channels, self.frames = path, channels, 0
        try:
            self._file = open(path, "w+b", buffering=0)  # noqa: SIM115 (closed by close)
        except OSError as error:
            raise OutputError(f"{path}: cannot be written ({error.strerror})") from error

    def __enter__(self) -> FloatSpill:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def append(self, block: Samples) -> None:
        """Add `(frames,)` or `(frames, channels)` float32 at the end."""
        try:
            self._file.seek(4 * self.channels * self.frames)
            _write_all(self._file, _bytes_of(np.ascontiguousarray(block, np.float32)))
        except OSError as error:
            raise OutputError(f"{self.path}: cannot be written ({error.strerror})") from error
        self.frames += len(block)

    def blocks(self, frames: int) -> Iterator[Samples]:
        """All frames from the start in new arrays of so many, the last one shorter; shaped as they were appended."""
        for start in range(0, self.frames, frames):
            count = min(frames, self.frames - start)
            block = np.empty((count,) if self.channels == 1 else (count, self.channels), np.float32)
            self._file.seek(4 * self.channels * start)
            _read_all(self._file, _bytes_of(block), self.path)
            yield block

    def close(self) -> None:
        """Close and remove the file; closing twice does no harm."""
        self._file.close()
        self.path.unlink(missing_ok=True)


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


def _chunk(kind: bytes, payload: bytes) -> bytes:
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


def _bytes_of(block: Samples) -> memoryview:
    """A contiguous array as bytes, without a copy."""
    return block.reshape(-1).view(np.uint8).data


def _read_all(file: Any, view: memoryview, path: Path) -> None:
    """Fill the view from an unbuffered file, which may read short."""
    while len(view):
        got = file.readinto(view)
        if not got:
            raise OutputError(f"{path}: ended before its header said")
        view = view[got:]


def _write_all(file: Any, view: memoryview) -> None:
    """Write the whole view to an unbuffered file, which may write short."""
    while len(view):
        view = view[file.write(view):]
