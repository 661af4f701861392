"""leveller.attribute.tail: how fast the room decays."""

from __future__ import annotations

import numpy as np
import pytest

from leveller.attribute.tail import USUAL_DB_PER_HOP, tail_db_per_hop
from leveller.measure.levels import SILENT, STEP_DB


def falling(db_per_hop: float, words: int = 60) -> np.ndarray:
    """Levels of one track with two bands: words of 200 ms at -20 dB that decay as asked for, 60 dB over nothing."""
    word = np.concatenate([np.full(20, -20.0), -20.0 - db_per_hop * np.arange(1, 81)])
    return np.rint(np.tile(word, words)[:, None, None].repeat(2, axis=2) / STEP_DB).astype(np.int16)


@pytest.mark.parametrize("db_per_hop", [0.5, 0.75, 1.2])
def test_a_free_decay_is_found(db_per_hop: float) -> None:
    """Words that fall at one rate give that rate."""
    floor = np.full((60, 1, 2), -120.0, np.float32)
    assert tail_db_per_hop(falling(db_per_hop), floor) == pytest.approx(db_per_hop, abs=0.03)


def test_silence_has_the_usual_tail() -> None:
    """Where nothing falls, nothing is known."""
    levels = np.full((500, 2, 3), SILENT, np.int16)
    assert tail_db_per_hop(levels, np.full((5, 2, 3), -190.0, np.float32)) == USUAL_DB_PER_HOP
