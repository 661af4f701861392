"""Levels held small: 16-bit integers in steps of 1/512 of a doubling of power.

An hour of one track has 360 000 hops with 16 levels each. As float32 that is 23 MB, as int16 half of it, with steps of
0.006 dB. Steps of a power of two (and not, say, hundredths of a dB) have a purpose: a source of exactly twice the
amplitude gives exactly shifted integers, so that no decision can hang on how the recording gains were set.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import numpy.typing as npt

STEPS_PER_DOUBLING = 512
STEP_DB = 10 * math.log10(2) / STEPS_PER_DOUBLING  # 0.00588 dB
SILENT = np.iinfo(np.int16).min  # -192.7 dB: no power at all

Levels = npt.NDArray[np.int16]


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
    return np.asarray(levels.mean(axis=-1, dtype=np.float32) * np.float32(STEP_DB))
