"""The noise floor of each microphone, per band and second.

Method: the quietest 90 ms of every second (minimum statistics; R. Martin, IEEE Trans. SAP 9(5), 2001, in its simplest
form), then a low percentile over the 20 s before and over the 20 s after, and the higher of the two: a fan that starts
or a knob that is turned moves the floor within a second or two instead of dragging it for half a minute. Runs of
digital zero, as a muted call leaves, do not count.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.measure.levels import SILENT, STEP_DB, Levels, walked
from leveller.units import HOPS_PER_S

AVERAGE_HOPS = 9
WINDOW_S = 20
PERCENTILE = 15
LEAST_S = 3  # fewer seconds with sound in a window say nothing
BIAS_DB = 1.5  # a minimum of averages lies under the mean (measured on pink noise)
NONE_DB = -190.0

FloorDb = npt.NDArray[np.float32]


def noise_floor(levels: Levels) -> FloorDb:
    """Floor in dB, shape=(seconds, tracks, bands); `NONE_DB` for a track that is digitally silent throughout."""
    return floor_of(quietest_db(levels))


def floor_of(quiet: FloorDb) -> FloorDb:
    """The same from the quietest moments, shape=(seconds, tracks, bands), nan where there is none."""
    floor = np.full(quiet.shape, np.nan, np.float32)
    for second in range(len(quiet)):
        before = _low(quiet[max(0, second - WINDOW_S + 1) : second + 1])
        after = _low(quiet[second : second + WINDOW_S])
        floor[second] = np.fmax(before, after)
    return _filled(floor) + np.float32(BIAS_DB)


def quietest_db(levels: Levels) -> FloorDb:
    """Quietest 90 ms of each second, nan where none of them has sound throughout."""
    hops, tracks, bands = levels.shape
    out = np.full((-(-hops // HOPS_PER_S), tracks, bands), np.nan, np.float32)
    for second, rows in enumerate(walked(levels, HOPS_PER_S)):
        part = levels[rows]
        if len(part) < AVERAGE_HOPS:
            continue
        mean = _sliding_sum(part) / np.float32(AVERAGE_HOPS)
        dead = _sliding_sum(part[:, :, 0] == SILENT) > 0
        mean[dead] = np.inf
        least = mean.min(axis=0)
        out[second] = np.where(np.isfinite(least), least * np.float32(STEP_DB), np.nan)
    return out


def _sliding_sum(values: npt.NDArray[Any]) -> npt.NDArray[np.int32]:
    """Sums of `AVERAGE_HOPS` neighbours along the first axis."""
    total = np.cumsum(values, axis=0, dtype=np.int32)
    out = total[AVERAGE_HOPS - 1 :].copy()
    out[1:] -= total[:-AVERAGE_HOPS]
    return out


def _low(part: FloorDb) -> FloorDb:
    """A low percentile over seconds, nan where too few have sound."""
    ranked = np.sort(part, axis=0)  # nan last
    count = np.isfinite(part).sum(axis=0)
    at = np.maximum(count - 1, 0) * PERCENTILE // 100
    low = np.take_along_axis(ranked, at[None], axis=0)[0]
    return np.where(count >= min(LEAST_S, len(part)), low, np.float32(np.nan))


def _filled(floor: FloorDb) -> FloorDb:
    """Seconds without a floor take the next one of their track (the last one at the end)."""
    seconds = np.arange(len(floor))
    for track in range(floor.shape[1]):
        known = np.isfinite(floor[:, track]).all(axis=1)
        if not known.any():
            floor[:, track] = NONE_DB
        elif not known.all():
            at = np.flatnonzero(known)
            floor[:, track] = floor[at[np.clip(np.searchsorted(at, seconds), 0, len(at) - 1)], track]
    return floor
