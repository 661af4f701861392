"""Loudness after ITU-R BS.1770-5, EBU Tech 3341 (momentary, short-term, integrated) and EBU Tech 3342 (range).

One currency: *cells*, the K-weighted mean-square power of each 10 ms, summed over channels with the channel weights of
BS.1770. Every loudness here is a pure function of cells, so a gain that is constant over a cell is a factor on it.

Conventions: cells are float64, shape=(cells,); cell i spans the frames `hop_to_frame(i)` to `hop_to_frame(i + 1)`, so
rates that 100 does not divide work; a cell that the end of the programme cuts off is not counted. Loudness is in LUFS,
range in LU. A programme shorter than a window, or silent, or wholly under the gate reads -inf LUFS and 0 LU.

Method: the two biquads are re-derived for each rate by the bilinear transform. They are applied to spectra of whole
seconds on the absolute frame grid, each with the 0.1 s before it (overlap-save; A. V. Oppenheim, R. W. Schafer,
Discrete-Time Signal Processing, ch. 8): the slowest pole, at 38 Hz, has fallen to 1e-9 by then. Four seconds at once
take 0.7 of the time of the recursive filters (measured), in float32: 130 dB under what sounds within the second. The
answer is the same at any block size, to the last bit.

References
----------
ITU-R BS.1770-5 (2023), Annex 1; EBU Tech 3341 (2023); EBU Tech 3342 (2023).
Analog prototypes of the two filters: B. De Man, "Evaluation of implementations of the EBU R128 loudness measurement",
AES Convention e-Brief 4, 2018; they give the standard's 48 kHz table to its last digits (tested).
"""

from __future__ import annotations

import functools
import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.measure.pieces import Piece, Pieces
from leveller.units import HOPS_PER_S, db_to_power, hop_to_frame, power_to_db

Cells = npt.NDArray[np.float64]

OFFSET_LU = -0.691  # BS.1770-5 Annex 1, eq. 2
ABSOLUTE_GATE_LUFS = -70.0  # BS.1770-5 Annex 1, eq. 4; Tech 3342 clause 2
RELATIVE_GATE_LU = -10.0  # BS.1770-5 Annex 1, eq. 6
RANGE_GATE_LU = -20.0  # Tech 3342 clause 2
RANGE_PERCENTILES = (0.10, 0.95)  # Tech 3342 clause 2
MOMENTARY_CELLS = 40  # 400 ms, Tech 3341 clause 2.2
SHORT_TERM_CELLS = 300  # 3 s, Tech 3341 clause 2.2
BLOCK_STEP_CELLS = 10  # 75 % overlap of 400 ms, BS.1770-5 Annex 1
RANGE_STEP_CELLS = 100  # 1 s: the least overlap of Tech 3342 (2 s of 3), and libebur128's step
SURROUND = 1.41  # BS.1770-5 Annex 1, table 3: +1.5 dB

# Analog prototypes (De Man 2018): the second stage's gain is that of the standard's table, numerator 1, -2, 1.
SHELF_HZ, SHELF_DB, SHELF_Q = 1681.974450955533, 3.999843853973347, 0.7071752369554196
SHELF_BAND_POWER = 0.4996667741545416  # the band gain is the shelf's gain to this power
HIGH_PASS_HZ, HIGH_PASS_Q = 38.13547087602444, 0.5003270373238773
CALIBRATION_HZ = 997.0  # BS.1770-5 Annex 1: the tone that reads -3.01 LKFS
RATES_HZ = (8000, 192000)
TABLE_RATE_HZ = 48000  # the rate of the standard's coefficient table

MEMORY_S = 0.1  # of the K-weighting
_BATCH_S = 4  # transforms side by side fill the processor's vectors


@dataclass(frozen=True)
class Loudness:
    """What a programme reads; times are those at which the window ends, 0 where there is no such window."""

    integrated_lufs: float
    range_lu: float
    max_momentary_lufs: float
    max_momentary_s: float
    max_short_term_lufs: float
    max_short_term_s: float
    cells: Cells  # shape=(cells,), K-weighted power per 10 ms


