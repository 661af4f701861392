"""Peaks agree with EBU Tech 3341 and libebur128; clipping is found where it is and nowhere else."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from loudness_reference import libebur128, noise_bursts, speech
from parity import assert_block_parity, run_meter

from leveller.measure import peaks
from leveller.measure.peaks import PeakMeter, TruePeakMeter

RATE_HZ = 48_000
RATES_HZ = (44_100, 48_000, 96_000)
EBU_OVER_DB, EBU_UNDER_DB = 0.2, 0.4  # EBU Tech 3341, table 1, tolerance of true peak
LIBEBUR128_BAND_DB = 1e-4  # the same taps; ours in float32, theirs in float64
SAMPLE_16_BIT = 32767 / 32768


def true_peak(signal: np.ndarray, rate_hz: int = RATE_HZ) -> peaks.TruePeakReading:
    meter = TruePeakMeter(rate_hz, 1 if signal.ndim == 1 else signal.shape[1], frames=len(signal))
    return run_meter(meter, np.asarray(signal, np.float32), 48_000)


def sample_peak(signal: np.ndarray, rate_hz: int = RATE_HZ, **options: bool) -> peaks.PeakReading:
    meter = PeakMeter(rate_hz, 1 if signal.ndim == 1 else signal.shape[1], **options)
    return run_meter(meter, np.asarray(signal, np.float32), 4801)


# ---- true peak: EBU Tech 3341 -----------------------------------------------------------------------------------

def faded_tone(divisor: int, degrees: float, peak: float, rate_hz: int) -> np.ndarray:
    """One second of rate / divisor from that phase, with fades of 10 ms."""
    frames = np.arange(rate_hz)
    fade = np.minimum(1.0, np.minimum(frames, rate_hz - 1 - frames) / (0.01 * rate_hz))
    return peak * fade * np.sin(2 * np.pi * frames / divisor + np.radians(degrees))


@pytest.mark.parametrize("rate_hz", [44_100, 48_000])
@pytest.mark.parametrize(("divisor", "degrees", "peak", "expected_dbtp"), [
    pytest.param(4, 0.0, 0.50, -6.0, id="case 15"),
    pytest.param(4, 45.0, 0.50, -6.0, id="case 16"),
    pytest.param(6, 60.0, 0.50, -6.0, id="case 17"),
    pytest.param(8, 67.5, 0.50, -6.0, id="case 18"),
    pytest.param(4, 45.0, 1.41, 3.0, id="case 19"),
])
def test_ebu_15_to_19_tones(divisor: int, degrees: float, peak: float, expected_dbtp: float, rate_hz: int) -> None:
    """Cases 15 to 19: tones whose samples miss the crest read their true peak."""
    reading = true_peak(faded_tone(divisor, degrees, peak, rate_hz), rate_hz)
    assert expected_dbtp - EBU_UNDER_DB <= reading.true_peak_dbtp <= expected_dbtp + EBU_OVER_DB


@pytest.mark.parametrize("offset", range(4))
def test_ebu_20_to_23_burst_between_samples(offset: int) -> None:
    """Cases 20 to 23: one period at full scale in a half-scale tone reads 0 dBTP wherever the samples fall."""
    from scipy.signal import firwin, oaconvolve

    frames = 4 * RATE_HZ // 2
    quiet = 0.5 * np.sin(2 * np.pi * np.arange(frames) / 24)  # fs/6 at 4 fs
    burst = np.sin(2 * np.pi * np.arange(16) / 16)  # one period of fs/4 at 4 fs
    middle = frames // 48 * 24
    fine = np.concatenate([quiet[:middle], burst, quiet[middle:]])
    low_passed = oaconvolve(fine, firwin(255, 0.25), mode="same")
    edge = RATE_HZ // 100
    reading = true_peak(low_passed[offset::4][edge:-edge])
    assert -EBU_UNDER_DB <= reading.true_peak_dbtp <= EBU_OVER_DB
    assert reading.true_peak_s == pytest.approx((middle / 4 - edge) / RATE_HZ, abs=0.002)


# ---- true peak: libebur128 --------------------------------------------------------------------------------------

@pytest.mark.parametrize("rate_hz", [*RATES_HZ, 8000, 11_025, 192_000])
def test_agrees_with_libebur128(rate_hz: int) -> None:
    """libebur128 reads the same true peak, at 4, 2 and 1 times oversampling, on one and two channels."""
    for channels in (1, 2):
        for signal in (speech(rate_hz, channels=channels), noise_bursts(rate_hz, 3, channels)):
            expected = libebur128(signal, rate_hz).true_peak_dbtp
            assert true_peak(signal, rate_hz).true_peak_dbtp == pytest.approx(expected, abs=LIBEBUR128_BAND_DB)


@pytest.mark.parametrize("rate_hz", [8000, 44_100, 48_000, 96_000])
def test_cells_are_the_plain_interpolation(rate_hz: int) -> None:
    """Each peak cell is the largest of its samples and of those interpolated after them, by direct convolution."""
    signal = noise_bursts(rate_hz, 0.7, 2)
    factor = peaks.oversampling(rate_hz)
    stuffed = np.zeros((len(signal) * factor, 2))
    stuffed[::factor] = signal
    taps = peaks.interpolator(factor)
    fine = np.stack([np.convolve(stuffed[:, channel], taps)[24 : 24 + len(stuffed)] for channel in (0, 1)], axis=1)
    per_frame = np.abs(fine).reshape(len(signal), -1).max(axis=1)
    width = peaks.peak_cell_frames(rate_hz)
    expected = np.maximum.reduceat(per_frame, np.arange(0, len(signal), width))
    reading = true_peak(signal, rate_hz)
    assert (reading.cell_frames, len(reading.cells)) == (width, -(-len(signal) // width))
    assert reading.cells == pytest.approx(expected, abs=1e-6)


def test_interpolator_is_a_half_band_of_its_phase() -> None:
    """Phase 0 is the sample itself, and a cell is never shorter than the interpolator's reach."""
    for rate_hz in (8000, 11_025, 44_100, 48_000, 88_200, 96_000, 176_400, 192_000):
        assert peaks.interpolator_reach(rate_hz) <= peaks.peak_cell_frames(rate_hz)
        factor = peaks.oversampling(rate_hz)
        assert peaks.interpolator(factor)[24 % factor :: factor][24 // factor] == 1.0
    assert [peaks.oversampling(rate_hz) for rate_hz in (48_000, 95_999, 96_000, 191_999, 192_000)] == [4, 4, 2, 2, 1]


def test_peak_after_the_end_counts() -> None:
    """A crest that lies behind the last sample is read, since what plays it back will make it."""
    signal = np.zeros(RATE_HZ // 10)
    signal[-2:] = 0.5
    assert true_peak(signal).true_peak_dbtp > 20 * math.log10(0.6)


@pytest.mark.parametrize("rate_hz", [44_100, 48_000, 96_000, 192_000])
def test_block_size_never_changes_true_peak(rate_hz: int) -> None:
    """Blocks of any size give the same cells, to the last bit."""
    signal = noise_bursts(rate_hz, 1.2345, 2)
    blocks = [997, 48_000, 10**9, [1, 20_000, 17]]
    assert_block_parity(lambda: TruePeakMeter(rate_hz, 2, frames=len(signal)), signal, blocks)


def test_true_peak_of_silence() -> None:
    """Silence and nothing at all read -inf dBTP at 0 s."""
    for frames, cells in ((0, 0), (1, 1), (48, 1), (49, 2), (48_000, 1000)):
        reading = true_peak(np.zeros(frames))
        assert (reading.true_peak_dbtp, reading.true_peak_s, len(reading.cells)) == (-math.inf, 0.0, cells)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 2**31), st.floats(0.01, 8.0))
