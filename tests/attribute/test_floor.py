"""leveller.attribute.floor: the noise floor of each microphone and band."""

from __future__ import annotations

import numpy as np
import pytest

from leveller.attribute.floor import NONE_DB, noise_floor, quietest_db
from leveller.measure.bands import ANALYSIS_HZ, BANDS, BandMeter
from leveller.measure.levels import SILENT, level_to_db

FLOOR_BAND_DB = 1.5  # over time and bands; a choice of ours: AUDIBLE is judged at 6 to 8 dB over the floor
NARROW_BAND_DB = 3.0  # of one band over time: one bias serves all, but minima of narrow bands lie 2.3 dB low (measured)
CELL_BAND_DB = 4.0  # of a single second in the narrowest bands of two lines, whose minima scatter
SECONDS = 60


def levels_of(signal: np.ndarray) -> np.ndarray:
    """Band levels of one microphone, shape=(hops, 1, BANDS)."""
    meter = BandMeter()
    meter.push(signal.astype(np.float32))
    return meter.result()[:, None, :BANDS]


def noise(db: float = -60.0, seconds: int = SECONDS, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).normal(0, 10 ** (db / 20), seconds * ANALYSIS_HZ)


def speaking(signal: np.ndarray, by_db: float = 40.0) -> np.ndarray:
    """The noise, louder in 0.6 s of every second, as somebody who speaks nearly all the time."""
    at = np.arange(len(signal)) % ANALYSIS_HZ
    return signal * np.where((at > 3200) & (at < 12_800), 10 ** (by_db / 20), 1)


def assert_floor(found: np.ndarray, expected_db: np.ndarray) -> None:
    """Each band's mean over time and each single cell are where they belong."""
    assert len(found) > 10
    assert abs(np.mean(found - expected_db)) < FLOOR_BAND_DB
    assert found.mean(axis=0) == pytest.approx(expected_db, abs=NARROW_BAND_DB)
    assert found == pytest.approx(np.tile(expected_db, (len(found), 1)), abs=CELL_BAND_DB)


def mean_db(levels: np.ndarray) -> np.ndarray:
    """Level of the mean power, per band."""
    return 10 * np.log10(np.mean(10 ** (level_to_db(levels[:, 0]) / 10), axis=0))


def test_the_floor_of_steady_noise_is_its_level() -> None:
    """Alone or under speech in 60 % of the time, noise is found within 1.5 dB, and about so in every cell."""
    steady = levels_of(noise())
    for levels in (steady, levels_of(speaking(noise()))):
        found = noise_floor(levels)
        assert found.shape == (SECONDS, 1, BANDS)
        assert_floor(found[:, 0], mean_db(steady))


def test_a_fan_that_starts_moves_the_floor_at_once() -> None:
    """15 dB more from second 30 on: at either level up to 3 s from the step."""
    signal = noise()
    signal[30 * ANALYSIS_HZ :] *= 10 ** (15 / 20)
    before, found = mean_db(levels_of(noise())), noise_floor(levels_of(signal))[:, 0]
    assert_floor(found[:27], before)
    assert_floor(found[33:], before + 15)


def test_a_muted_call_does_not_lower_the_floor() -> None:
    """Digital zero from 10 to 40 s does not count: the floor stays that of the noise."""
    signal = noise()
    signal[10 * ANALYSIS_HZ : 40 * ANALYSIS_HZ] = 0
    found = noise_floor(levels_of(signal))[:, 0]
    assert_floor(found, mean_db(levels_of(noise())))


def test_a_silent_track_has_no_floor() -> None:
    """A track of digital zeros has a floor far under everything, and no nan."""
    found = noise_floor(np.full((300, 2, BANDS), SILENT, np.int16))
    assert (found <= NONE_DB + 2).all()


def test_gains_shift_the_floor() -> None:
    """A source of twice the amplitude has a floor 6.02 dB higher in every cell."""
    once, twice = noise_floor(levels_of(speaking(noise()))), noise_floor(levels_of(2 * speaking(noise())))
    assert twice - once == pytest.approx(20 * np.log10(2), abs=1e-3)


@pytest.mark.parametrize("hops", [1, 5, 9, 99, 101])
def test_short_sessions_have_a_floor(hops: int) -> None:
    """A session shorter than a second, or a hop longer, has one floor a begun second, all finite."""
    levels = levels_of(noise(seconds=2))[:hops]
    assert noise_floor(levels).shape[0] == quietest_db(levels).shape[0] == -(-hops // 100)
    assert np.isfinite(noise_floor(levels)).all()