class LoudnessMeter:
    """Streaming meter: `push` blocks, then `result`; pushing may go on after a result.

    Parameters
    ----------
    rate_hz : int
        8000 to 192000 Hz.
    channels : int
        Order of BS.1770: L R C LFE Ls Rs for six, L R C Ls Rs for five.
    weights : sequence of float, optional
        Channel weights; by default those of BS.1770 (1, surround 1.41, LFE 0); other channel counts weigh 1 each.
    """

    def __init__(self, rate_hz: int, channels: int, *, weights: Sequence[float] | None = None) -> None:
        if not RATES_HZ[0] <= rate_hz <= RATES_HZ[1]:
            raise ValueError(_out_of_reach(rate_hz))
        self._rate_hz = rate_hz
        self._weights = tuple(weights) if weights is not None else channel_weights(channels)
        if len(self._weights) != channels:
            raise ValueError(f"{len(self._weights)} channel weights for {channels} channel(s)")
        self._edges = np.asarray(hop_to_frame(np.arange(HOPS_PER_S + 1), rate_hz))
        self._lead = memory_frames(rate_hz)
        self._pieces = Pieces(_BATCH_S * rate_hz, channels, before=self._lead)  # a second holds 100 whole cells
        self._cells: list[Cells] = []

    def push(self, block: npt.NDArray[Any]) -> None:
        """Take a block, shape=(frames,) or (frames, channels), of any length."""
        self._cells.extend(self._measure(piece) for piece in self._pieces.push(block))

    def cells(self) -> Cells:
        """The whole cells so far, shape=(cells,)."""
        done = list(self._cells)
        for piece, frames in self._pieces.rest():
            seconds, left = divmod(frames, self._rate_hz)
            whole = seconds * HOPS_PER_S + int(np.searchsorted(self._edges, left, side="right")) - 1
            done.append(self._measure(piece)[:whole])
        return np.concatenate(done) if done else np.zeros(0)

    def result(self) -> Loudness:
        """Everything measured over what was pushed so far."""
        return loudness_of(self.cells())

    def _measure(self, piece: Piece) -> Cells:
        """Cells of the seconds of a piece."""
        step = piece.itemsize
        shape, strides = (_BATCH_S, self._lead + self._rate_hz), (self._rate_hz * step, step)
        cells = np.zeros((_BATCH_S, HOPS_PER_S))
        for channel, weight in zip(piece, self._weights, strict=True):
            if weight and channel.any():
                seconds = np.lib.stride_tricks.as_strided(channel, shape, strides, writeable=False)
                cells += weight * weighted_cells(seconds, self._edges, rate_hz=self._rate_hz)
        return cells.reshape(-1)


def memory_frames(rate_hz: int) -> int:
    """Frames before a stretch that its K-weighting hangs on."""
    return math.ceil(MEMORY_S * rate_hz)


def weighted_cells(samples: npt.NDArray[np.float32], edges: npt.NDArray[np.int64], *, rate_hz: int) -> Cells:
    """K-weighted power between edges, of several stretches of one channel at once.

    Parameters
    ----------
    samples : shape=(stretches, frames), float32
        Each begins with the `memory_frames` before its first edge.
    edges : shape=(cells + 1,)
        Frames behind the memory at which cells begin, from 0, and the one at which the last ends.
    rate_hz : int

    Returns
    -------
    shape=(stretches, cells)
    """
    import scipy.fft

    lead = memory_frames(rate_hz)
    size = scipy.fft.next_fast_len(samples.shape[1], real=True)
    spectra = scipy.fft.rfft(samples, size, axis=1)
    spectra *= _response(rate_hz, size)
    weighted = scipy.fft.irfft(spectra, size, axis=1)[:, lead : lead + edges[-1]]
    squares = np.square(weighted)
    return np.asarray(np.add.reduceat(squares, edges[:-1], axis=1) / np.diff(edges), np.float64)


