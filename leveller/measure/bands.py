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
_PIECE_HOPS = 400


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
        self._windowed = np.empty((_PIECE_HOPS + 2, WINDOW), np.float32)
        self._weights = np.repeat(_weights(), 2, axis=0)  # real and imaginary parts lie side by side
        self._weights *= np.float32(2.0 / (WINDOW * float((self._window**2).sum())))
        self._levels = Grown()

    def push(self, block: npt.NDArray[np.float32]) -> None:
        """Take 16 kHz samples, shape=(frames,)."""
        for piece in self._pieces.push(block):
            self._levels.append(self._measure(piece[0]))

    def take(self) -> list[Levels]:
        """Levels of the hops that are done, in order; they are forgotten here."""
        return self._levels.take()

    def result(self) -> Levels:
        """Levels of all hops begun so far, without those that were taken."""
        done = self._levels.rows(
            *(self._measure(piece[0])[: -(-frames // HOP)] for piece, frames in self._pieces.rest()))
        return np.concatenate(done) if done else np.empty((0, BANDS + 3), np.int16)

    def _measure(self, samples: npt.NDArray[np.float32]) -> Levels:
        """One second's levels."""
        import scipy.fft

        step = samples.strides[0]
        windows = np.lib.stride_tricks.as_strided(samples, self._windowed.shape, (HOP * step, step), writeable=False)
        spectrum = scipy.fft.rfft(np.multiply(windows, self._window, out=self._windowed), axis=1)
        spectrum[:, 1] += np.float32(0.5) * spectrum[:, 0]  # DC under a Hann window: minus a half of it beside line 0
        squares = spectrum.view(np.float32)
        np.square(squares, out=squares)
        power = squares[:, 2:] @ self._weights[2:]
        out = power[1:-1].copy()
        out[:, :BANDS] += power[:-2, :BANDS]
        out[:, :BANDS] += power[2:, :BANDS]
        out[:, :BANDS] /= np.float32(3)
        return power_to_level(out)


def _weights() -> npt.NDArray[np.float32]:
    """What each line of the spectrum counts in each column of the levels, shape=(lines, BANDS + 3)."""
    frequencies = np.arange(WINDOW // 2 + 1) * ANALYSIS_HZ / WINDOW
    edges = np.searchsorted(frequencies, EDGES_HZ)
    low, high = np.searchsorted(frequencies, RUMBLE_HZ)
    out = np.zeros((len(frequencies), BANDS + 3), np.float32)
    for band in range(BANDS):
        out[edges[band] : edges[band + 1], band] = 1
    out[:, BANDS] = k_response_power(frequencies)
    out[high:, BANDS + 1] = out[high:, BANDS]
    out[low:high, BANDS + 2] = 1
    return out
