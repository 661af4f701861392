"""Broadcast Wave: the `bext` chunk both ways, and cue points.

A recorder writes into `bext` what the file is, who made it, when, and its time reference: the frame at which it
starts, counted from midnight. Reading is lenient, since recorders are: a short chunk, a text without its NUL, or one
that is not ASCII loses nothing else. Writing follows version 2, which also carries the loudness. No clock time of the
run is written: date and time are the source's, so two runs give the same bytes.

Chunks come as `(id, payload)` for `riff.append_chunks`, which pads them to an even length and corrects the sizes.

References: EBU Tech 3285 (bext, version 2: fields and offsets); Multimedia Programming Interface and Data
Specifications 1.0, IBM and Microsoft 1991 (`cue `, `LIST adtl`, `labl`, `ltxt`).
"""

from __future__ import annotations

import math
import struct
import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from leveller.riff import read_chunk

BEXT_BYTES = 602  # EBU Tech 3285: all but the coding history
HEAD = struct.Struct("<256s32s32s10s8sQH")  # description, originator, reference, date, time, time reference, version
LOUDNESS = struct.Struct("<5h")  # @412: integrated, range, true peak, momentary, short-term
LOUDNESS_AT = 412
VERSION = 2
ORIGINATOR = b"leveller"
UNUSED = 0x7FFF  # EBU Tech 3285, version 2
MOST_HUNDREDTHS = 9999  # values beyond 99.99 either way are not valid (Tech 3285 version 2, from memory)
CUE = struct.Struct("<II4sIII")  # id, position, chunk, chunk start, block start, frame in the chunk
LABELLED_LENGTH = struct.Struct("<II4sHHHH")  # id, frames, purpose, country, language, dialect, code page
MOST_FRAMES = 0xFFFFFFFF


@dataclass(frozen=True)
class Bext:
    """What a recorder says of its file; empty texts where it says nothing."""

    description: str
    originator: str
    date: str  # yyyy-mm-dd
    time: str  # hh:mm:ss
    time_reference: int | None  # frames since midnight


@dataclass(frozen=True)
class Loudness:
    """Loudness for a `bext` chunk; None or -inf where it was not measured or there is none."""

    integrated_lufs: float | None = None
    range_lu: float | None = None
    max_true_peak_dbtp: float | None = None
    max_momentary_lufs: float | None = None
    max_short_term_lufs: float | None = None


def read_bext(path: Path) -> Bext | None:
    """What the `bext` chunk of a file says, or None where it has none."""
    payload = read_chunk(path, b"bext", most_bytes=HEAD.size)
    if payload is None:
        return None
    description, originator, _, date, time, reference, _ = HEAD.unpack(payload.ljust(HEAD.size, b"\0"))
    there = len(payload) >= HEAD.size - 2  # the reference itself is not cut off
    return Bext(_text(description), _text(originator), _text(date), _text(time), reference if there else None)


def bext_chunk(
    *,
    description: str,
    time_reference: int | None,
    loudness: Loudness | None = None,
    date: str = "",
    time: str = "",
) -> bytes:
    """Payload of a `bext` chunk, version 2.

    Parameters
    ----------
    description : str
        written in ASCII, cut after 256 characters
    time_reference : int or None
        frames since midnight at the file's start, at the file's rate; None is written as 0
    loudness : Loudness, optional
        each rounded to a hundredth; what is missing, infinite or beyond 99.99 is marked as unused
    date, time : str
        of the source's `bext` (yyyy-mm-dd, hh:mm:ss); never those of the run

    Returns
    -------
    bytes
        602 of them, without a coding history
    """
    head = HEAD.pack(
        ascii_text(description).encode()[:256], ORIGINATOR, b"", ascii_text(date).encode()[:10],
        ascii_text(time).encode()[:8], time_reference or 0, VERSION)
    measured = loudness or Loudness()
    levels = LOUDNESS.pack(*(_hundredths(level) for level in (
        measured.integrated_lufs, measured.range_lu, measured.max_true_peak_dbtp, measured.max_momentary_lufs,
        measured.max_short_term_lufs)))
    return (head.ljust(LOUDNESS_AT, b"\0") + levels).ljust(BEXT_BYTES, b"\0")


def cue_chunks(places: Sequence[tuple[int, int, str]]) -> list[tuple[bytes, bytes]]:
    """Cue points with labels and lengths.

    Parameters
    ----------
    places : sequence of (frame, length_frames, label)
        a length of 0 marks a point; labels are written in ASCII. A place behind frame 2^32 - 1 (24.8 h at 48 kHz)
        cannot be written in this format and is left out.

    Returns
    -------
    list of (id, payload)
        `cue ` and `LIST`, for `append_chunks`; empty where there are no places
    """
    fitting = [place for place in places if 0 <= place[0] <= MOST_FRAMES]
    if not fitting:
        return []
    points, labels, lengths = [struct.pack("<I", len(fitting))], [b"adtl"], []
    for number, (frame, length, label) in enumerate(fitting, 1):
        points.append(CUE.pack(number, frame, b"data", 0, 0, frame))
        labels.append(_subchunk(b"labl", struct.pack("<I", number) + ascii_text(label).encode() + b"\0"))
        if length > 0:
            region = LABELLED_LENGTH.pack(number, min(length, MOST_FRAMES), b"rgn ", 0, 0, 0, 0)
            lengths.append(_subchunk(b"ltxt", region))
    return [(b"cue ", b"".join(points)), (b"LIST", b"".join(labels + lengths))]  # some readers stop at the first length


def ascii_text(text: str) -> str:
    """The text in printable ASCII: accents are dropped, other letters become '?', line ends and controls a blank."""
    plain = "".join(letter for letter in unicodedata.normalize("NFKD", text) if not unicodedata.combining(letter))
    return "".join(letter if " " <= letter <= "~" else " " if ord(letter) < 128 else "?" for letter in plain)


def _text(raw: bytes) -> str:
    """A text field up to its first NUL, as UTF-8 or else as Latin-1, without controls."""
    raw = raw.split(b"\0", 1)[0]
    try:
        text = raw.decode()
    except UnicodeDecodeError:
        text = raw.decode("latin-1")
    return " ".join("".join(letter if letter.isprintable() else " " for letter in text).split())


def _hundredths(level: float | None) -> int:
    """A level in hundredths, or the mark for 'unused'."""
    if level is None or not math.isfinite(level) or abs(round(100 * level)) > MOST_HUNDREDTHS:
        return UNUSED
    return round(100 * level)


def _subchunk(kind: bytes, payload: bytes) -> bytes:
    """A chunk within a list, padded to an even length."""
    return struct.pack("<4sI", kind, len(payload)) + payload + b"\0" * (len(payload) % 2)
