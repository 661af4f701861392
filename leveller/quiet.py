"""The quiet side of a track: pauses, noise floor, room tone for patching, dropouts and mutes.

A *pause* is where no microphone has its own voice, half a second and a breath away from any speech, so that neither
reverberation nor an onset counts. All times follow from hops of 10 ms.

Dropouts are seen in the levels: a hop is silent when the 20 ms round it are digital zero, so a gap of 30 ms is always
found, one of 20 ms when it lies well, a shorter one never; its edges are true to 10 ms.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.attribute import Activity
from leveller.findings import RoomTone, Spans
from leveller.measure import Measurements
from leveller.measure.levels import SILENT, level_to_db
from leveller.measure.loudness import OFFSET_LU
from leveller.units import HOP_S, HOPS_PER_S, Bools, seconds_to_hops

AFTER_SPEECH_S = 0.3  # the room has decayed (RT60 0.3 to 0.5 s: by 36 dB and more)
BEFORE_SPEECH_S = 0.2  # a breath and a soft onset
LEAST_PAUSE_HOPS = 50  # less than this says nothing about the floor
FALLBACK_PERCENTILE = 10  # of all hops with sound, where nobody ever pauses
DROPOUT_MOST_S = 0.5  # our choice: longer was a hand on the mute, not a fault
LEAST_TONE_S = 1.5  # shorter cannot be looped without being heard as a loop
MOST_TONE_S = 10.0
BEST = 3  # stretches named
SMOOTH_HOPS = 10
NEAR_DB = 4.0  # a smoothed level further from the floor than this is some event
THUMP_DB = 10.0  # rumble over its own median in pauses

Level = npt.NDArray[np.float32]


def pauses(activity: Activity, tone: Bools) -> Bools:
    """Hops in which nobody speaks, or just did, or is about to, shape=(hops,)."""
    spoken = np.asarray(activity.own.any(axis=1))
    after, before = seconds_to_hops(AFTER_SPEECH_S), seconds_to_hops(BEFORE_SPEECH_S)
    edges = np.concatenate([[0], np.cumsum(spoken)])
    hops = np.arange(len(spoken))
    near = edges[np.minimum(hops + before + 1, len(spoken))] - edges[np.maximum(hops - after, 0)]
    return np.asarray((near == 0) & activity.programme & ~tone)


def floor_lufs(m: Measurements, track: int, quiet: Bools) -> float | None:
    """K-weighted noise of one track: the median over its pauses; None where it is digitally silent throughout."""
    level = m.k_levels[:, track]
    sounding = level != SILENT
    if not sounding.any():
        return None
    heard = level[quiet & sounding]
    if len(heard) >= LEAST_PAUSE_HOPS:
        return float(np.median(level_to_db(heard))) + OFFSET_LU
    return float(np.percentile(level_to_db(level[sounding]), FALLBACK_PERCENTILE)) + OFFSET_LU


def room_tone(m: Measurements, track: int, quiet: Bools, floor: float | None) -> tuple[RoomTone, ...]:
    """The best stretches for patching, best first; empty where no pause lasts long enough.

    Parameters
    ----------
    m : Measurements
    track : int
    quiet : shape=(hops,)
        `pauses`
    floor : float, optional
        `floor_lufs` of the track; None for one that is silent throughout
    """
    if floor is None:
        return ()
    lufs = smoothed(level_to_db(m.k_levels[:, track])) + np.float32(OFFSET_LU)
    rumble = level_to_db(m.rumble[:, track])
    calm = quiet & (np.abs(lufs - floor) < NEAR_DB) & (m.k_levels[:, track] != SILENT)
    if calm.any():
        calm &= smoothed(rumble) < np.median(rumble[calm]) + THUMP_DB
    found = []
    for first, end in runs(calm):
        if (end - first) * HOP_S >= LEAST_TONE_S:
            a, b = _steadiest(lufs, first, end)
            low, middle, high = np.percentile(lufs[a:b], [10, 50, 90])
            found.append(RoomTone(a * HOP_S, b * HOP_S, float(middle), float(high - low)))
    return tuple(sorted(found, key=lambda t: abs(t.level_lufs - floor) + t.swing_db)[:BEST])


def gaps(m: Measurements, track: int, inside: tuple[int, int]) -> tuple[Spans, Spans]:
    """Digital zero inside a track's sound, as (dropouts, mutes); none counts before its start or after its end."""
    silent = (m.k_levels[:, track] == SILENT)[slice(*inside)]
    sounding = np.flatnonzero(~silent)
    if not len(sounding):
        return (), ()
    found = [(a, b) for a, b in runs(silent) if sounding[0] < a and b <= sounding[-1]]
    spans = [((a + inside[0]) * HOP_S, (b + inside[0]) * HOP_S) for a, b in found]
    short = tuple(span for span in spans if span[1] - span[0] <= DROPOUT_MOST_S)
    return short, tuple(span for span in spans if span[1] - span[0] > DROPOUT_MOST_S)


def quiet_seconds(m: Measurements, track: int, most: int) -> list[float]:
    """Where the quietest seconds of a track begin, quietest first, none of them digitally silent or overlapping."""
    level = m.k_levels[:, track].astype(np.float32)
    level[m.k_levels[:, track] == SILENT] = np.inf
    seconds = len(level) // HOPS_PER_S
    loudest = level[: seconds * HOPS_PER_S].reshape(seconds, HOPS_PER_S).max(axis=1)
    order = np.argsort(loudest, kind="stable")
    return [float(s) for s in order[:most] if np.isfinite(loudest[s])]


def runs(flags: Bools) -> list[tuple[int, int]]:
    """Stretches of True as (first, end)."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], flags, [False]]).astype(np.int8)))
    return [(int(a), int(b)) for a, b in zip(edges[::2], edges[1::2], strict=True)]


def smoothed(values: Level) -> Level:
    """Mean over `SMOOTH_HOPS`, the edges repeated."""
    padded = np.pad(values.astype(np.float64), (SMOOTH_HOPS // 2, SMOOTH_HOPS - SMOOTH_HOPS // 2), mode="edge")
    total = np.cumsum(padded)
    return np.asarray((total[SMOOTH_HOPS:] - total[:-SMOOTH_HOPS]) / SMOOTH_HOPS, np.float32)[: len(values)]


def _steadiest(lufs: Level, first: int, end: int) -> tuple[int, int]:
    """The part of a stretch, at most `MOST_TONE_S` long, whose level moves least."""
    width = seconds_to_hops(MOST_TONE_S)
    if end - first <= width:
        return first, end
    starts = range(first, end - width + 1, HOPS_PER_S // 2)
    best = min(starts, key=lambda at: float(np.std(lufs[at : at + width])))
    return best, best + width