def test_true_peak_of_a_scaled_signal_is_scaled(seed: int, gain: float) -> None:
    """Interpolation is linear: what the limiter counts on."""
    signal = np.random.default_rng(seed).standard_normal(2000).astype(np.float32)
    scaled = true_peak(signal * np.float32(gain)).cells
    assert scaled == pytest.approx(true_peak(signal).cells * gain, rel=1e-5)


# ---- sample peak, DC offset, clipping ---------------------------------------------------------------------------

def test_sample_peak_and_its_time() -> None:
    """The first frame that holds the largest sample of either sign, on any channel, is told."""
    signal = np.zeros((RATE_HZ * 3, 2))
    signal[100, 0], signal[70_000, 1], signal[90_000, 0] = 0.25, -0.5, 0.5
    reading = sample_peak(signal)
    assert reading.sample_peak_dbfs == pytest.approx(20 * math.log10(0.5))
    assert reading.sample_peak_s == 70_000 / RATE_HZ


def test_dc_offset_of_each_channel() -> None:
    """The mean of each channel, whatever its length."""
    signal = np.tile([0.25, -0.125], (RATE_HZ * 2 + 1234, 1))
    assert sample_peak(signal).dc_offset == (0.25, -0.125)


def test_silence_has_no_peak() -> None:
    """Silence and nothing at all: -inf dBFS, no offset, nothing clipped."""
    for frames in (0, 1, RATE_HZ):
        assert sample_peak(np.zeros(frames)) == peaks.PeakReading(-math.inf, 0.0, (0.0,), ())


