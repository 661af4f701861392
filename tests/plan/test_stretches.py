"""leveller.plan.stretches: flags into stretches and back."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from leveller.plan.stretches import flagged, stretches, without_short_gaps

FLAGS = st.lists(st.booleans(), max_size=60).map(lambda bits: np.array(bits, bool))


@given(flags=FLAGS)
@settings(max_examples=100, deadline=None, derandomize=True)
def test_there_and_back(flags: np.ndarray) -> None:
    """The stretches of flags, flagged, are the flags; they are in order and do not touch."""
    spans = stretches(flags)
    assert np.array_equal(flagged(spans, len(flags)), flags)
    assert (spans[:, 0] < spans[:, 1]).all()
    assert (spans[1:, 0] > spans[:-1, 1]).all()


def test_stretches_may_overlap_and_pass_the_ends() -> None:
    """Overlapping stretches join, and what lies outside is cut."""
    assert flagged(np.array([[-3, 2], [1, 4], [8, 99]]), 10).tolist() == [True] * 4 + [False] * 4 + [True] * 2


@given(flags=FLAGS, hops=st.integers(0, 8))
@settings(max_examples=100, deadline=None, derandomize=True)
def test_short_gaps_are_filled_and_nothing_else(flags: np.ndarray, hops: int) -> None:
    """Inner gaps of fewer hops are gone, all other flags are as they were, the ends stay."""
    found = without_short_gaps(flags, hops)
    for first, after in stretches(~flags):
        inner = first > 0 and after < len(flags)
        assert (found[first:after] == (inner and after - first < hops)).all()
    assert found[flags].all()
