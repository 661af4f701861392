"""The gentle compressor within a phrase: soft knee, feed-forward, smoothed in the log domain after the gain computer.

D. Giannoulis, M. Massberg, J. D. Reiss, JAES 60(6), 2012. The level detector is the 10 ms speech level without
rumble, so neither thumps nor plosives drive it; only own speech does, so neither bleed nor pauses do. Because
nothing here is live, it looks ahead by one hop.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller import settings as settings_
from leveller.plan.curves import compressor_gain_db, one_pole
from leveller.recursion import recursion
from leveller.units import HOP_S, Bools

Grid = npt.NDArray[np.float32]
_DONE_DB = 0.005


def compressor_nodes_db(level_db: Grid, own: Bools, *, settings: settings_.Compressor) -> Grid:
    """Gain of one voice at hop edges, shape=(hops + 1,), never above 0.

    Parameters
    ----------
    level_db : shape=(hops,)
        Speech level after trim and ride, against the voice's own level.
    own : shape=(hops,)
        Hops of own voice; elsewhere the gain returns to 0.
    """
    out = np.zeros(len(level_db) + 1, np.float32)
    if not settings.enabled:
        return out
    static = compressor_gain_db(
        level_db, threshold_db=settings.threshold_db, ratio=settings.ratio, knee_db=settings.knee_db)
    wanted = np.where(own, np.maximum(static, -settings.most_db), 0.0)
    out[: len(level_db)] = _smoothed(wanted, settings)  # a hop's gain is reached at its start: one hop of look-ahead
    out[-1] = out[-2] if len(level_db) else 0.0
    return out


def _smoothed(wanted: npt.NDArray[np.floating], settings: settings_.Compressor) -> npt.NDArray[np.float64]:
    """One-pole smoothing with separate attack and release."""
    attack, release = one_pole(settings.attack_s, HOP_S), one_pole(settings.release_s, HOP_S)

    def step(now: npt.NDArray[np.float64], target: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
        after = target + np.where(target < now, attack, release) * (now - target)
        after[(target == 0.0) & (after > -_DONE_DB)] = 0.0
        return after

    return recursion(wanted, step)
