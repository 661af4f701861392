"""Finds tracks that add nothing: louder or softer copies of another, and the recorder's own mix of the others.

Both are judged on pieces of 1 s at the same session times in all files, by the products of their spectra from 100 to
4000 Hz (by Parseval's theorem the products of the band-limited signals), so tracks of different rates compare as
well, hum and DC count nothing, and loud places decide. A copy correlates above 0.999 with its original, either way
up. A mix is what a sum of at least two others with *positive* gains leaves less than -30 dB of; the sign matters,
since with A + B in the session, A is the mix less B. Bleed does neither: it comes late, coloured and with noise.

Least squares with gains held positive: C. L. Lawson, R. J. Hanson, Solving Least Squares Problems, 1974, chapter 23.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from leveller.audio import AudioSource, Part, parts_of, pieces, spread_starts
from leveller.units import db_to_power, power_to_db

COPY_CORRELATION = 0.999
MIX_RESIDUAL_DB = -30.0
SILENT_DBFS = -100.0  # below this a track is silent, and silence is no copy of silence
BAND_HZ = (100, 4000)  # a piece lasts 1 s, so bins are 1 Hz apart
EQUAL_DB = 0.1  # copies this close in level count as equally loud: the first stays


def find_duplicates(
    tracks: Sequence[AudioSource], *, candidates: Sequence[bool], rate_hz: int, frames: int
) -> dict[int, str]:
    """Which tracks are copies or the sum of others.

    Parameters
    ----------
    tracks : sequence of tracks
    candidates : sequence of bool
        whether the track may be set aside
    rate_hz, frames : int
        of the session

    Returns
    -------
    dict
        index of the track to the reason, a phrase for the user
    """
    if len(tracks) < 2:
        return {}
    products = _products(tracks, rate_hz, frames)
    heard = [i for i in range(len(tracks)) if products[i, i] > db_to_power(SILENT_DBFS)]
    found = _copies(tracks, products, [i for i in heard if candidates[i]])
    while True:
        left = [i for i in heard if i not in found]
        mix = _mix_among(products, left, candidates)
        if mix is None:
            return found
        found[mix] = "the sum of other tracks (a recorder's mix)"


def _products(tracks: Sequence[AudioSource], rate_hz: int, frames: int) -> npt.NDArray[np.float64]:
    """Mean products of all pairs of tracks in the band, shape=(tracks, tracks)."""
    starts = spread_starts(frames, rate_hz)
    groups: dict[tuple[tuple[Part, ...], int], list[int]] = {}
    for index, track in enumerate(tracks):
        groups.setdefault((parts_of(track), track.offset_frames), []).append(index)
    walks = []
    for (parts, offset), members in groups.items():
        source_hz = tracks[members[0]].source_rate_hz
        places = [round((start - offset) * source_hz / rate_hz) for start in starts]
        walks.append((members, pieces(parts, places, frames=source_hz)))
    total = np.zeros((len(tracks), len(tracks)))
    bins = BAND_HZ[1] - BAND_HZ[0]
    lines = np.empty((len(tracks), 2 * bins))
    for _ in starts:
        for members, walk in walks:
            block = next(walk)
            for index in members:
                spectrum = np.fft.rfft(block[:, list(tracks[index].channels)].mean(axis=1))[slice(*BAND_HZ)]
                spectrum *= np.sqrt(2) / len(block)
                lines[index, :bins], lines[index, bins:] = spectrum.real, spectrum.imag
        total += lines @ lines.T
    return total / len(starts)


def _copies(tracks: Sequence[AudioSource], products: npt.NDArray[np.float64], members: list[int]) -> dict[int, str]:
    """The softer ones of tracks that correlate."""
    found: dict[int, str] = {}
    level_db = [round(power_to_db(products[i, i]) / EQUAL_DB) if i in members else 0 for i in range(len(tracks))]
    for keep in sorted(members, key=lambda i: (-level_db[i], i)):
        if keep in found:
            continue
        for other in members:
            strength = products[keep, other] ** 2 / (products[keep, keep] * products[other, other])
            if other != keep and other not in found and strength > COPY_CORRELATION**2 and (
                    (-level_db[keep], keep) < (-level_db[other], other)):
                found[other] = f"a copy of {tracks[keep].name}"
    return found


def _mix_among(products: npt.NDArray[np.float64], members: list[int], candidates: Sequence[bool]) -> int | None:
    """The track that the others make up best with positive gains, where one is made up well enough."""
    if len(members) < 3:
        return None
    part = products[np.ix_(members, members)]
    values, vectors = np.linalg.eigh(part)
    signals = np.sqrt(np.maximum(values, 0))[:, None] * vectors.T  # columns with the very same products
    limit = db_to_power(MIX_RESIDUAL_DB)
    best, best_left = None, limit
    for column, index in enumerate(members):
        if not candidates[index]:
            continue
        others = np.delete(signals, column, axis=1)
        target = signals[:, column]
        power = float(target @ target)
        free = target - others @ np.linalg.lstsq(others, target, rcond=None)[0]
        if free @ free >= limit * power:
            continue  # no gains at all would do
        left, parts = _positive_fit(others, target)
        if left / power < best_left and np.count_nonzero(parts > limit * power) >= 2:
            best, best_left = index, left / power
    return best


def _positive_fit(
    others: npt.NDArray[np.float64], target: npt.NDArray[np.float64]
) -> tuple[float, npt.NDArray[np.float64]]:
    """Power that is left, and the power of each part, with gains held positive."""
    from scipy.optimize import nnls

    gains, left = nnls(others, target)
    return float(left) ** 2, gains**2 * np.sum(others**2, axis=0)
