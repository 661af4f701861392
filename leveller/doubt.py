"""How likely a mistake is: a closed microphone that has lost a word, an open one that only hears the others.

Two logistic regressions over a few named features, each the mean or the largest of something round a hop. Their weights
are learnt by tests/learn_doubt.py on simulated conversations of the development voices; docs/accuracy.md holds what
they find with other voices. A weight says what one unit of a feature adds to the log odds.

*A lost word.* The decoder misses what is short and lies under somebody else's voice: over a quarter of a second some
bands stand out of the predicted bleed although most do not. (So says the anatomy of the errors: nearly all lost runs
are short answers under another voice.)

*Open bleed.* An opening while others speak that rests on little evidence, rises and falls with the loudest other
microphone, stands out in the high bands only (paper, keys), or came while another microphone was muted, so that its
voice is explained by nothing.

All is worked out track by track, so that memory stays small.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.attribute import Activity
from leveller.attribute.answers import mean_round
from leveller.measure import Measurements
from leveller.measure.levels import level_to_db
from leveller.plan.stretches import stretches
from leveller.units import Bools

CLOSED_SHARE = 6 / 18  # of the deepest cut: more loses a word
OPEN_SHARE = 10 / 18  # of the deepest cut: less leaves bleed open
WORD_HOPS = 27  # what is looked at round a hop for a word
BLEED_HOPS = 51  # what is looked at round a hop for open bleed
AGREEING_HOPS = 101  # over which two levels rise and fall together
OPENING_REACH_HOPS = 31
MUTED_DB = -120.0  # digital zero, as a muted call leaves it
SPAN_DB = 40.0  # levels further under the loudest say nothing about rising and falling together
STEADY_DB2 = 1.0  # variance under which a level does not rise or fall
# Learnt by tests/learn_doubt.py from 349 simulated conversations: 1 129 117 examples, 1455 of them lost words.
WORD_WEIGHTS = {"standing_out_db": 2.33, "own_to_bleed_db": -2.25, "bright_db": -0.536, "audible_db": 0.208}
WORD_OFFSET = -16.8
# From the same conversations: 667 661 examples, 5392 of them open bleed.
BLEED_WEIGHTS = {
    "others": 6.45, "muted": 5.62, "evidence": -0.477, "opening": -1.91, "bright_db": 0.315, "agreeing": 2.29}
BLEED_OFFSET = -10.5

Row = npt.NDArray[np.float32]  # (hops,)


def word_doubt(activity: Activity, cut: Row, track: int) -> Row:
    """How likely a word was lost at each hop of one track; 0 where it is open or nobody else speaks.

    Parameters
    ----------
    cut : shape=(hops,)
        How far the expander cuts, as a share of its deepest cut.
    """
    possible = (cut > CLOSED_SHARE) & ~activity.own[:, track] & activity.programme & _others(activity, track)
    return _likelihood(word_features(activity, track), WORD_WEIGHTS, WORD_OFFSET, possible)


def bleed_doubt(activity: Activity, m: Measurements, cut: Row, track: int) -> Row:
    """How likely one open track only hears the others at each hop; 0 where it is closed (`cut` as in `word_doubt`)."""
    possible = (cut < OPEN_SHARE) & activity.programme
    return _likelihood(bleed_features(activity, m, track), BLEED_WEIGHTS, BLEED_OFFSET, possible)


def word_features(activity: Activity, track: int) -> dict[str, Row]:
    """What a lost word is known by, each of shape=(hops,)."""
    return {name: mean_round(getattr(activity, name)[:, track], WORD_HOPS) for name in WORD_WEIGHTS}


def bleed_features(activity: Activity, m: Measurements, track: int) -> dict[str, Row]:
    """What open bleed is known by, each of shape=(hops,)."""
    score = activity.score[:, track].astype(np.float32)
    return {
        "others": mean_round(_others(activity, track), BLEED_HOPS),
        "muted": mean_round(_any_silent(m, track), BLEED_HOPS),
        "evidence": most_round(score, BLEED_HOPS),
        "opening": most_round(_of_opening(score, activity.own[:, track]), OPENING_REACH_HOPS),
        "bright_db": mean_round(activity.bright_db[:, track], BLEED_HOPS),
        "agreeing": _agreeing(*_levels_db(m, track)),
    }


def silent(m: Measurements, track: int) -> Bools:
    """Whether one microphone gives digital zero, shape=(hops,)."""
    return np.asarray(level_to_db(m.voice_levels[:, track]) < MUTED_DB)


def most_round(values: Row, hops: int) -> Row:
    """Largest of so many hops round each (odd), in steps that double."""
    out = np.pad(values, hops // 2, constant_values=np.float32(values.min(initial=0)))
    width = 1
    while width < hops:
        step = min(width, hops - width)
        out = np.maximum(out[:-step], out[step:])
        width += step
    return out


def _likelihood(features: dict[str, Row], weights: dict[str, float], offset: float, possible: Bools) -> Row:
    """The logistic regression, where a mistake is possible at all."""
    odds = np.full(len(possible), offset, np.float32)
    for name, values in features.items():
        odds += np.float32(weights[name]) * values
    return np.asarray(np.where(possible, 1 / (1 + np.exp(-np.clip(odds, -30, 30))), 0), np.float32)


def _others(activity: Activity, track: int) -> Bools:
    """Whether anybody else speaks."""
    return np.asarray(activity.own.sum(axis=1) > activity.own[:, track])


def _any_silent(m: Measurements, track: int) -> Bools:
    """Whether any other microphone gives digital zero."""
    out = np.zeros(m.hops, np.bool_)
    for other in range(m.voice_levels.shape[1]):
        if other != track:
            out |= silent(m, other)
    return out


def _of_opening(score: Row, own: Bools) -> Row:
    """Mean evidence of the whole stretch of own voice that a hop lies in, else 0."""
    out = np.zeros_like(score)
    for first, after in stretches(own).tolist():
        out[first:after] = score[first:after].mean()
    return out


def _levels_db(m: Measurements, track: int) -> tuple[Row, Row]:
    """Level of one microphone and of the loudest other one, each against its own loudest, from -`SPAN_DB` to 0."""
    levels = m.voice_levels
    span_db = [np.clip(x - x.max(initial=-np.inf), -SPAN_DB, 0) for x in map(level_to_db, levels.T)]
    others = [x for k, x in enumerate(span_db) if k != track]
    loudest = others[0].copy() if others else np.zeros(len(levels), np.float32)
    for other in others[1:]:
        np.maximum(loudest, other, out=loudest)
    return span_db[track], loudest


def _agreeing(one: Row, other: Row) -> Row:
    """Correlation of two levels over a second round each hop."""
    mean_one, mean_other = mean_round(one, AGREEING_HOPS), mean_round(other, AGREEING_HOPS)
    both = mean_round(one * other, AGREEING_HOPS) - mean_one * mean_other
    spread = [np.maximum(mean_round(x * x, AGREEING_HOPS) - mean * mean, STEADY_DB2)
              for x, mean in ((one, mean_one), (other, mean_other))]
    return np.asarray(both / np.sqrt(spread[0] * spread[1]))
