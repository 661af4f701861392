"""leveller.measure.levels: 16-bit levels that shift by whole steps when a gain doubles."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leveller.measure import levels
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


def test_a_large_grid_lies_in_a_file_and_reads_the_same(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """What was written stays, released or not; nothing of the file is seen, and small grids lie in memory."""
    monkeypatch.setattr(levels, "SHELVED_FROM_BYTES", 1 << 16)
    monkeypatch.setattr(levels, "WALKED_HOPS", 1000)
    shape = (5000, 3, 4)
    grid = levels.level_grid(shape, folder=tmp_path)
    assert not grid.flags.owndata
    assert (grid == levels.SILENT).all()
    wanted = np.random.default_rng(1).integers(-30_000, 30_000, shape).astype(np.int16)
    for rows in levels.walked(grid, 300):
        grid[rows] = wanted[rows]
        levels.release(grid[rows])
    assert (grid == wanted).all()
    assert list(tmp_path.iterdir()) == []
    assert levels.mean_level_db(grid) == pytest.approx(wanted.mean(axis=2) * levels.STEP_DB, rel=1e-5, abs=1e-3)
    assert levels.level_grid((5, 3, 4), folder=tmp_path).base is None


def test_a_grid_without_room_for_its_file_lies_in_memory(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Where the system cannot promise the room, nothing fails."""
    def full(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(levels, "SHELVED_FROM_BYTES", 0)
    monkeypatch.setattr(levels.os, "posix_fallocate", full)
    assert levels.level_grid((50, 2, 3), folder=tmp_path).base is None


@pytest.mark.parametrize("step", [1, 7, 100])
def test_walked_rows_are_all_rows(step: int) -> None:
    """Every row once, in order."""
    rows = np.arange(100)
    assert np.concatenate([rows[part] for part in levels.walked(rows, step)]).tolist() == rows.tolist()
