"""Loudness agrees with the standards' own signals and with two independent implementations."""

from __future__ import annotations

import math

import numpy as np
import pyebur128
import pyloudnorm
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from loudness_reference import feed, libebur128, noise_bursts, speech
from parity import assert_block_parity, run_meter

from leveller.measure import loudness
from leveller.measure.loudness import LoudnessMeter

RATE_HZ = 48_000
RATES_HZ = (44_100, 48_000, 96_000)
EBU_BAND_LU = 0.1  # EBU Tech 3341, table 1, tolerance of loudness
RANGE_BAND_LU = 1.0  # EBU Tech 3342, table 1
TABLE_48K = (  # ITU-R BS.1770-5 Annex 1, tables 1 and 2
    (1.53512485958697, -2.69169618940638, 1.19839281085285, 1.0, -1.69065929318241, 0.73248077421585),
    (1.0, -2.0, 1.0, 1.0, -1.99004745483398, 0.99007225036621),
)
TABLE_DIGITS = 1e-13  # the table has 14 decimals, its last ones rounded
CALIBRATION_MONO_LKFS = -3.0103  # ITU-R BS.1770-5 Annex 1: 997 Hz, 0 dBFS, one front channel
SIZES = (1023, 48_000, 10**9)


def tone(
    steps: list[tuple[float, float]], *, channels: int = 2, hz: float = 1000.0, rate_hz: int = RATE_HZ
) -> np.ndarray:
    """A sine through (peak dBFS, seconds) steps, alike on all channels; -inf is silence."""
    level = np.concatenate([np.full(round(s * rate_hz), 10 ** (db / 20)) for db, s in steps])
    wave = level * np.sin(2 * np.pi * hz / rate_hz * np.arange(len(level)))
    return np.repeat(wave[:, None], channels, axis=1).astype(np.float32)


def read(signal: np.ndarray, rate_hz: int = RATE_HZ, frames: int = 48_000) -> loudness.Loudness:
    """The meter's result."""
    return run_meter(LoudnessMeter(rate_hz, 1 if signal.ndim == 1 else signal.shape[1]), signal, frames)


def libebur128_above_lu(rate_hz: int) -> float:
    """What libebur128 and pyloudnorm read over the standard's calibration, for any signal: theirs at 997 Hz."""
    import scipy.signal

    ours = loudness.k_weighting(rate_hz)
    theirs = ours.copy()
    theirs[1, :3] = (1.0, -2.0, 1.0)  # their high-pass keeps the numerator of the 48 kHz table at every rate
    gains = [np.abs(scipy.signal.sosfreqz(sos, worN=[997.0], fs=rate_hz)[1][0]) for sos in (theirs, ours)]
    return 20 * math.log10(gains[0] / gains[1])


def near(value: float, band: float = EBU_BAND_LU) -> object:
    return pytest.approx(value, abs=band)


# ---- ITU-R BS.1770 ----------------------------------------------------------------------------------------------

def test_coefficients_at_48_khz_are_the_standards() -> None:
    """The re-derived filters agree with the table of BS.1770 in all its digits."""
    assert np.abs(loudness.k_weighting(48_000) - np.array(TABLE_48K)).max() < TABLE_DIGITS


@pytest.mark.parametrize("rate_hz", [8000, 16_000, 44_100, 48_000, 96_000, 192_000])
def test_calibration_tone(rate_hz: int) -> None:
    """997 Hz at full scale reads -3.01 on one channel and 0.00 on two, at any rate."""
    wave = tone([(0.0, 5.0)], hz=997.0, rate_hz=rate_hz)
    assert read(wave[:, 0], rate_hz).integrated_lufs == near(CALIBRATION_MONO_LKFS, 0.001)
    assert read(wave, rate_hz).integrated_lufs == near(0.0, 0.001)


def test_rates_out_of_reach_are_refused() -> None:
    """A rate for which the filters cannot be derived is an error, not a wrong number."""
    with pytest.raises(ValueError, match="4000 Hz: loudness is measured from 8000 to 192000 Hz"):
        LoudnessMeter(4000, 1)


