"""leveller.plan.ride: a slow hand that follows a voice, within its range and rate, still in pauses."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leveller.plan.ride import ride_nodes_db
from leveller.settings import Ride
from leveller.units import HOPS_PER_S

HOW = Ride()
NEVER = np.zeros(6000, bool)
ALWAYS = np.ones(6000, bool)
FLOAT_DB = 1e-4  # float32 curves of a few dB


def leaning(by_db: float = 6.0) -> np.ndarray:
    """A minute of speech level, softer by so much in the second half, with syllables."""
    rng = np.random.default_rng(1)
    return (rng.normal(0, 3, 6000) - by_db * (np.arange(6000) >= 3000)).astype(np.float32)


def test_a_steady_voice_is_left_alone() -> None:
    """Syllables about one level move the ride by less than half a decibel."""
    assert np.abs(ride_nodes_db(leaning(0.0), ALWAYS, NEVER, settings=HOW)).max() < 0.5


def test_a_voice_that_leans_back_is_brought_part_of_the_way() -> None:
    """6 dB softer in the second half: the end is raised against the start by 2 to 6 dB, never by more than it fell."""
    found = ride_nodes_db(leaning(6.0), ALWAYS, NEVER, settings=replace(HOW, window_s=8.0))
    raised = found[5000:].mean() - found[:1000].mean()
    assert 2 < raised < 6


def test_whispers_stay_whispers() -> None:
    """Five seconds 20 dB softer hardly move the gain: they count as unusual."""
    level = leaning(0.0)
    level[2000:2500] -= 20
    assert np.abs(ride_nodes_db(level, ALWAYS, NEVER, settings=HOW)).max() < 1


def test_what_does_not_count_is_not_heard() -> None:
    """Bleed and noise of any level outside the counted hops change nothing."""
    counted = np.tile(np.arange(500) < 300, 12)
    loud = np.where(counted, leaning(), np.float32(30))
    assert np.array_equal(ride_nodes_db(loud, counted, NEVER, settings=HOW),
                          ride_nodes_db(leaning(), counted, NEVER, settings=HOW))


@given(seed=st.integers(0, 10**6), range_db=st.floats(0.5, 20), rate_db_s=st.floats(0.05, 10),
       window_s=st.floats(1, 60))
@settings(max_examples=40, deadline=None, derandomize=True)
def test_range_and_rate_are_kept(seed: int, range_db: float, rate_db_s: float, window_s: float) -> None:
    """Whatever is said, the gain stays within the range and moves no faster than the rate."""
    rng = np.random.default_rng(seed)
    level = np.float32(np.repeat(rng.normal(0, 6, 30), 100))
    how = replace(HOW, range_db=range_db, rate_db_s=rate_db_s, window_s=window_s)
    found = ride_nodes_db(level, np.repeat(rng.random(30) < 0.7, 100), NEVER[:3000], settings=how)
    assert np.abs(found).max() <= range_db + FLOAT_DB
    assert np.abs(np.diff(found)).max() * HOPS_PER_S <= rate_db_s + HOPS_PER_S * 1e-5


def paused() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """A voice that comes back 6 dB softer after ten seconds of pause, in which its microphone is open."""
    still = np.zeros(6000, bool)
    still[2500:3500] = True
    return leaning(6.0), ~still, still


def test_it_stands_still_in_an_open_pause() -> None:
    """While the voice is silent and its microphone open the gain does not move at all, and it ends where it should."""
    level, counted, still = paused()
    how = replace(HOW, window_s=8.0)
    found = ride_nodes_db(level, counted, still, settings=how)
    assert np.ptp(found[2500:3501]) < FLOAT_DB
    assert found[-1] == pytest.approx(ride_nodes_db(level, counted, NEVER, settings=how)[-1], abs=0.01)


@pytest.mark.parametrize("window_s", [4.0, 40.0])
def test_what_a_pause_holds_back_is_made_up_within_the_rate(window_s: float) -> None:
    """What the gain owes after an open pause is paid no faster than the rate either."""
    level, counted, still = paused()
    found = ride_nodes_db(level, counted, still, settings=replace(HOW, window_s=window_s))
    assert np.abs(np.diff(found)).max() * HOPS_PER_S <= HOW.rate_db_s + HOPS_PER_S * 1e-5


def test_off_or_hardly_heard_nothing_moves() -> None:
    """Switched off, or with less than half a second of speech, the ride is 0."""
    assert not ride_nodes_db(leaning(), ALWAYS, NEVER, settings=replace(HOW, enabled=False)).any()
    assert not ride_nodes_db(leaning(), np.arange(6000) < 49, NEVER, settings=HOW).any()
