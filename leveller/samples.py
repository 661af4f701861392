"""Small steps on blocks of samples that need no file: integers with dither, repair, high-pass; and the records.

Blocks are float32, `(frames,)` or `(frames, channels)`. Integers: full scale is 2^23 or 2^15 steps, rounded to nearest
and clipped at the top step; triangular dither of two steps peak to peak only at 16 bit (S. P. Lipshitz, R. A.
Wannamaker, J. Vanderkooy, JAES 40(5), 1992), drawn frame by frame from a fixed seed, so that the block size does not
matter. The protocols say what `audio` must know of a session; `session` implements them and imports `audio`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

import numpy as np
import numpy.typing as npt

Samples = npt.NDArray[np.float32]

DITHER_SEED = 20
BROKEN_FROM = 1e12  # +240 dBFS: no file of integers read as float gets there, and its square is still finite


@dataclass(frozen=True)
class FileFacts:
    """What a file is, as far as it can be used."""

    rate_hz: int
    frames: int  # that are there; header_frames says how many there should be
    channels: int
    subtype: str
    is_float: bool
    format: str
    header_frames: int


@dataclass(frozen=True)
class Preview:
    """Powers of some seconds of a file, by hop of 10 ms."""

    power: npt.NDArray[np.float64]  # mean square without DC, shape=(hops, channels)
    cross: npt.NDArray[np.float64]  # mean product of the first two channels, shape=(hops,); zeros for one channel


@dataclass(frozen=True)
class Part:
    """One file of a take that a recorder has split."""

    path: Path
    frames: int  # that are taken of it


class AudioSource(Protocol):
    """What a reader must know of a track; `session.Track` is one. It may have `parts` and `clock_ppm` (see below)."""

    @property
    def name(self) -> str: ...
    @property
    def path(self) -> Path: ...
    @property
    def channels(self) -> tuple[int, ...]: ...
    @property
    def width(self) -> int: ...
    @property
    def offset_frames(self) -> int: ...
    @property
    def frames(self) -> int: ...
    @property
    def source_rate_hz(self) -> int: ...
    @property
    def source_frames(self) -> int: ...
    @property
    def is_float(self) -> bool: ...
    @property
    def polarity(self) -> int: ...
    @property
    def high_pass_hz(self) -> float | None: ...


class SourceList(Protocol):
    """What `open_readers` must know of a session; `session.Session` is one."""

    @property
    def rate_hz(self) -> int: ...
    @property
    def tracks(self) -> Sequence[AudioSource]: ...


def parts_of(source: AudioSource) -> tuple[Part, ...]:
    """The files that a track is read from, in order; one unless its take was split (then it has `parts`)."""
    parts: tuple[Part, ...] = getattr(source, "parts", ())
    return parts or (Part(source.path, source.source_frames),)


def clock_rate_hz(source: AudioSource) -> float:
    """The rate at which a track's frames really came, where its recorder's clock was fast or slow (`clock_ppm`)."""
    ppm: float = getattr(source, "clock_ppm", 0.0)
    return source.source_rate_hz * (1 + ppm * 1e-6) if ppm else source.source_rate_hz


class Quantiser:
    """Float to integers of 16 or 24 bit as a WAV file holds them, little-endian; dither at 16 bit."""

    def __init__(self, bits: int, channels: int) -> None:
        self._bits, self._channels = bits, channels
        self._dither = np.random.Generator(np.random.PCG64(DITHER_SEED))

    def push(self, block: Samples) -> npt.NDArray[np.uint8]:
        """The next block as bytes, shape=(samples, bits / 8); values beyond full scale are clipped."""
        full = np.float32(2.0 ** (self._bits - 1))
        steps = block * full
        if self._bits == 16:
            draws = self._dither.random((len(block), self._channels, 2), dtype=np.float32)
            steps += (draws[:, :, 0] - draws[:, :, 1]).reshape(steps.shape)
        np.rint(steps, out=steps)
        np.clip(steps, -full, full - 1, out=steps)
        whole = steps.astype("<i4").reshape(-1, 1).view(np.uint8)
        out = np.empty((len(whole), self._bits // 8), np.uint8)
        for byte in range(out.shape[1]):  # one at a time: five times as fast as all together (measured)
            out[:, byte] = whole[:, byte]
        return out


class HighPass:
    """Second-order Butterworth high-pass with its state; filtering in place."""

    def __init__(self, cutoff_hz: float, rate_hz: int, width: int) -> None:
        from scipy.signal import butter

        self._sections = butter(2, cutoff_hz, "highpass", fs=rate_hz, output="sos")
        self._state = np.zeros((1, 2) if width == 1 else (1, 2, width))

    def apply(self, block: Samples) -> None:
        """Replace the block by what the filter lets through."""
        from scipy.signal import sosfilt

        block[...], self._state = sosfilt(self._sections, block.astype(np.float64), axis=0, zi=self._state)


def repair(block: Samples) -> npt.NDArray[np.bool_] | None:
    """Silence NaN, Inf and what is beyond any sound in place; where they were, or None."""
    if block.max(initial=0) < BROKEN_FROM and block.min(initial=0) > -BROKEN_FROM:  # false for NaN
        return None
    bad = ~(np.abs(block) < BROKEN_FROM)
    block[bad] = 0
    return bad
