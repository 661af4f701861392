"""Cuts a stream of blocks into pieces of fixed length that lie on the absolute frame grid.

Purpose: a meter whose arithmetic runs over whole pieces gives the same bytes whatever the block size, also where the
order of a sum matters (matrix products, means). Three meters use it.

Conventions: blocks are `(frames,)` or `(frames, channels)`; a piece is `(channels, before + frames + after)` float32,
each channel contiguous. `before` and `after` are frames of context that neighbouring pieces share; before the start
and after the end there are zeros.

Method: one buffer of a piece's length is filled; when full it is handed out, and its context moves to the front.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
import numpy.typing as npt

Piece = npt.NDArray[np.float32]
_TOGETHER = 120


def as_columns(block: npt.NDArray[Any], channels: int) -> npt.NDArray[Any]:
    """The block as (frames, channels); ValueError where the channel count differs."""
    columns = block[:, None] if block.ndim == 1 else block
    if columns.ndim != 2 or columns.shape[1] != channels:
        raise ValueError(f"block of shape {block.shape}, but the meter was opened for {channels} channel(s)")
    return columns


class Pieces:
    """Fixed-length pieces of a stream, with context on both sides."""

    def __init__(self, frames: int, channels: int, *, before: int, after: int = 0) -> None:
        self.frames = frames
        self.channels = channels
        self._before = before
        self._shared = before + after
        self._buffer = np.zeros((channels, frames + self._shared), np.float32)
        self._filled = before

    def push(self, block: npt.NDArray[Any]) -> Iterator[Piece]:
        """Take a block and yield the pieces it completes; a piece is a view, valid until the next one."""
        columns = as_columns(block, self.channels)
        length = self._buffer.shape[1]
        at = 0
        while at < len(columns):
            take = min(length - self._filled, len(columns) - at)
            self._buffer[:, self._filled : self._filled + take] = columns[at : at + take].T
            self._filled += take
            at += take
            if self._filled == length:
                yield self._buffer
                self._buffer[:, : self._shared] = self._buffer[:, self.frames :].copy()
                self._filled = self._shared

    def rest(self) -> Iterator[tuple[Piece, int]]:
        """Yield what is left as (piece padded with zeros, its own frames); the stream may go on afterwards."""
        left = self._filled - self._before
        padded = np.zeros((self.channels, 2 * self.frames + self._shared), np.float32)
        padded[:, : self._filled] = self._buffer[:, : self._filled]
        for start in range(0, left, self.frames):
            yield padded[:, start : start + self.frames + self._shared], min(self.frames, left - start)


class Grown:
    """Rows that come in small arrays, kept in few large ones: many small ones would fragment the memory for good."""

    def __init__(self) -> None:
        self._large: list[npt.NDArray[Any]] = []
        self._small: list[npt.NDArray[Any]] = []

    def append(self, rows: npt.NDArray[Any]) -> None:
        """Add rows at the end."""
        self._small.append(rows)
        if len(self._small) == _TOGETHER:
            self._large.append(np.concatenate(self._small))
            self._small.clear()

    def take(self) -> list[npt.NDArray[Any]]:
        """All arrays so far in order; they are forgotten here."""
        out = self.rows()
        self._large, self._small = [], []
        return out

    def rows(self, *more: npt.NDArray[Any]) -> list[npt.NDArray[Any]]:
        """All arrays so far in order, then `more`; ready to be concatenated."""
        return [*self._large, *self._small, *more]
