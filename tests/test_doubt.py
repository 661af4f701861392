"""leveller.doubt: likelihoods rise with what speaks for a mistake, and are nothing where none is possible."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from leveller.attribute import Activity
from leveller.attribute.coupling import Coupling
from leveller.doubt import (
    BLEED_WEIGHTS,
    WORD_HOPS,
    WORD_WEIGHTS,
    bleed_doubt,
    bleed_features,
    mean_round,
    most_round,
    word_doubt,
    word_features,
)
from leveller.measure import Measurements
from leveller.measure.arrival import Arrivals
from leveller.measure.levels import SILENT, STEP_DB

HOPS = 1200
LOUD_DB, SOFT_DB = -30.0, -60.0
FLOAT32 = 1e-5


def activity_of(own: np.ndarray, **grids: np.ndarray) -> Activity:
    """Who speaks, with all else as in plain bleed (not own) or plain own voice."""
    tracks = own.shape[1]
    usual = {
        "margin": np.where(own, 5.0, -4.0), "own_to_bleed_db": np.where(own, 12.0, -4.5),
        "audible_db": np.full(own.shape, 18.0)}
    usual = {name: x.astype(np.float32) for name, x in usual.items()}
    usual |= {"score": np.where(own, 1.5, -0.2), "standing_out_db": np.where(own, 16.0, -2.0),
              "bright_db": np.zeros(own.shape)}
    made = {name: (grids.get(name, x)).astype(np.float16 if name in ("score", "standing_out_db", "bright_db")
                                              else np.float32) for name, x in usual.items()}
    others = own.sum(axis=1, keepdims=True) > own
    return Activity(
        own=own, bleed=~own & others, floor_db=np.zeros((-(-len(own) // 100), tracks, 14), np.float32),
        programme=np.ones(len(own), bool),
        coupling=Coupling(np.zeros((1, tracks, tracks, 14), np.float32), np.full(tracks, 500)), **made)


def measured(level_db: np.ndarray) -> Measurements:
    """Measurements of which only the voices' levels count."""
    levels = np.maximum(np.rint(level_db / STEP_DB), SILENT).astype(np.int16)
    nothing = np.zeros(levels.shape, np.int16)
    return Measurements(
        levels=np.zeros((*levels.shape, 14), np.int16), k_levels=nothing, voice_levels=levels, rumble=nothing,
        voiced=np.zeros(levels.shape, bool), peaks=(), repaired_frames=(),
        arrivals=Arrivals(np.zeros(0, np.int64), np.zeros((0, levels.shape[1]), np.float32),
                          np.zeros((0, 1), np.int16), np.zeros((0, 1), np.float32), ((0, 1),),
                          np.zeros(1, np.float32)))


def talking(*, tracks: int = 2) -> np.ndarray:
    """The last track's person speaks throughout, nobody else."""
    own = np.zeros((HOPS, tracks), bool)
    own[:, -1] = True
    return own


@pytest.mark.parametrize("hops", [1, 3, 27, 31, 51, 101])
def test_mean_and_most_round_each_hop(hops: int) -> None:
    """They are what a plain loop gives, at the ends too."""
    values = np.random.default_rng(1).normal(size=300).astype(np.float32)
    half = hops // 2
    padded = np.pad(values, half)
    windows = np.lib.stride_tricks.sliding_window_view(padded, hops)
    assert mean_round(values, hops) == pytest.approx(windows.mean(axis=1), abs=FLOAT32)
    windows = np.lib.stride_tricks.sliding_window_view(np.pad(values, half, constant_values=-99), hops)
    assert np.array_equal(most_round(values, hops), windows.max(axis=1))


def test_features_are_those_that_are_weighed() -> None:
    """Each weight has its feature, in the same order, and each has a value for every hop."""
    activity, m = activity_of(talking()), measured(np.full((HOPS, 2), LOUD_DB))
    assert list(word_features(activity, 0)) == list(WORD_WEIGHTS)
    assert list(bleed_features(activity, m, 0)) == list(BLEED_WEIGHTS)
    assert all(x.shape == (HOPS,) and np.isfinite(x).all() for x in bleed_features(activity, m, 0).values())


