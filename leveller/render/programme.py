"""A sum of stems on its way to the mix: walked block by block, as often as its delivery needs.

Each kind of programme yields its blocks after make-up and limiter (`delivered`): a spilled sum as it is, float stems
that take the make-up gain in place while they are summed, or stems of 24 bit that are limited like the mix.
"""

from __future__ import annotations

from collections.abc import Generator, Sequence
from contextlib import ExitStack
from pathlib import Path
from typing import Protocol

import numpy as np
import numpy.typing as npt

from leveller.audio import FloatSpill, FloatWav, WavWriter
from leveller.lanes import walk
from leveller.measure.peaks import peak_cell_frames
from leveller.render.limiter import MakeUp, apply_nodes
from leveller.session import Session
from leveller.units import db_to_gain

Samples = npt.NDArray[np.float32]
Blocks = Generator[Samples, None, None]  # to be closed before what it reads and writes


class Programme(Protocol):
    """A sum that can be walked more than once."""

    @property
    def frames(self) -> int: ...

    def delivered(self, make_up: MakeUp) -> Blocks:
        """Its blocks from the start, after make-up and limiter."""


class SpilledSum:
    """A sum that is kept in a temporary file, since it can be made only once; a context manager."""

    def __init__(self, path: Path, rate_hz: int, channels: int, block_frames: int) -> None:
        self._spill = FloatSpill(path, channels)
        self._block_frames, self._cell_frames = block_frames, peak_cell_frames(rate_hz)

    def __enter__(self) -> SpilledSum:
        return self

    def __exit__(self, *_: object) -> None:
        self._spill.close()

    @property
    def frames(self) -> int:
        """Frames so far."""
        return self._spill.frames

    def append(self, block: Samples) -> None:
        """Add the next block."""
        self._spill.append(block)

    def delivered(self, make_up: MakeUp) -> Blocks:
        """As `Programme`."""
        at = 0
        for block in self._spill.blocks(self._block_frames):
            yield apply_nodes(block, make_up.nodes_db, first_frame=at, cell_frames=self._cell_frames,
                              make_up_db=make_up.make_up_db)
            at += len(block)


class ScaledStems:
    """Stems that take the make-up gain in place while they are summed; a context manager.

    They add up to the mix before the limiter.
    """

    def __init__(self, paths: Sequence[Path], session: Session, block_frames: int) -> None:
        self.frames = session.frames
        self._block_frames, self._cell_frames = block_frames, peak_cell_frames(session.rate_hz)
        self._gain = 1.0  # that the stems have by now
        self._open = ExitStack()
        self._files = [self._open.enter_context(FloatWav(path, session.mix_channels)) for path in paths]

    def __enter__(self) -> ScaledStems:
        return self

    def __exit__(self, *_: object) -> None:
        self._open.close()

    def delivered(self, make_up: MakeUp) -> Blocks:
        """As `Programme`; a second walk takes the stems from the first one's gain to its own."""
        wanted = float(db_to_gain(make_up.make_up_db))
        factor = np.float32(wanted / self._gain)
        for file in self._files:
            file.rewind()

        def step(lane: int, block: int) -> Samples:
            scaled = self._files[lane].read(self._block_frames)
            scaled *= factor
            self._files[lane].put_back(scaled)
            return scaled

        blocks = -(-self.frames // self._block_frames)
        with walk(step, lanes=len(self._files), blocks=blocks) as rows:
            for block, row in enumerate(rows):
                yield apply_nodes(summed(row), make_up.nodes_db, first_frame=block * self._block_frames,
                                  cell_frames=self._cell_frames, make_up_db=0.0)
        self._gain = wanted

    def keep(self) -> None:
        """Nothing is delivered any more: the stems are where they belong."""


class LimitedStems:
    """Stems of 24 bit with make-up and the limiter's gain, which add up to the mix; a context manager.

    They are written beside the float ones and put in their place in the end.
    """

    def __init__(self, paths: Sequence[Path], session: Session, block_frames: int) -> None:
        self.frames = session.frames
        self._paths, self._rate_hz, self._channels = paths, session.rate_hz, session.mix_channels
        self._block_frames = block_frames

    def __enter__(self) -> LimitedStems:
        return self

    def __exit__(self, *_: object) -> None:
        pass

    def delivered(self, make_up: MakeUp) -> Blocks:
        """As `Programme`; each walk writes the stems anew."""
        cell_frames = peak_cell_frames(self._rate_hz)
        with ExitStack() as stack:
            files = [stack.enter_context(FloatWav(path, self._channels)) for path in self._paths]
            writers = [stack.enter_context(WavWriter(_limited(path), self._rate_hz, self._channels, "pcm24",
                                                     expected_frames=self.frames)) for path in self._paths]

            def step(lane: int, block: int) -> Samples:
                limited = apply_nodes(
                    files[lane].read(self._block_frames), make_up.nodes_db, first_frame=block * self._block_frames,
                    cell_frames=cell_frames, make_up_db=make_up.make_up_db)
                writers[lane].write(limited)
                return limited

            with walk(step, lanes=len(files), blocks=-(-self.frames // self._block_frames)) as rows:
                for row in rows:
                    yield summed(row)

    def keep(self) -> None:
        """Nothing is delivered any more: put the stems in place."""
        for path in self._paths:
            _limited(path).replace(path)


def _limited(path: Path) -> Path:
    """Where a limited stem is written."""
    return path.with_suffix(".limited")


def summed(row: Sequence[Samples]) -> Samples:
    """The sum of one block of all lanes, in their order, in a new array."""
    total = row[0].copy()
    for stem in row[1:]:
        total += stem
    return total
