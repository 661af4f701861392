"""Levels held small: 16-bit integers in steps of 1/512 of a doubling of power.

An hour of one track has 360 000 hops with 16 levels each. As float32 that is 23 MB, as int16 half of it, with steps of
0.006 dB. Steps of a power of two (and not, say, hundredths of a dB) have a purpose: a source of exactly twice the
amplitude gives exactly shifted integers, so that no decision can hang on how the recording gains were set.

Three hours of eight tracks still take 240 MB in bands, and they are walked from start to end a few times. So a large
grid lies in a nameless file (`level_grid`), and the memory of what was read of it is given back on the way (`walked`,
`release`).
"""

from __future__ import annotations

import contextlib
import math
import mmap
import os
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

STEPS_PER_DOUBLING = 512
STEP_DB = 10 * math.log10(2) / STEPS_PER_DOUBLING  # 0.00588 dB
SILENT = np.iinfo(np.int16).min  # -192.7 dB: no power at all

SHELVED_FROM_BYTES = 64 << 20
WALKED_HOPS = 60_000  # between two releases

Levels = npt.NDArray[np.int16]


def level_grid(shape: tuple[int, int, int], *, folder: Path | None = None) -> Levels:
    """A grid of silence, shape=(hops, tracks, bands).

    A large one lies in a nameless file of the folder, if one is given. The room for it is taken at once: where there is
    none, or the system cannot promise it, the grid lies in memory.
    """
    size = math.prod(shape) * np.dtype(np.int16).itemsize
    if folder is not None and size >= SHELVED_FROM_BYTES:
        with contextlib.suppress(OSError, AttributeError), tempfile.TemporaryFile(dir=folder) as file:
            os.posix_fallocate(file.fileno(), 0, size)
            grid = np.frombuffer(mmap.mmap(file.fileno(), size), np.int16).reshape(shape)
            for rows in walked(grid, WALKED_HOPS):
                grid[rows] = SILENT
            return grid
    return np.full(shape, SILENT, np.int16)


def walked(levels: npt.NDArray[Any], step: int) -> Iterator[slice]:
    """Rows from start to end, so many at a time; what lies behind need not stay in memory."""
    for start in range(0, len(levels), step):
        yield slice(start, min(start + step, len(levels)))
        if start // WALKED_HOPS != (start + step) // WALKED_HOPS:
            release(levels)
    release(levels)


def release(levels: npt.NDArray[Any]) -> None:
    """Give back the memory of a grid that lies in a file; its contents stay there. Other arrays stay as they are."""
    owner: Any = levels
    while isinstance(owner, np.ndarray):
        owner = owner.base
    owner = owner.obj if isinstance(owner, memoryview) else owner
    if isinstance(owner, mmap.mmap):
        owner.madvise(mmap.MADV_DONTNEED)


def power_to_level(power: npt.NDArray[np.float32]) -> Levels:
    """Powers as 16-bit levels, same shape; zero power is `SILENT`."""
    mantissa, exponent = np.frexp(power)
    steps = np.rint(np.log2(np.maximum(mantissa, np.float32(0.5))) * np.float32(STEPS_PER_DOUBLING))
    steps += exponent * np.float32(STEPS_PER_DOUBLING)
    steps[power <= 0] = SILENT
    return np.clip(steps, SILENT, 32767).astype(np.int16)


def level_to_db(level: npt.NDArray[Any]) -> npt.NDArray[np.float32]:
    """16-bit levels in dB, float32, same shape."""
    return level.astype(np.float32) * np.float32(STEP_DB)


def mean_level_db(levels: Levels) -> npt.NDArray[np.float32]:
    """Mean over the last axis (bands) in dB, float32; without a float copy of everything, which is large."""
    out = np.empty(levels.shape[:-1], np.float32)
    for rows in walked(levels, WALKED_HOPS):
        out[rows] = levels[rows].mean(axis=-1, dtype=np.float32)
    out *= np.float32(STEP_DB)
    return out