def test_bands_that_stand_out_of_bleed_may_be_a_word() -> None:
    """A quarter of a second in which the best bands stand out and most do not is likelier by far than the rest."""
    own = talking()
    standing_out = np.full(own.shape, -2.0)
    standing_out[600 : 600 + WORD_HOPS, 0] = 3.0
    doubt = word_doubt(activity_of(own, standing_out_db=standing_out), np.ones(HOPS, np.float32), 0)
    assert int(doubt.argmax()) == pytest.approx(600 + WORD_HOPS // 2, abs=1)
    assert doubt.max() > 100 * np.median(doubt) > 0


def test_no_word_is_lost_where_nothing_is_closed_or_nobody_speaks() -> None:
    """Open, own voice, no other voice, outside the programme, no expander at all: 0."""
    own = talking()
    own[:200] = False
    own[200:300, 0] = True
    activity = activity_of(own, standing_out_db=np.full(own.shape, 5.0))
    activity = dataclasses.replace(activity, programme=np.arange(HOPS) < 1000)
    cut = np.where(np.arange(HOPS) < 500, 1.0, 0.0).astype(np.float32)
    doubt = word_doubt(activity, cut, 0)
    assert np.array_equal(np.flatnonzero(doubt), np.arange(300, 500))
    assert not word_doubt(activity, np.full(HOPS, np.nan, np.float32), 0).any()
    assert not word_doubt(activity, np.ones(HOPS, np.float32), 1)[300:].any()


def test_little_evidence_while_others_speak_may_be_bleed() -> None:
    """An opening with little evidence is likelier bleed than one with much, and than one while nobody else speaks."""
    m = measured(np.full((HOPS, 2), LOUD_DB))
    own = talking()
    own[400:500, 0] = own[700:800, 0] = own[1000:1100, 0] = True
    own[900:, 1] = False
    score = np.where(own, 1.5, -0.2)
    score[400:500, 0] = score[1000:1100, 0] = 0.1
    doubt = bleed_doubt(activity_of(own, score=score), m, np.where(own[:, 0], 0, 1).astype(np.float32), 0)
    assert doubt[450] > 5 * max(doubt[750], doubt[1050])
    assert not doubt[:400].any()


def test_a_muted_microphone_and_bright_noise_speak_for_bleed() -> None:
    """Digital zero elsewhere makes an opening doubtful; so do high bands that stand out alone."""
    own = talking(tracks=3)
    own[400:800, 0] = True
    score = np.where(own, 0.6, -0.2)
    level_db = np.full(own.shape, LOUD_DB)
    cut = np.where(own[:, 0], 0, 1).astype(np.float32)
    plain = bleed_doubt(activity_of(own, score=score), measured(level_db), cut, 0)
    bright = bleed_doubt(activity_of(own, score=score, bright_db=np.full(own.shape, 6.0)), measured(level_db), cut, 0)
    level_db[:, 1] = SILENT * STEP_DB
    muted = bleed_doubt(activity_of(own, score=score), measured(level_db), cut, 0)
    assert muted[600] > 5 * plain[600]
    assert bright[600] > 2 * plain[600]


def test_rising_and_falling_together_speaks_for_bleed() -> None:
    """An opening whose level follows the loudest other microphone is likelier bleed than one that does not."""
    rng = np.random.default_rng(3)
    own = talking()
    own[400:800, 0] = True
    score = np.where(own, 0.6, -0.2)
    steps = np.repeat(rng.uniform(SOFT_DB, LOUD_DB, (HOPS // 10, 2)), 10, axis=0)
    cut = np.where(own[:, 0], 0, 1).astype(np.float32)
    alike = bleed_doubt(activity_of(own, score=score), measured(steps[:, [1, 1]]), cut, 0)
    apart = bleed_doubt(activity_of(own, score=score), measured(steps), cut, 0)
    assert alike[500:700].mean() > 2 * apart[500:700].mean()


def test_one_track_has_no_bleed_to_be_in_doubt() -> None:
    """With one microphone alone nothing is likely to be bleed, and nothing fails."""
    own = np.ones((HOPS, 1), bool)
    doubt = bleed_doubt(activity_of(own), measured(np.full((HOPS, 1), LOUD_DB)), np.zeros(HOPS, np.float32), 0)
    assert doubt.max() < 0.01
