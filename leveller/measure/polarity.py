"""Which microphones are upside down against the others, from the signs of their correlations.

Two microphones that hear the same voice with opposite polarity cancel each other in part when they are summed. The sign
of the peak of their correlation shows it: `arrival` keeps that of the mean over all windows, which costs a sum, and
`alignment` that of some seconds of each voice.

Conventions: heights are (tracks, tracks), 0 where nothing is known; a negative one means that the two are opposed.

Method: within a group of tracks that hear each other, the signs of the main eigenvector agree best with all heights.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.measure.arrival import Arrivals

Matrix = npt.NDArray[np.float64]


def heights_of(arrivals: Arrivals, tracks: int) -> Matrix:
    """Signed heights of all pairs, symmetric, 0 on the diagonal."""
    out = np.zeros((tracks, tracks))
    for (i, j), height in zip(arrivals.pairs, arrivals.signed, strict=True):
        out[i, j] = out[j, i] = float(height)
    return out


def signs_of(heights: Matrix, *, reference: int = 0) -> tuple[int | None, ...]:
    """A sign a track: +1 as most of those it is compared with, -1 the other way round, None where nothing is known.

    Parameters
    ----------
    heights : shape=(tracks, tracks)
        symmetric
    reference : int
        of as many that are one way as the other, those are right that agree with this track, or with the first
    """
    signs: list[int | None] = [None] * len(heights)
    for group in _groups(heights):
        found = np.sign(np.linalg.eigh(heights[np.ix_(group, group)])[1][:, -1])
        total = found.sum()
        judge = group.index(reference) if reference in group else 0
        if total < 0 or (total == 0 and found[judge] < 0):
            found = -found
        for track, sign in zip(group, found, strict=True):
            signs[track] = int(sign) or None
    return tuple(signs)


def agreement(heights: Matrix, signs: tuple[int | None, ...], track: int) -> float:
    """The share of a track's heights, 0 to 1, that its sign explains."""
    weight = np.abs(heights[track]).sum()
    told = sum(float(h) * (signs[track] or 0) * (s or 0) for h, s in zip(heights[track], signs, strict=True))
    return (1 + told / float(weight)) / 2 if weight else 0.0


def _groups(heights: Matrix) -> list[list[int]]:
    """Tracks that are compared with each other, directly or by way of others; those alone are left out."""
    left, groups = set(range(len(heights))), []
    while left:
        group, new = set[int](), {min(left)}
        while new:
            group |= new
            new = {int(k) for i in new for k in np.flatnonzero(heights[i])} - group
        left -= group
        groups += [sorted(group)] if len(group) > 1 else []
    return groups
