"""How much of each voice every microphone hears: the coupling, per band, followed through time.

While only person k speaks, the level at microphone m less the level at k's own microphone is the same from word to
word, whatever the gains are. Its quantile over the hops labelled k is the coupling of k into m. It is taken
locally, over half a minute of k's own speech or wider where there is little, because a knob that is turned shifts
one microphone for everybody and a person who changes seat shifts one voice for all microphones; both are followed,
forwards and backwards in time, and a person who says nothing for ten minutes is not forgotten. A little over the
median is taken (our choice, measured): bleed under-predicted opens microphones, bleed over-predicted by a decibel
or two costs nothing.

The interference matrix this builds is the one of leakage reduction (E. Kokkinis, J. Reiss, J. Mourjopoulos, IEEE
TASL 20(3), 2012).
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.attribute.lag import Lags
from leveller.attribute.seeds import Labels
from leveller.measure.levels import SILENT, STEP_DB, Levels, release

STEP_HOPS = 500
QUANTILE = 0.6
REACH_HOPS = (1500, 4500, 15000)  # half windows to try, nearest first
LEAST_HOPS = 60  # in a window
LEAST_EVER = 15  # a person heard less than this has no coupling yet
MOST_HOPS = 160  # of a window are looked at, evenly spread
MOST_GLOBAL = 4000
CLEAR_DB = 10.0  # own microphone over its noise, in a band that counts
STRAY_DB = 10.0  # the local coupling stays this near to the overall one
NONE_DB = -60.0


class Coupling:
    """Coupling in dB: `at(block)` is shape=(tracks, tracks, bands), [k, m] = voice k into microphone m."""

    def __init__(
        self, local_db: npt.NDArray[np.float32], heard_hops: npt.NDArray[np.int64], lags: Lags | None = None
    ) -> None:
        self.local_db = local_db  # (blocks, tracks, tracks, bands)
        self.heard_hops = heard_hops  # (tracks,) hops labelled with each person
        tracks = len(heard_hops)
        self.lags = lags if lags is not None else np.zeros((tracks, tracks), np.int16)  # [k, m] hops k is late at m

    def at(self, block: int) -> npt.NDArray[np.float32]:
        """The coupling during one block of `STEP_HOPS`."""
        return np.asarray(self.local_db[min(block, len(self.local_db) - 1)])

    @property
    def overall_db(self) -> npt.NDArray[np.float32]:
        """Mean over time and bands, shape=(tracks, tracks)."""
        return np.asarray(np.median(self.local_db.mean(axis=3), axis=0))


def estimate_coupling(
    levels: Levels, floor_db: npt.NDArray[np.float32], labels: Labels, lags: Lags | None = None
) -> Coupling:
    """Coupling of every labelled voice into every microphone.

    Parameters
    ----------
    levels : shape=(hops, tracks, bands)
    floor_db : shape=(seconds, tracks, bands)
    labels : shape=(hops,)
    lags : shape=(tracks, tracks), optional
        How many hops late voice k is heard at microphone m.
    """
    hops, tracks, bands = levels.shape
    blocks = max(1, -(-hops // STEP_HOPS))
    local = np.full((blocks, tracks, tracks, bands), NONE_DB, np.float32)
    heard = np.zeros(tracks, np.int64)
    for person in range(tracks):
        at = np.flatnonzero(labels == person)
        heard[person] = len(at)
        if len(at) >= LEAST_EVER:
            local[:, person] = _followed(levels, floor_db, at, person, blocks, lags)
        local[:, person, person] = 0.0
        release(levels)
    return Coupling(local, heard, lags)


def _followed(
    levels: Levels, floor_db: npt.NDArray[np.float32], at: npt.NDArray[np.int64], person: int, blocks: int,
    lags: Lags | None,
) -> npt.NDArray[np.float32]:
    """Coupling of one person, shape=(blocks, tracks, bands)."""
    overall = _quantile(_ratios(levels, floor_db, _spread(at, MOST_GLOBAL), person, lags))
    overall = np.where(np.isfinite(overall), overall, np.float32(NONE_DB))
    out = np.empty((blocks, *overall.shape), np.float32)
    for block in range(blocks):
        near = _nearby(at, block * STEP_HOPS + STEP_HOPS // 2)
        if near is None:
            out[block] = overall
            continue
        here = _quantile(_ratios(levels, floor_db, _spread(near, MOST_HOPS), person, lags))
        here = np.where(np.isfinite(here), here, overall)
        out[block] = np.clip(here, overall - STRAY_DB, overall + STRAY_DB)
    return out


def _nearby(at: npt.NDArray[np.int64], middle: int) -> npt.NDArray[np.int64] | None:
    """Labelled hops round a moment, from the narrowest window that has enough of them."""
    for reach in REACH_HOPS:
        first, last = np.searchsorted(at, [middle - reach, middle + reach])
        if last - first >= LEAST_HOPS:
            return at[first:last]
    return None


def _spread(at: npt.NDArray[np.int64], most: int) -> npt.NDArray[np.int64]:
    """At most so many of them, evenly spread."""
    return at if len(at) <= most else at[np.linspace(0, len(at) - 1, most).astype(np.int64)]


def _ratios(
    levels: Levels, floor_db: npt.NDArray[np.float32], at: npt.NDArray[np.int64], person: int,
    lags: Lags | None,
) -> npt.NDArray[np.float32]:
    """Level differences to the person's own microphone, nan where that is not clear of noise or the other is muted."""
    if lags is None or not lags[person].any():
        there = levels[at]
    else:
        late = np.clip(at[:, None] + lags[person], 0, len(levels) - 1)
        there = levels[late, np.arange(levels.shape[1])]
    here = np.where(there == SILENT, np.float32(np.nan), there.astype(np.float32) * np.float32(STEP_DB))
    own = here[:, person]
    clear = own > floor_db[np.minimum(at // 100, len(floor_db) - 1), person] + CLEAR_DB
    return np.where(clear[:, None, :], here - own[:, None, :], np.float32(np.nan))


def _quantile(values: npt.NDArray[np.float32]) -> npt.NDArray[np.float32]:
    """`QUANTILE` along the first axis without the nans; nan where nothing is left."""
    ranked = np.sort(values, axis=0)
    count = np.isfinite(values).sum(axis=0)
    at = (np.maximum(count - 1, 0) * QUANTILE + 0.5).astype(np.int64)
    return np.asarray(np.take_along_axis(ranked, at[None], axis=0)[0])