def test_response_on_spectra_is_that_of_the_filters() -> None:
    """|H|^2 is what white noise, filtered, gains in each frequency; 997 Hz lies 0.691 dB up, 0 Hz is nothing."""
    from scipy.signal import sosfreqz

    hz = np.array([20.0, 38.0, 100.0, 997.0, 1682.0, 4000.0, 10_000.0, 20_000.0])
    _, response = sosfreqz(np.array(TABLE_48K), worN=hz, fs=48_000)
    assert loudness.k_response_power(hz) == pytest.approx(np.abs(response) ** 2, rel=1e-9)
    assert 10 * math.log10(loudness.k_response_power([997.0])[0]) == near(0.691, 0.001)
    assert loudness.k_response_power([0.0])[0] == 0.0
    assert loudness.k_response_power([40_000.0])[0] == loudness.k_response_power([24_000.0])[0]


def test_lfe_is_left_out_and_surrounds_weigh_more() -> None:
    """In 5.1 the LFE counts nothing; a surround channel reads 1.49 dB over a front one (factor 1.41)."""
    front, lfe, surround = (np.zeros((RATE_HZ * 2, 6), np.float32) for _ in range(3))
    for signal, channel in ((front, 0), (lfe, 3), (surround, 4)):
        signal[:, channel] = tone([(-20.0, 2.0)])[:, 0]
    assert read(lfe).integrated_lufs == -math.inf
    assert read(surround).integrated_lufs - read(front).integrated_lufs == near(10 * math.log10(1.41), 1e-9)


def test_weights_of_ones_own() -> None:
    """Weights that are handed in replace the standard's."""
    meter = LoudnessMeter(RATE_HZ, 2, weights=(1.0, 0.0))
    assert run_meter(meter, tone([(0.0, 2.0)], hz=997.0), 4800).integrated_lufs == near(CALIBRATION_MONO_LKFS, 0.01)
    with pytest.raises(ValueError, match="3 channel weights for 2"):
        LoudnessMeter(RATE_HZ, 2, weights=(1, 1, 1))


# ---- EBU Tech 3341, table 1 -------------------------------------------------------------------------------------

@pytest.mark.parametrize("frames", SIZES)
@pytest.mark.parametrize("level", [-23.0, -33.0])
def test_ebu_1_and_2_steady_tone(level: float, frames: int) -> None:
    """Cases 1 and 2: M, S and I all read the tone's level."""
    reading = read(tone([(level, 20.0)]), frames=frames)
    assert reading.integrated_lufs == near(level)
    assert reading.max_momentary_lufs == near(level)
    assert reading.max_short_term_lufs == near(level)


@pytest.mark.parametrize("frames", SIZES)
@pytest.mark.parametrize("steps", [
    pytest.param([(-36, 10), (-23, 60), (-36, 10)], id="case 3"),
    pytest.param([(-72, 10), (-36, 10), (-23, 60), (-36, 10), (-72, 10)], id="case 4"),
    pytest.param([(-26, 20), (-20, 20.1), (-26, 20)], id="case 5"),
])
def test_ebu_3_to_5_gates(steps: list[tuple[float, float]], frames: int) -> None:
    """Cases 3 to 5: the gates leave -23.0 LUFS."""
    assert read(tone(steps), frames=frames).integrated_lufs == near(-23.0)


@pytest.mark.parametrize("with_lfe", [False, True])
def test_ebu_6_surround(with_lfe: bool) -> None:
    """Case 6: five channels at -28, -28, -24, -30, -30 read -23.0; a loud LFE between them changes nothing."""
    levels = [-28.0, -28.0, -24.0, 0.0, -30.0, -30.0] if with_lfe else [-28.0, -28.0, -24.0, -30.0, -30.0]
    signal = np.concatenate([tone([(level, 20.0)], channels=1) for level in levels], axis=1)
    assert read(signal).integrated_lufs == near(-23.0)


def test_ebu_9_short_term_is_constant() -> None:
    """Case 9: S stays at -23.0 from 3 s on."""
    short_term = loudness.short_term_lufs(read(tone([(-20, 1.34), (-30, 1.66)] * 5)).cells)
    assert len(short_term) == 1500 - 299
    assert np.abs(short_term + 23.0).max() <= EBU_BAND_LU


def test_ebu_12_momentary_is_constant() -> None:
    """Case 12: M stays at -23.0 from 1 s on."""
    momentary = loudness.momentary_lufs(read(tone([(-20, 0.18), (-30, 0.22)] * 25)).cells)[60:]
    assert len(momentary) == 1000 - 39 - 60
    assert np.abs(momentary + 23.0).max() <= EBU_BAND_LU


