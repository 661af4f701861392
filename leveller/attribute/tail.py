"""How fast the room decays, from the recording itself.

Speech falls off at the end of every word, and no faster than the room lets it: the slopes of falling levels have their
middle near the room's own decay in live rooms and below it in dry ones, where words fade more slowly than the room.
Measured on simulated rooms: RT60 0.3 s gives 0.9 to 1.1 dB per 10 ms, 0.6 s 0.7, 1.0 s 0.5. That is the tail with
which predicted bleed is held up (`bleed`).

Blind estimation of reverberation from free decays: R. Ratnam et al., JASA 114(5), 2003; the median of least-squares
slopes is our own, simpler choice.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.measure.levels import Levels, mean_level_db
from leveller.units import HOPS_PER_S

WINDOW_HOPS = 10
FALLING_DB = 0.3  # no step inside a decay may rise by more
CLEAR_DB = 6.0  # over the floor at the end of the window
LEAST_DECAYS = 200
USUAL_DB_PER_HOP = 0.8
BOUNDS_DB_PER_HOP = (0.4, 1.3)

Grid = npt.NDArray[np.float32]


def tail_db_per_hop(levels: Levels, floor_db: Grid) -> float:
    """Decay of the room in dB per hop; `USUAL_DB_PER_HOP` where too little falls freely.

    Parameters
    ----------
    levels : shape=(hops, tracks, bands)
    floor_db : shape=(seconds, tracks, bands)
    """
    slopes = np.concatenate([
        _slopes(mean_level_db(levels[:, track]), floor_db[:, track].mean(axis=1)) for track in range(levels.shape[1])])
    if len(slopes) < LEAST_DECAYS:
        return USUAL_DB_PER_HOP
    return float(np.clip(np.median(slopes), *BOUNDS_DB_PER_HOP))


def _slopes(level_db: Grid, floor_db: Grid) -> Grid:
    """Falling slopes of one track in dB per hop, one a window that falls throughout."""
    if len(level_db) < WINDOW_HOPS:
        return np.zeros(0, np.float32)
    centred = np.arange(WINDOW_HOPS, dtype=np.float32) - np.float32((WINDOW_HOPS - 1) / 2)
    windows = np.lib.stride_tricks.sliding_window_view(level_db, WINDOW_HOPS)
    steps = np.lib.stride_tricks.sliding_window_view(np.diff(level_db), WINDOW_HOPS - 1)
    floor = np.repeat(floor_db, HOPS_PER_S)[: len(level_db)]
    falls = (steps.max(axis=1) < FALLING_DB) & (windows[:, -1] > floor[: len(windows)] + CLEAR_DB)
    return np.asarray(-(windows[falls] @ centred) / (centred @ centred))
