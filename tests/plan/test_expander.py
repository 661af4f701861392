"""leveller.plan.expander: when a microphone opens and closes, and how deep."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leveller.plan.expander import EARLY_S, auto_range_db, expander_nodes_db, opened
from leveller.plan.stretches import stretches
from leveller.settings import Expander
from leveller.units import HOPS_PER_S

CLEAN_DB = 24.0  # the promise of `expander.range_db = "auto"` (settings): bleed so far under the voice
AUTO_DB = (6.0, 18.0)  # the same promise
HOW = Expander()
AHEAD, HOLD = round(HOW.lookahead_s * HOPS_PER_S), round(HOW.hold_s * HOPS_PER_S)
ATTACK, RELEASE = round(HOW.attack_s * HOPS_PER_S), round(HOW.release_s * HOPS_PER_S)
EARLY = round(EARLY_S * HOPS_PER_S)


def speaking(hops: int, *spans: list[tuple[int, int]]) -> np.ndarray:
    """Own speech of several tracks, from and to in hops."""
    own = np.zeros((hops, len(spans)), bool)
    for track, part in enumerate(spans):
        for first, after in part:
            own[first:after, track] = True
    return own


def spans_of(own: np.ndarray, *, lone: bool = False) -> list[list[list[int]]]:
    found = opened(own, settings=HOW, lone=lone)
    return [stretches(column).tolist() for column in found.T]


def test_it_opens_before_and_holds_after_the_voice_while_another_speaks() -> None:
    """Under somebody else's speech it is open from look-ahead before to hold after the voice, exactly."""
    own = speaking(1000, [(400, 500)], [(0, 1000)])
    assert spans_of(own)[0] == [[400 - AHEAD, 500 + HOLD]]


def test_the_last_microphone_stays_open_through_a_pause() -> None:
    """It closes as the next voice starts, its release done by then; the next one opens up to `EARLY_S` early."""
    own = speaking(1000, [(100, 300)], [(600, 800)])
    first, second = spans_of(own)
    assert first == [[0, 600 - RELEASE]]
    assert second == [[600 - EARLY, 1000]]


def test_something_is_open_at_every_moment() -> None:
    """When all are silent a microphone is open, so that the room tone stays."""
    rng = np.random.default_rng(1)
    for _ in range(20):
        edges = np.sort(rng.choice(np.arange(10, 2990), 12, replace=False))
        own = speaking(3000, *[[(int(edges[k]), int(edges[k + 1])) for k in range(t, 12, 6)] for t in (0, 2, 4)])
        found = opened(own, settings=HOW, lone=False)
        closing = np.stack([np.convolve(column, np.ones(RELEASE + 1))[: len(column)] > 0 for column in found.T], axis=1)
        assert closing.any(axis=1).all()
        assert found[own].all()


def test_short_gaps_stay_open() -> None:
    """A gap between two phrases that leaves less than 0.4 s closed stays open, a longer one closes."""
    talk = [(0, 3000)]
    close = speaking(3000, [(500, 600), (600 + AHEAD + HOLD + 39, 800)], talk)
    apart = speaking(3000, [(500, 600), (600 + AHEAD + HOLD + 40, 800)], talk)
    assert len(spans_of(close)[0]) == 1
    assert len(spans_of(apart)[0]) == 2


def test_a_lone_microphone_closes_in_long_pauses_only() -> None:
    """With one microphone a pause that leaves a second or more closes, a shorter one does not."""
    short, long = (speaking(2000, [(100, 300), (300 + AHEAD + HOLD + gap, 900)]) for gap in (99, 100))
    assert spans_of(short, lone=True)[0] == [[100 - AHEAD, 900 + HOLD]]
    assert len(spans_of(long, lone=True)[0]) == 2


@given(seed=st.integers(0, 10**6), range_db=st.floats(0, 60), doubt=st.floats(-6, 20))
@settings(max_examples=40, deadline=None, derandomize=True)
def test_gain_is_between_the_range_and_nothing(seed: int, range_db: float, doubt: float) -> None:
    """Within -range to 0, 0 wherever it is open, ramps no steeper than attack and release allow."""
    open_ = np.repeat(np.random.default_rng(seed).random(12) < 0.5, 40)
    found = expander_nodes_db(open_, np.full(len(open_), doubt, np.float32), range_db=range_db, settings=HOW)
    assert len(found) == len(open_) + 1
    assert found.max() <= 0
    assert found.min() >= -range_db - 1e-5
    assert not found[:-1][open_].any()
    moves = np.diff(found)
    assert moves.max(initial=0) <= range_db / ATTACK + 1e-4
    assert moves.min(initial=0) >= -range_db / RELEASE - 1e-4


def test_ramps_take_attack_and_release() -> None:
    """Bleed where it was predicted gets the whole range: down over the release, up by the attack, ended as it opens."""
    open_ = np.ones(300, bool)
    open_[100:200] = False
    found = expander_nodes_db(open_, np.zeros(300, np.float32), range_db=18.0, settings=HOW)
    assert found[100] == 0
    assert found[100 + RELEASE] == -18
    assert found[200 - ATTACK] == -18
    assert found[200] == 0
    assert found[100 + RELEASE // 2] == pytest.approx(-9)


def test_a_doubtful_stretch_closes_by_a_part() -> None:
    """The more is heard over the predicted bleed, the less is cut; own voice (10 dB and more) is not cut at all."""
    open_ = np.zeros(200, bool)
    depths = [-float(expander_nodes_db(open_, np.full(200, over, np.float32), range_db=18.0, settings=HOW)[100])
              for over in (0.0, 2.0, 4.0, 6.0, 10.0)]
    assert depths[0] == 18
    assert depths[-1] == 0
    assert (np.diff(depths) < 0).all()


def test_off_or_without_range_nothing_moves() -> None:
    """Switched off or at 0 dB it does nothing."""
    closed, doubt = np.zeros(100, bool), np.zeros(100, np.float32)
    assert not expander_nodes_db(closed, doubt, range_db=18.0, settings=replace(HOW, enabled=False)).any()
    assert not expander_nodes_db(closed, doubt, range_db=0.0, settings=HOW).any()


def test_auto_brings_bleed_24_db_under_the_voice() -> None:
    """24 dB less what the coupling, after both trims, already gives; never under 6 nor over 18."""
    coupling = np.array([[0, -12, -30], [-14, 0, -2], [-60, -60, 0]], np.float32)
    heard, trims = np.array([500, 500, 3]), np.array([2.0, -1.0, 0.0], np.float32)
    found = auto_range_db(coupling, heard, trims)
    assert found[0] == pytest.approx(CLEAN_DB - 14 + 2 + 1)  # voice 1 at microphone 0; voice 2 was hardly heard
    assert found[1] == pytest.approx(CLEAN_DB - 12 - 1 - 2)
    assert found[2] == AUTO_DB[1]
    assert auto_range_db(coupling - 40 * (coupling < 0), heard, trims).tolist() == [AUTO_DB[0]] * 3


def test_a_lone_voice_gets_the_least_range() -> None:
    """Without others there is no bleed: 6 dB."""
    assert auto_range_db(np.zeros((1, 1), np.float32), np.array([900]), np.zeros(1, np.float32)).tolist() == [6.0]
