"""Which microphone hears a sound first: delays between microphones, whatever their gains.

A voice reaches its own microphone before all others, by 3 ms a metre. The generalised cross-correlation with phase
transform (GCC-PHAT; C. H. Knapp, G. C. Carter, IEEE Trans. ASSP 24(4), 1976) of a 128 ms window shows the delay as
a peak that does not depend on level, gain or spectrum, and still stands in a live room. That makes it a seed for
knowing who speaks into which microphone before anything about levels is known; a knob turned in the middle or a
person who hardly speaks do not disturb it. Measured on simulated rooms (RT60 0.3 to 0.8 s): of the windows that
`attribute` takes as seeds 999 in a thousand named the right microphone.

Method: windows of 2048 samples at 16 kHz; only 200 to 3700 Hz is kept, so the correlation comes back at 8 kHz; each
spectrum is set to unit modulus once, then one inverse transform a pair. Their mean over all windows has a peak whose
sign is the polarity of the pair. Lags up to 12 ms count (4 m). The *lead* of
a microphone is the mean over the others of the peak's height, positive where it hears first and negative where it
hears later. The number of windows is bounded by the number of pairs, so that twelve microphones do not cost thirty
times three.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from leveller.measure.bands import ANALYSIS_HZ, HOP

WINDOW = 2048
_BACK = 1024  # length of the inverse transform: 8 kHz
BAND_HZ = (200, 3700)
LAGS = 96  # 12 ms at 8 kHz
LAG_S = 1 / 8000
STRIDE = 800  # 50 ms at the most dense
PAIRS_PER_S = 30
ENOUGH_WINDOWS = 3000
_BATCH = 32
_SCALE = _BACK / (2 * (BAND_HZ[1] * WINDOW // ANALYSIS_HZ - BAND_HZ[0] * WINDOW // ANALYSIS_HZ))
CLEAR = 0.025  # of the mean correlation; the lowest true peak was 0.057 (118 pairs in 34 minutes of sessions, measured)
CHANCE = 1.0  # over the root of the windows; without a common sound 0.17 was the most (measured)
OTHER_SIGN = 0.75  # the highest of the other sign against it; at most 0.64 (measured there)

Samples = npt.NDArray[np.float32]


@dataclass(frozen=True)
class Arrivals:
    """Who hears first, window by window."""

    hop: npt.NDArray[np.int64]  # (windows,) the hop in the middle of the window
    lead: npt.NDArray[np.float32]  # (windows, tracks) -1 .. 1
    lag: npt.NDArray[np.int16]  # (windows, pairs) in LAG_S; positive: the second of the pair hears first
    strength: npt.NDArray[np.float32]  # (windows, pairs) height of the peak, 0 .. 1
    pairs: tuple[tuple[int, int], ...]
    signed: npt.NDArray[np.float32]  # (pairs,) height of the mean correlation, negative: upside down; 0: not clear

    def of_tracks(self, tracks: list[int]) -> Arrivals:
        """The same windows between some of the tracks only."""
        place = {track: i for i, track in enumerate(tracks)}
        kept = [p for p, (i, j) in enumerate(self.pairs) if i in place and j in place]
        pairs = tuple((place[self.pairs[p][0]], place[self.pairs[p][1]]) for p in kept)
        lag, strength = self.lag[:, kept], self.strength[:, kept]
        return Arrivals(self.hop, leads(lag, strength, pairs, len(tracks)), lag, strength, pairs, self.signed[kept])


def leads(
    lag: npt.NDArray[np.int16], strength: Samples, pairs: tuple[tuple[int, int], ...], tracks: int
) -> npt.NDArray[np.float32]:
    """Mean signed peak height of each track against the others, shape=(windows, tracks)."""
    lead = np.zeros((len(lag), tracks), np.float32)
    for p, (i, j) in enumerate(pairs):
        signed = strength[:, p] * np.sign(lag[:, p])  # positive: i hears later
        lead[:, i] -= signed
        lead[:, j] += signed
    return lead / np.float32(max(1, tracks - 1))


def signed_heights(around: Samples, windows: int) -> Samples:
    """Highest peak of each pair's mean correlation with its sign, shape=(pairs,); 0 where it is not clear.

    Parameters
    ----------
    around : shape=(pairs, lags)
    windows : int
        over which it is the mean
    """
    up, down = around.max(axis=1, initial=0.0), -around.min(axis=1, initial=0.0)
    high, other = np.maximum(up, down), np.minimum(up, down)
    clear = (high > max(CLEAR, CHANCE / max(windows, 1) ** 0.5)) & (other < OTHER_SIGN * high)
    return np.where(clear, np.where(up > down, high, -high), 0).astype(np.float32)


class ArrivalMeter:
    """Streaming over all tracks at once; `push` aligned 16 kHz blocks, then `result`."""

    def __init__(self, tracks: int, length_s: float) -> None:
        self._tracks = tracks
        self._pairs = tuple((i, j) for i in range(tracks) for j in range(i + 1, tracks))
        sparse_s = min(len(self._pairs) / PAIRS_PER_S, length_s / ENOUGH_WINDOWS)
        self._stride = max(STRIDE, round(sparse_s * ANALYSIS_HZ / HOP) * HOP)
        self._taper = np.hanning(WINDOW).astype(np.float32)
        bins = np.array(BAND_HZ) * WINDOW // ANALYSIS_HZ
        self._low, self._high = int(bins[0]), int(bins[1])
        self._buffer = np.empty((tracks, 0), np.float32)
        self._start = 0  # absolute 16 kHz sample at the front of the buffer
        self._next = 0  # where the next window starts
        self._found: list[tuple[npt.NDArray[np.int16], npt.NDArray[np.float32]]] = []
        self._sums = np.zeros((len(self._pairs), 2 * LAGS + 1), np.float32)

    def push(self, blocks: list[Samples]) -> None:
        """Take one block a track, all of one length, shape=(frames,) each."""
        if self._tracks < 2:
            return
        self._buffer = np.concatenate([self._buffer, np.stack(blocks)], axis=1)
        end = self._start + self._buffer.shape[1]
        while self._next + WINDOW + (_BATCH - 1) * self._stride <= end:
            self._measure(_BATCH)
        keep = min(self._next, end) - self._start
        self._buffer = self._buffer[:, keep:]
        self._start += keep

    def result(self) -> Arrivals:
        """All windows so far."""
        end = self._start + self._buffer.shape[1]
        if self._tracks > 1 and self._next + WINDOW <= end:
            self._measure((end - WINDOW - self._next) // self._stride + 1)
        count = sum(len(lag) for lag, _ in self._found)
        pairs = len(self._pairs)
        lag = np.concatenate([f[0] for f in self._found]) if count else np.zeros((0, pairs), np.int16)
        strength = np.concatenate([f[1] for f in self._found]) if count else np.zeros((0, pairs), np.float32)
        hop = (np.arange(count) * self._stride + WINDOW // 2) // HOP
        return Arrivals(hop, leads(lag, strength, self._pairs, self._tracks), lag, strength, self._pairs,
                        signed_heights(self._sums / np.float32(max(count, 1)), count))

    def _measure(self, count: int) -> None:
        """The next `count` windows."""
        import scipy.fft

        first = self._next - self._start
        spectra = np.zeros((self._tracks, count, _BACK // 2 + 1), np.complex64)
        shape, strides = (count, WINDOW), (self._stride * self._buffer.itemsize, self._buffer.itemsize)
        windows = np.empty(shape, np.float32)
        for track in range(self._tracks):
            view = np.lib.stride_tricks.as_strided(self._buffer[track, first:], shape, strides, writeable=False)
            spectrum = scipy.fft.rfft(np.multiply(view, self._taper, out=windows), axis=1)
            cut = spectrum[:, self._low : self._high]
            modulus = np.square(cut.real)
            modulus += np.square(cut.imag)
            np.sqrt(modulus, out=modulus)
            np.divide(np.float32(1), np.maximum(modulus, np.float32(1e-20), out=modulus), out=modulus)
            np.multiply(cut, modulus, out=spectra[track, :, self._low : self._high])
        lag = np.empty((count, len(self._pairs)), np.int16)
        strength = np.empty((count, len(self._pairs)), np.float32)
        for p, (i, j) in enumerate(self._pairs):
            around = scipy.fft.irfft(spectra[i] * spectra[j].conj(), _BACK, axis=1)
            lags = np.concatenate([around[:, -LAGS:], around[:, : LAGS + 1]], axis=1)
            self._sums[p] += lags.sum(axis=0) * np.float32(_SCALE)
            lag[:, p] = lags.argmax(axis=1) - LAGS
            strength[:, p] = lags.max(axis=1)
        strength *= np.float32(_SCALE)
        self._found.append((lag, strength))
        self._next += count * self._stride
