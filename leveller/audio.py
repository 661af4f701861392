"""Opens audio files and the tracks in them; the sole user of soundfile and soxr.

`probe` says what a file is, having made sure that it can be read to its end; `pieces` and `preview` look at some places
of it, `file_blocks` walks it at its own rate. `open_readers` opens all tracks of a session, each a `TrackReader` at the
session's rate; those on one polyphonic file share its decode, and a take split into several files is read as one.
Sources are opened for reading only.

Audio is float32, `(frames,)` for one channel or `(frames, channels)`. How a track is walked in session time is the
business of `tracks`, what is written that of `wav`, own chunks and truncated files that of `riff`.
"""

from __future__ import annotations

import contextlib
import os
import stat
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import soundfile
import soxr

from leveller.decoder import CHUNK_FRAMES, Chain, Decoder
from leveller.errors import InputError
from leveller.riff import append_chunks, is_little_wav, missing_bytes, read_chunks
from leveller.samples import (
    AudioSource,
    FileFacts,
    Part,
    Preview,
    Samples,
    SourceList,
    clock_rate_hz,
    parts_of,
    repair,
)
from leveller.tracks import TrackReader
from leveller.units import HOPS_PER_S
from leveller.wav import FloatSpill, FloatWav, Kind, SampleFile, WavWriter

__all__ = [
    "AudioSource", "FileFacts", "FloatSpill", "FloatWav", "Part", "Preview", "Resampler", "TrackReader", "WavWriter",
    "append_chunks", "clock_rate_hz", "open_readers", "parts_of", "pieces", "preview", "probe", "read_chunks",
    "spread_starts", "track_seconds",
]

RATES_HZ = (8000, 192000)
PREVIEW_PIECES = 60  # of 1 s each; enough for levels and likeness, a sixtieth of an hour's reading
MOST_CHANNELS = 128  # our choice: twice the tracks of a large session; bounds what a header can make us hold
READ_QUALITY = "HQ"
PLAIN: dict[str, Kind] = {"PCM_16": "pcm16", "PCM_24": "pcm24", "FLOAT": "float32"}  # by libsndfile's names
COUNT_FRAMES = 65521  # a prime: no read ends where a coded block does, for hours
CODED_FRAMES = 4096  # a block of most FLAC encoders
WAY_OUT = "Copy it again, or take what lies before with --accept-short"


