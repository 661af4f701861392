"""The static trim: one gain that brings a voice to `VOICE_LUFS`, and a step where the recording gain stepped.

Level: K-weighted over own speech (ITU-R BS.1770 weighting; the gate is our own: what lies 25 dB under the mean of own
speech is not speech). Every voice lies at the same level after it; the make-up gain of the mix does the rest.

A knob that was turned (`attribute.knobs`) is turned back by as much at the same moment, so that the voice, its room
tone and the bleed keep their level. Somebody who leans back or changes seat is the ride's business.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller import settings as settings_
from leveller.attribute.knobs import Step
from leveller.plan.levels import level_lufs
from leveller.units import Bools

VOICE_LUFS = -23.0  # any common level would do; this one keeps the gains of usual recordings small
RAMP_HOPS = 3

Nodes = npt.NDArray[np.float32]


def trim_nodes_db(
    power: Nodes, counted: Bools, steps: list[Step], *, settings: settings_.Trim
) -> Nodes:
    """Gain of one voice at hop edges, shape=(hops + 1,); 0 for a voice that is never heard.

    Parameters
    ----------
    power : shape=(hops,)
        K-weighted.
    counted : shape=(hops,)
        Own speech.
    steps : list of Step
        Of this track.
    """
    out = np.zeros(len(power) + 1, np.float32)
    if not settings.enabled or level_lufs(power, counted) is None:
        return out
    for step in steps:
        out[step.hop :] -= np.float32(step.size_db)
    level = level_lufs(power * 10 ** (out[:-1] / 10), counted)
    if level is not None:
        out += np.float32(VOICE_LUFS - level)
    return _ramped(np.clip(out, -settings.most_db, settings.most_db), steps)


def _ramped(trim: Nodes, steps: list[Step]) -> Nodes:
    """Steps drawn over 30 ms, so that they do not click."""
    for step in steps:
        first, after = max(step.hop - 1, 0), min(step.hop - 1 + RAMP_HOPS, len(trim) - 1)
        trim[first : after + 1] = np.linspace(trim[first], trim[after], after - first + 1)
    return trim
