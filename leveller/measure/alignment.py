"""Delay and polarity between microphones, from the waveforms of a few seconds in which one person speaks alone.

`arrival` sees every hop but only 12 ms and no sign. Here a handful of seconds a voice are read once more, which finds a
track that runs 50 ms late, a call that returns its bleed after 300 ms, and a microphone wired the wrong way round.

Conventions: [k, m] = voice k at microphone m against microphone k; a positive delay means that m hears later. Unknown
is nan. The sign of `correlation` is the polarity, its size how sharply the delay shows (0 to 1).

Method: smoothed coherence transform (G. C. Carter, A. H. Nuttall, P. G. Cable, Proc. IEEE 61(10), 1973; from memory):
the complex coherence of the two microphones over 1 s windows, transformed back, has sharp peaks, whatever their
sign, at the direct sound and at strong reflections, which a cardioid that looks away may hear louder: so the earliest
of the high ones counts. Lines are 1 Hz apart at any source rate, so tracks of different rates compare.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from leveller.audio import track_seconds
from leveller.session import Session, Track

BAND_HZ = (100, 4000)
LONGEST_S = 0.45  # lags searched; windows last 1 s
LEAST_WINDOWS = 4
CLEAR = 0.06  # height of the peak; without a common sound it stays under 0.03 (measured)
ECHO_S = 0.03  # a microphone that looks away hears a wall louder than the voice, up to so much later
EARLY_SHARE = 0.25  # of the highest peak: of 108 pairs in rooms 81 are right, 1 too early (0.45: 57, 0; 0.15: 72, 19)
_LAGS = 1 << 16  # values in a second: 15 microseconds apart

Matrix = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Alignment:
    """What the waveforms say about every voice and microphone."""

    delay_s: Matrix  # (tracks, tracks), nan where it does not show
    correlation: Matrix  # (tracks, tracks), -1 .. 1, nan where it was not measured


def read_alignment(session: Session, alone_s: Sequence[Sequence[float]]) -> Alignment:
    """Delay and polarity of every voice at every microphone.

    Parameters
    ----------
    session : Session
    alone_s : per track
        session times at which a second begins in which its voice speaks alone

    Raises
    ------
    InputError
        where a file has become unreadable.
    """
    tracks = session.tracks
    delay = np.full((len(tracks), len(tracks)), np.nan)
    correlation = delay.copy()
    for voice, starts in enumerate(alone_s):
        if len(starts) < LEAST_WINDOWS:
            continue
        own = _spectra(tracks[voice], session.rate_hz, starts)
        for mic, track in enumerate(tracks):
            if mic != voice:
                height, lag_s = peak_of(own, _spectra(track, session.rate_hz, starts))
                correlation[voice, mic] = height
                delay[voice, mic] = lag_s if abs(height) > CLEAR else np.nan
    return Alignment(delay, correlation)


def peak_of(near: npt.NDArray[np.complex64], far: npt.NDArray[np.complex64]) -> tuple[float, float]:
    """Signed height and lag in seconds of the sharpest peak, from spectra of shape (windows, lines) in `BAND_HZ`."""
    cross = np.sum(far * near.conj(), axis=0)
    power = np.sum(np.abs(near) ** 2, axis=0) * np.sum(np.abs(far) ** 2, axis=0)
    lines = np.zeros(_LAGS // 2 + 1, np.complex128)
    lines[slice(*BAND_HZ)] = cross / np.sqrt(np.maximum(power, 1e-30))
    around = np.fft.irfft(lines) * (_LAGS / (2 * (BAND_HZ[1] - BAND_HZ[0])))
    reach = round(LONGEST_S * _LAGS)
    lags = np.concatenate([around[-reach:], around[: reach + 1]])
    at = _direct(np.abs(lags))
    return float(lags[at]), (at - reach) / _LAGS


def _direct(height: Matrix) -> int:
    """The earliest peak that is not much lower than the highest: the direct sound may be softer than an echo."""
    highest = int(height.argmax())
    first = max(highest - round(ECHO_S * _LAGS), 1)
    part = height[first - 1 : highest + 2]
    top = (part[1:-1] > part[:-2]) & (part[1:-1] >= part[2:])
    tops = np.flatnonzero(top & (part[1:-1] > EARLY_SHARE * height[highest]))
    return first + int(tops[0]) if len(tops) else highest


def _spectra(track: Track, rate_hz: int, starts_s: Sequence[float]) -> npt.NDArray[np.complex64]:
    """Spectra of 1 s windows in `BAND_HZ`, as the session takes the track (its polarity turned where it says so)."""
    window = (np.hanning(track.source_rate_hz + 1)[:-1] * track.polarity).astype(np.float32)
    out = np.zeros((len(starts_s), BAND_HZ[1] - BAND_HZ[0]), np.complex64)
    for row, second in enumerate(track_seconds(track, rate_hz, starts_s)):
        lines = np.fft.rfft(second.mean(axis=1) * window)[slice(*BAND_HZ)]
        out[row, : len(lines)] = lines
    return out
