"""leveller.measure.levels: 16-bit levels that shift by whole steps when a gain doubles."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leveller.measure.levels import SILENT, STEP_DB, STEPS_PER_DOUBLING, level_to_db, power_to_level

STEPS_PER_DOUBLED_AMPLITUDE = 2 * STEPS_PER_DOUBLING  # power goes with the square of the amplitude
ROUNDING_DB = STEP_DB / 2 + 1e-4  # half a step, and float32 of a value up to 100 dB


@given(power=st.floats(2.0**-40, 2.0**20, width=32), doublings=st.integers(-10, 10))
@settings(max_examples=200, deadline=None, derandomize=True)
def test_a_doubled_amplitude_is_a_whole_shift(power: float, doublings: int) -> None:
    """A source of exactly 2**n times the amplitude has exactly n * 1024 steps more."""
    once, scaled = power_to_level(np.float32([power, np.float32(power) * np.float32(4.0**doublings)]))
    assert int(scaled) - int(once) == doublings * STEPS_PER_DOUBLED_AMPLITUDE


def test_levels_are_decibels_within_half_a_step() -> None:
    """level_to_db(power_to_level(p)) is 10 log10 p, to 0.003 dB, from -120 to +20 dB."""
    power = np.float32(10 ** np.random.default_rng(1).uniform(-12, 2, 5000))
    found_db = level_to_db(power_to_level(power))
    assert np.abs(found_db - 10 * np.log10(power.astype(np.float64))).max() <= ROUNDING_DB


def test_silence_has_a_level_of_its_own() -> None:
    """No power at all is SILENT, and nothing else is."""
    assert power_to_level(np.float32([0.0, 1e-19]))[0] == SILENT
    assert power_to_level(np.float32([0.0, 1e-19]))[1] > SILENT
    assert level_to_db(np.int16([SILENT]))[0] == pytest.approx(-192.66, abs=0.01)


def test_no_power_overflows() -> None:
    """The largest and the smallest float32 powers stay in order and within 16 bits."""
    power = np.float32([np.finfo(np.float32).tiny, 1.0, 1e10, np.finfo(np.float32).max])
    levels = power_to_level(power)
    assert levels.dtype == np.int16
    assert (np.diff(levels.astype(int)) >= 0).all()
    assert levels[1] == 0
