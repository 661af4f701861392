"""leveller.attribute.lag: how late a voice arrives where that is more than the way through the room."""

from __future__ import annotations

import numpy as np
import pytest

from leveller.attribute.lag import MOST_HOPS, USUAL_HOPS, find_lags
from leveller.attribute.seeds import NOBODY

HOPS = 6000


def talk(seed: int = 1) -> np.ndarray:
    """Level over noise of a voice, 0 to 20 dB: syllables of 100 to 300 ms in the first of every two spells of 4 s."""
    rng = np.random.default_rng(seed)
    level = np.zeros(HOPS)
    at = 0
    while at < HOPS:
        length = int(rng.integers(10, 30))
        if at // 400 % 2 == 0:
            level[at : at + length // 2] = rng.uniform(8, 20)
        at += length
    return level


def heard(lag: int, *, unrelated: bool = False) -> tuple[np.ndarray, np.ndarray]:
    """Two microphones: the voice at the first, and 6 dB softer and `lag` hops later at the second; who is loud."""
    voice = talk()
    far = talk(2) if unrelated else np.maximum(np.roll(voice, lag + USUAL_HOPS) - 6, 0)
    audible = np.stack([voice, far], axis=1) + np.random.default_rng(3).uniform(0, 1, (HOPS, 2))
    return audible.astype(np.float32), np.where(voice > 8, 0, NOBODY).astype(np.int16)


@pytest.mark.parametrize("lag", [-50, -8, 12, 40, 50])
def test_a_late_or_early_microphone_is_found(lag: int) -> None:
    """Bleed that comes 80 to 500 ms late, or early as on a late track, is found to a hop."""
    found = find_lags(*heard(lag))
    assert found[0, 1] == pytest.approx(lag, abs=1)
    assert not found[1].any()
    assert (np.diag(found) == 0).all()


@pytest.mark.parametrize("lag", [-1, 0, 1])
def test_the_way_through_a_room_is_no_lag(lag: int) -> None:
    """Up to 10 ms more or less than usual counts as 0."""
    assert not find_lags(*heard(lag)).any()


def test_strangers_have_no_lag() -> None:
    """A microphone that does not hear the voice at all has lag 0, whatever correlates by chance."""
    assert not find_lags(*heard(0, unrelated=True)).any()


def test_a_voice_that_is_hardly_heard_has_no_lag() -> None:
    """Fewer labels than needed say nothing."""
    audible, labels = heard(30)
    few = np.flatnonzero(labels == 0)[:100]
    only = np.full(HOPS, NOBODY, np.int16)
    only[few] = 0
    assert not find_lags(audible, only).any()


@pytest.mark.parametrize("hops", [1, 50, 2 * MOST_HOPS])
def test_short_sessions_have_no_lag(hops: int) -> None:
    """A session shorter than the lags sought has none, and raises nothing."""
    audible, labels = heard(30)
    assert not find_lags(audible[:hops], labels[:hops]).any()
