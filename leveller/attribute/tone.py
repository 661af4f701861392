"""Steady tone: line-up tone and slates that shall not count as programme.

A hop is tone where one band carries nearly all the power and its level has stood still for two seconds. Speech never
holds one band within half a decibel for that long; hum does, but lies under the bands looked at.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.measure.levels import STEP_DB, WALKED_HOPS, Levels, release
from leveller.units import HOPS_PER_S, Bools

LEAST_S = 2
STEADY_DB = 0.5
OVER_DB = 15.0  # the band of the tone and its neighbours over all others together
LOUD_DB = -60.0
MARGIN_HOPS = 10


def steady_tone(levels: Levels) -> Bools:
    """True where any track carries a steady tone, shape=(hops,)."""
    hops, tracks, bands = levels.shape
    found = np.zeros(hops, np.bool_)
    if bands < 4:
        return found
    window = LEAST_S * HOPS_PER_S
    for start in range(0, hops - window + 1, HOPS_PER_S // 2):
        if start % WALKED_HOPS == 0:
            release(levels)
        part = levels[start : start + window]
        low, high = part.min(axis=0), part.max(axis=0)
        best = high.argmax(axis=1)
        for track in range(tracks):
            band = int(best[track])
            still = (int(high[track, band]) - int(low[track, band])) * STEP_DB < STEADY_DB
            if still and low[track, band] * STEP_DB > LOUD_DB and _alone(high[track] * STEP_DB, band):
                found[max(0, start - MARGIN_HOPS) : start + window + MARGIN_HOPS] = True
    return found


def _alone(level_db: npt.NDArray[Any], band: int) -> bool:
    """Whether one band and its neighbours hold nearly all the power."""
    others = np.delete(level_db, [b for b in (band - 1, band, band + 1) if 0 <= b < len(level_db)])
    return bool(level_db[band] > 10 * np.log10(np.sum(10 ** (others / 10))) + OVER_DB)
