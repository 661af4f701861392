"""Sounds too short for a voice: thumps, clicks, keys. They open nothing and close nothing.

A knock stands out of its surroundings on both sides: 50 ms before and 50 ms after, the microphone is much softer.
The shortest syllable is longer. A stop consonant can be as short, but a vowel follows or goes before it, so a knock
counts only where there is no lasting evidence for own voice on either side. Round it, evidence for own voice is
left out; evidence against stays.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.measure.levels import Levels, mean_level_db
from leveller.units import Bools

REACH_HOPS = 5
STANDS_OUT_DB = 5.0
SPREAD_HOPS = 4  # the window of a hop and the average of three smear a click over nine hops
BESIDE_HOPS = 15
VOICE_NATS = 0.5  # mean evidence beside it that makes it part of speech

Grid = npt.NDArray[np.float32]


def without_knocks(evidence: Grid, levels: Levels) -> Grid:
    """Evidence with what knocks say for own voice taken out, shape=(hops, tracks).

    Parameters
    ----------
    evidence : shape=(hops, tracks)
        Nats in favour of own voice.
    levels : shape=(hops, tracks, bands)
    """
    out = np.empty_like(evidence)
    for track in range(evidence.shape[1]):
        own, level_db = evidence[:, track], mean_level_db(levels[:, track])
        beside = np.maximum(_moved(level_db, -REACH_HOPS), _moved(level_db, REACH_HOPS))
        knock = (level_db - beside > STANDS_OUT_DB) & ~_beside_voice(own)
        out[:, track] = np.where(_spread(knock), np.minimum(own, 0), own)
    return out


def _moved(values: Grid, hops: int) -> Grid:
    """The values so many hops later (negative: earlier), the edges repeated."""
    at = np.clip(np.arange(len(values)) + hops, 0, len(values) - 1)
    return np.asarray(values[at])


def _beside_voice(evidence: Grid) -> Bools:
    """Whether own voice lasts right before or right after each hop."""
    room = REACH_HOPS + BESIDE_HOPS
    total = np.cumsum(np.pad(np.maximum(evidence, 0), (room + 1, room)), dtype=np.float64)
    hops = len(evidence)

    def mean(first: int) -> npt.NDArray[np.float64]:
        start = room + first
        return np.asarray(total[start + BESIDE_HOPS : start + BESIDE_HOPS + hops] - total[start : start + hops])

    least = VOICE_NATS * BESIDE_HOPS
    return np.asarray((mean(REACH_HOPS) >= least) | (mean(-room) >= least))


def _spread(flags: Bools) -> Bools:
    """Flags widened by `SPREAD_HOPS` either way."""
    total = np.cumsum(np.pad(flags, (SPREAD_HOPS + 1, SPREAD_HOPS)))
    return np.asarray(total[2 * SPREAD_HOPS + 1 :] > total[: -2 * SPREAD_HOPS - 1])
