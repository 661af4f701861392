"""The reading of a delivered mix from that of the same programme before make-up and limiter.

Where the limiter rests, the make-up gain is one factor on every sample, and so its square is one on every K-weighted
cell and it is one on every peak cell: nothing needs to be measured twice. Where the limiter is at work, and as far
round it as the K-weighting remembers and the interpolator reaches, the samples that are written are measured as in
`measure.loudness` and `measure.peaks`. In an hour of conversation that was one tenth of a second in seven (measured).

A stretch counts as touched for as long as the K-weighting remembers it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from leveller.measure.loudness import (
    MEMORY_S,
    Cells,
    Loudness,
    channel_weights,
    loudness_of,
    memory_frames,
    weighted_cells,
)
from leveller.measure.peaks import PIECE_CELLS, PeakCells
from leveller.measure.pieces import Piece, Pieces
from leveller.render.limiter import Nodes
from leveller.units import HOPS_PER_S, Bools, db_to_gain, gain_to_db, hop_to_frame

Samples = npt.NDArray[np.float32]

MEMORY_CELLS = round(MEMORY_S * HOPS_PER_S)
STRETCH_CELLS = 25  # stretches are measured in steps of a quarter of a second, so that spectra have few sizes


@dataclass(frozen=True)
class Unlimited:
    """What was measured of a programme before make-up and limiter."""

    cells: Cells  # K-weighted power per 10 ms
    peak_cells: Samples  # true peak per peak cell, linear


class Remeter:
    """Streaming: `push` the delivered blocks, then `loudness` and `true_peak`.

    Parameters
    ----------
    before : Unlimited
    nodes_db : shape=(peak cells + 1,)
        The limiter's gain.
    make_up_db : float
    """

    def __init__(self, before: Unlimited, nodes_db: Nodes, make_up_db: float, rate_hz: int, channels: int) -> None:
        self._rate_hz = rate_hz
        self._peak_gain = np.float32(db_to_gain(make_up_db))
        self._peak_cells = before.peak_cells
        self._between = PeakCells(rate_hz)
        self._nodes_db = nodes_db
        self._peak_pieces = self._between.pieces(channels)
        self._at = 0  # peak cell of the next piece
        self._highest = (0.0, 0)

        self._weights = channel_weights(channels)
        self._edges = np.asarray(hop_to_frame(np.arange(HOPS_PER_S + 1), rate_hz))
        self._lead = memory_frames(rate_hz)
        self._pieces = Pieces(rate_hz, channels, before=self._lead)
        self._touched = touched_hops(nodes_db, len(before.cells), self._between.cell_frames / rate_hz)
        self._cells = before.cells * float(db_to_gain(2 * make_up_db))
        self._hop = 0

    def push(self, block: Samples) -> None:
        """Take the next delivered block, shape=(frames,) or (frames, channels)."""
        for piece in self._pieces.push(block):
            self._weigh(piece)
        for piece in self._peak_pieces.push(block):
            self._look(piece)

    def loudness(self) -> Loudness:
        """The loudness of everything; nothing may be pushed any more."""
        for piece, _ in self._pieces.rest():
            self._weigh(piece)
        return loudness_of(self._cells)

    def true_peak(self) -> tuple[float, float]:
        """True peak in dBTP and the middle of its cell in s; nothing may be pushed any more."""
        for piece, _ in self._peak_pieces.rest():
            self._look(piece)
        peak, cell = self._highest
        at_s = (cell + 0.5) * self._between.cell_frames / self._rate_hz if peak else 0.0
        return (gain_to_db(peak) if peak else -math.inf), at_s

    def _weigh(self, piece: Piece) -> None:
        """Measure the touched cells of one second."""
        first, self._hop = self._hop, self._hop + HOPS_PER_S
        touched = np.flatnonzero(self._touched[first : self._hop])
        if not len(touched):
            return
        start = int(touched[0]) // STRETCH_CELLS * STRETCH_CELLS
        end = -(-(int(touched[-1]) + 1) // STRETCH_CELLS) * STRETCH_CELLS
        edges = self._edges[start : end + 1]
        stretch = piece[:, edges[0] : self._lead + edges[-1]]  # with the memory before it
        cells = np.zeros(end - start)
        for channel, weight in zip(stretch, self._weights, strict=True):
            if weight and channel.any():
                cells += weight * weighted_cells(channel[None], edges - edges[0], rate_hz=self._rate_hz)[0]
        room = self._cells[first + start : first + end]
        room[:] = cells[: len(room)]

    def _look(self, piece: Piece) -> None:
        """The highest peak with this piece."""
        known = self._peak_cells[self._at : self._at + PIECE_CELLS]
        reached = self._nodes_db[max(0, self._at - 1) : self._at + PIECE_CELLS + 2]  # by the interpolator, too
        cells = self._between.measure(piece)[: len(known)] if reached.any() else known
        factor = 1.0 if cells is not known else float(self._peak_gain)
        if len(cells):
            at = int(cells.argmax())
            if float(cells[at]) * factor > self._highest[0]:
                self._highest = float(cells[at]) * factor, self._at + at
        self._at += PIECE_CELLS


def touched_hops(nodes_db: Nodes, hops: int, cell_s: float) -> Bools:
    """Hops in which the limiter works or whose K-weighting remembers that it did, shape=(hops,)."""
    out = np.zeros(hops + 1, np.bool_)
    at = np.flatnonzero(nodes_db < 0)
    for beside_s in (-cell_s, cell_s):  # a node's gain reaches to its neighbours
        out[np.clip(((at * cell_s + beside_s) * HOPS_PER_S).astype(np.int64), 0, hops)] = True
    total = np.concatenate([np.zeros(MEMORY_CELLS + 1, np.int64), np.cumsum(out[:hops])])
    return np.asarray(total[MEMORY_CELLS + 1 :] > total[: -MEMORY_CELLS - 1])
