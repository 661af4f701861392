"""A second reader of WAV files for the tests, written from the standards and independent of leveller.

EBU Tech 3285 (bext, version 2), EBU Tech 3306 (RF64, ds64), IBM and Microsoft 1991 (RIFF, `cue `, `LIST adtl`). It is
strict where leveller is lenient: every byte must belong to a chunk, and every size must be right.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

LOUDNESS_OFFSETS = {"integrated": 412, "range": 414, "true_peak": 416, "momentary": 418, "short_term": 420}


@dataclass(frozen=True)
class Cue:
    """One cue point with what the associated data list says of it."""

    frame: int
    label: str | None
    length: int | None


def chunks_of(path: Path) -> list[tuple[bytes, int, int]]:
    """(id, offset of the payload, size) of every chunk; ValueError unless they fill the file exactly."""
    with open(path, "rb") as file:
        return _chunks(file)


def payload(path: Path, kind: bytes) -> bytes:
    """The payload of the only chunk of a kind."""
    ((_, offset, size),) = [chunk for chunk in chunks_of(path) if chunk[0] == kind]
    with open(path, "rb") as file:
        file.seek(offset)
        return file.read(size)


def _chunks(file: BinaryIO) -> list[tuple[bytes, int, int]]:
    """Walk the chunks of an open file."""
    length = file.seek(0, 2)
    file.seek(0)
    form, riff_size, wave = struct.unpack("<4sI4s", file.read(12))
    if wave != b"WAVE" or form not in (b"RIFF", b"RF64"):
        raise ValueError(f"{form!r} {wave!r}")
    data_size = None
    if form == b"RF64":
        kind, ds64_bytes, riff_size64, data_size = struct.unpack("<4sIQQ", file.read(24))
        if kind != b"ds64" or ds64_bytes < 28 or riff_size != 0xFFFFFFFF:
            raise ValueError("RF64 without a ds64 chunk first")
        riff_size = riff_size64
    if riff_size + 8 != length:
        raise ValueError(f"size {riff_size} + 8, but {length} bytes are there")
    out, at = [], 12
    while at < length:
        file.seek(at)
        kind, size = struct.unpack("<4sI", file.read(8))
        if kind == b"data" and size == 0xFFFFFFFF and data_size is not None:
            size = data_size
        out.append((kind, at + 8, size))
        at += 8 + size + (size & 1)
    if at != length:
        raise ValueError(f"last chunk ends at {at}, the file at {length}")
    return out


def bext_fields(raw: bytes) -> dict[str, object]:
    """All fields of a bext chunk at their fixed offsets."""

    def text(start: int, size: int) -> str:
        return raw[start : start + size].split(b"\0")[0].decode("ascii")

    low, high = struct.unpack_from("<II", raw, 338)
    fields: dict[str, object] = {
        "description": text(0, 256), "originator": text(256, 32), "reference": text(288, 32), "date": text(320, 10),
        "time": text(330, 8), "time_reference": low + (high << 32), "version": struct.unpack_from("<H", raw, 346)[0],
        "umid": raw[348:412], "reserved": raw[422:602], "history": raw[602:].decode("ascii")}
    return fields | {name: struct.unpack_from("<h", raw, at)[0] for name, at in LOUDNESS_OFFSETS.items()}


def cues_of(cue: bytes, adtl: bytes) -> list[Cue]:
    """Cue points joined with their labels and lengths; ValueError where one contradicts the format."""
    (count,) = struct.unpack_from("<I", cue)
    if len(cue) != 4 + 24 * count or adtl[:4] != b"adtl":
        raise ValueError(f"{len(cue)} bytes for {count} cue points, list {adtl[:4]!r}")
    labels: dict[int, str] = {}
    lengths: dict[int, int] = {}
    at = 4
    while at < len(adtl):
        kind, size = struct.unpack_from("<4sI", adtl, at)
        body = adtl[at + 8 : at + 8 + size]
        (number,) = struct.unpack_from("<I", body)
        if kind == b"labl":
            if body[-1:] != b"\0" or b"\0" in body[4:-1]:
                raise ValueError(f"label {body!r}")
            labels[number] = body[4:-1].decode("ascii")
        elif kind == b"ltxt":
            lengths[number] = struct.unpack_from("<I", body, 4)[0]
        at += 8 + size + (size & 1)
    if at != len(adtl):
        raise ValueError("the list does not end with its last entry")
    out = []
    for index in range(count):
        number, position, kind, start, block, frame = struct.unpack_from("<II4sIII", cue, 4 + 24 * index)
        if (kind, start, block) != (b"data", 0, 0) or position != frame:
            raise ValueError(f"cue point {number}: {kind!r} {start} {block} {position}")
        out.append(Cue(frame, labels.get(number), lengths.get(number)))
    return out
