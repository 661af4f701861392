"""leveller.attribute.knobs: recording gains that were turned in the middle."""

from __future__ import annotations

from pathlib import Path

import conditions
import numpy as np
import pytest
import sounds
from conversations import ConversationSpec, simulate

from leveller.attribute import attribute
from leveller.attribute.knobs import Step, knob_steps
from leveller.measure import measure

SECONDS = 120
MOMENT_S = 3.0  # how near a step is found: trims step there within 30 ms, and listeners hear what is off (our choice)
SIZE_BAND_DB = 1.5  # the ride takes the rest


def grids(floor_steps: dict[int, tuple[int, float]], speech_steps: dict[int, tuple[int, float]]) -> list[Step]:
    """Steps found for two tracks whose floor and speech step at (second, size); the people speak in turn."""
    rng = np.random.default_rng(1)
    quiet = rng.normal(-70, 0.7, (SECONDS, 2, 14)).astype(np.float32)
    speech = rng.normal(-30, 4, (SECONDS * 100, 2)).astype(np.float32)
    for track, (second, size) in floor_steps.items():
        quiet[second:, track] += np.float32(size)
    for track, (second, size) in speech_steps.items():
        speech[second * 100 :, track] += np.float32(size)
    turn = np.arange(SECONDS * 100) // 400 % 2
    return knob_steps(quiet, speech, np.stack([turn == 0, turn == 1], axis=1))


@pytest.mark.parametrize("size_db", [-12.0, -4.0, 4.0, 12.0])
def test_a_turned_knob_is_found(size_db: float) -> None:
    """Floor and speech of one track step together: one step, there, of that size."""
    (found,) = grids({0: (50, size_db)}, {0: (50, size_db)})
    assert found.track == 0
    assert found.hop / 100 == pytest.approx(50, abs=MOMENT_S)
    assert found.size_db == pytest.approx(size_db, abs=SIZE_BAND_DB)


def test_a_fan_is_no_knob() -> None:
    """All floors step at one moment and speech does not: nothing was turned."""
    assert grids({0: (50, 8.0), 1: (50, 8.0)}, {}) == []


def test_people_who_speak_up_over_a_fan_turn_no_knob() -> None:
    """All floors step at one moment and all voices with them: that is the room, since knobs are turned one by one."""
    assert grids({0: (50, 8.0), 1: (50, 8.0)}, {0: (50, 8.0), 1: (50, 8.0)}) == []


def test_a_noise_at_one_microphone_is_no_knob() -> None:
    """One floor steps, the speech there stays: nothing was turned."""
    assert grids({0: (50, 8.0)}, {}) == []


def test_somebody_who_leans_back_is_no_knob() -> None:
    """Speech steps and the floor does not: that is the ride's business."""
    assert grids({}, {0: (50, -6.0)}) == []


def test_small_steps_and_steady_sessions_have_none() -> None:
    """A step of a decibel is left to the ride; without any step none is found."""
    assert grids({0: (50, 1.0)}, {0: (50, 1.0)}) == []
    assert grids({}, {}) == []


def test_two_knobs_in_order_of_time() -> None:
    """Each track's own step is found, the earlier first."""
    found = grids({0: (80, 8.0), 1: (35, -6.0)}, {0: (80, 8.0), 1: (35, -6.0)})
    assert [step.track for step in found] == [1, 0]


def test_a_knob_in_a_conversation_is_found(tmp_path: Path) -> None:
    """10 dB more on one microphone in a simulated session: one step on that track, within a few seconds."""
    spoken = simulate(ConversationSpec(
        rate_hz=16_000, seconds=75.0, seed=42, voices=sounds.HELD_OUT, knobs=((35.0, -10.0, (0,)),)))
    session = conditions.opened(conditions.with_headroom(spoken), tmp_path)
    (found,) = attribute(measure(session), session).steps
    assert found.track == 0
    assert found.hop / 100 == pytest.approx(35, abs=MOMENT_S)
    assert found.size_db == pytest.approx(-10, abs=SIZE_BAND_DB)
