"""Own speech and its K-weighted level, as every levelling step hears it: bleed, pauses and noise are left out.

A voice's level counts all of its own speech, also what is said over others: somebody who says little says much of it
there, and often otherwise than alone. What the others' bleed adds to the microphone then is taken off by the bleed that
is predicted (`Activity.own_to_bleed_db`), so that it makes nobody louder. The ride, which follows the voice from hop to
hop, listens only while nobody else speaks, as long as there is enough of that.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.attribute import Activity
from leveller.measure import Measurements
from leveller.measure.levels import level_to_db
from leveller.measure.loudness import power_to_lufs
from leveller.units import Bools

AUDIBLE_DB = 6.0  # over the noise
QUIET_DB = 25.0  # under the mean of own speech: the gate of the level
LEAST_HOPS = 10  # own speech shorter than this has no level
ENOUGH_HOPS = 200  # spoken alone: what was spoken over others is not needed

Grid = npt.NDArray[np.float32]


def own_speech(activity: Activity) -> Bools:
    """Hops of own, clearly audible speech, shape=(hops, tracks)."""
    return np.asarray(activity.own & (activity.audible_db > AUDIBLE_DB) & activity.programme[:, None])


def spoken_alone(activity: Activity) -> Bools:
    """Those while nobody else speaks, if there are enough; else all of them."""
    alone = activity.own.sum(axis=1) == 1
    counted = own_speech(activity)
    for track in range(counted.shape[1]):
        if np.count_nonzero(counted[:, track] & alone) >= ENOUGH_HOPS:
            counted[:, track] &= alone
    return np.asarray(counted)


def k_power(m: Measurements, track: int) -> Grid:
    """K-weighted power of one track per hop, shape=(hops,)."""
    return np.asarray(10 ** (level_to_db(m.k_levels[:, track]) / 10), np.float32)


def own_power(m: Measurements, activity: Activity, track: int) -> Grid:
    """K-weighted power of one voice per hop, shape=(hops,): less the bleed predicted there, while others speak too."""
    power = k_power(m, track)
    over = activity.own[:, track] & (activity.own.sum(axis=1) > 1)
    bleed = np.minimum(10 ** (-activity.own_to_bleed_db[over, track] / 10), 1)
    power[over] *= 1 - bleed
    return power


def level_lufs(power: npt.NDArray[np.floating], counted: Bools) -> float | None:
    """Level of the counted hops, gated `QUIET_DB` under their mean; None where there is too little."""
    own = power[counted]
    if len(own) < LEAST_HOPS:
        return None
    gate = own.mean(dtype=np.float64) * 10 ** (-QUIET_DB / 10)
    heard = own[own > gate]  # none in digital silence that an editor calls own voice
    return float(power_to_lufs(heard.mean(dtype=np.float64))) if len(heard) else None
