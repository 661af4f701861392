"""The static trim: one gain that brings a voice to `VOICE_LUFS`, K-weighted over its own speech.

Every voice lies at the same level after it (ITU-R BS.1770 weighting; the gate is our own: what lies 25 dB under the mean of own
speech is not speech). The make-up gain of the mix does the rest.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller import settings as settings_
from leveller.attribute import Activity
from leveller.measure import Measurements
from leveller.plan.levels import k_power, level_lufs
from leveller.units import Bools

VOICE_LUFS = -23.0  # any common level would do; this one keeps the gains of usual recordings small

Nodes = npt.NDArray[np.float32]


def trim_nodes_db(
    m: Measurements, activity: Activity, counted: Bools, track: int, *, settings: settings_.Trim
) -> Nodes:
    """Gain of one voice at hop edges, shape=(hops + 1,); 0 for a voice that is never heard."""
    out = np.zeros(m.hops + 1, np.float32)
    level = level_lufs(k_power(m, track), counted[:, track])
    if settings.enabled and level is not None:
        out += np.clip(VOICE_LUFS - level, -settings.most_db, settings.most_db)
    return out
