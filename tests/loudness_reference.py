"""libebur128's reading of a signal, and material to read: recorded speech at several levels, noise bursts.

libebur128 (through pyebur128) is the outside truth for loudness and true peak; nothing here uses leveller.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np
import pyebur128
import soundfile
import soxr

VOICES = Path(__file__).with_name("voices")


@dataclass(frozen=True)
class Reference:
    """What libebur128 reads."""

    integrated_lufs: float
    range_lu: float
    true_peak_dbtp: float


def libebur128(signal: np.ndarray, rate_hz: int) -> Reference:
    """Integrated loudness, range and true peak; 20 frames of silence flush its interpolator."""
    columns = signal[:, None] if signal.ndim == 1 else signal
    mode = pyebur128.MeasurementMode
    state = pyebur128.R128State(columns.shape[1], rate_hz, mode.MODE_I | mode.MODE_LRA | mode.MODE_TRUE_PEAK)
    feed(state, np.concatenate([columns, np.zeros((20, columns.shape[1]), columns.dtype)]))
    peak = max(pyebur128.get_true_peak(state, channel) for channel in range(columns.shape[1]))
    return Reference(
        pyebur128.get_loudness_global(state), pyebur128.get_loudness_range(state), float(20 * np.log10(peak)))


def feed(state: pyebur128.R128State, columns: np.ndarray) -> None:
    """Interleaved frames into a libebur128 state."""
    state.add_frames(np.ascontiguousarray(columns, np.float32).ravel(), len(columns))


@lru_cache(maxsize=8)
def speech(rate_hz: int, names: tuple[str, ...] = ("woman_en", "man_it"), channels: int = 1) -> np.ndarray:
    """12 s of each recorded voice in turn, the second 8 dB softer, with 1.5 s of silence between; peak 0.5."""
    parts = []
    for index, name in enumerate(names):
        samples, recorded_hz = soundfile.read(VOICES / f"{name}.flac", dtype="float32")
        voice = soxr.resample(samples[: 12 * recorded_hz], recorded_hz, rate_hz)
        parts += [voice * 10 ** (-8 * index / 20), np.zeros(rate_hz * 3 // 2, np.float32)]
    mono = np.concatenate(parts)
    mono = (mono * (0.5 / np.abs(mono).max())).astype(np.float32)
    out = mono if channels == 1 else np.stack([mono, np.roll(mono, 37) * np.float32(0.7)], axis=1)
    out.setflags(write=False)
    return out


def noise_bursts(rate_hz: int, seconds: float, channels: int = 1, *, seed: int = 7) -> np.ndarray:
    """White noise whose level is drawn anew every quarter of a second, -45 to -10 dB."""
    rng = np.random.default_rng(seed)
    frames = int(seconds * rate_hz)
    step = rate_hz // 4
    level = np.repeat(10 ** (rng.uniform(-45, -10, frames // step + 1) / 20), step)[:frames]
    return (rng.standard_normal((frames, channels)) * level[:, None]).astype(np.float32)
