"""leveller.measure.voice: voice activity as evidence, whatever the recording gain."""

from __future__ import annotations

import math

import numpy as np
import pytest
import sounds
from loudness_reference import speech
from parity import assert_block_parity

from leveller.measure.voice import VoiceMeter

RATE_HZ = 16_000
LOUD_DBFS = -12.0  # about the 95th percentile of 10 ms RMS in `speech`, whose peak is at 0.5


def flags_of(signal: np.ndarray, loud_dbfs: float) -> np.ndarray:
    meter = VoiceMeter(loud_dbfs)
    meter.push(np.asarray(signal, np.float32))
    return meter.result()


def test_speech_is_voice_and_silence_is_not() -> None:
    """Two recorded voices are found in most of their hops, and digital silence in none."""
    voices = speech(RATE_HZ)
    assert flags_of(voices, LOUD_DBFS).mean() > 0.5
    assert not flags_of(np.zeros(3 * RATE_HZ), LOUD_DBFS).any()


def test_steady_noise_is_no_voice() -> None:
    """Soft room noise is voice in less than a tenth of its hops, once the detector has settled."""
    quiet = sounds.at_level(sounds.band_noise(np.random.default_rng(1), 5 * RATE_HZ, 80, 1200), -50.0)
    assert flags_of(quiet, LOUD_DBFS)[200:].mean() < 0.1


@pytest.mark.parametrize("by_db", [-40.0, -20.0, 6.0])
def test_the_recording_gain_does_not_count(by_db: float) -> None:
    """The same speech softer or louder, its level known, gives the same flags but for a hop in a hundred (rounding)."""
    voices = speech(RATE_HZ)
    scaled = voices * np.float32(10 ** (by_db / 20))
    assert np.mean(flags_of(voices, LOUD_DBFS) != flags_of(scaled, LOUD_DBFS + by_db)) < 0.01


def test_a_silent_track_has_no_voice() -> None:
    """A track whose preview was silent has no flag at all, whatever follows."""
    assert not flags_of(speech(RATE_HZ)[: 3 * RATE_HZ], -math.inf).any()


def test_clipping_into_the_detector_does_not_wrap() -> None:
    """A source far louder than its preview is clipped at 16 bit, and still mostly voice."""
    assert flags_of(speech(RATE_HZ) * np.float32(50), LOUD_DBFS).mean() > 0.3


@pytest.mark.parametrize(("frames", "hops"), [(319, 0), (320, 2), (16_000, 100), (16_319, 100)])
def test_two_flags_a_frame(frames: int, hops: int) -> None:
    """Each whole frame of 20 ms gives two flags; what is left over gives none."""
    assert len(flags_of(speech(RATE_HZ)[:frames], LOUD_DBFS)) == hops


def test_block_size_changes_nothing() -> None:
    """Blocks of any length give the same flags."""
    assert_block_parity(lambda: VoiceMeter(LOUD_DBFS), np.array(speech(RATE_HZ)[: 4 * RATE_HZ + 11]))
