"""leveller.measure.bands: power in speech bands, K-weighted power and rumble per hop."""

from __future__ import annotations

import numpy as np
import pytest
from parity import assert_block_parity

from leveller.measure.bands import ANALYSIS_HZ, BANDS, EDGES_HZ, HOP, BandMeter, bands_within
from leveller.measure.levels import SILENT, level_to_db
from leveller.measure.loudness import power_to_lufs

CALIBRATION_LKFS = -3.01  # ITU-R BS.1770-5: a sine of 997 Hz at 0 dBFS on one channel
CALIBRATION_BAND_LU = 0.1  # EBU Tech 3341
POWER_BAND_DB = 0.1  # what a Hann window leaks out of a band; 18 dB down a bin beyond (arithmetic)
K, K_NO_RUMBLE, RUMBLE = BANDS, BANDS + 1, BANDS + 2
SECONDS = 3


def levels_of(signal: np.ndarray) -> np.ndarray:
    """Levels in dB, shape=(hops, BANDS + 3), without the first and last 50 ms."""
    meter = BandMeter()
    meter.push(signal.astype(np.float32))
    return level_to_db(meter.result())[5:-5]


def sine(hz: float, amplitude: float = 1.0) -> np.ndarray:
    return amplitude * np.sin(2 * np.pi * hz * np.arange(SECONDS * ANALYSIS_HZ) / ANALYSIS_HZ)


def noise(sigma: float = 0.1, seconds: int = SECONDS) -> np.ndarray:
    return np.random.default_rng(3).normal(0, sigma, seconds * ANALYSIS_HZ)


@pytest.mark.parametrize("band", [8, 10, 12, 13])
def test_a_sine_has_its_power_in_its_band(band: int) -> None:
    """A sine of amplitude a in the middle of a band reads 20 log10 a - 3.01 dB there and 20 dB less elsewhere."""
    middle_hz = (EDGES_HZ[band] + EDGES_HZ[band + 1]) / 2
    found = levels_of(sine(middle_hz, 0.25))
    assert found[:, band] == pytest.approx(20 * np.log10(0.25) - 3.01, abs=POWER_BAND_DB)
    others = np.delete(found[:, :BANDS], band, axis=1)
    assert (others < found[:, band : band + 1] - 20).all()


def test_noise_has_its_power_by_width() -> None:
    """White noise spreads by bandwidth (Parseval): the mean over time within 0.3 dB in every band."""
    power = 10 ** (levels_of(noise(0.1, 20)) / 10)
    found_db = 10 * np.log10(power[:, :BANDS].mean(axis=0))
    bins = np.diff(np.searchsorted(np.arange(161) * 50, EDGES_HZ))  # lines 50 Hz apart that fall into each band
    assert found_db == pytest.approx(10 * np.log10(0.1**2 * bins / 160), abs=0.3)


def test_k_weighted_power_is_calibrated() -> None:
    """997 Hz at 0 dBFS reads -3.01 LKFS (ITU-R BS.1770-5)."""
    found = power_to_lufs(10 ** (levels_of(sine(997.0))[:, K] / 10))
    assert found == pytest.approx(CALIBRATION_LKFS, abs=CALIBRATION_BAND_LU)


def test_k_weighted_power_without_rumble_is_the_rest() -> None:
    """A thump of 90 Hz counts in the K-weighted power and in the rumble, not in the power above; speech sound does."""
    thump, speech = levels_of(sine(90.0, 0.5)), levels_of(sine(1000.0, 0.5))
    assert thump[:, K_NO_RUMBLE].max() < thump[:, K].min() - 20
    assert thump[:, RUMBLE] == pytest.approx(20 * np.log10(0.5) - 3.01, abs=0.5)
    assert speech[:, K_NO_RUMBLE] == pytest.approx(speech[:, K], abs=0.01)
    assert speech[:, RUMBLE].max() < -60


def test_dc_is_no_speech() -> None:
    """A constant of half full scale leaves every speech band 60 dB under it."""
    found = levels_of(np.full(SECONDS * ANALYSIS_HZ, 0.5))
    assert found[:, :BANDS].max() < -66


@pytest.mark.parametrize("column", [K, RUMBLE])
def test_dc_is_no_rumble(column: int) -> None:
    """A constant of half full scale is taken neither for thumps and hum nor for loudness: K-weighting blocks DC."""
    found = levels_of(np.full(SECONDS * ANALYSIS_HZ, 0.5))
    assert found[:, column].max() < -66


def test_silence_is_silent() -> None:
    """Digital silence is SILENT in every column."""
    meter = BandMeter()
    meter.push(np.zeros(ANALYSIS_HZ, np.float32))
    assert (meter.result() == SILENT).all()


def test_a_click_lies_in_its_hop() -> None:
    """One sample in the middle of hop 150 is loudest there and gone three hops away (window and average of three)."""
    signal = np.zeros(2 * ANALYSIS_HZ, np.float32)
    signal[150 * HOP + HOP // 2] = 1.0
    meter = BandMeter()
    meter.push(signal)
    levels = meter.result()
    assert levels[:, K].argmax() == 150
    assert np.flatnonzero((levels[:, :BANDS] > SILENT).any(axis=1)).tolist() == [149, 150, 151]


@pytest.mark.parametrize("frames", [1, HOP - 1, HOP, HOP + 1, ANALYSIS_HZ + 37])
def test_a_part_of_a_hop_counts_whole(frames: int) -> None:
    """There are as many hops as have begun."""
    meter = BandMeter()
    meter.push(noise()[:frames].astype(np.float32))
    assert meter.result().shape == (-(-frames // HOP), BANDS + 3)


def test_block_size_changes_nothing() -> None:
    """Blocks of any length give the same bits."""
    assert_block_parity(BandMeter, noise().astype(np.float32)[: 2 * ANALYSIS_HZ + 77])


def test_doubled_amplitude_shifts_all_levels() -> None:
    """Twice the amplitude is 1024 steps more in every cell, exactly."""
    once, twice = BandMeter(), BandMeter()
    once.push(noise().astype(np.float32))
    twice.push(2 * noise().astype(np.float32))
    assert np.array_equal(twice.result().astype(int), once.result().astype(int) + 1024)


@pytest.mark.parametrize(("rate_hz", "bands"), [(8000, 12), (11_025, 13), (16_000, 14), (48_000, 14)])
def test_a_low_rate_fills_fewer_bands(rate_hz: int, bands: int) -> None:
    """Bands count that end under 0.46 of the source's rate."""
    assert bands_within(rate_hz) == bands
