"""leveller.attribute.seeds: the first labels, from arrival times or from levels."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import conditions
import numpy as np
import pytest
import scoring
import sounds
from conversations import Conversation, ConversationSpec, simulate

from leveller.attribute import _audible
from leveller.attribute.floor import noise_floor
from leveller.attribute.seeds import NOBODY, first_labels
from leveller.measure import Measurements, measure
from leveller.measure.arrival import Arrivals

RIGHT_SHARE = 0.97  # a choice of ours; the rounds that follow take a median and stand a few strays
SPEC = ConversationSpec(rate_hz=16_000, seconds=40.0, seed=41, voices=sounds.HELD_OUT, empty=1)


def measured(spec: ConversationSpec, folder: Path) -> tuple[Conversation, Measurements]:
    spoken = conditions.with_headroom(simulate(spec))
    return spoken, measure(conditions.opened(spoken, folder))


@pytest.fixture(scope="module")
def table(tmp_path_factory: pytest.TempPathFactory) -> tuple[Conversation, Measurements]:
    """Three people and a spare microphone."""
    return measured(SPEC, tmp_path_factory.mktemp("seeds"))


def labels_of(m: Measurements, programme: np.ndarray | None = None) -> np.ndarray:
    programme = np.ones(m.hops, bool) if programme is None else programme
    return first_labels(m, _audible(m, noise_floor(m.levels)), programme)


def right_share(labels: np.ndarray, spoken: Conversation) -> float:
    """Of the labelled hops, how many lie in what the named person really said, give or take 50 ms."""
    truth = scoring.truth_of(spoken)
    events = [(e.mic, (e.from_s, e.to_s)) for e in spoken.events if e.kind in ("laugh", "cough", "short answer")]
    near = np.stack([scoring._widened(truth.speaking[:, m] | scoring.mask(
        [*spoken.breaths[m], *(span for mic, span in events if mic == m)], spoken.hops), 5, 5)
        for m in range(truth.speaking.shape[1])], axis=1)
    at = np.flatnonzero(labels[: spoken.hops] != NOBODY)
    return float(near[at, labels[at]].mean())


def without_arrivals(m: Measurements) -> Measurements:
    """As if the microphones ran on clocks of their own."""
    pairs = m.arrivals.pairs
    none = Arrivals(np.zeros(0, np.int64), np.zeros((0, m.levels.shape[1]), np.float32),
                    np.zeros((0, len(pairs)), np.int16), np.zeros((0, len(pairs)), np.float32), pairs,
                    np.zeros(len(pairs), np.float32))
    return dataclasses.replace(m, arrivals=none)


def test_seeds_by_arrival_are_right(table: tuple[Conversation, Measurements]) -> None:
    """Everybody has a second of seeds or more, nearly all of them true; the spare microphone has none."""
    spoken, m = table
    labels = labels_of(m)
    counts = [np.count_nonzero(labels == mic) for mic in range(4)]
    assert min(counts[:3]) > 100
    assert counts[3] == 0
    assert right_share(labels, spoken) > RIGHT_SHARE


def test_seeds_by_level_are_right(tmp_path: Path) -> None:
    """Without usable arrivals, levels alone name the right person."""
    spoken, m = measured(dataclasses.replace(SPEC, empty=0), tmp_path)
    labels = labels_of(without_arrivals(m))
    assert min(np.count_nonzero(labels == mic) for mic in range(3)) > 100
    assert right_share(labels, spoken) > 0.9


def test_what_is_no_programme_has_no_seed(table: tuple[Conversation, Measurements]) -> None:
    """Beyond two hops of its edge, a stretch left out has no label, by arrival nor by level."""
    _, m = table
    programme = np.ones(m.hops, bool)
    programme[1000:2000] = False
    for found in (labels_of(m, programme), labels_of(without_arrivals(m), programme)):
        assert (found[1002:1998] == NOBODY).all()
        assert (found != NOBODY).any()


def test_silence_has_no_seed() -> None:
    """Nothing sounds, nobody is named."""
    hops = 300
    silent = np.full((hops, 2, 14), -32768, np.int16)
    lone = np.full((hops, 2), -32768, np.int16)
    arrivals = Arrivals(np.arange(20) * 10, np.zeros((20, 2), np.float32), np.zeros((20, 1), np.int16),
                        np.zeros((20, 1), np.float32), ((0, 1),), np.zeros(1, np.float32))
    m = Measurements(silent, lone, lone, lone, np.zeros((hops, 2), bool), arrivals, (), (0, 0))
    assert (labels_of(m) == NOBODY).all()
