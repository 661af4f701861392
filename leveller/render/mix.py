"""Stems and their sum, then make-up gain and limiter: no decisions about microphones, only what the plan says.

First pass, over the sources: each track is read, gets its gain and its place, and is written as a stem; the sum is only
measured (loudness, true peak). From these two readings the make-up gain is found without touching audio again
(`limiter.find_make_up`). Second pass, over the stems: each gets the make-up gain in place, and their sum, after the
limiter, is written as the mix. Its reading is that of the first sum, measured anew where the limiter was at work
(`remeter`); should loudness or true peak miss by more than the reading can tell, make-up or ceiling are corrected and
the pass repeated.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from contextlib import ExitStack, closing
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from leveller.audio import TrackReader, WavWriter, open_readers
from leveller.lanes import walk
from leveller.measure.loudness import Loudness, LoudnessMeter, short_term_lufs
from leveller.measure.peaks import TruePeakMeter, peak_cell_frames
from leveller.plan import GainPlan
from leveller.render.gain import GainCurve
from leveller.render.limiter import LimiterSummary, MakeUp, find_make_up, summarise
from leveller.render.programme import LimitedStems, Programme, ScaledStems, summed
from leveller.render.remeter import Remeter, Unlimited
from leveller.session import Session, Track
from leveller.settings import Delivery, Limiter

Samples = npt.NDArray[np.float32]
OnProgress = Callable[[str, float, float], None]

BLOCK_S = 8.0
LOUDNESS_SLACK_LU = 0.03
PEAK_SLACK_DB = 0.0005
MOST_ROUNDS = 4
LEVELS = ("before-limiter", "limited")


@dataclass(frozen=True)
class Mix:
    """The mix as written."""

    delivery: Delivery
    channels: int
    loudness: Loudness
    true_peak_dbtp: float
    true_peak_s: float
    make_up_db: float
    limiter_db: npt.NDArray[np.float32]  # gain at the edges of its cells
    cell_s: float
    limiting: LimiterSummary
    reason: str  # why the target is out of reach; empty where it is met

    @property
    def met(self) -> bool:
        """On target within 0.1 LU and not over the ceiling."""
        near = abs(self.loudness.integrated_lufs - self.delivery.target_lufs) <= 0.1
        return near and self.true_peak_dbtp <= self.delivery.ceiling_dbtp + 0.005

    @property
    def short_term_lufs(self) -> npt.NDArray[np.float64]:
        """Short-term loudness at the end of each hop from 3 s on."""
        return short_term_lufs(self.loudness.cells)


def render(
    session: Session, plan: GainPlan, work: Path, *, stems: str = LEVELS[0], on_progress: OnProgress,
    block_s: float = BLOCK_S,
) -> Mix:
    """Write `stems/` and `mix.wav` below `work`.

    Parameters
    ----------
    stems : "before-limiter" or "limited"
        Float stems that add up to the mix before the limiter, or 24-bit ones that add up to `mix.wav`.
    """
    frames = round(block_s * session.rate_hz)
    paths = [work / "stems" / f"{track.name}.wav" for track in session.tracks]
    paths[0].parent.mkdir(exist_ok=True)
    bus = Bus(session.rate_hz, session.mix_channels, session.frames)
    _write_stems(session, plan, paths, frames, bus, on_progress)
    kind = ScaledStems if stems == LEVELS[0] else LimitedStems
    with kind(paths, session, frames) as programme:
        mix = bus.deliver(work / "mix.wav", programme, session.delivery, session.settings.limiter, on_progress)
        programme.keep()
    return mix


class Bus:
    """The sum on its way to the mix: measured as it grows, then delivered."""

    def __init__(self, rate_hz: int, channels: int, frames: int) -> None:
        self._rate_hz, self._channels = rate_hz, channels
        self._cell_s = peak_cell_frames(rate_hz) / rate_hz
        self._loudness = LoudnessMeter(rate_hz, channels)
        self._peaks = TruePeakMeter(rate_hz, channels, frames=frames)

    def push(self, block: Samples) -> None:
        """Measure the next block of the sum."""
        self._loudness.push(block)
        self._peaks.push(block)

    def deliver(
        self, path: Path, programme: Programme, delivery: Delivery, limiter: Limiter, on_progress: OnProgress
    ) -> Mix:
        """Write the mix on target under the ceiling; the reading is of what was written."""
        before = Unlimited(self._loudness.cells(), self._peaks.cells())
        del self._loudness, self._peaks  # the sum is complete
        target, ceiling = delivery.target_lufs, delivery.ceiling_dbtp
        for _ in range(MOST_ROUNDS):
            make_up = find_make_up(before.cells, before.peak_cells, target_lufs=target, ceiling_dbtp=ceiling,
                                   settings=limiter, cell_s=self._cell_s)
            mix = self._write(path, programme, before, make_up, delivery, on_progress)
            off = delivery.target_lufs - mix.loudness.integrated_lufs
            over = mix.true_peak_dbtp - delivery.ceiling_dbtp
            if make_up.reason or not math.isfinite(off) or (abs(off) <= LOUDNESS_SLACK_LU and over <= PEAK_SLACK_DB):
                break
            target += off if abs(off) > LOUDNESS_SLACK_LU else 0.0
            ceiling -= max(0.0, over)
        return mix

    def _write(
        self, path: Path, programme: Programme, before: Unlimited, make_up: MakeUp, delivery: Delivery,
        on_progress: OnProgress,
    ) -> Mix:
        """One pass over the programme."""
        meter = Remeter(before, make_up.nodes_db, make_up.make_up_db, self._rate_hz, self._channels)
        total_s, done = programme.frames / self._rate_hz, 0
        with (WavWriter(path, self._rate_hz, self._channels, "pcm24", expected_frames=programme.frames) as writer,
              closing(programme.delivered(make_up)) as blocks):
            for block in blocks:
                writer.write(block)
                meter.push(block)
                done += len(block)
                on_progress("mix", done / self._rate_hz, total_s)
        peak_dbtp, peak_s = meter.true_peak()
        return Mix(delivery, self._channels, meter.loudness(), peak_dbtp, peak_s, make_up.make_up_db, make_up.nodes_db,
                   self._cell_s, summarise(make_up.nodes_db, cell_s=self._cell_s), make_up.reason)


def _write_stems(
    session: Session, plan: GainPlan, paths: list[Path], frames: int, bus: Bus, on_progress: OnProgress
) -> None:
    """One pass over the sources; the sum goes to the bus."""
    blocks = -(-session.frames // frames)
    hops_per_block = round(frames / session.rate_hz * 100)
    length_s = session.frames / session.rate_hz
    with open_readers(session) as readers, ExitStack() as stack:
        writers = [stack.enter_context(WavWriter(path, session.rate_hz, session.mix_channels, "float32",
                                                 expected_frames=session.frames)) for path in paths]
        lanes = [
            _StemLane(reader, track, GainCurve(gain, plan.hops, session.rate_hz), writer, session.mix_channels)
            for reader, track, gain, writer in zip(readers, session.tracks, plan.tracks, writers, strict=True)
        ]

        def step(lane: int, block: int) -> Samples:
            return lanes[lane].next(min(frames, session.frames - block * frames), block * hops_per_block)

        with walk(step, lanes=len(lanes), blocks=blocks) as rows:
            for block, row in enumerate(rows):
                bus.push(summed(row))
                on_progress("render", min(length_s, (block + 1) * frames / session.rate_hz), length_s)


class _StemLane:
    """One track on its way from source to stem."""

    def __init__(self, reader: TrackReader, track: Track, curve: GainCurve, writer: WavWriter, channels: int) -> None:
        self._reader, self._curve, self._writer, self._channels = reader, curve, writer, channels
        self._places = pan_gains(track.pan) if track.width == 1 and channels == 2 else None

    def next(self, frames: int, first_hop: int) -> Samples:
        """Read, apply the gain, place, write; returns the stem's block."""
        block = self._curve.apply(self._reader.read(frames), first_hop)
        if self._places is not None:
            block = block[:, None] * self._places
        elif block.ndim == 2 and self._channels == 1:
            block = block.mean(axis=1)
        self._writer.write(block)
        return block


def pan_gains(pan: float) -> Samples:
    """Left and right gain of a place from -1 to 1: sine / cosine law, -3.01 dB each in the middle."""
    angle = (pan + 1) * math.pi / 4
    return np.array([math.cos(angle), math.sin(angle)], np.float32)
