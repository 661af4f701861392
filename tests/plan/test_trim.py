"""leveller.plan.trim and plan.levels: one gain that brings a voice to level, steps where a knob was turned."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace
from typing import cast

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leveller.attribute import Activity
from leveller.attribute.coupling import Coupling
from leveller.attribute.knobs import Step
from leveller.measure import Measurements
from leveller.measure.levels import STEP_DB
from leveller.measure.loudness import power_to_lufs
from leveller.plan.levels import QUIET_DB, level_lufs, own_power, own_speech, spoken_alone
from leveller.plan.trim import VOICE_LUFS, trim_nodes_db
from leveller.settings import Trim

HOW = Trim()
EXACT_LU = 0.01  # float32 power of thousands of hops


def talk(level_db: float = -30.0, hops: int = 3000) -> tuple[np.ndarray, np.ndarray]:
    """K-weighted power of a voice that speaks in three of five seconds, noise between; and when it speaks."""
    own = np.arange(hops) % 500 < 300
    rng = np.random.default_rng(1)
    power = np.where(own, 10 ** ((level_db + rng.normal(0, 3, hops)) / 10), 1e-9)
    return power.astype(np.float32), own


@pytest.mark.parametrize("level_db", [-50.0, -30.0, -10.0])
def test_a_voice_is_brought_to_its_level(level_db: float) -> None:
    """After the trim own speech reads VOICE_LUFS, whatever it was recorded at."""
    power, own = talk(level_db)
    trim = trim_nodes_db(power, own, [], settings=HOW)
    assert np.ptp(trim) == 0
    assert level_lufs(power * 10 ** (trim[0] / 10), own) == pytest.approx(VOICE_LUFS, abs=EXACT_LU)


def test_no_voice_is_moved_further_than_the_limit() -> None:
    """A voice 60 dB too soft gets `most_db` and no more."""
    power, own = talk(-90.0)
    assert trim_nodes_db(power, own, [], settings=replace(HOW, most_db=12.0)).tolist() == [12.0] * 3001


def test_a_silent_voice_gets_nothing() -> None:
    """A voice that is never heard, or the stage switched off: 0 dB."""
    power, own = talk()
    assert not trim_nodes_db(power, np.zeros(3000, bool), [], settings=HOW).any()
    assert not trim_nodes_db(power, own, [], settings=replace(HOW, enabled=False)).any()


def test_a_knob_that_was_turned_is_turned_back() -> None:
    """8 dB more from hop 1500 on: the trim falls by 8 dB there within 30 ms, and both halves read VOICE_LUFS."""
    power, own = talk()
    power[1500:] *= np.float32(10 ** (8 / 10))
    trim = trim_nodes_db(power, own, [Step(0, 1500, 8.0)], settings=HOW)
    assert trim[1400] - trim[1600] == pytest.approx(8.0, abs=1e-3)
    assert np.ptp(trim[:1499]) == np.ptp(trim[1503:]) == 0
    assert np.abs(np.diff(trim)).max() == pytest.approx(8 / 3, abs=1e-3)
    after = power * 10 ** (trim[:-1] / 10)
    for half in (slice(0, 1500), slice(1510, 3000)):
        assert level_lufs(after[half], own[half]) == pytest.approx(VOICE_LUFS, abs=0.3)


def test_the_level_is_the_mean_of_the_counted_hops() -> None:
    """Level is -0.691 + 10 log10 of the mean power (ITU-R BS.1770-5, equation 2)."""
    power, own = np.full(500, 0.01, np.float32), np.ones(500, bool)
    assert level_lufs(power, own) == pytest.approx(-20.691, abs=1e-3)
    assert power_to_lufs(0.01) == pytest.approx(-20.691, abs=1e-9)


def test_pauses_within_speech_do_not_count() -> None:
    """Hops further than QUIET_DB under the mean leave the level as it is; louder ones do not (half the hops: -3 dB)."""
    power, own = np.full(400, 0.01, np.float32), np.ones(400, bool)
    power[:200] = 0.01 * 10 ** (-(QUIET_DB + 5) / 10)
    assert level_lufs(power, own) == pytest.approx(-20.691, abs=1e-3)
    power[:200] = 0.01 * 10 ** (-(QUIET_DB - 5) / 10)
    assert level_lufs(power, own) == pytest.approx(-20.691 - 3.0, abs=0.1)


def activity_of(own: np.ndarray, audible_db: float = 15.0) -> Activity:
    """Who speaks, as clearly audible as said; the last ten hops are no programme."""
    hops, tracks = own.shape
    grid, half = np.zeros(own.shape, np.float32), np.zeros(own.shape, np.float16)
    return Activity(
        own=own, bleed=~own, margin=grid, own_to_bleed_db=grid, audible_db=grid + np.float32(audible_db),
        floor_db=np.zeros((-(-hops // 100), tracks, 14), np.float32), programme=np.arange(hops) < hops - 10,
        coupling=Coupling(np.zeros((1, tracks, tracks, 14), np.float32), np.full(tracks, 500)),
        score=half, standing_out_db=half, bright_db=half)


@pytest.mark.parametrize(("alone", "counted"), [(199, 299), (200, 200)])
def test_the_ride_hears_speech_over_others_only_where_it_must(alone: int, counted: int) -> None:
    """With two seconds spoken alone, overlapped speech is left out; with less it is needed. The level counts it all."""
    own = np.zeros((1000, 2), bool)
    own[: alone + 100, 0] = True
    own[alone : alone + 100, 1] = True
    assert np.count_nonzero(spoken_alone(activity_of(own))[:, 0]) == counted
    assert np.count_nonzero(own_speech(activity_of(own))[:, 0]) == alone + 100


def test_bleed_makes_nobody_louder() -> None:
    """While two speak, the bleed that is predicted is taken off; alone, the power is the microphone's own.

    Own voice and bleed of the same power: 10 log10 2 dB over the bleed, so half the power is its own.
    """
    own = np.zeros((1000, 2), bool)
    own[:600, 0] = True
    own[300:900, 1] = True
    activity = replace(activity_of(own), own_to_bleed_db=np.full(own.shape, 10 * np.log10(2), np.float32))
    levels = np.full(own.shape, round(-30 / STEP_DB), np.int16)
    m = cast(Measurements, SimpleNamespace(k_levels=levels))
    power = own_power(m, activity, 0)
    assert power[:300] == pytest.approx(power[600:].mean(), rel=1e-5)
    assert power[300:600] == pytest.approx(power[0] / 2, rel=1e-5)
    beneath = replace(activity, own_to_bleed_db=np.full(own.shape, -3.0, np.float32))
    assert not own_power(m, beneath, 0)[300:600].any()  # never less than nothing


def test_a_voice_lies_where_it_does_over_all_it_says() -> None:
    """Somebody who says little alone, and that softly, but much over others is not turned up for it."""
    own = np.zeros((2000, 2), bool)
    own[:1300, 0] = own[300:1900, 1] = True
    activity = replace(activity_of(own), own_to_bleed_db=np.full(own.shape, 30.0, np.float32))
    levels = np.full(own.shape, round(-30 / STEP_DB), np.int16)
    levels[:300, 0] = round(-40 / STEP_DB)
    m = cast(Measurements, SimpleNamespace(k_levels=levels))
    counted = own_speech(activity)[:, 0]
    trim = trim_nodes_db(own_power(m, activity, 0), counted, [], settings=HOW)
    expected = 10 * np.log10((300 * 1e-4 + 1000 * 1e-3) / 1300) - 0.691
    assert trim[0] == pytest.approx(VOICE_LUFS - expected, abs=0.02)


def test_faint_speech_and_what_is_no_programme_do_not_count() -> None:
    """Hops within 6 dB of the noise, or in a stretch left out, are not listened to."""
    own = np.ones((1000, 1), bool)
    assert np.flatnonzero(~own_speech(activity_of(own))[:, 0]).tolist() == list(range(990, 1000))
    assert not own_speech(activity_of(own, audible_db=5.9)).any()


@given(hops=st.integers(0, 9))
@settings(max_examples=10, deadline=None, derandomize=True)
def test_too_little_speech_has_no_level(hops: int) -> None:
    """Fewer than ten hops have none."""
    assert level_lufs(np.ones(100, np.float32), np.arange(100) < hops) is None
