"""Evidence into states: own voice or not, decoded over time, with a confidence.

Two states a microphone and a cost for every change between them (Viterbi). For two states the recursion is one
number, the lead of *open* over *closed*, clamped to the cost before each hop's evidence is added; run forwards and
backwards, and added, it gives the max-marginal of every hop: by how much the best path through *open* beats the best
path through *closed*. Its sign is the decision, its size the confidence.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.recursion import recursion

CHANGE_COST = 2.0  # nats
SURE_OWN = ((0.0, 1.5, 3.0, 4.6, 5.2, 5.5), (0.72, 0.78, 0.86, 0.91, 0.98, 0.99))  # margin in nats, share right
SURE_NOT = ((0.0, 1.0, 2.0, 3.9, 4.1), (0.76, 0.82, 0.93, 0.95, 0.995))

Grid = npt.NDArray[np.float32]


def margins(evidence: Grid, *, cost: float = CHANGE_COST) -> Grid:
    """Lead of own voice over not own, in nats, shape=(hops, tracks); above 0 means own."""
    out = np.empty(evidence.shape, np.float32)
    for track in range(evidence.shape[1]):
        column = evidence[:, track]
        out[:, track] = _leads(column, cost) + _leads(column[::-1], cost)[::-1] - column
    return out


def sure_of(margin: npt.NDArray[np.floating[Any]]) -> Grid:
    """How sure a decision is, 0.5 (a coin) to 1, same shape: the share of decisions with such a margin that are right.

    Calibrated on simulated conversations of the development voices over sixteen conditions; docs/accuracy.md holds the
    check on others.
    """
    size = np.abs(margin)
    sure = np.where(margin > 0, np.interp(size, *SURE_OWN), np.interp(size, *SURE_NOT))
    return np.asarray(sure, np.float32)


def _leads(column: Grid, cost: float) -> npt.NDArray[np.float64]:
    """Lead of own after each hop, given the hops up to it."""
    return recursion(column, lambda lead, value: np.minimum(np.maximum(lead, -cost), cost) + value)