@pytest.mark.parametrize("i", range(20))
def test_ebu_10_and_13_maxima(i: int) -> None:
    """Cases 10 and 13: a tone that fills one window reads -23.0 wherever it starts, and its end is the window's."""
    reading = read(tone([(-math.inf, 0.15 * i), (-23, 3.0), (-math.inf, 1.0)]))
    assert reading.max_short_term_lufs == near(-23.0)
    assert reading.max_short_term_s == near(0.15 * i + 3.0, 0.011)
    reading = read(tone([(-math.inf, 0.02 * i), (-23, 0.4), (-math.inf, 1.0)]))
    assert reading.max_momentary_lufs == near(-23.0)
    assert reading.max_momentary_s == near(0.02 * i + 0.4, 0.011)


# ---- EBU Tech 3342, table 1 -------------------------------------------------------------------------------------

@pytest.mark.parametrize("frames", SIZES)
@pytest.mark.parametrize(("levels", "expected_lu"), [
    ((-20, -30), 10.0), ((-20, -15), 5.0), ((-40, -20), 20.0), ((-50, -35, -20, -35, -50), 15.0)])
def test_ebu_3342_range(levels: tuple[float, ...], expected_lu: float, frames: int) -> None:
    """The four range signals read what the document says."""
    assert read(tone([(level, 20.0) for level in levels]), frames=frames).range_lu == near(expected_lu, RANGE_BAND_LU)


# ---- independent implementations --------------------------------------------------------------------------------

PYLOUDNORM_BAND_LU = 0.01  # it rounds block edges to whole samples its own way
LIBEBUR128_BAND_LU = 0.01  # the same arithmetic; its 100 ms steps are ours


@pytest.mark.parametrize("rate_hz", RATES_HZ)
@pytest.mark.parametrize("channels", [1, 2])
def test_agrees_with_pyloudnorm(rate_hz: int, channels: int) -> None:
    """pyloudnorm with the De Man filters reads the same integrated loudness."""
    meter = pyloudnorm.Meter(rate_hz, filter_class="DeMan")
    for signal in (speech(rate_hz, channels=channels), noise_bursts(rate_hz, 20, channels)):
        whole = signal.reshape(len(signal), channels).astype(np.float64)
        assert read(signal, rate_hz).integrated_lufs == near(
            meter.integrated_loudness(whole) - libebur128_above_lu(rate_hz), PYLOUDNORM_BAND_LU)


@pytest.mark.parametrize("rate_hz", [*RATES_HZ, 22_050])
@pytest.mark.parametrize("channels", [1, 2])
def test_agrees_with_libebur128(rate_hz: int, channels: int) -> None:
    """libebur128 reads the same integrated loudness and range, also where 100 does not divide the rate."""
    for signal in (speech(rate_hz, channels=channels), noise_bursts(rate_hz, 20, channels)):
        ours, theirs = read(signal, rate_hz), libebur128(signal, rate_hz)
        assert ours.integrated_lufs == near(theirs.integrated_lufs - libebur128_above_lu(rate_hz), LIBEBUR128_BAND_LU)
        assert ours.range_lu == near(theirs.range_lu, 5 * LIBEBUR128_BAND_LU)


