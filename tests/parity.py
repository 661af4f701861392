"""Block size never changes an answer: one helper for every meter and for the renderer.

`blocks` cuts a signal; `assert_block_parity` runs a fresh meter over each cut and compares the results to the last bit,
field by field, and holds that a meter does not write into what it is given.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Iterator, Sequence
from typing import Any

import numpy as np

BLOCK_FRAMES = (997, 4800, 48_000, 10**9)  # odd, a hop multiple, a second, everything at once


def blocks(signal: np.ndarray, frames: int | Sequence[int]) -> Iterator[np.ndarray]:
    """The signal in blocks of one length, or of the lengths in turn."""
    lengths = [frames] if isinstance(frames, int) else list(frames)
    at = turn = 0
    while at < len(signal):
        yield signal[at : at + lengths[turn % len(lengths)]]
        at += lengths[turn % len(lengths)]
        turn += 1


def run_meter(meter: Any, signal: np.ndarray, frames: int | Sequence[int]) -> Any:
    """The meter's result over the signal in such blocks."""
    for block in blocks(signal, frames):
        meter.push(block)
    return meter.result()


def assert_block_parity(
    make_meter: Callable[[], Any], signal: np.ndarray, sizes: Sequence[int | Sequence[int]] = BLOCK_FRAMES
) -> Any:
    """All block sizes give the same bits; returns the result."""
    before = signal.copy()
    first, *others = [run_meter(make_meter(), signal, size) for size in sizes]
    assert others, "one block size proves nothing"
    for size, other in zip(sizes[1:], others, strict=True):
        assert_same_bits(first, other, f"blocks of {size} against {sizes[0]}")
    assert np.array_equal(signal, before), "the meter wrote into its input"
    return first


def assert_same_bits(one: Any, other: Any, where: str) -> None:
    """Equal to the last bit, through dataclasses, tuples and arrays."""
    assert type(one) is type(other), where
    if dataclasses.is_dataclass(one):
        for field in dataclasses.fields(one):
            assert_same_bits(getattr(one, field.name), getattr(other, field.name), f"{where}: {field.name}")
    elif isinstance(one, np.ndarray):
        assert (one.dtype, one.shape) == (other.dtype, other.shape), where
        assert one.tobytes() == other.tobytes(), where
    elif isinstance(one, (tuple, list)):
        assert len(one) == len(other), where
        for index, (a, b) in enumerate(zip(one, other, strict=True)):
            assert_same_bits(a, b, f"{where}[{index}]")
    else:
        assert one == other, where
