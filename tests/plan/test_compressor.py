"""leveller.plan.compressor: smoothing in the log domain, own speech only."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leveller.plan.compressor import compressor_nodes_db
from leveller.settings import Compressor
from leveller.units import HOPS_PER_S

GONE = 1 - 1 / math.e  # after one time constant: JAES 60(6), 2012
HARD = Compressor(threshold_db=0.0, ratio=2.0, knee_db=0.0, attack_s=0.05, release_s=0.2, most_db=12.0)


def nodes(level_db: np.ndarray, own: np.ndarray | None = None, how: Compressor = HARD) -> np.ndarray:
    level_db = np.asarray(level_db, np.float32)
    own = np.ones(len(level_db), bool) if own is None else own
    return compressor_nodes_db(level_db, own, settings=how)


def test_attack_and_release_are_time_constants() -> None:
    """8 dB over at 2:1 wants -4 dB: after the attack time 1 - 1/e of it is there, after the release time it has gone.

    The gain of a hop is reached at the hop's start, so n hops of smoothing are behind node n - 1.
    """
    level = np.r_[np.full(100, -30.0), np.full(200, 8.0), np.full(200, -30.0)]
    found = nodes(level)
    attack, release = round(HARD.attack_s * HOPS_PER_S), round(HARD.release_s * HOPS_PER_S)
    assert found[100 + attack - 1] == pytest.approx(-4 * GONE, abs=1e-3)
    assert found[299] == pytest.approx(-4, abs=1e-3)
    assert found[300 + release - 1] == pytest.approx(-4 * (1 - GONE), abs=1e-3)


def test_it_looks_ahead_by_one_hop_and_no_further() -> None:
    """The gain starts to move at the very edge where the loud hop begins, from nothing before it."""
    found = nodes(np.r_[np.full(50, -30.0), np.full(50, 8.0)])
    assert not found[:50].any()
    assert found[50] < 0


def test_only_own_speech_drives_it() -> None:
    """Loud bleed and loud pauses leave the gain at 0, and it returns to 0 after own speech."""
    level = np.full(400, 10.0)
    own = np.zeros(400, bool)
    assert not nodes(level, own).any()
    own[100:150] = True
    found = nodes(level, own)
    assert found[149] < -3
    assert found[-1] == 0


@given(level=st.lists(st.floats(-60, 40), min_size=1, max_size=60), most=st.floats(0, 12), ratio=st.floats(1, 20))
@settings(max_examples=60, deadline=None, derandomize=True)
def test_gains_stay_within_limits(level: list[float], most: float, ratio: float) -> None:
    """Never above 0, never deeper than `most_db`, one node more than hops."""
    found = nodes(np.float32(level), how=replace(HARD, most_db=most, ratio=ratio))
    assert len(found) == len(level) + 1
    assert found.max() <= 0
    assert found.min() >= -most - 1e-5


def test_off_is_off() -> None:
    """Switched off, or at 1:1, it does nothing."""
    loud = np.full(50, 30.0)
    assert not nodes(loud, how=replace(HARD, enabled=False)).any()
    assert not nodes(loud, how=replace(HARD, ratio=1.0)).any()


def test_nothing_in_nothing_out() -> None:
    """No hops give one node of 0 dB."""
    assert nodes(np.zeros(0)).tolist() == [0.0]
