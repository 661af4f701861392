"""Short simulated sessions and their runs, for tests of what is made from a Result."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import soundfile
from conversations import Conversation, ConversationSpec, simulate

from leveller.pipeline import Result, process

RATE_HZ = 16000
SPEC = ConversationSpec(seed=5, seconds=20, rate_hz=RATE_HZ, people=2, room="round table", gains_db=(-4.0, 5.0),
                        coughs_per_min=0, laughs_per_min=0)


def written(
    folder: Path, spec: ConversationSpec = SPEC, names: tuple[str, ...] = ()
) -> tuple[Conversation, list[Path]]:
    """A conversation and its files, named as asked."""
    conversation = simulate(spec)
    paths = conversation.write(folder)
    for i, name in enumerate(names):
        paths[i] = paths[i].rename(folder / f"{name}.wav")
    return conversation, paths


def run(folder: Path, out: Path, **options: Any) -> Result:
    """A run over a folder."""
    return process(folder, out=out, **options)


def noise(seconds: float, *, level: float = 1e-3, seed: int = 1) -> np.ndarray:
    """Seeded white noise, (frames,)."""
    return (level * np.random.default_rng(seed).standard_normal(round(seconds * RATE_HZ))).astype(np.float32)


def save(path: Path, x: np.ndarray, *, subtype: str = "PCM_24") -> Path:
    """Write a file."""
    soundfile.write(path, x, RATE_HZ, subtype)
    return path