def probe(path: Path, *, accept_short: bool = False) -> FileFacts:
    """What a file is, after checking that it can be read to its end.

    Raises
    ------
    InputError
        for a file that is missing, unreadable, empty, of a rate outside 8 to 192 kHz, or (without `accept_short`)
        shorter than its header says.
    """
    with _open(path) as file:
        facts = (file.samplerate, file.channels, file.subtype, file.format)
        header_frames = file.frames
        absent = missing_bytes(path)
        there = header_frames
        if absent:  # libsndfile has clamped its count already
            header_frames += -(-absent // _frame_bytes(file))
        elif (file.format in ("FLAC", "MP3") and not _tail_reads(file)) or (file.format == "FLAC" and accept_short):
            there = _count_frames(path)  # where damage is allowed it may lie anywhere
    if not RATES_HZ[0] <= facts[0] <= RATES_HZ[1]:
        raise InputError(f"{path}: {facts[0]} Hz, expected {RATES_HZ[0]} to {RATES_HZ[1]} Hz. Convert it first")
    if there < header_frames and there > 0 and not accept_short:
        raise InputError(
            f"{path}: ends after {there / facts[0]:.3f} s, but its header says {header_frames / facts[0]:.3f} s. "
            "Copy it again, or take what is there with --accept-short")
    if there <= 0:
        raise InputError(f"{path}: holds no audio (0 frames by its header, {path.stat().st_size} bytes on the disk). "
                         "Leave it out, or have the header repaired if the recorder lost power")
    if facts[1] > MOST_CHANNELS:
        raise InputError(f"{path}: {facts[1]} channels, expected at most {MOST_CHANNELS}. Split it first")
    is_float = facts[2] in ("FLOAT", "DOUBLE")
    return FileFacts(facts[0], there, facts[1], facts[2], is_float, facts[3], header_frames)


def spread_starts(frames: int, rate_hz: int) -> list[int]:
    """First frames of up to 60 pieces of 1 s, evenly spread; all of a file that is shorter than a minute."""
    if frames <= PREVIEW_PIECES * rate_hz:
        return list(range(0, frames, rate_hz))
    return [round(k * (frames - rate_hz) / (PREVIEW_PIECES - 1)) for k in range(PREVIEW_PIECES)]


def pieces(path: Path | Sequence[Part], starts: Sequence[int], *, frames: int) -> Iterator[Samples]:
    """Read some places of a file, each `(frames, channels)`; zeros where a place lies outside the file.

    The same array is filled again for each place. The files of a split take (`parts_of(track)`) count as one.

    Raises
    ------
    InputError
        where the file cannot be opened or read there.
    """
    with _open_samples(path) if isinstance(path, Path) else _open_parts(path) as file:
        length = file.frames if isinstance(path, Path) else sum(part.frames for part in path)  # that are taken
        block = np.empty((frames, file.channels), np.float32)
        for start in starts:
            block.fill(0)
            first, last = max(start, 0), min(start + frames, length)
            if last > first:
                try:
                    file.seek(first)
                    file.read(out=block[first - start : last - start])
                except (soundfile.LibsndfileError, OSError) as error:
                    name = path if isinstance(path, Path) else path[0].path
                    raise InputError(f"{name}: cannot be read at {first / file.samplerate:.3f} s "
                                     f"({_detail(error)}). {WAY_OUT}") from error
                repair(block)
            yield block


def track_seconds(track: AudioSource, rate_hz: int, starts_s: Sequence[float]) -> Iterator[Samples]:
    """Seconds of a track, each of shape=(source_rate_hz, its channels), that begin at session times.

    `rate_hz` is that of the session. Nothing is resampled, so a line of a spectrum is 1 Hz at any rate of the source;
    edges and errors as of `pieces`.
    """
    hz = track.source_rate_hz
    places = [round((start_s - track.offset_frames / rate_hz) * hz) for start_s in starts_s]
    for block in pieces(parts_of(track), places, frames=hz):
        yield block[:, list(track.channels)]


def preview(path: Path | Sequence[Part], facts: FileFacts) -> Preview:
    """Powers of up to a minute of a file or a split take, for levels and for the likeness of two channels."""
    hop = facts.rate_hz // HOPS_PER_S
    starts = spread_starts(facts.frames, facts.rate_hz)
    power, cross = [], []
    for start, block in zip(starts, pieces(path, starts, frames=facts.rate_hz), strict=True):
        hops = max(1, min(facts.rate_hz, facts.frames - start) // hop)  # the rest of the last piece is not there
        grid = block[: hops * hop].reshape(hops, hop, -1).astype(np.float64)
        grid -= grid.mean(axis=1, keepdims=True)  # DC is no level and no likeness
        power.append(np.mean(grid * grid, axis=1))
        cross.append(np.mean(grid[:, :, 0] * grid[:, :, 1], axis=1) if facts.channels > 1 else np.zeros(hops))
    return Preview(np.concatenate(power), np.concatenate(cross))


class Resampler:
    """A streaming resampler, exact at any block size; it hands blocks through where both rates are equal.

    Parameters
    ----------
    from_hz, to_hz : float
    channels : int
    quality : str
        of soxr: 'LQ', 'MQ' (enough for analysis), 'HQ', 'VHQ'
    """

    def __init__(self, from_hz: float, to_hz: float, *, channels: int = 1, quality: str = "MQ") -> None:
        self._stream = None if from_hz == to_hz else soxr.ResampleStream(
            from_hz, to_hz, channels, dtype="float32", quality=quality)

    def push(self, block: Samples, last: bool = False) -> Samples:
        """The next samples at the new rate; `last` brings out what is still held back."""
        if self._stream is None:
            return block
        out: Samples = self._stream.resample_chunk(block, last=last)
        return out


@contextlib.contextmanager
def open_readers(session: SourceList) -> Iterator[list[TrackReader]]:
    """Readers of all tracks, in session order; those on one file (at one offset) share its decode."""
    groups: dict[tuple[tuple[Part, ...], int], list[AudioSource]] = {}
    for track in session.tracks:
        groups.setdefault((parts_of(track), track.offset_frames), []).append(track)
    with contextlib.ExitStack() as stack:
        readers: dict[str, TrackReader] = {}
        for (parts, _), tracks in groups.items():
            decoder = Decoder(_open_parts(parts), tracks[0], len(tracks))
            for user, track in enumerate(tracks):
                resampler = Resampler(
                    clock_rate_hz(track), session.rate_hz, channels=track.width, quality=READ_QUALITY)
                reader = TrackReader(track, session.rate_hz, decoder=decoder, user=user, resampler=resampler)
                readers[track.name] = stack.enter_context(reader)
        yield [readers[track.name] for track in session.tracks]


def file_blocks(path: Path, frames: int, *, length: int | None = None) -> Iterator[Samples]:
    """A file (its first `length` frames) in blocks, shape=(frames, channels), at its own rate, the last one shorter.

    Raises
    ------
    InputError
        where the file cannot be opened, or read any further.
    """
    with _open(path) as file:
        left = file.frames if length is None else length
        while left > 0:
            try:
                block = file.read(min(frames, left), dtype="float32", always_2d=True)
            except (soundfile.LibsndfileError, OSError) as error:
                raise InputError(f"{path}: cannot be read behind {file.tell() / file.samplerate:.3f} s "
                                 f"({_detail(error)}). {WAY_OUT}") from error
            if not len(block):
                return
            left -= len(block)
            yield block


def _open_parts(parts: Sequence[Part]) -> Any:
    """One open file, or a chain of several."""
    return _open_samples(parts[0].path) if len(parts) == 1 else Chain(parts, _open_samples)


def _open_samples(path: Path) -> Any:
    """The quickest reader of the samples of a file: `SampleFile` for plain WAV files, else a SoundFile."""
    file = _open(path)
    kind = PLAIN.get(file.subtype) if file.format in ("WAV", "WAVEX", "RF64") and is_little_wav(path) else None
    if kind is None:
        return file
    with file:
        return SampleFile(path, kind, frames=file.frames, samplerate=file.samplerate, channels=file.channels)


def _open(path: Path) -> Any:
    """An open SoundFile, or InputError that says why not."""
    _check_there(path)
    try:
        return soundfile.SoundFile(_native(path))
    except (soundfile.LibsndfileError, OSError) as error:
        raise InputError(
            f"{path}: not readable as audio ({_detail(error)}). Convert it to WAV or leave it out") from error


def _check_there(path: Path) -> None:
    """The file is one, is not empty and may be read."""
    try:  # os.stat: Path.is_file says no more than "no" of a name too long since Python 3.14
        found = os.stat(path)
        if not stat.S_ISREG(found.st_mode):
            raise InputError(f"{path}: no such file")
        if not found.st_size:
            raise InputError(f"{path}: empty file (0 bytes). Leave it out or copy it again")
        with open(path, "rb"):
            pass
    except (FileNotFoundError, NotADirectoryError):
        raise InputError(f"{path}: no such file") from None
    except OSError as error:  # no right to it, a name too long
        raise InputError(f"{path}: cannot be read ({error.strerror})") from error


def _detail(error: Exception) -> str:
    """What went wrong, without the path."""
    return str(getattr(error, "error_string", error)).strip().rstrip(".")


def _native(path: Path) -> Path | bytes:
    """The path as the system has it: soundfile refuses names that are no UTF-8, but takes their bytes."""
    return path if os.name == "nt" else os.fsencode(path)


def _frame_bytes(file: Any) -> int:
    """Bytes of one frame in a PCM file; an estimate from 16 bit for coded ones."""
    bits = {"PCM_S8": 8, "PCM_U8": 8, "PCM_24": 24, "PCM_32": 32, "FLOAT": 32, "DOUBLE": 64, "ULAW": 8, "ALAW": 8}
    return int(file.channels) * bits.get(file.subtype, 16) // 8


def _tail_reads(file: Any) -> bool:
    """Whether the last frame that the header counts can be decoded."""
    try:
        file.seek(max(file.frames - 1, 0))
        return len(file.read(1)) == 1
    except (soundfile.LibsndfileError, OSError):
        return False


def _count_frames(path: Path) -> int:
    """Decode a file from its start until it ends or fails.

    libsndfile fills what it can of a read that fails, which NaN in the rest shows. It also fails a read that ends just
    where the damage begins, since it decodes ahead: hence the odd number of frames a step, and one frame less.
    """
    count = 0
    with _open(path) as file:
        block = np.full((COUNT_FRAMES, file.channels), np.nan, np.float32)
        try:
            while got := len(file.read(out=block)):
                count += got
                block.fill(np.nan)
        except (soundfile.LibsndfileError, OSError):
            whole = int(np.argmax(np.isnan(block[:, 0])))
            count = max(count + whole - 1, 0)
    while count and not _reads(path, count):
        count = max(count - CODED_FRAMES, 0)  # libsndfile 1.2.0 fills in the damaged block too before it fails
    return count


def _reads(path: Path, frames: int) -> bool:
    """Whether so many frames can be read, in the chunks in which they will be."""
    with _open(path) as file, contextlib.suppress(soundfile.LibsndfileError, OSError):
        for start in range(0, frames, CHUNK_FRAMES):
            if len(file.read(min(CHUNK_FRAMES, frames - start), dtype="float32")) == 0:
                return False
        return True
    return False
