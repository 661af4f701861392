"""How late each voice arrives at each microphone, where that is more than the way through the room.

A call returns the others 100 to 500 ms late, and a recorder on a clock of its own is late as a whole: then what a
microphone hears is not what the others hear at that moment. The lag of voice k at microphone m is where the levels of
m follow those of k's own microphone best, over hops that are loud at k against k's own loud speech. It is 0 unless
another lag explains clearly more.

Correlation of short-time levels: common practice for coarse alignment; the numbers are our choice, measured.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.attribute.seeds import Labels

MOST_HOPS = 60
USUAL_HOPS = 2  # rises show this much later in softer, more reverberant sound (measured)
LEAST_HOPS = 4  # less is taken up by the average of three hops and the tail
LEAST_LABELS = 150
MOST_LABELS = 6000
NEAR_HOPS = 2
CLEAR = 0.35  # correlation at the lag
BETTER = 0.15  # ... over the best one within `NEAR_HOPS` of `USUAL_HOPS`

Lags = npt.NDArray[np.int16]  # (voices, microphones) hops


def find_lags(audible_db: npt.NDArray[np.float32], labels: Labels) -> Lags:
    """Lag of every voice at every microphone, in hops, mostly 0.

    Parameters
    ----------
    audible_db : shape=(hops, tracks)
    labels : shape=(hops,)
        Who is loud against their own loud speech.
    """
    hops, tracks = audible_db.shape
    out = np.zeros((tracks, tracks), np.int16)
    rises = _rises(audible_db)
    lags = np.arange(-MOST_HOPS, MOST_HOPS + 1)
    for k in range(tracks):
        at = np.flatnonzero(labels == k)
        at = at[(at >= MOST_HOPS) & (at < hops - MOST_HOPS)]
        if len(at) < LEAST_LABELS:
            continue
        at = at[np.linspace(0, len(at) - 1, min(len(at), MOST_LABELS)).astype(np.int64)]
        for m in range(tracks):
            if m != k:
                alike = np.array([_correlation(rises[at, k], rises[at + lag, m]) for lag in lags])
                best = int(alike.argmax())
                usual = alike[np.abs(lags - USUAL_HOPS) < NEAR_HOPS].max()
                if abs(lags[best] - USUAL_HOPS) >= LEAST_HOPS and alike[best] > max(CLEAR, usual + BETTER):
                    out[k, m] = lags[best] - USUAL_HOPS
    return out


def _rises(level_db: npt.NDArray[np.float32]) -> npt.NDArray[np.float32]:
    """How much a level has risen within 30 ms; a room smears how sounds end, not how they begin."""
    padded = np.pad(level_db, ((2, 1), (0, 0)), mode="edge")
    return np.asarray(np.maximum(padded[3:] - padded[:-3], 0), np.float32)


def _correlation(a: npt.NDArray[np.float32], b: npt.NDArray[np.float32]) -> float:
    """Pearson's coefficient; 0 where one does not move."""
    a, b = a - a.mean(), b - b.mean()
    scale = float(np.sqrt((a @ a) * (b @ b)))
    return float(a @ b) / scale if scale > 0 else 0.0
