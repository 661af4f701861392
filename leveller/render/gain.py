"""Breakpoints onto samples: linear in dB within each hop, the same bits wherever the blocks are cut.

Every hop lies between two rows, since rows lie on the hop grid; its gain runs in a straight line in dB from its first
edge to its second. A step (two rows at one hop) takes effect with the hop that begins there.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.plan import TrackGain
from leveller.units import frames_to_hops, hop_to_frame

Samples = npt.NDArray[np.float32]
_NEPER = np.float32(np.log(10) / 20)


class GainCurve:
    """The gain of one track, applied block by block in any order; blocks start on hop edges."""

    def __init__(self, gain: TrackGain, hops: int, rate_hz: int) -> None:
        self._rate_hz = rate_hz
        self.starts_db, self.ends_db = hop_gains_db(gain, hops)

    def apply(self, block: Samples, first_hop: int) -> Samples:
        """The block after its gain, shape as given; `first_hop` is where it starts."""
        edges = self._edges(len(block), first_hop)
        hops = slice(first_hop, first_hop + len(edges) - 1)
        start, end = self.starts_db[hops], self.ends_db[hops]
        if not len(start):
            return block.copy()
        if (start == start[0]).all() and (end == start[0]).all():
            return np.asarray(block * np.exp(start[0] * _NEPER), np.float32)
        gain = self._ramps(start, end, edges)[: len(block)]
        return np.asarray(block * (gain if block.ndim == 1 else gain[:, None]), np.float32)

    def _edges(self, frames: int, first_hop: int) -> npt.NDArray[np.int64]:
        """Frames at which the block's hops start, from 0; the last one may lie past the block's end."""
        most = frames_to_hops(frames, self._rate_hz) + 1
        edges = hop_to_frame(np.arange(first_hop, min(first_hop + most, len(self.starts_db)) + 1), self._rate_hz)
        edges -= edges[0]
        return np.asarray(edges[: np.searchsorted(edges, frames) + 1])

    def _ramps(self, start: Samples, end: Samples, edges: npt.NDArray[np.int64]) -> Samples:
        """Gain of every frame of whole hops."""
        lengths = np.diff(edges)
        if (lengths == lengths[0]).all():
            part = np.arange(lengths[0], dtype=np.float32) / np.float32(lengths[0])
            ramp = np.multiply((end - start)[:, None], part)
            ramp += start[:, None]
            ramp = ramp.reshape(-1)
        else:
            inside = np.arange(edges[-1]) - np.repeat(edges[:-1], lengths)
            part = (inside / np.repeat(lengths, lengths)).astype(np.float32)
            ramp = np.repeat(start, lengths) + np.repeat(end - start, lengths) * part
        ramp *= _NEPER
        return np.asarray(np.exp(ramp, out=ramp))


def hop_gains_db(gain: TrackGain, hops: int) -> tuple[Samples, Samples]:
    """Gain in dB at the start and at the end of every hop, shape=(hops,) each."""
    level = gain.gain_cdb / 100
    edge = np.arange(hops)
    row = np.clip(np.searchsorted(gain.hop, edge, side="right") - 1, 0, max(0, len(gain.hop) - 2))
    following = np.minimum(row + 1, len(gain.hop) - 1)
    length = np.maximum(gain.hop[following] - gain.hop[row], 1)
    slope = (level[following] - level[row]) / length
    start = level[row] + slope * (edge - gain.hop[row])
    return start.astype(np.float32), (start + slope).astype(np.float32)
