"""Promises of leveller.attribute.answers."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from leveller.attribute.answers import LEAST_HOPS, MOST, SPEAKS, WINDOW_HOPS, mean_round, with_answers
from leveller.attribute.bleed import Evidence

HOPS = 2000
WORD = slice(1000, 1000 + WINDOW_HOPS)
ALL = np.ones(HOPS, bool)


def evidence(*, scatter_db: float = 1.0, word_db: float = 0.0, everywhere_db: float = 0.0, bright_db: float = 0.0,
             audible_db: float = 20.0) -> Evidence:
    """Track 1 speaks throughout; at track 0 the bleed scatters, and in `WORD` some bands stand out."""
    rng = np.random.default_rng(1)
    standing_out = np.stack([-2 + scatter_db * rng.standard_normal(HOPS), np.full(HOPS, 15.0)], axis=1)
    standing_out[WORD, 0] += word_db + everywhere_db
    mean = np.stack([np.full(HOPS, -4.0), np.full(HOPS, 10.0)], axis=1)
    mean[WORD, 0] += everywhere_db
    bright = np.zeros((HOPS, 2))
    bright[WORD, 0] = bright_db
    own = np.stack([np.full(HOPS, -0.1), np.full(HOPS, 1.5)], axis=1)
    return Evidence(
        own=own.astype(np.float32), score=np.zeros((HOPS, 2), np.float32), own_to_bleed_db=mean.astype(np.float32),
        audible_db=np.full((HOPS, 2), audible_db, np.float32), standing_out_db=standing_out.astype(np.float16),
        bright_db=bright.astype(np.float16))


def in_word(found: Evidence, programme: np.ndarray = ALL) -> float:
    """The most that is said for own voice at track 0 in the middle of the word."""
    return float(with_answers(found, programme)[WORD, 0].max())


def test_a_few_bands_that_stand_out_for_a_word_speak_for_own_voice() -> None:
    """Bands 6 dB over the usual for a quarter of a second say `MOST` nats; nothing else changes."""
    found = evidence(word_db=6.0)
    out = with_answers(found, ALL)
    assert out[WORD, 0].max() == np.float32(MOST)
    far = np.ones(HOPS, bool)
    far[WORD.start - WINDOW_HOPS : WORD.stop + WINDOW_HOPS] = False
    assert np.array_equal(out[far], found.own[far])
    assert np.array_equal(out[:, 1], found.own[:, 1])


def test_it_never_speaks_against_own_voice() -> None:
    """No hop gets less evidence than it had."""
    found = evidence(word_db=6.0, scatter_db=3.0)
    assert (with_answers(found, ALL) >= found.own).all()


def test_the_limit_is_the_microphones_own() -> None:
    """The same excess says nothing at a microphone whose bleed scatters three times as far."""
    assert in_word(evidence(word_db=2.0, scatter_db=0.8)) > 0
    assert in_word(evidence(word_db=2.0, scatter_db=6.0)) < 0


def test_what_lifts_all_bands_counts_half() -> None:
    """A coupling estimated too low by 2.5 dB opens nothing; a few bands that stand out as much do."""
    assert in_word(evidence(word_db=2.5)) > 0
    assert in_word(evidence(everywhere_db=2.5)) < in_word(evidence(word_db=2.5))


def test_bright_sounds_count_less() -> None:
    """Where high bands stand out over low ones, as with paper, the same excess says less."""
    dull, bright = in_word(evidence(word_db=1.8)), in_word(evidence(word_db=1.8, bright_db=6.0))
    assert bright < dull


def test_a_click_is_no_word() -> None:
    """One hop, far over everything, passes no limit that a word of a few decibels passes."""
    found = evidence()
    standing_out = found.standing_out_db.copy()
    standing_out[WORD.start + 13, 0] += 18
    assert in_word(dataclasses.replace(found, standing_out_db=standing_out)) < 0
    assert in_word(evidence(word_db=3.0)) > 0


def test_what_is_hardly_audible_says_less() -> None:
    """At 4 dB over the noise an answer says half of what it says at 8."""
    whole, half = in_word(evidence(word_db=6.0)), in_word(evidence(word_db=6.0, audible_db=4.0))
    assert half == pytest.approx(whole / 2)


def test_without_enough_bleed_there_is_no_limit() -> None:
    """Where nobody else clearly speaks, or hardly ever within the programme, the evidence stays as it was."""
    found = evidence(word_db=6.0)
    alone = dataclasses.replace(found, own=np.minimum(found.own, np.float32(SPEAKS)))
    assert np.array_equal(with_answers(alone, ALL), alone.own)
    assert np.array_equal(with_answers(found, np.arange(HOPS) < LEAST_HOPS - 1), found.own)


def test_a_mean_reaches_as_far_on_either_side() -> None:
    """The mean over five hops is that of two before and two after; beyond the ends is nothing."""
    assert mean_round(np.array([0, 0, 5, 0, 0, 10]), 5) == pytest.approx([1, 1, 1, 3, 3, 2])
