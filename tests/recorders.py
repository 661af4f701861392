"""Short talks as recorders of their own leave them: a file a track, started when they like, on a clock of its own."""

from __future__ import annotations

from functools import lru_cache
from pathlib import Path

import numpy as np
import soundfile as sf
import soxr
from conversations import ConversationSpec, simulate

from leveller.measure import Measurements, measure
from leveller.session import Session, open_session

RATE_HZ = 16_000
TALK = ConversationSpec(seed=5, seconds=60, rate_hz=RATE_HZ, room="desk", people=2)


@lru_cache(maxsize=2)
def talk(spec: ConversationSpec = TALK) -> np.ndarray:
    """The microphones of a short conversation."""
    return simulate(spec).mics


def alone(seed: int, voice: str) -> np.ndarray:
    """One voice in a room of its own."""
    spec = ConversationSpec(seed=seed, seconds=60, rate_hz=RATE_HZ, people=1, voices=(voice,), common_noise_db=-90)
    return simulate(spec).mics[:, 0].copy()


def clocked(x: np.ndarray, *, offset_s: float = 0.0, ppm: float = 0.0) -> np.ndarray:
    """What a recorder has that starts so much earlier (positive: its track is late) and whose clock is fast."""
    y = soxr.resample(x, RATE_HZ, RATE_HZ * (1 + ppm * 1e-6), quality="VHQ") if ppm else x
    late = round(offset_s * RATE_HZ)
    return np.concatenate([np.zeros(late, np.float32), y]) if late >= 0 else y[-late:]


def written(folder: Path, *tracks: np.ndarray) -> Path:
    """One file a track."""
    folder.mkdir(parents=True, exist_ok=True)
    for name, samples in zip(("first", "second", "third"), tracks, strict=False):
        sf.write(folder / f"{name}.wav", samples, RATE_HZ, subtype="PCM_24")
    return folder


def opened(folder: Path) -> tuple[Session, Measurements]:
    """The session and its measurements."""
    session = open_session([folder])
    return session, measure(session)
