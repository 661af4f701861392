"""leveller.render.gain: breakpoints onto samples, linear in dB, the same bits wherever the blocks are cut."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leveller.plan import TrackGain
from leveller.render.gain import GainCurve, hop_gains_db
from leveller.units import hop_to_frame

FLOAT_DB = 1e-4  # float32 of gains up to 120 dB and of exp


def gain_of(rows: list[tuple[int, float]]) -> TrackGain:
    """Breakpoints (hop, dB)."""
    hop = np.array([row[0] for row in rows], np.int64)
    cdb = np.array([round(100 * row[1]) for row in rows], np.int32)
    parts = np.zeros((len(rows), 4), np.int32)
    parts[:, 0] = cdb
    return TrackGain(hop, parts, cdb, np.zeros(len(rows), np.int8), np.zeros(len(rows), np.int8))


def expected_db(rows: list[tuple[int, float]], hops: int, rate_hz: int) -> np.ndarray:
    """The gain of every frame: between two rows a straight line in dB, in equal parts of each hop."""
    edges = hop_to_frame(np.arange(hops + 1), rate_hz)
    out = np.empty(edges[-1])
    for hop in range(hops):
        before = [row for row in rows if row[0] <= hop][-1]
        after = next(row for row in rows if row[0] > hop)
        part = hop + np.arange(edges[hop + 1] - edges[hop]) / (edges[hop + 1] - edges[hop])
        slope = (after[1] - before[1]) / (after[0] - before[0])
        out[edges[hop] : edges[hop + 1]] = before[1] + slope * (part - before[0])
    return out


ROWS = [(0, -3.0), (20, -3.0), (36, -21.0), (60, -21.0), (60, 2.5), (68, 2.5), (69, 0.0), (100, -1.0)]


@pytest.mark.parametrize("rate_hz", [8000, 16_000, 22_050, 44_100, 48_000])
def test_between_rows_the_gain_is_a_line_in_db(rate_hz: int) -> None:
    """Every frame has the gain that the rows say, at rates whose hops have a whole number of frames and others."""
    frames = int(hop_to_frame(100, rate_hz))
    found = GainCurve(gain_of(ROWS), 100, rate_hz).apply(np.ones(frames, np.float32), 0)
    assert 20 * np.log10(found) == pytest.approx(expected_db(ROWS, 100, rate_hz), abs=FLOAT_DB)


def test_a_step_takes_effect_with_its_hop() -> None:
    """Two rows at one hop: the frame before has the old gain, the first frame of the hop the new one."""
    found = GainCurve(gain_of([(0, 0.0), (10, 0.0), (10, -20.0), (20, -20.0)]), 20, 16_000).apply(
        np.ones(3200, np.float32), 0)
    assert found[1599] == 1
    assert found[1600] == pytest.approx(0.1, rel=1e-6)


@given(seed=st.integers(0, 10**6), rate_hz=st.sampled_from([16_000, 22_050, 44_100, 48_000]), wide=st.booleans(),
       cuts=st.lists(st.integers(1, 99), max_size=6, unique=True))
@settings(max_examples=40, deadline=None, derandomize=True)
def test_blocks_may_be_cut_at_any_hop(seed: int, rate_hz: int, wide: bool, cuts: list[int]) -> None:
    """The same bits in one block or in many, of one channel or two, also where the last hop is not whole."""
    rng = np.random.default_rng(seed)
    hops = np.r_[0, np.sort(rng.choice(np.arange(1, 100), 8, replace=False)), 100]
    rows = list(zip(hops.tolist(), rng.uniform(-40, 20, 10).tolist(), strict=True))
    curve = GainCurve(gain_of(rows), 100, rate_hz)
    frames = int(hop_to_frame(100, rate_hz)) - int(rng.integers(0, rate_hz // 100))
    block = rng.normal(0, 0.1, (frames, 2) if wide else frames).astype(np.float32)
    edges = [0, *sorted(cuts), 100]
    at = [min(int(hop_to_frame(edge, rate_hz)), frames) for edge in edges]
    parts = [curve.apply(block[a:b], first) for a, b, first in zip(at, at[1:], edges, strict=False)]
    assert np.concatenate(parts).tobytes() == curve.apply(block, 0).tobytes()


def test_no_gain_changes_no_bit() -> None:
    """0 dB throughout gives the source back, in an array of its own."""
    block = np.random.default_rng(1).normal(0, 0.1, 16_000).astype(np.float32)
    found = GainCurve(gain_of([(0, 0.0), (100, 0.0)]), 100, 16_000).apply(block, 0)
    assert found.tobytes() == block.tobytes()
    assert not np.shares_memory(found, block)


def test_hop_gains_are_the_lines_at_hop_edges() -> None:
    """Start and end of every hop; a step is the end of one and the start of the next."""
    start, end = hop_gains_db(gain_of(ROWS), 100)
    assert start[0] == -3
    assert end[59] == -21
    assert start[60] == 2.5
    assert (start[28], end[27]) == (-12, -12)
    assert end[99] == -1


def test_an_empty_block_stays_empty() -> None:
    """Nothing in, nothing out."""
    assert len(GainCurve(gain_of(ROWS), 100, 16_000).apply(np.empty(0, np.float32), 50)) == 0
