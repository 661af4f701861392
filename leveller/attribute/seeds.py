"""First labels: a few hops per person of which it is as good as certain who speaks.

Two sources, in this order:

* *Arrival*: the window's sound reaches one microphone clearly before all others (`measure.arrival`), and that
  microphone stands out in level against the others by more than in most such windows. This needs no knowledge of
  gains, nor of how much anybody speaks, and never names a microphone that nobody sits at.
* *Level*, for sessions without usable arrivals (microphones far apart, or not on one clock): each loud hop goes to
  the microphone that is loudest against its own loud speech (normalising each channel by itself: T. Pfau, D. P. W.
  Ellis, A. Stolcke, ASRU 2001).

A microphone that gets no seed may still have a voice: whatever sounds there and is not explained by the others' bleed
is labelled in the rounds that follow.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.measure import Measurements
from leveller.measure.levels import mean_level_db
from leveller.units import Bools

NOBODY = -1
LEAD = 0.12  # mean height of the correlation peaks in favour of one microphone, over three windows
AUDIBLE_DB = 8.0
STANDS_OUT = 0.6  # quantile of the windows in which a microphone leads
LEAST_WINDOWS = 3
SEED_HOPS = 2  # either side of the window's middle
OWN_LOUD = 95  # percentile of a track's level that counts as its own loud speech

Labels = npt.NDArray[np.int16]  # (hops,) track of the person who speaks alone, or NOBODY


def first_labels(m: Measurements, audible_db: npt.NDArray[np.float32], programme: Bools) -> Labels:
    """Seeds for all tracks, shape=(hops,).

    Parameters
    ----------
    audible_db : shape=(hops, tracks)
        Mean level over the noise floor.
    programme : shape=(hops,)
        False where a slate, a tone or a marked stretch is to be left out.
    """
    level_db = mean_level_db(m.levels)
    by_arrival = _by_arrival(m, level_db, audible_db, programme)
    if (by_arrival != NOBODY).any():
        return by_arrival
    return _by_level(level_db, audible_db, programme)


def labels_by_level(m: Measurements, audible_db: npt.NDArray[np.float32], programme: Bools) -> Labels:
    """The second source alone, shape=(hops,)."""
    return _by_level(mean_level_db(m.levels), audible_db, programme)


def _by_arrival(
    m: Measurements, level_db: npt.NDArray[np.float32], audible_db: npt.NDArray[np.float32], programme: Bools
) -> Labels:
    """Windows in which one microphone hears first and stands out in level."""
    labels = np.full(len(level_db), NOBODY, np.int16)
    inside = m.arrivals.hop < len(level_db)
    hop, lead = m.arrivals.hop[inside], three(m.arrivals.lead[inside])
    if len(hop) < LEAST_WINDOWS:
        return labels
    first = lead.argmax(axis=1)
    elevation = _elevation(three(level_db)[hop])
    for track in range(level_db.shape[1]):
        leads = (first == track) & (lead.max(axis=1) > LEAD) & (audible_db[hop, track] > AUDIBLE_DB) & programme[hop]
        if np.count_nonzero(leads) < LEAST_WINDOWS:
            continue
        clear = leads & (elevation[:, track] >= np.quantile(elevation[leads, track], STANDS_OUT))
        for offset in range(-SEED_HOPS, SEED_HOPS + 1):
            labels[np.clip(hop[clear] + offset, 0, len(labels) - 1)] = track
    return labels


def _by_level(level_db: npt.NDArray[np.float32], audible_db: npt.NDArray[np.float32], programme: Bools) -> Labels:
    """Loud hops go to the microphone that is loudest against its own loud speech."""
    labels = np.full(len(level_db), NOBODY, np.int16)
    loud = audible_db > AUDIBLE_DB
    relative = np.full(level_db.shape, -np.inf, np.float32)
    for track in range(level_db.shape[1]):
        own = loud[:, track] & programme
        if own.any():
            relative[:, track] = level_db[:, track] - np.percentile(level_db[own, track], OWN_LOUD)
    relative[~loud] = -np.inf
    best = relative.argmax(axis=1)
    ranked = np.sort(relative, axis=1)
    clear = np.isfinite(ranked[:, -1]) & programme
    if level_db.shape[1] > 1:
        clear &= ranked[:, -1] - np.maximum(ranked[:, -2], -100) > 3
    labels[clear] = best[clear]
    return labels


def _elevation(level_db: npt.NDArray[np.float32]) -> npt.NDArray[np.float32]:
    """Level of each track over the mean of the others."""
    tracks = level_db.shape[1]
    others = (level_db.sum(axis=1, keepdims=True) - level_db) / max(1, tracks - 1)
    return np.asarray(level_db - others, np.float32)


def three(values: npt.NDArray[np.float32]) -> npt.NDArray[np.float32]:
    """Mean of three neighbours along the first axis, the edges repeated."""
    padded = np.concatenate([values[:1], values, values[-1:]])
    return np.asarray((padded[:-2] + padded[1:-1] + padded[2:]) / np.float32(3), np.float32)
