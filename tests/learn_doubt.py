"""Learn the weights of `leveller.doubt` on simulated conversations of the development voices.

Purpose: `python tests/learn_doubt.py` prints the constants of leveller/doubt.py, so that they can be made anew when
what they are learnt from changes. It takes some 20 minutes.

Conventions: all conditions of `conditions` with the seeds from `FIRST_SEED` on, and `ANSWERING`, in which short answers
are words instead of an "mm". Held-out voices and the seeds of docs/accuracy.md are never looked at.

Method: a lost word is own speech that counts, cut by more than 6 dB for 100 ms; the five hops in its middle are
examples, shorter lost runs and the rest of the word are left out; every fifth other hop is a counter-example. Open
bleed counts as in `scoring`, every fifth hop. Logistic regression by Newton's method with a small ridge.
"""

from __future__ import annotations

import argparse
import dataclasses
import sys
import tempfile
from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np

sys.path[:0] = [str(Path(__file__).parent), str(Path(__file__).parents[1])]  # also without an installed package

import scoring  # noqa: E402 - the path comes first
from conditions import CONDITIONS, VOICE_SETS, Condition, build, expander_cut_db, opened, without_last  # noqa: E402
from conversations import ConversationSpec  # noqa: E402
from reliability import LOST_DB, OPEN_DB, WORD_HOPS, runs  # noqa: E402

from leveller import doubt  # noqa: E402
from leveller.attribute import Activity, attribute  # noqa: E402
from leveller.measure import Measurements, measure  # noqa: E402
from leveller.plan import make_plan  # noqa: E402

FIRST_SEED, SEEDS = 31, 5
ANSWERING_SEEDS = range(61, 67)
EVERY = 5  # hops, of those that are no mistake
MIDDLE_HOPS = 2  # either side of the middle of a lost word
SHORTEST_HOPS = 3
RIDGE = 1e-3
STEPS = 30
_ROOMS: tuple[dict[str, object], ...] = (
    {}, {"rt60_s": 0.6}, {"rt60_s": 0.8}, {"room": "lapels", "rt60_s": 0.3}, {"room": "lapels", "rt60_s": 0.6},
    {"room": "lapels", "rt60_s": 0.4, "people": 5}, {"room": "desk", "people": 2}, {"people": 5},
    {"room": "panel", "people": 4}, {"overlap_share": 0.35}, {"people": 4, "shared": 1}, {"empty": 1, "rt60_s": 0.5},
    {"noise_db": -20.0}, {"room": "far table", "rt60_s": 0.5})
ANSWERING = Condition("answering in words", tuple(
    dataclasses.replace(
        ConversationSpec(seconds=75.0, rate_hz=16_000, spoken_answers=1.0, short_answers_per_min=12.0), **room)
    for room in _ROOMS))

Examples = tuple[np.ndarray, np.ndarray]  # (examples, features), (examples,) whether it is a mistake


def examples(condition: Condition, which: int, seed: int) -> tuple[Examples, Examples]:
    """Of lost words and of open bleed in one conversation."""
    conversation = build(condition, which, seed=seed, voices=VOICE_SETS["dev"])
    with tempfile.TemporaryDirectory() as folder:
        session = opened(conversation, Path(folder), room_role=condition.room_role)
        measurements = measure(session)
    activity = attribute(measurements, session)
    cut_db = expander_cut_db(make_plan(measurements, activity, session))
    truth = scoring.truth_of(conversation if condition.room_role is None else without_last(conversation))
    return examples_of(activity, measurements, cut_db, truth)


