"""leveller.attribute.decode: evidence into states, against every path there is."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leveller.attribute.decode import CHANGE_COST, margins, sure_of

NATS = st.floats(-1.5, 1.5, allow_subnormal=False)


def best_paths(evidence: list[float], cost: float) -> list[float]:
    """Best path through own less best path through not own, for each hop, by trying all (Viterbi's definition)."""
    hops = len(evidence)
    best = {(hop, state): -np.inf for hop in range(hops) for state in (0, 1)}
    for path in itertools.product((0, 1), repeat=hops):
        changes = sum(a != b for a, b in itertools.pairwise(path))
        score = sum(e for e, state in zip(evidence, path, strict=True) if state) - cost * changes
        for hop, state in enumerate(path):
            best[hop, state] = max(best[hop, state], score)
    return [best[hop, 1] - best[hop, 0] for hop in range(hops)]


@given(evidence=st.lists(NATS, min_size=1, max_size=9), cost=st.floats(0.1, 4.0))
@settings(max_examples=60, deadline=None, derandomize=True)
def test_margins_are_those_of_the_best_of_all_paths(evidence: list[float], cost: float) -> None:
    """Forwards and backwards together give exactly what enumerating every path gives."""
    found = margins(np.float32(evidence)[:, None], cost=cost)[:, 0]
    exact = best_paths([float(np.float32(e)) for e in evidence], cost)
    assert found == pytest.approx(exact, abs=1e-5)


def test_a_stray_hop_changes_nothing_and_a_word_does() -> None:
    """Less evidence than two changes cost is overruled by its neighbours; more is not."""
    weak, strong = np.full((80, 1), -1.0, np.float32), np.full((80, 1), -1.0, np.float32)
    weak[40] = 1.5
    strong[40:44] = 1.5
    assert 1.5 < 2 * CHANGE_COST - 1 < 4 * 2.5
    assert not (margins(weak) > 0).any()
    assert np.flatnonzero(margins(strong)[:, 0] > 0).tolist() == [40, 41, 42, 43]


def test_tracks_are_decoded_alone() -> None:
    """A column's margins do not depend on the other columns."""
    evidence = np.random.default_rng(1).uniform(-1.5, 1.5, (200, 3)).astype(np.float32)
    together = margins(evidence)
    for track in range(3):
        assert np.array_equal(margins(evidence[:, track : track + 1])[:, 0], together[:, track])


def test_time_backwards_is_the_same() -> None:
    """Reversed evidence has the reversed margins: no direction is preferred."""
    evidence = np.random.default_rng(2).uniform(-1.5, 1.5, (200, 1)).astype(np.float32)
    assert margins(evidence[::-1])[::-1] == pytest.approx(margins(evidence), abs=1e-5)


def test_no_evidence_is_not_own() -> None:
    """Silence decides nothing, and nothing decided is not own speech."""
    assert not (margins(np.zeros((50, 2), np.float32)) > 0).any()


def test_sure_of_is_a_probability() -> None:
    """More than a coin at no margin, never falling with its size, under 1."""
    for sign in (-1, 1):
        found = sure_of(np.float32([1e-6, 0.5, 2, 4, 5, 8]) * np.float32(sign))
        assert found[0] > 0.5
        assert (np.diff(found) >= 0).all()
        assert found[-1] < 1

