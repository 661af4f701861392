"""Static curves of the dynamics processors, gain in dB over level in dB.

D. Giannoulis, M. Massberg, J. D. Reiss, "Digital Dynamic Range Compressor Design - A Tutorial and Analysis", JAES
60(6), 2012: input x, output y, threshold T, knee W, ratio R, all in dB; the expander is the mirror image, with a
range D at which it ends. A limiter is a compressor with an infinite ratio.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.floating]


def compressor_gain_db(level_db: Floats, *, threshold_db: float, ratio: float, knee_db: float) -> Floats:
    """Gain of a compressor, never above 0: y - x of the published curve."""
    over = np.asarray(level_db) - threshold_db
    slope = (0.0 if math.isinf(ratio) else 1.0 / ratio) - 1.0
    gain = np.where(over > 0, slope * over, 0.0)
    if knee_db > 0:
        inside = 2 * np.abs(over) <= knee_db
        gain = np.where(inside, slope * (over + knee_db / 2) ** 2 / (2 * knee_db), gain)
    return np.asarray(gain)


def expander_gain_db(
    level_db: Floats, *, threshold_db: float, ratio: float, knee_db: float, range_db: float
) -> Floats:
    """Gain of a downward expander, from -range to 0: y - x of the published curve."""
    over = np.asarray(level_db) - threshold_db
    gain = np.where(over < 0, (ratio - 1.0) * over, 0.0)
    if knee_db > 0:
        inside = 2 * np.abs(over) <= knee_db
        gain = np.where(inside, -(ratio - 1.0) * (over - knee_db / 2) ** 2 / (2 * knee_db), gain)
    return np.asarray(np.maximum(gain, -range_db))


def one_pole(time_s: float, step_s: float) -> float:
    """Coefficient of a one-pole smoother that has gone 1 - 1/e of the way after `time_s`."""
    return math.exp(-step_s / time_s) if time_s > 0 else 0.0
