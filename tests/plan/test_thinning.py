"""leveller.plan.thinning: fewest rows within a tolerance."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leveller.plan.thinning import kept_rows

SLACK_DB = 1e-9  # float64


def rebuilt(curves: np.ndarray, rows: np.ndarray) -> np.ndarray:
    """The curves as lines between the rows kept."""
    at = np.arange(len(curves))
    return np.stack([np.interp(at, rows, curve[rows]) for curve in curves.T], axis=1)


@given(seed=st.integers(0, 10**6), rows=st.integers(1, 300), curves=st.integers(1, 5),
       tolerance=st.sampled_from([0.01, 0.08, 1.0]))
@settings(max_examples=60, deadline=None, derandomize=True)
def test_no_curve_strays_further_than_the_tolerance(seed: int, rows: int, curves: int, tolerance: float) -> None:
    """Random walks rebuilt from the rows kept are within the tolerance at every edge; both ends are kept."""
    walk = np.cumsum(np.random.default_rng(seed).normal(0, 0.1, (rows, curves)), axis=0)
    kept = kept_rows(walk, tolerance)
    assert kept[0] == 0
    assert kept[-1] == rows - 1
    assert (np.diff(kept) > 0).all()
    assert np.abs(rebuilt(walk, kept) - walk).max() <= tolerance + SLACK_DB


def test_a_line_needs_its_ends_and_a_corner_one_more() -> None:
    """A steady gain or a ramp is two rows; a ramp down and up is three, at the very corner."""
    assert kept_rows(np.zeros((1000, 4)), 0.08).tolist() == [0, 999]
    assert kept_rows(np.linspace(0, -18, 1001)[:, None], 0.08).tolist() == [0, 1000]
    corner = np.r_[np.linspace(0, -18, 17), np.linspace(-18, 0, 9)[1:]][:, None]
    assert kept_rows(corner, 0.08).tolist() == [0, 16, 24]


def test_all_curves_share_their_rows() -> None:
    """A corner of one curve is a row of all."""
    curves = np.zeros((101, 3))
    curves[:51, 1] = np.linspace(0, 5, 51)
    curves[50:, 1] = 5
    assert kept_rows(curves, 0.08).tolist() == [0, 50, 100]


@pytest.mark.parametrize("rows", [1, 2])
def test_nothing_to_thin(rows: int) -> None:
    """One or two rows stay."""
    assert kept_rows(np.ones((rows, 4)), 0.1).tolist() == list(range(rows))
