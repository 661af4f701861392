"""A clap that two recordings share where nothing else is common: each sharp knock of one against each of the other.

One clap among minutes of speech does not stand out in a correlation of onsets. But there are few knocks as sharp as a
clap, so that each pair of them can be listened to: the waveforms of the same clap agree, those of others do not.

Conventions and method as in `clocks`.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.measure.clocks import LAG_S, PLACE_S, Heard, correlation, spectra_at
from leveller.measure.onsets import ENOUGH_SCORE, Line
from leveller.units import HOP_S, HOPS_PER_S

KNOCKS = 12  # the sharpest of each track
CLAP_HEIGHT = 0.3  # of the correlation's peak; pairs of different sounds stay under 0.1 (measured, see tests)
APART_HOPS = HOPS_PER_S // 2


def common_clap(first: Heard, second: Heard, rate_hz: int) -> Line | None:
    """The line through the knocks whose waveforms agree best, without drift; None where none do.

    Raises
    ------
    InputError
        where a file has become unreadable.
    """
    knocks = [_sharpest(heard.onsets[:, -1]) for heard in (first, second)]
    begins = [np.array(hops) * HOP_S - PLACE_S / 2 for hops in knocks]
    near = list(spectra_at(first.track, rate_hz, begins[0], 0.0))
    far = list(spectra_at(second.track, rate_hz, begins[1], 0.0))
    best: Line | None = None
    highest = CLAP_HEIGHT
    for at, a in zip(knocks[0], near, strict=True):
        for there, b in zip(knocks[1], far, strict=True):
            around = correlation(a, b)
            peak = int(np.abs(around).argmax())
            if abs(around[peak]) > highest:
                highest = float(abs(around[peak]))
                lag_s = (peak - len(around) // 2) * LAG_S
                best = Line(there - at + lag_s * HOPS_PER_S, 0.0, ENOUGH_SCORE)
    return best


def _sharpest(rise: npt.NDArray[np.float32]) -> list[int]:
    """Hops of the sharpest knocks, not near each other."""
    left = rise.copy()
    chosen: list[int] = []
    while len(left) and len(chosen) < KNOCKS and left[at := int(left.argmax())] > 0:
        chosen.append(at)
        left[max(at - APART_HOPS, 0) : at + APART_HOPS] = 0
    return chosen
