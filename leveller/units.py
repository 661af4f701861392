"""Conversions between units, each once.

Levels are in dB: of a gain 20 log10, of a power 10 log10. Silence has the level `-inf`, and `-inf` dB is a gain of 0.
Time runs in seconds, *frames* (instants of all channels at the session's rate) and *hops* (10 ms analysis steps).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

HOPS_PER_S = 100  # one analysis step is 10 ms, whatever the source's rate
HOP_S = 1 / HOPS_PER_S

Floats = npt.NDArray[np.floating[Any]]
Bools = npt.NDArray[np.bool_]


def db_to_gain(level_db: Any) -> Any:
    """Linear gain of a level in dB."""
    return 10.0 ** (np.asarray(level_db) / 20.0) if np.ndim(level_db) else 10.0 ** (level_db / 20.0)


def gain_to_db(gain: Any) -> Any:
    """Level in dB of a linear gain; 0 gives -inf."""
    with np.errstate(divide="ignore"):
        out = 20.0 * np.log10(gain)
    return out if np.ndim(gain) else float(out)


def db_to_power(level_db: Any) -> Any:
    """Power of a level in dB."""
    return 10.0 ** (np.asarray(level_db) / 10.0) if np.ndim(level_db) else 10.0 ** (level_db / 10.0)


def power_to_db(power: Any) -> Any:
    """Level in dB of a power; 0 gives -inf."""
    with np.errstate(divide="ignore"):
        out = 10.0 * np.log10(power)
    return out if np.ndim(power) else float(out)


def seconds_to_frames(time_s: float, rate_hz: int) -> int:
    """The frame nearest to a time."""
    return round(time_s * rate_hz)


def seconds_to_hops(time_s: float) -> int:
    """The hop edge nearest to a time."""
    return round(time_s * HOPS_PER_S)


def hop_to_frame(hop: Any, rate_hz: int) -> Any:
    """The frame at which a hop starts; hops of rates that 100 does not divide differ by one frame."""
    return (np.asarray(hop, np.int64) * rate_hz + HOPS_PER_S // 2) // HOPS_PER_S if np.ndim(hop) else (
        int(hop) * rate_hz + HOPS_PER_S // 2) // HOPS_PER_S


def frames_to_hops(frames: int, rate_hz: int) -> int:
    """How many hops cover so many frames; a part of a hop counts whole."""
    return -(-frames * HOPS_PER_S // rate_hz)


def clock(time_s: float) -> str:
    """A time as h:mm:ss, the way an editor's timeline shows it; parts of a second are dropped."""
    whole = int(time_s + 1e-9)
    return f"{whole // 3600}:{whole // 60 % 60:02d}:{whole % 60:02d}"
