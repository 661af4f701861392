"""Sample peak, DC offset, clipping, and true peak after ITU-R BS.1770-5, Annex 2.

Conventions: levels in dBFS and dBTP, silence is -inf; times in s. *Peak cells* hold the true peak of about 1 ms each
(`peak_cell_frames`), linear, the largest over the channels: the limiter works from them. A last cell that the end cuts
off counts.

Method: true peak oversamples 4 times (2 times from 96 kHz, not at all from 192 kHz) with a 49-tap Hann-windowed sinc,
the interpolator libebur128 uses; phase 0 of it is the samples themselves. The other phases are one matrix product per
piece, a column of the matrix being some frames with their surroundings. Pieces have a fixed length and lie on the
absolute frame grid, since a matrix product may change in its last digit with the number of columns: so the block size
changes nothing. Under-read of 4 times oversampling: at most 0.55 dB up to 0.45 of the rate (BS.1770-5 Annex 2).

References
----------
ITU-R BS.1770-5 (2023), Annex 2; libebur128 (`interp_create` in ebur128.c) for taps, window and factors.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.measure.pieces import Piece, Pieces
from leveller.units import gain_to_db

FULL_SCALE = 0.9999  # a choice of ours: just under the largest 16-bit sample, 0.99997
CLIPPED_FRAMES = 3  # common practice, no source: fewer in a row may be a chance peak
CLIPPED_MERGE_S = 0.2  # a choice of ours: clipped runs closer than this are one place to listen to
INTERPOLATOR_TAPS = 49  # libebur128
_GROUP_FRAMES = 12  # groups of about this many frames cost least in product and maxima (measured: 8 to 16 alike)
_PIECE_S = 4  # a piece of sample peak: few calls, so that threads seldom wait for each other
PIECE_CELLS = 256  # a piece of true peak, about 0.26 s: its buffers stay in the second-level cache


@dataclass(frozen=True)
class PeakReading:
    """Sample peak and what is wrong with the waveform."""

    sample_peak_dbfs: float  # -inf for silence
    sample_peak_s: float  # first frame that reaches it
    dc_offset: tuple[float, ...]  # mean of each channel, full scale is 1
    clipped: tuple[tuple[float, float], ...]  # (from_s, to_s), ascending, any channel


@dataclass(frozen=True)
class TruePeakReading:
    """True peak overall and per peak cell."""

    true_peak_dbtp: float  # -inf for silence
    true_peak_s: float  # middle of the peak cell that holds it
    cells: npt.NDArray[np.float32]  # shape=(cells,), linear
    cell_frames: int


class PeakMeter:
    """Streaming sample peak, DC offset and clipped places.

    Parameters
    ----------
    rate_hz, channels : int
    float_source : bool
        The file holds floats: samples over 1.0 are then not clipped, runs that lie *at* 1.0 still are.
    """

    def __init__(self, rate_hz: int, channels: int, *, float_source: bool = False) -> None:
        self._rate_hz = rate_hz
        self._ceiling = 1.0 if float_source else math.inf
        self._pieces = Pieces(_PIECE_S * rate_hz, channels, before=CLIPPED_FRAMES - 1)
        self._frames = 0
        self._peak = (0.0, 0)
        self._sum = np.zeros(channels)
        self._runs: list[tuple[int, int]] = []

    def push(self, block: npt.NDArray[Any]) -> None:
        """Take a block, shape=(frames,) or (frames, channels), of any length."""
        for piece in self._pieces.push(block):
            self._peak, self._sum, runs = self._measure(piece)
            self._runs = self._merged(self._runs, runs)
            self._frames += self._pieces.frames

    def result(self) -> PeakReading:
        """The reading over what was pushed so far."""
        (peak, frame), total, runs, frames = self._peak, self._sum, self._runs, self._frames
        for piece, left in self._pieces.rest():
            (peak, frame), total, new = self._measure(piece)
            runs = self._merged(runs, new)
            frames += left
        clipped = tuple((first / self._rate_hz, end / self._rate_hz) for first, end in runs)
        means = tuple(float(value) for value in total / max(1, frames))
        return PeakReading(gain_to_db(peak), frame / self._rate_hz, means, clipped)

    def _measure(self, piece: Piece) -> tuple[tuple[float, int], npt.NDArray[np.float64], list[tuple[int, int]]]:
        """Peak and sum with this piece, and the clipped runs in it."""
        own = piece[:, CLIPPED_FRAMES - 1 :]
        total = self._sum + own.sum(axis=1, dtype=np.float64)
        highest = float(max(piece.max(), -piece.min()))  # the frames before its own are in the peak already
        peak = self._peak
        if highest > peak[0]:
            peak = highest, self._frames + int((np.abs(own) == np.float32(highest)).any(axis=0).argmax())
        return peak, total, self._clipped(piece) if highest >= FULL_SCALE else []

    def _clipped(self, piece: Piece) -> list[tuple[int, int]]:
        """Runs of three or more frames at full scale on one side, as absolute (first, end) frames."""
        count = self._pieces.frames
        ends = np.zeros(count, np.bool_)
        for side in (piece, -piece):
            at_scale = (side >= FULL_SCALE) & (side <= self._ceiling)
            run = at_scale[:, :count].copy()
            for later in range(1, CLIPPED_FRAMES):
                run &= at_scale[:, later : later + count]
            ends |= run.any(axis=0)
        last = np.flatnonzero(ends) + self._frames  # the third frame of a run, or a later one
        if not len(last):
            return []
        breaks = np.flatnonzero(np.diff(last) > CLIPPED_FRAMES)
        firsts, lasts = last[np.r_[0, breaks + 1]], last[np.r_[breaks, len(last) - 1]]
        return [(int(a) - CLIPPED_FRAMES + 1, int(b) + 1) for a, b in zip(firsts, lasts, strict=True)]

    def _merged(self, runs: list[tuple[int, int]], new: list[tuple[int, int]]) -> list[tuple[int, int]]:
        """Runs with later ones added; those within 0.2 s become one."""
        out = list(runs[-1:])
        for first, end in new:
            if out and first - out[-1][1] <= CLIPPED_MERGE_S * self._rate_hz:
                out[-1] = out[-1][0], max(out[-1][1], end)
            else:
                out.append((first, end))
        return runs[:-1] + out


class PeakCells:
    """True peak of the cells of one piece; pieces are those of `pieces(channels)`, shared by all who measure."""

    def __init__(self, rate_hz: int) -> None:
        self.cell_frames = peak_cell_frames(rate_hz)
        self._group = _group_frames(self.cell_frames)
        self._reach = interpolator_reach(rate_hz)
        self._matrix = _interpolation_matrix(oversampling(rate_hz), self._group)
        groups = self.cell_frames * PIECE_CELLS // self._group
        self._around = np.empty((self._matrix.shape[1], groups), np.float32)
        self._between = np.empty((self._matrix.shape[0], groups), np.float32)

    def pieces(self, channels: int) -> Pieces:
        """The cutter that makes pieces of `PIECE_CELLS` cells with what the interpolator needs on either side."""
        return Pieces(self.cell_frames * PIECE_CELLS, channels, before=self._reach, after=self._reach)

    def measure(self, piece: Piece) -> npt.NDArray[np.float32]:
        """Cells of one piece, linear, the largest over the channels, shape=(PIECE_CELLS,)."""
        highest = np.zeros(self._around.shape[1], np.float32)
        for channel in piece:
            step = channel.strides[0]
            columns = (self._group * step, step)
            around = np.lib.stride_tricks.as_strided(channel, self._around.shape[::-1], columns, writeable=False)
            np.copyto(self._around, around.T)
            own = self._around[self._reach : self._reach + self._group]
            np.maximum(highest, np.abs(own).max(axis=0), out=highest)
            if self._reach:
                np.matmul(self._matrix, self._around, out=self._between)
                np.abs(self._between, out=self._between)
                np.maximum(highest, self._between.max(axis=0), out=highest)
        groups = self.cell_frames // self._group
        cells = highest[::groups].copy()
        for later in range(1, groups):
            np.maximum(cells, highest[later::groups], out=cells)
        return cells


class TruePeakMeter:
    """Streaming true peak; `push` blocks, then `result`.

    Parameters
    ----------
    rate_hz, channels : int
    frames : int
        How many will be pushed at most, where the cells are wanted; 0 remembers the highest peak alone. (An hour of
        cells is 14 MB.)
    """

    def __init__(self, rate_hz: int, channels: int, *, frames: int = 0) -> None:
        self._rate_hz = rate_hz
        self._between = PeakCells(rate_hz)
        self.cell_frames = self._between.cell_frames
        self._pieces = self._between.pieces(channels)
        self._cells = np.zeros(-(-frames // self.cell_frames), np.float32)
        self._count = 0  # cells so far
        self._highest = (0.0, 0)  # linear, cell

    def push(self, block: npt.NDArray[Any]) -> None:
        """Take a block, shape=(frames,) or (frames, channels), of any length."""
        for piece in self._pieces.push(block):
            cells = self._between.measure(piece)
            self._highest = self._higher(cells)
            self._keep(cells)
            self._count += len(cells)

    def cells(self) -> npt.NDArray[np.float32]:
        """True peak of each peak cell so far, linear, shape=(cells,); empty where none are kept."""
        count = self._count
        for piece, frames in self._pieces.rest():
            self._keep(self._between.measure(piece)[: -(-frames // self.cell_frames)])
            count += -(-frames // self.cell_frames)
        return self._cells[:count]

    def result(self) -> TruePeakReading:
        """The reading over what was pushed so far; without cells where none are kept."""
        peak, at = self._highest
        for piece, frames in self._pieces.rest():
            peak, at = self._higher(self._between.measure(piece)[: -(-frames // self.cell_frames)])
        cells = self.cells()
        if not peak:
            return TruePeakReading(-math.inf, 0.0, cells, self.cell_frames)
        return TruePeakReading(gain_to_db(peak), (at + 0.5) * self.cell_frames / self._rate_hz, cells, self.cell_frames)

    def _keep(self, cells: npt.NDArray[np.float32]) -> None:
        """Write the cells behind those so far, as far as there is room."""
        room = self._cells[self._count : self._count + len(cells)]
        room[:] = cells[: len(room)]

    def _higher(self, cells: npt.NDArray[np.float32]) -> tuple[float, int]:
        """The highest peak with these cells, and its cell."""
        at = int(cells.argmax())
        return (float(cells[at]), self._count + at) if cells[at] > self._highest[0] else self._highest


def peak_cell_frames(rate_hz: int) -> int:
    """Frames in a peak cell: about 1 ms."""
    return max(1, round(rate_hz / 1000))


def oversampling(rate_hz: int) -> int:
    """Oversampling factor at a rate: 4, 2 from 96 kHz, 1 from 192 kHz (libebur128)."""
    return 4 if rate_hz < 96000 else 2 if rate_hz < 192000 else 1


def interpolator_reach(rate_hz: int) -> int:
    """Frames the interpolator looks at on either side; 0 without oversampling."""
    factor = oversampling(rate_hz)
    return (INTERPOLATOR_TAPS - 1) // 2 // factor if factor > 1 else 0


def interpolator(factor: int) -> npt.NDArray[np.float64]:
    """The windowed sinc, shape=(49,), cut-off at the rate's half: every `factor`-th tap but the middle one is 0."""
    centred = np.arange(INTERPOLATOR_TAPS) - (INTERPOLATOR_TAPS - 1) // 2
    return np.asarray(np.sinc(centred / factor) * np.hanning(INTERPOLATOR_TAPS))


def _group_frames(cell_frames: int) -> int:
    """The divisor of a cell that is nearest to the cheapest group length."""
    return min((n for n in range(1, cell_frames + 1) if cell_frames % n == 0), key=lambda n: abs(n - _GROUP_FRAMES))


def _interpolation_matrix(factor: int, group: int) -> npt.NDArray[np.float32]:
    """Takes a group of frames with its surroundings to the values between them.

    Shape=(group * (factor - 1), group + 2 * reach). The value a part `phase / factor` after frame k is the sum over t
    of tap[factor * t + phase] * x[k + reach - t].
    """
    taps = interpolator(factor)
    reach = (INTERPOLATOR_TAPS - 1) // 2 // factor if factor > 1 else 0
    matrix = np.zeros((factor - 1, group, group + 2 * reach), np.float32)
    for phase in range(1, factor):
        own = taps[phase::factor][::-1]  # for x[k + reach - len + 1] to x[k + reach]
        for k in range(group):
            matrix[phase - 1, k, k + 2 * reach - len(own) + 1 : k + 2 * reach + 1] = own
    return matrix.reshape((factor - 1) * group, group + 2 * reach)
