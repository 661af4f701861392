"""leveller.measure.arrival: which microphone hears a sound first, from delays alone."""

from __future__ import annotations

import numpy as np
import pytest
import rooms
from loudness_reference import speech
from parity import assert_same_bits
from scipy.signal import oaconvolve

from leveller.measure.arrival import LAG_S, WINDOW, ArrivalMeter, Arrivals
from leveller.measure.bands import ANALYSIS_HZ, HOP

SPEED_M_S = 343.0  # of sound in air at 20 degrees C, as the simulated rooms have it
ONE_STEP_S = LAG_S  # the grid on which lags are found


def arrivals_of(mics: np.ndarray, frames: int = 16_000) -> Arrivals:
    """Of (frames, microphones), pushed in blocks."""
    meter = ArrivalMeter(mics.shape[1], len(mics) / ANALYSIS_HZ)
    for at in range(0, len(mics), frames):
        meter.push([np.ascontiguousarray(column, np.float32) for column in mics[at : at + frames].T])
    return meter.result()


def delayed(seconds: tuple[float, ...], *, length_s: float = 6.0, noise: float = 1e-4) -> np.ndarray:
    """Recorded speech at microphones that hear it late by so much, each with a little noise of its own."""
    voice = speech(ANALYSIS_HZ)[: round(length_s * ANALYSIS_HZ)]
    rng = np.random.default_rng(5)
    late = [np.concatenate([np.zeros(round(s * ANALYSIS_HZ)), voice])[: len(voice)] for s in seconds]
    return np.stack(late, axis=1) + rng.normal(0, noise, (len(voice), len(seconds)))


def clear(found: Arrivals) -> np.ndarray:
    """Windows in which the pairs share a sound."""
    return found.strength.max(axis=1) > 0.3


def test_lag_and_lead_name_the_first_microphone() -> None:
    """A voice that comes 2 ms later to the second microphone: lag -16 steps of 125 us, lead for the first."""
    found = arrivals_of(delayed((0.0, 0.002)))
    there = clear(found)
    assert there.mean() > 0.5
    assert np.median(found.lag[there, 0]) == -16
    assert (found.lead[there, 0] > 0).mean() > 0.95
    assert found.lead[:, 1] == pytest.approx(-found.lead[:, 0])


def test_delays_are_distances() -> None:
    """In a room without walls the lag is the difference of the ways at 343 m/s, within one step."""
    mics = tuple(rooms.Microphone(at) for at in ((1.3, 2.0, 1.5), (2.4, 2.0, 1.5), (1.0, 3.5, 1.5)))
    room = rooms.Room((6.0, 5.0, 3.0), 0.0, ((1.0, 2.0, 1.5),), mics, (0,))
    heard = oaconvolve(delayed((0.0,)), rooms.responses(room, room.mouths[0]), axes=0)
    found = arrivals_of(heard + np.random.default_rng(1).normal(0, 1e-4, heard.shape))
    there = clear(found)
    ways_m = np.array([0.3, 1.4, 1.5])
    for p, (i, j) in enumerate(found.pairs):
        expected_s = (ways_m[i] - ways_m[j]) / SPEED_M_S
        assert np.median(found.lag[there, p]) * LAG_S == pytest.approx(expected_s, abs=ONE_STEP_S)
    assert (found.lead[there].argmax(axis=1) == 0).mean() > 0.95


def test_gains_do_not_count() -> None:
    """Microphones 40 dB apart give the same windows to the last bit where the gain is a power of two."""
    mics = delayed((0.0, 0.003)).astype(np.float32)
    assert_same_bits(arrivals_of(mics), arrivals_of(mics * np.float32([2.0**-7, 1.0])), "gain")


def test_polarity_and_strangers_have_no_clear_peak() -> None:
    """Microphones without a common sound, in noise of their own, correlate below 0.3 in nearly all windows."""
    rng = np.random.default_rng(2)
    found = arrivals_of(rng.normal(0, 0.1, (5 * ANALYSIS_HZ, 2)))
    assert np.quantile(found.strength, 0.99) < 0.3


def test_silence_leads_nowhere() -> None:
    """Digital silence has strength 0 and no lead."""
    found = arrivals_of(np.zeros((2 * ANALYSIS_HZ, 3)))
    assert not found.strength.any()
    assert not found.lead.any()


def test_block_size_changes_nothing() -> None:
    """Blocks of any length give the same bits."""
    mics = delayed((0.0, 0.001, 0.004))
    whole = arrivals_of(mics, len(mics))
    for frames in (997, 4800, 48_000):
        assert_same_bits(arrivals_of(mics, frames), whole, str(frames))


def test_some_of_the_tracks_are_as_if_alone() -> None:
    """`of_tracks` gives what those microphones would have given by themselves."""
    mics = delayed((0.0, 0.001, 0.004))
    assert_same_bits(arrivals_of(mics).of_tracks([0, 2]), arrivals_of(mics[:, [0, 2]]), "0 and 2")
    swapped = arrivals_of(mics).of_tracks([1, 2])
    assert swapped.pairs == ((0, 1),)


def test_one_track_has_no_pairs() -> None:
    """A single microphone has no window at all."""
    found = arrivals_of(delayed((0.0,)))
    assert found.lead.shape == (0, 1)
    assert found.pairs == ()


@pytest.mark.parametrize("frames", [0, WINDOW - 1, WINDOW, WINDOW + 800])
def test_windows_lie_within_the_sound(frames: int) -> None:
    """Only whole windows count, and each names the hop in its middle."""
    found = arrivals_of(delayed((0.0, 0.001))[:frames])
    assert len(found.hop) == (0 if frames < WINDOW else 1 + (frames - WINDOW) // 800)
    assert found.hop.tolist() == [(at * 800 + WINDOW // 2) // HOP for at in range(len(found.hop))]


def test_many_tracks_take_fewer_windows() -> None:
    """An hour of twelve tracks (66 pairs) has a window every 1.2 s, of three tracks ten a second."""
    strides = [ArrivalMeter(tracks, 3600.0)._stride / ANALYSIS_HZ for tracks in (3, 12)]
    assert strides == pytest.approx([0.1, 1.2], abs=0.01)