@functools.lru_cache(maxsize=16)
def _response(rate_hz: int, size: int) -> npt.NDArray[np.complex64]:
    """The K-weighting's response on the lines of a spectrum of so many samples."""
    return _response_of(k_weighting(rate_hz), np.arange(size // 2 + 1) / size).astype(np.complex64)


def channel_weights(channels: int) -> tuple[float, ...]:
    """Weights of BS.1770-5 Annex 1, table 3, for a channel count."""
    known = {5: (1.0, 1.0, 1.0, SURROUND, SURROUND), 6: (1.0, 1.0, 1.0, 0.0, SURROUND, SURROUND)}
    return known.get(channels, (1.0,) * channels)


def k_weighting(rate_hz: int) -> npt.NDArray[np.float64]:
    """The K-weighting as second-order sections, shape=(2, 6): shelf, then high-pass.

    At 48 kHz these are the standard's coefficients; at other rates the gain is set so that the calibration tone of
    997 Hz reads what it reads there. Implementations that leave the high-pass's numerator at 1, -2, 1 (libebur128,
    pyloudnorm) miss it by -0.03 to +0.04 LU, by 0.003 LU at 44.1 kHz.

    Raises
    ------
    ValueError
        outside 8 to 192 kHz, where the bilinear transform no longer follows the prototype.
    """
    if not RATES_HZ[0] <= rate_hz <= RATES_HZ[1]:
        raise ValueError(_out_of_reach(rate_hz))
    sos = _bilinear(rate_hz)
    if rate_hz != TABLE_RATE_HZ:
        tone = np.array([CALIBRATION_HZ])
        sos[1, :3] *= np.sqrt(k_response_power(tone) / _response_power(sos, tone / rate_hz))
    return sos


def k_response_power(frequencies_hz: npt.ArrayLike) -> npt.NDArray[np.float64]:
    """|H|^2 of the K-weighting at some frequencies, for use on power spectra of any rate.

    It is the response of the standard's own 48 kHz filters; over 24 kHz it stays at the value of 24 kHz.
    """
    cycles = np.minimum(np.asarray(frequencies_hz, np.float64) / TABLE_RATE_HZ, 0.5)
    return _response_power(_bilinear(TABLE_RATE_HZ), cycles)


def loudness_of(cells: Cells) -> Loudness:
    """All readings of a programme from its cells."""
    momentary, momentary_s = _maximum(momentary_lufs(cells), MOMENTARY_CELLS)
    short_term, short_term_s = _maximum(short_term_lufs(cells), SHORT_TERM_CELLS)
    return Loudness(integrated_lufs(cells), range_lu(cells), momentary, momentary_s, short_term, short_term_s, cells)


def power_to_lufs(power: Any) -> Any:
    """Loudness of a K-weighted mean-square power; 0 gives -inf."""
    return OFFSET_LU + power_to_db(power)


def momentary_lufs(cells: Cells) -> npt.NDArray[np.float64]:
    """Momentary loudness, shape=(max(0, cells - 39),): window i ends at (i + 40) * 10 ms."""
    return np.asarray(power_to_lufs(sliding_sum(cells, MOMENTARY_CELLS) / MOMENTARY_CELLS))


def short_term_lufs(cells: Cells) -> npt.NDArray[np.float64]:
    """Short-term loudness, shape=(max(0, cells - 299),): window i ends at (i + 300) * 10 ms."""
    return np.asarray(power_to_lufs(sliding_sum(cells, SHORT_TERM_CELLS) / SHORT_TERM_CELLS))


def integrated_lufs(cells: Cells) -> float:
    """Integrated loudness with both gates; -inf for silence and for less than 400 ms."""
    powers = sliding_sum(cells, MOMENTARY_CELLS)[::BLOCK_STEP_CELLS] / MOMENTARY_CELLS
    loud = _gated(powers, RELATIVE_GATE_LU)
    return float(power_to_lufs(float(loud.mean()))) if len(loud) else -math.inf


def range_lu(cells: Cells) -> float:
    """Loudness range; 0 for silence and for less than 3 s."""
    powers = sliding_sum(cells, SHORT_TERM_CELLS)[::RANGE_STEP_CELLS] / SHORT_TERM_CELLS
    loud = np.sort(_gated(powers, RANGE_GATE_LU))
    if not len(loud):
        return 0.0
    low, high = (loud[int((len(loud) - 1) * part + 0.5)] for part in RANGE_PERCENTILES)  # nearest rank, as libebur128
    return float(power_to_db(high / low))


def sliding_sum(values: npt.NDArray[np.float64], width: int) -> npt.NDArray[np.float64]:
    """Sums over `width` neighbours, shape=(max(0, len - width + 1),), by doubling: no drift, silence sums to 0."""
    count = len(values) - width + 1
    if count <= 0:
        return np.zeros(0)
    total = np.zeros(count)
    doubled, span, start = values, 1, 0
    while True:
        if width & span:
            total += doubled[start : start + count]
            start += span
        if 2 * span > width:
            return total
        doubled = doubled[:-span] + doubled[span:]
        span *= 2


def _bilinear(rate_hz: int) -> npt.NDArray[np.float64]:
    """Both analog prototypes by the bilinear transform; the high-pass's numerator is 1, -2, 1 as in the table."""
    k = math.tan(math.pi * SHELF_HZ / rate_hz)
    high = 10.0 ** (SHELF_DB / 20.0)
    band = high**SHELF_BAND_POWER
    norm = 1.0 + k / SHELF_Q + k * k
    b = [high + band * k / SHELF_Q + k * k, 2.0 * (k * k - high), high - band * k / SHELF_Q + k * k]
    a = [norm, 2.0 * (k * k - 1.0), 1.0 - k / SHELF_Q + k * k]
    shelf = [value / norm for value in (*b, *a)]
    k = math.tan(math.pi * HIGH_PASS_HZ / rate_hz)
    norm = 1.0 + k / HIGH_PASS_Q + k * k
    high_pass = [1.0, -2.0, 1.0, 1.0, 2.0 * (k * k - 1.0) / norm, (1.0 - k / HIGH_PASS_Q + k * k) / norm]
    return np.array([shelf, high_pass])


def _out_of_reach(rate_hz: int) -> str:
    """What to say of a rate that cannot be measured."""
    return f"{rate_hz} Hz: loudness is measured from {RATES_HZ[0]} to {RATES_HZ[1]} Hz"


def _response_power(sos: npt.NDArray[np.float64], cycles: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
    """|H|^2 of second-order sections at frequencies in cycles per frame."""
    return np.asarray(np.abs(_response_of(sos, cycles)) ** 2)


def _response_of(sos: npt.NDArray[np.float64], cycles: npt.NDArray[np.float64]) -> npt.NDArray[np.complex128]:
    """H of second-order sections at frequencies in cycles per frame."""
    z = np.exp(-2j * np.pi * cycles)
    response = np.ones(cycles.shape, np.complex128)
    for b0, b1, b2, a0, a1, a2 in sos:
        response = response * (b0 + z * (b1 + z * b2)) / (a0 + z * (a1 + z * a2))
    return response


def _gated(powers: Cells, relative_lu: float) -> Cells:
    """Powers that pass the absolute gate and then the one relative to the mean of those."""
    loud: Cells = powers[powers >= db_to_power(ABSOLUTE_GATE_LUFS - OFFSET_LU)]
    gate = float(loud.mean()) * db_to_power(relative_lu) if len(loud) else 0.0
    return loud[loud >= gate]


def _maximum(windows_lufs: npt.NDArray[np.float64], width: int) -> tuple[float, float]:
    """Loudest window and the time at which it ends; (-inf, 0) without one that sounds."""
    if not len(windows_lufs) or windows_lufs.max() == -math.inf:
        return -math.inf, 0.0
    at = int(windows_lufs.argmax())
    return float(windows_lufs[at]), (at + width) / HOPS_PER_S
