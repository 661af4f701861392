"""leveller.attribute.tone: line-up tone is no programme, speech is."""

from __future__ import annotations

import numpy as np
import pytest
import sounds
from loudness_reference import speech

from leveller.attribute.tone import steady_tone
from leveller.measure.bands import ANALYSIS_HZ, BANDS, BandMeter


def levels_of(*signals: np.ndarray) -> np.ndarray:
    """Band levels, shape=(hops, tracks, BANDS)."""
    out = []
    for signal in signals:
        meter = BandMeter()
        meter.push(np.asarray(signal, np.float32))
        out.append(meter.result()[:, :BANDS])
    return np.stack(out, axis=1)


def with_tone(hz: float, from_s: int = 4, to_s: int = 10) -> np.ndarray:
    """Soft noise of 14 s with a line-up tone of -18 dBFS in it."""
    signal = np.random.default_rng(1).normal(0, 1e-4, 14 * ANALYSIS_HZ)
    at = np.arange(from_s * ANALYSIS_HZ, to_s * ANALYSIS_HZ)
    signal[at] += np.sqrt(2) * 10 ** (-18 / 20) * np.sin(2 * np.pi * hz * at / ANALYSIS_HZ)
    return signal


@pytest.mark.parametrize("hz", [400, 440, 1000])
def test_a_line_up_tone_is_found(hz: int) -> None:
    """All of a tone but at most half a second at its ends (the grid it is sought on), and nothing beside it."""
    found = steady_tone(levels_of(with_tone(hz)))
    assert found[450:950].all()
    assert not found[:350].any()
    assert not found[1050:].any()


def test_one_track_with_tone_is_enough() -> None:
    """A slate on one track takes the moment out for all."""
    quiet = np.random.default_rng(2).normal(0, 1e-4, 14 * ANALYSIS_HZ)
    assert steady_tone(levels_of(quiet, with_tone(1000)))[500:900].all()


def test_speech_noise_and_laughter_are_no_tone() -> None:
    """Two recorded voices, steady noise and a laugh have not one hop of tone."""
    rng = np.random.default_rng(3)
    voices = speech(ANALYSIS_HZ)
    noise = rng.normal(0, 0.01, len(voices))
    laugh = np.tile(sounds.laugh(rng, 180.0), 20)[: len(voices)]
    laugh = np.pad(laugh, (0, len(voices) - len(laugh)))
    assert not steady_tone(levels_of(voices, noise, laugh)).any()


def test_a_steady_buzz_is_no_tone() -> None:
    """Forty harmonics of 150 Hz stand as still as a tone, but no band of them stands alone."""
    at = np.arange(8 * ANALYSIS_HZ) / ANALYSIS_HZ
    buzz = sum(0.01 * np.sin(2 * np.pi * 150 * k * at + k * k) for k in range(1, 41))
    assert not steady_tone(levels_of(buzz)).any()


def test_silence_is_no_tone() -> None:
    """Digital silence and tone under -60 dBFS do not count."""
    assert not steady_tone(levels_of(np.zeros(5 * ANALYSIS_HZ), with_tone(1000)[: 5 * ANALYSIS_HZ] * 1e-4)).any()
