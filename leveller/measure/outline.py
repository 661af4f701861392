"""Outline of a waveform: the largest magnitude in each short cell of time, over all channels, for drawing.

Conventions: linear, full scale is 1, float32; silence is 0. Cells lie on the absolute frame grid, so a block of any
length gives the same outline, to the last bit: a maximum does not hang on the order it is taken in. A last cell that
the end cuts off counts.

Method: magnitudes of a block, then one maximum a cell (`np.maximum.reduceat`). Hops of 10 ms, which rates that 100 does
not divide split unevenly, begin as `units.hop_to_frame` says.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.units import HOPS_PER_S

Outlined = npt.NDArray[np.float32]  # shape=(cells,), linear


class Outline:
    """Streaming outline of so many frames: `push` blocks, then `result`.

    Parameters
    ----------
    frames : int
        How many will be pushed at most.
    per_cell : (int, int)
        Frames in so many cells; cell i starts at the frame nearest to i times their ratio.
    """

    def __init__(self, frames: int, per_cell: tuple[int, int]) -> None:
        self._frames_per, self._cells_per = per_cell
        self._at = 0
        self._peaks: Outlined = np.zeros(self._cell(frames - 1) + 1, np.float32)

    def push(self, block: npt.NDArray[Any]) -> None:
        """Take a block, shape=(frames,) or (frames, channels), of any length."""
        if not len(block):
            return
        channels = [block] if block.ndim == 1 else list(block.T)
        first, last = self._cell(self._at), self._cell(self._at + len(block) - 1)
        cells = np.arange(first + 1, last + 1)
        edges = (cells * self._frames_per + self._cells_per // 2) // self._cells_per - self._at
        starts, here = np.concatenate([[0], edges]), self._peaks[first : last + 1]
        for channel in channels:  # one by one: a maximum along an axis of two takes ten times as long
            np.maximum(here, np.maximum.reduceat(np.abs(channel), starts), out=here)
        self._at += len(block)

    def result(self) -> Outlined:
        """The largest magnitude of every cell."""
        return self._peaks

    def _cell(self, frame: int) -> int:
        """The cell that a frame lies in."""
        return ((frame + 1) * self._cells_per - self._cells_per // 2 - 1) // self._frames_per


def hop_outline(frames: int, rate_hz: int) -> Outline:
    """An outline with one value per hop."""
    return Outline(frames, (rate_hz, HOPS_PER_S))
