"""Power per hop in speech bands, with the K-weighted power and the rumble under the bands, from one spectrum.

Everything that decides works at 16 kHz on 10 ms hops: a Hann window of 20 ms round each hop, 14 bands from 180 to
7000 Hz, about a third-octave to half-octave wide (our choice), averaged over three hops, because the power of a single
window scatters. K-weighted power and rumble stay as fast as the hop. DC is taken out
of each window first (its mean under the window), since the window would leak it into the line at 50 Hz.

K-weighted power is the same spectrum times |H(f)|^2 of ITU-R BS.1770-5; it misses what lies over 8 kHz, which for
speech is a small part. It serves to compare own speech hop by hop; the delivered mix is measured at full rate. Ride
and compressor listen to it without the rumble, so that thumps and plosives do not drive them.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.measure.levels import Levels, power_to_level
from leveller.measure.loudness import k_response_power
from leveller.measure.pieces import Grown, Pieces

ANALYSIS_HZ = 16000
HOP = 160
WINDOW = 320
EDGES_HZ = (180, 280, 390, 510, 650, 810, 1000, 1230, 1510, 1850, 2270, 2800, 3600, 4900, 7000)
BANDS = len(EDGES_HZ) - 1
RUMBLE_HZ = (50, 180)  # thumps, plosives and hum live here
_PIECE_HOPS = 100


def bands_within(rate_hz: int) -> int:
    """How many bands a source of this rate can fill."""
    return sum(edge <= 0.46 * rate_hz for edge in EDGES_HZ[1:])


class BandMeter:
    """Streaming; `push` 16 kHz samples, then `result`: levels, shape=(hops, BANDS + 3), int16.

    The last three columns are K-weighted power, the same without the rumble, and the rumble.
    """

    def __init__(self) -> None:
        margin = (WINDOW - HOP) // 2 + HOP  # one hop more on either side, for the average of three
        self._pieces = Pieces(_PIECE_HOPS * HOP, 1, before=margin, after=margin)
        ramp = np.arange(WINDOW) / WINDOW
        self._window = (0.5 - 0.5 * np.cos(2 * np.pi * ramp)).astype(np.float32)
        self._mean = self._window / self._window.sum()
        frequencies = np.arange(WINDOW // 2 + 1) * ANALYSIS_HZ / WINDOW
        self._starts = np.searchsorted(frequencies, EDGES_HZ)
        self._rumble = np.searchsorted(frequencies, RUMBLE_HZ)
        self._scale = np.float32(2.0 / (WINDOW * float((self._window**2).sum())))
        self._k_weight = k_response_power(frequencies).astype(np.float32)
        self._levels = Grown()

    def push(self, block: npt.NDArray[np.float32]) -> None:
        """Take 16 kHz samples, shape=(frames,)."""
        for piece in self._pieces.push(block):
            self._levels.append(self._measure(piece[0]))

    def result(self) -> Levels:
        """Levels of all hops begun so far."""
        done = self._levels.rows(
            *(self._measure(piece[0])[: -(-frames // HOP)] for piece, frames in self._pieces.rest()))
        return np.concatenate(done) if done else np.empty((0, BANDS + 3), np.int16)

    def _measure(self, samples: npt.NDArray[np.float32]) -> Levels:
        """One second's levels."""
        import scipy.fft

        windows = np.lib.stride_tricks.sliding_window_view(samples, WINDOW)[::HOP]
        windows = (windows - (windows @ self._mean)[:, None]) * self._window
        spectrum = scipy.fft.rfft(windows, axis=1)
        power = np.square(spectrum.real)
        power += np.square(spectrum.imag)
        power *= self._scale
        banded = np.add.reduceat(power[:, : self._starts[-1]], self._starts[:-1], axis=1)
        out = np.empty((len(power) - 2, BANDS + 3), np.float32)
        out[:, :BANDS] = (banded[:-2] + banded[1:-1] + banded[2:]) / np.float32(3)
        middle = power[1:-1]
        out[:, BANDS + 2] = middle[:, self._rumble[0] : self._rumble[1]].sum(axis=1)
        middle *= self._k_weight
        low = middle[:, : self._rumble[1]].sum(axis=1)
        out[:, BANDS + 1] = middle[:, self._rumble[1] :].sum(axis=1)
        out[:, BANDS] = out[:, BANDS + 1] + low
        return power_to_level(out)
