"""Where two recordings hear the same sounds, to a hop or two, however far apart their clocks are.

A sound that begins makes the bands rise, at the microphone it is meant for and, softer, at every other that hears it.
The *onsets* of a track are those rises: in four groups of bands, limited, so that a soft track and the bleed in a loud
one count as well as speech; and the rise of the band that rises least, which only a clap or a knock has. They come
from the levels that `measure` has anyway: one number a hop, no sound is read.

Method: the onsets of each stretch of two minutes of one track are correlated with the other track up to five minutes
either way; in each correlation only what stands out (over three standard deviations) counts. Straight lines through
stretches and lags, one for every offset and drift, add these up (a Radon transform): 300 ppm move the lag by a second
within an hour, and no single stretch need be certain.

Conventions: a lag is positive where the second track is late; drift is in hops a hop.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from leveller.measure.levels import SILENT, Levels, level_to_db
from leveller.units import HOPS_PER_S

REACH_HOPS = 300 * HOPS_PER_S  # offsets looked for, either way
STRETCH_HOPS = 120 * HOPS_PER_S
MOST_DRIFT = 400e-6  # cheap quartz stays within 100 ppm; common practice, no source
GROUPS = 4
RISE_HOPS = 2
MOST_RISE_DB = 12.0
FLOOR_PERCENTILE = 10
PERCENTILE_HOPS = 20_000  # of as many at least, where there are so many, it is taken
OVER_FLOOR_DB = 4.0
CLAP_DB = 8.0  # the least rise of all bands that makes a clap
CLAP_WEIGHT = 3.0
STANDS_OUT = 3.0  # standard deviations
ENOUGH_SCORE = 8.0  # chance reached 4 in three minutes and 7.8 in an hour (measured); the waveforms decide after this

Onsets = npt.NDArray[np.float32]


@dataclass(frozen=True)
class Line:
    """Offset and drift to a hop or two, and how far the line stands out."""

    offset_hops: float  # at hop 0 of the first track
    drift: float
    score: float


def onsets(levels: Levels) -> Onsets:
    """Rises of one track, shape=(hops, GROUPS + 1), each column of mean 0.

    Parameters
    ----------
    levels : shape=(hops, bands)
        as of `Measurements.levels`, one track
    """
    db = level_to_db(levels)
    heard = (levels > SILENT).all(axis=1)
    out = np.zeros((len(db), GROUPS + 1), np.float32)
    if np.count_nonzero(heard) < HOPS_PER_S:
        return out
    thinned = db[heard][:: max(1, np.count_nonzero(heard) // PERCENTILE_HOPS)]
    floor = np.percentile(thinned, FLOOR_PERCENTILE, axis=0) + OVER_FLOOR_DB
    np.maximum(db, floor.astype(np.float32), out=db)
    rise = np.zeros_like(db)
    rise[RISE_HOPS:] = db[RISE_HOPS:] - db[:-RISE_HOPS]
    for group, bands in enumerate(np.array_split(np.arange(db.shape[1]), GROUPS)):
        out[:, group] = np.clip(rise[:, bands].mean(axis=1), 0, MOST_RISE_DB)
    out[:, GROUPS] = np.maximum(rise.min(axis=1) - CLAP_DB, 0) * CLAP_WEIGHT
    out -= out.mean(axis=0)
    return out


def common_line(first: Onsets, second: Onsets) -> Line:
    """The line of offset and drift on which two tracks share the most onsets.

    Its score is 0 where a track is silent; below `ENOUGH_SCORE` it is chance.
    """
    hops = min(len(first), len(second))
    reach = min(REACH_HOPS, max(hops - STRETCH_HOPS // 8, 1))
    starts = list(range(0, max(hops - STRETCH_HOPS // 2, 1), STRETCH_HOPS))
    evidence = np.stack([_evidence(first, second, start, reach) for start in starts])
    middles = np.array([(start + min(start + STRETCH_HOPS, hops)) / 2 for start in starts])
    return _best_line(evidence, middles, reach)


def _evidence(first: Onsets, second: Onsets, start: int, reach: int) -> npt.NDArray[np.float32]:
    """How far each lag from -reach to reach stands out in one stretch."""
    import scipy.fft

    piece = first[start : start + STRETCH_HOPS]
    low, high = start - reach, start + len(piece) + reach
    other = np.zeros((high - low, second.shape[1]), np.float32)
    inside = slice(max(low, 0), min(high, len(second)))
    other[inside.start - low : inside.stop - low] = second[inside]
    size = scipy.fft.next_fast_len(len(other), real=True)
    cross = (scipy.fft.rfft(other, size, axis=0) * scipy.fft.rfft(piece, size, axis=0).conj()).sum(axis=1)
    found = scipy.fft.irfft(cross, size)[: 2 * reach + 1].astype(np.float32)
    overlapped = found[found != 0]
    spread = 1.4826 * float(np.median(np.abs(overlapped))) if len(overlapped) else 0.0
    spread = max(spread, 0.5 * float(found.std()))
    return found / np.float32(spread) if spread > 0 else np.zeros_like(found)


def _best_line(evidence: npt.NDArray[np.float32], middles: npt.NDArray[np.float64], reach: int) -> Line:
    """Add the evidence up along all lines."""
    from scipy.ndimage import maximum_filter1d

    sums = maximum_filter1d(np.maximum(evidence - np.float32(STANDS_OUT), 0), 3, axis=1)
    span = middles[-1] - middles[0] if len(middles) > 1 else 0.0
    step = 3.0 / max(span, 3.0 / MOST_DRIFT)
    count = int(MOST_DRIFT / step)
    centre = float(middles.mean())
    best = Line(0.0, 0.0, 0.0)
    for drift in sorted((k * step for k in range(-count, count + 1)), key=abs):
        total = np.zeros(sums.shape[1], np.float32)
        for row, middle in zip(sums, middles, strict=True):
            total += _moved(row, round(drift * (middle - centre)))
        at = int(total.argmax())
        if total[at] > best.score * 1.001:
            best = Line(at - reach - drift * centre, drift, float(total[at]))
    return best


def _moved(row: npt.NDArray[np.float32], by: int) -> npt.NDArray[np.float32]:
    """row[i + by], zeros outside."""
    out = np.zeros_like(row)
    if by >= 0:
        out[: len(row) - by] = row[by:]
    else:
        out[-by:] = row[:by]
    return out
