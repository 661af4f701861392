"""Tracks and sessions as far as a reader asks, of files that tests have written."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from leveller import audio
from leveller.audio import Part

RATE_HZ = 48000


@dataclass(frozen=True)
class Source:
    """A track as `session` would hand it over."""

    name: str
    path: Path
    channels: tuple[int, ...] = (0,)
    width: int = 1
    offset_frames: int = 0
    frames: int = 0
    source_rate_hz: int = RATE_HZ
    source_frames: int = 0
    is_float: bool = True
    polarity: int = 1
    high_pass_hz: float | None = None
    parts: tuple[Part, ...] = ()


@dataclass(frozen=True)
class Sources:
    """A session as far as `open_readers` asks."""

    rate_hz: int
    tracks: tuple[Source, ...]


def noise(frames: int, channels: int = 1, seed: int = 1) -> np.ndarray:
    """Seeded noise at -20 dBFS, (frames,) or (frames, channels)."""
    shape = (frames,) if channels == 1 else (frames, channels)
    return np.random.default_rng(seed).normal(0, 0.1, shape).astype(np.float32)


def source(path: Path, *, rate_hz: int = RATE_HZ, **changes: Any) -> Source:
    """A track of a file that exists."""
    facts = audio.probe(path)
    frames = (2 * facts.frames * rate_hz + facts.rate_hz) // (2 * facts.rate_hz)
    made = Source(path.stem, path, frames=frames, source_rate_hz=facts.rate_hz, source_frames=facts.frames,
                  is_float=facts.is_float)
    return replace(made, **changes)


@contextlib.contextmanager
def reader_of(track: Source, rate_hz: int = RATE_HZ) -> Iterator[audio.TrackReader]:
    """The reader of a session of one track."""
    with audio.open_readers(Sources(rate_hz, (track,))) as (reader,):
        yield reader


def read_all(track: Source, sizes: list[int], rate_hz: int = RATE_HZ) -> np.ndarray:
    """A track in blocks of the given sizes."""
    with reader_of(track, rate_hz) as reader:
        return np.concatenate([reader.read(size) for size in sizes])
