"""leveller.measure.outline: the largest magnitude of each cell, at any block size."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from parity import assert_block_parity

from leveller.measure.outline import Outline, hop_outline
from leveller.units import hop_to_frame

RATES_HZ = (8000, 11_025, 22_050, 44_100, 48_000, 96_000)


@pytest.mark.parametrize("rate_hz", RATES_HZ)
@pytest.mark.parametrize("channels", [1, 2])
def test_each_hop_has_its_largest_magnitude(rate_hz: int, channels: int) -> None:
    """Hop by hop it is the largest magnitude over both channels between the hop's frames, whatever the blocks."""
    noise = np.random.default_rng(rate_hz).normal(size=(round(1.237 * rate_hz), channels)).astype(np.float32)
    signal = noise[:, 0] if channels == 1 else noise
    outline = assert_block_parity(lambda: hop_outline(len(signal), rate_hz), signal)
    edges = [*hop_to_frame(np.arange(len(outline)), rate_hz).tolist(), len(signal)]
    assert edges[-2] < len(signal) <= hop_to_frame(len(outline), rate_hz)
    expected = [np.abs(noise[first:after]).max() for first, after in itertools.pairwise(edges)]
    assert outline.tolist() == [float(value) for value in expected]


def test_cells_of_a_whole_number_of_frames() -> None:
    """Cells of 5 frames: 12 frames are three cells, the last of two frames."""
    signal = np.float32([0, 1, -2, 0, 0, 3, 0, 0, 0, -1, 0, -4])
    assert assert_block_parity(lambda: Outline(len(signal), (5, 1)), signal, (1, 3, 5, 12)).tolist() == [2, 3, 4]


def test_what_was_not_pushed_is_silence() -> None:
    """A file that ends early leaves zeros; an empty block changes nothing."""
    outline = Outline(20, (5, 1))
    outline.push(np.float32([1, 1]))
    outline.push(np.zeros(0, np.float32))
    assert outline.result().tolist() == [1, 0, 0, 0]