@pytest.mark.parametrize("rate_hz", RATES_HZ)
def test_windows_agree_with_libebur128(rate_hz: int) -> None:
    """Momentary loudness each 10 ms and short-term loudness each 100 ms are libebur128's."""
    signal = noise_bursts(rate_hz, 6, 2)
    cells = read(signal, rate_hz).cells
    momentary, short_term = loudness.momentary_lufs(cells), loudness.short_term_lufs(cells)
    state = pyebur128.R128State(2, rate_hz, pyebur128.MeasurementMode.MODE_S)
    above = libebur128_above_lu(rate_hz)
    compared = 0
    for hop in range(1, 601):
        feed(state, signal[(hop - 1) * rate_hz // 100 : hop * rate_hz // 100])
        if hop >= 40:
            assert momentary[hop - 40] == near(pyebur128.get_loudness_momentary(state) - above, LIBEBUR128_BAND_LU)
        if hop >= 300 and hop % 10 == 0:
            assert short_term[hop - 300] == near(pyebur128.get_loudness_shortterm(state) - above, LIBEBUR128_BAND_LU)
            compared += 1
    assert compared == 31


# ---- edges ------------------------------------------------------------------------------------------------------

@pytest.mark.parametrize("rate_hz", [44_100, 22_050, 11_025, 48_000])
def test_block_size_never_changes_the_answer(rate_hz: int) -> None:
    """Blocks of any size give the same bits, cells included."""
    signal = noise_bursts(rate_hz, 5.123, 2)
    reading = assert_block_parity(lambda: LoudnessMeter(rate_hz, 2), signal, [997, 48_000, 10**9, [1, 30_000, 17]])
    assert len(reading.cells) == 512


@pytest.mark.parametrize(("seconds", "momentary", "short_term"), [
    (0.0, False, False), (0.005, False, False), (0.399, False, False), (0.4, True, False), (2.999, True, False),
    (3.0, True, True)])
def test_short_programmes(seconds: float, momentary: bool, short_term: bool) -> None:
    """A programme shorter than a window reads -inf there, range 0, and its maxima have time 0."""
    reading = read(tone([(-20.0, seconds)]))
    assert (reading.integrated_lufs > -math.inf) == (reading.max_momentary_lufs > -math.inf) == momentary
    assert (reading.max_short_term_lufs > -math.inf) == short_term
    assert 0.4 * momentary <= reading.max_momentary_s <= seconds * momentary
    assert reading.max_short_term_s == 3.0 * short_term
    assert reading.range_lu == 0.0
    assert len(reading.cells) == int(seconds * 100 + 1e-9)


def test_silence_reads_minus_infinity() -> None:
    """Silence reads -inf LUFS and 0 LU, from the first window to the last, also after sound."""
    reading = read(np.zeros((RATE_HZ * 5, 2), np.float32))
    assert (reading.integrated_lufs, reading.max_momentary_lufs) == (-math.inf, -math.inf)
    assert (reading.max_short_term_lufs, reading.range_lu) == (-math.inf, 0.0)
    after = read(tone([(-10.0, 1.0), (-math.inf, 8.0)]))
    assert loudness.momentary_lufs(after.cells)[-1] < -140.0
    assert np.isneginf(loudness.momentary_lufs(np.r_[np.ones(50), np.zeros(40)])[-1])


def test_under_the_gate_reads_minus_infinity() -> None:
    """A programme under -70 LUFS has no integrated loudness, but its momentary maximum is told."""
    reading = read(tone([(-75.0, 5.0)]))
    assert (reading.integrated_lufs, reading.range_lu) == (-math.inf, 0.0)
    assert reading.max_momentary_lufs == near(-75.0)


def test_result_may_be_asked_for_in_between() -> None:
    """A result does not end the measurement or change it."""
    signal = noise_bursts(RATE_HZ, 4.5)
    meter = LoudnessMeter(RATE_HZ, 1)
    meter.push(signal[:70_000])
    assert len(meter.result().cells) == 145
    meter.push(signal[70_000:])
    assert meter.result().cells.tobytes() == read(signal).cells.tobytes()


def test_wrong_channel_count_is_refused() -> None:
    """A block of other channels than the meter's is an error."""
    with pytest.raises(ValueError, match=r"block of shape \(10, 2\), but the meter was opened for 1 channel"):
        LoudnessMeter(RATE_HZ, 1).push(np.zeros((10, 2), np.float32))


@settings(max_examples=50, deadline=None)
@given(st.lists(st.floats(0, 1e3), max_size=60), st.integers(1, 70))
def test_sliding_sum_is_the_plain_sum(values: list[float], width: int) -> None:
    """Doubling gives each window's sum, and exactly 0 for a silent window."""
    array = np.array(values)
    sums = loudness.sliding_sum(array, width)
    expected = [array[i : i + width].sum() for i in range(len(values) - width + 1)]
    assert sums == pytest.approx(np.array(expected), rel=1e-12, abs=0)


@settings(max_examples=30, deadline=None)
@given(st.lists(st.floats(-60, 0), min_size=40, max_size=400), st.floats(-9, 30))
def test_a_gain_moves_every_reading_by_itself(levels_db: list[float], gain_db: float) -> None:
    """Loudness of scaled cells is the loudness plus the gain, range stays, while all lies over the absolute gate."""
    cells = 10 ** (np.array(levels_db) / 10)
    one, other = loudness.loudness_of(cells), loudness.loudness_of(cells * 10 ** (gain_db / 10))
    assert other.integrated_lufs - one.integrated_lufs == near(gain_db, 1e-6)
    assert other.max_momentary_lufs - one.max_momentary_lufs == near(gain_db, 1e-6)
    assert other.range_lu == near(one.range_lu, 1e-6)