def runs_at(places: list[tuple[int, int]], value: float, seconds: int = 4) -> np.ndarray:
    """Soft noise with runs (first frame, frames) at a value."""
    signal = 0.1 * np.random.default_rng(3).standard_normal(seconds * RATE_HZ)
    for first, frames in places:
        signal[first : first + frames] = value
    return signal


@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_clipped_runs_are_found(sign: float) -> None:
    """Three frames at full scale are clipped, two are not; runs within 0.2 s are one place; either polarity."""
    places = [(1000, 3), (9000, 5), (40_000, 2), (RATE_HZ - 1, 3), (3 * RATE_HZ, 40)]
    reading = sample_peak(runs_at(places, sign * SAMPLE_16_BIT))
    expected = [(1000, 9005), (RATE_HZ - 1, RATE_HZ + 2), (3 * RATE_HZ, 3 * RATE_HZ + 40)]
    assert reading.clipped == tuple((first / RATE_HZ, end / RATE_HZ) for first, end in expected)


def test_full_scale_that_changes_sides_is_not_clipped() -> None:
    """Half the rate at full scale is a tone, not a flat top."""
    assert sample_peak(np.where(np.arange(RATE_HZ) % 2, 1.0, -1.0)).clipped == ()


def test_clipping_of_one_channel_of_two() -> None:
    """One channel's clipping is enough; half a run on each is none."""
    signal = np.zeros((RATE_HZ, 2))
    signal[500:504, 1] = -1.0
    signal[30_000:30_002, 0] = signal[30_002:30_004, 1] = 1.0
    assert sample_peak(signal).clipped == ((500 / RATE_HZ, 504 / RATE_HZ),)


def test_floats_over_full_scale_are_not_clipped() -> None:
    """A float file may go over 1.0, even flat; a run that lies at 1.0 is clipping kept in floats."""
    over, at = runs_at([(5000, 50)], 1.5), runs_at([(5000, 50)], 1.0)
    assert sample_peak(over, float_source=True).clipped == ()
    assert sample_peak(at, float_source=True).clipped == ((5000 / RATE_HZ, 5050 / RATE_HZ),)
    assert sample_peak(over).clipped == sample_peak(at).clipped == ((5000 / RATE_HZ, 5050 / RATE_HZ),)


def test_block_size_never_changes_peaks() -> None:
    """Blocks of any size give the same peak, offset and clipped places, to the last bit."""
    signal = (10 * noise_bursts(44_100, 3.3, 2)).clip(-1, 1)
    reading = assert_block_parity(lambda: PeakMeter(44_100, 2), signal, [997, 44_100, 10**9, [1, 20_000, 17]])
    assert len(reading.clipped) >= 2


@settings(max_examples=60, deadline=None)
@given(st.lists(st.sampled_from([-1.0, 0.0, 1.0]), max_size=60), st.integers(1, 9))
def test_clipping_is_what_a_plain_count_finds(samples: list[float], frames: int) -> None:
    """Runs of three or more equal full-scale samples, counted one by one, merged when 0.2 s or less apart."""
    rate_hz, expected, start = 10, [], 0  # 0.2 s are two frames
    for at in range(1, len(samples) + 1):
        if at == len(samples) or samples[at] != samples[start]:
            if samples[start] and at - start >= 3:
                if expected and start - expected[-1][1] <= 2:
                    expected[-1] = expected[-1][0], at
                else:
                    expected.append((start, at))
            start = at
    reading = run_meter(PeakMeter(rate_hz, 1), np.array(samples, np.float32), frames)
    assert reading.clipped == tuple((first / rate_hz, end / rate_hz) for first, end in expected)
