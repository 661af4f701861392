"""Sounds that people and rooms make, dry, for the simulator of conversations.

Purpose: phrases cut from the recordings in `voices/`, whispered phrases, short answers, breaths, laughs, coughs,
and what every microphone hears alike (thumps, clicks, keys, fan, hum, rain).

Conventions: float64, mono, at `RATE_HZ` = 16 kHz, since that is what the recordings hold; speech is brought to 0 dB
(an active root mean square of 1), and every other sound has its level in dB against that. Randomness comes from the
generator that is handed in, so one seed makes one sound.

Method: pauses are found at 10 ms hops, 30 dB under the loud hops; a whisper keeps the spectral envelope of a phrase
(low-quefrency part of the cepstrum) and replaces its source by noise; the levels of breaths, laughs and coughs are
common practice without a source.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np
import soundfile as sf
import soxr
from scipy.signal import butter, sosfilt

RATE_HZ = 16_000
HOP = RATE_HZ // 100
VOICES = Path(__file__).with_name("voices")
DEV = ("woman_en", "man_it", "man_commands", "synthetic_low")
HELD_OUT = ("man_reader", "woman_fr", "woman_ru", "synthetic_dry", "synthetic_high")
RESIZED = (1.0, 1.09, 0.91)  # more people than recordings: the same phrases from a smaller or larger head

PAUSE_HOPS = 13  # a pause of 130 ms parts two phrases
LONGEST_HOPS = 400
SOFTEST_DB = -9.0  # what never gets louder is a breath in the recording


@dataclass(frozen=True)
class Voice:
    """One person's phrases, dry, at 0 dB, and the pitch of the short answers."""

    name: str
    phrases: tuple[np.ndarray, ...]
    pitch_hz: float


@lru_cache(maxsize=64)
def voice(name: str, resized: float = 1.0) -> Voice:
    """The voice of that recording, played `resized` times as fast."""
    recording, rate_hz = sf.read(VOICES / f"{name}.flac")
    assert rate_hz == RATE_HZ, (name, rate_hz)
    if resized != 1.0:
        recording = soxr.resample(recording, RATE_HZ * resized, RATE_HZ)
    recording = recording / active_level(recording)
    return Voice(f"{name} x{resized:g}", tuple(phrases_of(recording)), _pitch_hz(recording))


