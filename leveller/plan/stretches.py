"""Stretches of hops: out of a row of flags, and back.

A stretch is a first hop and the hop after the last one; a row of flags, one a hop, is the same said the other way. What
lasts too short to count is filled or dropped in flags, what reaches further is widened in stretches.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.units import Bools

Spans = npt.NDArray[np.int64]  # (stretches, 2), first hop and the hop after the last


def stretches(flags: Bools) -> Spans:
    """The true stretches, in order."""
    edges = np.flatnonzero(np.diff(np.concatenate([[0], np.asarray(flags, np.int8), [0]])))
    return edges.reshape(-1, 2)


def flagged(spans: Spans, hops: int) -> Bools:
    """Flags that are true within the stretches."""
    change = np.zeros(hops + 1, np.int64)
    np.add.at(change, np.clip(spans[:, 0], 0, hops), 1)
    np.add.at(change, np.clip(spans[:, 1], 0, hops), -1)
    return np.asarray(np.cumsum(change)[:hops] > 0)


def without_short_gaps(flags: Bools, hops: int) -> Bools:
    """Gaps of fewer hops filled, except at the very start and end."""
    out = flags.copy()
    for first, after in stretches(~flags):
        if after - first < hops and first > 0 and after < len(flags):
            out[first:after] = True
    return out