def examples_of(
    activity: Activity, m: Measurements, cut_db: np.ndarray, truth: scoring.Truth
) -> tuple[Examples, Examples]:
    """The same from what is known of it."""
    words, bleeds = [], []
    for track in range(truth.heard.shape[1]):
        cut = cut_db[: len(truth.heard), track]
        hops = len(cut)
        others = np.delete(activity.own, track, axis=1)[:hops].any(axis=1)
        programme = activity.programme[:hops]
        middle, near = lost_words(truth.heard[:hops, track] & (cut > LOST_DB))
        every = np.arange(hops) % EVERY == 0
        possible = (cut > LOST_DB) & ~activity.own[:hops, track] & others & programme
        features = np.stack(list(doubt.word_features(activity, track).values()), axis=1)[:hops]
        kept = possible & (middle | (every & ~near))
        words.append((features[kept], middle[kept]))
        features = np.stack(list(doubt.bleed_features(activity, m, track).values()), axis=1)[:hops]
        kept = (cut < OPEN_DB) & programme & every
        bleeds.append((features[kept], truth.only_bleed[:hops, track][kept]))
    return pooled(words), pooled(bleeds)


def lost_words(lost: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The middles of lost words, and all that lies near a lost run, each of shape (hops,)."""
    middle, near = np.zeros(len(lost), bool), np.zeros(len(lost), bool)
    for _, first, after in runs(lost[:, None], SHORTEST_HOPS):
        near[max(0, first - EVERY) : after + EVERY] = True
        if after - first >= WORD_HOPS:
            at = (first + after) // 2
            middle[at - MIDDLE_HOPS : at + MIDDLE_HOPS + 1] = True
    return middle, near


def pooled(parts: list[Examples]) -> Examples:
    """All examples one after the other."""
    return np.concatenate([x for x, _ in parts]), np.concatenate([y for _, y in parts])


def regression(x: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, float]:
    """Weights of the features and offset of a logistic regression."""
    mean, spread = x.mean(axis=0, dtype=np.float64), x.std(axis=0, dtype=np.float64) + 1e-9
    scaled = np.column_stack([(x - mean) / spread, np.ones(len(x))])
    weights = np.zeros(scaled.shape[1])
    ridge = RIDGE * len(x) * np.diag([*np.full(x.shape[1], 1e-3), 0.0])
    for _ in range(STEPS):
        likely = 1 / (1 + np.exp(-np.clip(scaled @ weights, -30, 30)))
        slope = scaled.T @ (y - likely) - ridge @ weights
        weights = weights + np.linalg.solve((scaled.T * (likely * (1 - likely))) @ scaled + ridge + 1e-6 * np.eye(
            len(weights)), slope)
    plain = weights[:-1] / spread
    return plain, float(weights[-1] - plain @ mean)


def jobs() -> Iterator[tuple[Condition, int, int]]:
    """Every conversation that is learnt from."""
    for condition in CONDITIONS:
        for which in range(len(condition.specs)):
            yield from ((condition, which, seed) for seed in range(FIRST_SEED, FIRST_SEED + SEEDS))
    for which in range(len(ANSWERING.specs)):
        yield from ((ANSWERING, which, seed) for seed in ANSWERING_SEEDS)


def constants(name: str, features: list[str], found: Examples) -> str:
    """The lines for leveller/doubt.py."""
    weights, offset = regression(*found)
    said = ", ".join(f'"{f}": {w:.3g}' for f, w in zip(features, weights, strict=True))
    return f"# {len(found[1])} examples, {int(found[1].sum())} of them mistakes\n" \
           f"{name}_WEIGHTS = {{{said}}}\n{name}_OFFSET = {offset:.3g}"


def main() -> None:
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--jobs", type=int, default=2, metavar="N", help="processes (default 2)")
    with ProcessPoolExecutor(parser.parse_args().jobs) as pool:
        found = list(pool.map(examples, *zip(*jobs(), strict=True)))
    print(constants("WORD", list(doubt.WORD_WEIGHTS), pooled([words for words, _ in found])))
    print(constants("BLEED", list(doubt.BLEED_WEIGHTS), pooled([bleeds for _, bleeds in found])))


if __name__ == "__main__":
    main()