def cast(names: tuple[str, ...], people: int) -> list[Voice]:
    """So many different voices; resized ones after the recordings are used up."""
    most = len(names) * len(RESIZED)
    assert people <= most, f"{people} people asked for, {most} voices at hand"
    return [voice(names[k % len(names)], RESIZED[k // len(names)]) for k in range(people)]


def hop_level_db(x: np.ndarray) -> np.ndarray:
    """Level of each 10 ms hop."""
    hops = len(x) // HOP
    return 10 * np.log10(np.mean(x[: hops * HOP].reshape(hops, HOP) ** 2, axis=1) + 1e-12)


def active_level(x: np.ndarray) -> float:
    """Root mean square of the hops within 30 dB of the loud ones."""
    level_db = hop_level_db(x)
    return float(np.sqrt(np.mean(10 ** (level_db[level_db > np.percentile(level_db, 95) - 30] / 10))))


def phrases_of(x: np.ndarray) -> list[np.ndarray]:
    """Cut where nothing is said for 130 ms or more; edges are faded, long phrases cut at their quietest place."""
    level_db = hop_level_db(x)
    loud = np.flatnonzero(level_db > np.percentile(level_db, 95) - 30)
    groups = np.split(loud, np.flatnonzero(np.diff(loud) > PAUSE_HOPS) + 1)
    spans = [(int(g[0]), int(g[-1]) + 1) for g in groups]
    phrases = []
    while spans:
        first, last = spans.pop(0)
        if last - first > LONGEST_HOPS:
            middle = first + 150 + int(np.argmin(level_db[first + 150 : last - 150]))
            spans[:0] = [(first, middle), (middle, last)]
        elif last - first >= 20 and level_db[first:last].max() > SOFTEST_DB:
            phrases.append(faded(x[max(first - 2, 0) * HOP : (last + 4) * HOP], 0.015, 0.03))
    return phrases


def faded(x: np.ndarray, in_s: float, out_s: float) -> np.ndarray:
    """A copy with cosine edges."""
    x = x.copy()
    for edge_s, at in ((in_s, slice(None)), (out_s, slice(None, None, -1))):
        n = min(int(edge_s * RATE_HZ), len(x))
        x[at][:n] *= 0.5 - 0.5 * np.cos(np.pi * np.arange(n) / max(n, 1))
    return x


def at_level(x: np.ndarray, level_db: float) -> np.ndarray:
    """Brought to a root mean square of so many dB."""
    return x * 10 ** (level_db / 20) / np.sqrt(np.mean(x**2) + 1e-20)


def band_noise(rng: np.random.Generator, frames: int, low_hz: float, high_hz: float) -> np.ndarray:
    """White noise through a second-order band pass."""
    sos = butter(2, [low_hz, high_hz], "bandpass", fs=RATE_HZ, output="sos")
    return sosfilt(sos, rng.standard_normal(frames))


def breath(rng: np.random.Generator) -> np.ndarray:
    """An intake of breath: 0.25 to 0.45 s of noise that swells and stops."""
    frames = int(rng.uniform(0.25, 0.45) * RATE_HZ)
    t = np.linspace(0, 1, frames)
    swell = t**0.8 * np.minimum(1, (1 - t) / 0.12)
    noise = band_noise(rng, frames, 700, 5500) + 0.6 * band_noise(rng, frames, 1400, 2400)
    return at_level(noise * swell, -22.0)


def short_answer(rng: np.random.Generator, pitch_hz: float) -> np.ndarray:
    """An "mm", 10 dB softer than speech: harmonics with a nasal slope and a falling pitch."""
    frames = int(rng.uniform(0.25, 0.5) * RATE_HZ)
    fall = np.linspace(rng.uniform(1.0, 1.15), rng.uniform(0.85, 1.0), frames)
    phase = 2 * np.pi * np.cumsum(pitch_hz * fall) / RATE_HZ
    hum = sum(np.sin(k * phase + rng.uniform(0, 6.28)) / (1 + (k * pitch_hz / 280) ** 2) for k in range(1, 14))
    return at_level(faded(hum + 0.02 * rng.standard_normal(frames), 0.05, 0.1), -10.0)


def spoken_answer(rng: np.random.Generator, phrases: list[np.ndarray]) -> np.ndarray:
    """The beginning of a phrase, a word or two, 2 to 10 dB softer than speech."""
    frames = int(rng.uniform(0.25, 0.8) * RATE_HZ)
    dry = phrases[int(rng.integers(len(phrases)))][:frames]
    return faded(dry / active_level(dry), 0.005, 0.05) * 10 ** (rng.uniform(-10, -2) / 20)


def whisper(rng: np.random.Generator, phrase: np.ndarray) -> np.ndarray:
    """The phrase with noise for a source, 12 dB softer."""
    size, step = 512, 128
    window = np.hanning(size)
    padded = np.pad(phrase, (size, size))
    noise = rng.standard_normal(len(padded))
    out = np.zeros(len(padded))
    for start in range(0, len(padded) - size, step):
        spectrum = np.abs(np.fft.rfft(padded[start : start + size] * window)) + 1e-6
        cepstrum = np.fft.irfft(np.log(spectrum))
        cepstrum[28:-27] = 0
        shape = np.exp(np.fft.rfft(cepstrum).real)
        out[start : start + size] += np.fft.irfft(np.fft.rfft(noise[start : start + size] * window) * shape) * window
    sos = butter(2, 300, "highpass", fs=RATE_HZ, output="sos")
    out = sosfilt(sos, out)[size : size + len(phrase)]
    return faded(out / active_level(out), 0.01, 0.02) * 10 ** (-12 / 20)


def laugh(rng: np.random.Generator, pitch_hz: float) -> np.ndarray:
    """Four to seven bursts a fifth of a second apart, voice and some air, each softer than the last."""
    burst_s, bursts = rng.uniform(0.17, 0.23), int(rng.integers(4, 8))
    out = np.zeros(int(burst_s * bursts * RATE_HZ) + HOP)
    for k in range(bursts):
        frames = int(burst_s * 0.62 * RATE_HZ)
        phase = 2 * np.pi * np.cumsum(np.linspace(1.5, 1.2, frames) * pitch_hz) / RATE_HZ
        tone = sum(np.sin(h * phase) / (1 + (h * pitch_hz / 700) ** 2) for h in range(1, 20))
        air = band_noise(rng, frames, 500, 2500)
        burst = faded(at_level(tone, 0) + 0.3 * at_level(air, 0), 0.02, 0.06)
        at = int(k * burst_s * RATE_HZ)
        out[at : at + frames] += burst * 10 ** (-1.5 * k / 20)
    return at_level(out, -1.0)


def cough(rng: np.random.Generator) -> np.ndarray:
    """One or two blasts of noise with a fast start, louder than speech."""
    parts = []
    for _ in range(int(rng.integers(1, 3))):
        frames = int(rng.uniform(0.16, 0.26) * RATE_HZ)
        decay = np.exp(-np.arange(frames) / (0.06 * RATE_HZ))
        blast = band_noise(rng, frames, 250, 3500) + 0.5 * rng.standard_normal(frames) * np.linspace(0.2, 1, frames)
        parts += [faded(blast * decay, 0.004, 0.02), np.zeros(int(0.12 * RATE_HZ))]
    return at_level(np.concatenate(parts[:-1]), 2.0)


def thump(rng: np.random.Generator) -> np.ndarray:
    """A knock on the table: a damped mode of 50 to 110 Hz and the click of the touch."""
    t = np.arange(int(0.3 * RATE_HZ)) / RATE_HZ
    mode = np.sin(2 * np.pi * rng.uniform(50, 110) * t) * np.exp(-t / 0.06)
    return mode * 10 ** (9 / 20) + 0.8 * rng.standard_normal(len(t)) * np.exp(-t / 0.006)


def click(rng: np.random.Generator) -> np.ndarray:
    """A pen or a key: 15 ms of bright noise."""
    frames = int(0.015 * RATE_HZ)
    return band_noise(rng, frames, 1500, 7000) * np.exp(-np.arange(frames) / (0.003 * RATE_HZ)) * 10 ** (-4 / 20)


def fan(rng: np.random.Generator, frames: int) -> np.ndarray:
    """Rumbling air with a blade tone; it takes two seconds to run up."""
    air = at_level(band_noise(rng, frames, 60, 900), 0)
    tone = np.sin(2 * np.pi * 117 * np.arange(frames) / RATE_HZ) * 0.4
    return (air + tone) * np.minimum(1, np.arange(frames) / (2.0 * RATE_HZ))


def hum(frames: int) -> np.ndarray:
    """Mains hum: 50 Hz and its first odd and even harmonics."""
    t = np.arange(frames) / RATE_HZ
    return at_level(sum(np.sin(2 * np.pi * 50 * k * t + k) / k for k in (1, 2, 3, 4, 5, 7)), 0)


def rain(rng: np.random.Generator, frames: int) -> np.ndarray:
    """Wide noise with about forty drops a second on top."""
    drops = np.zeros(frames)
    at = rng.integers(0, frames, int(40 * frames / RATE_HZ))
    np.add.at(drops, at, rng.exponential(12, len(at)))
    return at_level(band_noise(rng, frames, 400, 7000), 0) + at_level(sosfilt(
        butter(1, [1000, 6000], "bandpass", fs=RATE_HZ, output="sos"), drops), -6)


def _pitch_hz(x: np.ndarray) -> float:
    """Median pitch of the loud hops by autocorrelation; 130 Hz where none is clear."""
    found, size = [], 640
    loud = np.flatnonzero(hop_level_db(x) > -6)
    for hop in loud[:: max(1, len(loud) // 150)]:
        piece = x[hop * HOP : hop * HOP + size]
        if len(piece) == size:
            lags = np.fft.irfft(np.abs(np.fft.rfft(piece - piece.mean(), 2 * size)) ** 2)[:size]
            lag = 45 + int(np.argmax(lags[45:230]))
            if lags[lag] > 0.5 * lags[0]:
                found.append(RATE_HZ / lag)
    return float(np.median(found)) if found else 130.0
