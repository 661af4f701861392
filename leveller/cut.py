"""After the creative edit: the finished cut, or its stems, to the delivery by make-up gain and limiter alone.

Nothing is gated, ridden or compressed a second time, and several files are summed as they are: sample for sample, no
pan law. A file of one channel goes unchanged to both channels of a mix of two; a file of two is averaged for a mix of
one. (So a voice keeps its balance with stereo music, and folding down what was spread gives the same samples again.)
Without a delivery the files decide: `podcast-stereo` where one of them has two channels, else `podcast-mono`.

Files of other rates are resampled to the most common one (a tie takes the higher); all start together, and shorter ones
end in silence.

The outlines that report.html draws, of files and mix, are taken as the blocks pass by: nothing is read again.
"""

from __future__ import annotations

import os
from collections import Counter
from collections.abc import Mapping, Sequence
from contextlib import closing
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.audio import open_readers, probe
from leveller.errors import InputError, SettingsError
from leveller.folder import OutputFolder
from leveller.lanes import walk
from leveller.measure import OnProgress
from leveller.measure.outline import Outlined, hop_outline
from leveller.names import safe_name, unique_names
from leveller.render.limiter import MakeUp
from leveller.render.mix import BLOCK_S, Bus, Mix
from leveller.render.programme import Blocks, Programme, SpilledSum, summed
from leveller.samples import FileFacts
from leveller.session import Session, Track, audio_files
from leveller.settings import Settings, delivery_named
from leveller.units import hop_to_frame

BY_CHANNELS = {1: "podcast-mono", 2: "podcast-stereo"}

Samples = npt.NDArray[np.float32]


@dataclass(frozen=True)
class Finished:
    """Everything known of a finished cut; its session holds the files as tracks."""

    session: Session
    mix: Mix
    repaired_frames: tuple[int, ...]  # per file: NaN or Inf silenced
    out: Path
    file_peaks: tuple[Outlined, ...]  # per file: sample peak of each hop at the cut's rate, linear
    mix_peaks: Outlined  # the same of the mix as delivered
    limiter_db: Outlined  # the limiter's deepest gain in each hop, 0 or less
    stems: str = "none"  # as report.json names them
    digests: Mapping[Path, str] = field(default_factory=dict)  # SHA-256 of every file


def open_cut(
    paths: Sequence[Path], *, delivery: str | None, settings: Mapping[str, Any] | None, accept_short: bool
) -> Session:
    """The files of a cut as a session without voices.

    Raises
    ------
    InputError, SettingsError
    """
    files = _files(paths)
    facts = [probe(path, accept_short=accept_short) for path in files]
    for path, fact in zip(files, facts, strict=True):
        if fact.channels > 2:
            raise InputError(f"{path}: {fact.channels} channels, expected 1 or 2. Mix it down first")
    notes: list[str] = []
    widest = max(fact.channels for fact in facts)
    chosen = delivery_named(delivery or BY_CHANNELS[widest])
    counts = Counter(fact.rate_hz for fact in facts)
    rate_hz = max(counts, key=lambda rate: (counts[rate], rate))
    names = unique_names([safe_name(path.stem) for path in files])
    tracks = tuple(_track(*entry, rate_hz) for entry in zip(names, files, facts, strict=True))
    frames = max(track.frames for track in tracks)
    channels = chosen.channels or widest
    _say(notes, tracks, facts, rate_hz, frames, channels)
    title = files[0].stem if len(files) == 1 else files[0].resolve().parent.name or "cut"
    return Session(
        title=title, rate_hz=rate_hz, frames=frames, tracks=tracks, set_aside=(), skips=(), corrections=(),
        delivery=chosen, mix_channels=channels, settings=_settings(settings), notes=tuple(notes))


def deliver_cut(session: Session, folder: OutputFolder, on_progress: OnProgress) -> Finished:
    """Sum the files of a cut and deliver the sum as mix.wav of the folder."""
    frames = round(BLOCK_S * session.rate_hz)
    outlines = [hop_outline(session.frames, session.rate_hz) for _ in session.tracks]
    length_s = session.frames / session.rate_hz
    with (SpilledSum(folder.work / ".sum", session.rate_hz, session.mix_channels, frames) as spilled,
          open_readers(session) as readers):
        bus = Bus(session.rate_hz, session.mix_channels, session.frames)

        def step(lane: int, block: int) -> Samples:
            own = readers[lane].read(min(frames, session.frames - block * frames))
            outlines[lane].push(own)
            return _placed(own, session.mix_channels)

        with walk(step, lanes=len(readers), blocks=-(-session.frames // frames)) as rows:
            for block, row in enumerate(rows):
                total = summed(row)
                bus.push(total)
                spilled.append(total)
                on_progress("render", min(length_s, (block + 1) * frames / session.rate_hz), length_s)
        repaired = tuple(reader.repaired_frames for reader in readers)
        seen = _Outlined(spilled, session.rate_hz)
        mix = bus.deliver(folder.work / "mix.wav", seen, session.delivery, session.settings.limiter, on_progress)
    peaks = seen.outline.result()
    return Finished(session, mix, repaired, folder.path, tuple(outline.result() for outline in outlines),
                    peaks, _limiter_per_hop(mix, len(peaks), session.rate_hz))


class _Outlined:
    """A programme whose delivered blocks are outlined as they pass."""

    def __init__(self, programme: Programme, rate_hz: int) -> None:
        self.frames, self._programme, self._rate_hz = programme.frames, programme, rate_hz
        self.outline = hop_outline(self.frames, rate_hz)

    def delivered(self, make_up: MakeUp) -> Blocks:
        """As `Programme`; each walk makes the outline anew."""
        self.outline = hop_outline(self.frames, self._rate_hz)
        with closing(self._programme.delivered(make_up)) as blocks:
            for block in blocks:
                self.outline.push(block)
                yield block


def _limiter_per_hop(mix: Mix, hops: int, rate_hz: int) -> Outlined:
    """The limiter's deepest gain in each hop, in dB."""
    edges = hop_to_frame(np.arange(hops + 1), rate_hz) // round(mix.cell_s * rate_hz)
    edges = np.minimum(edges, len(mix.limiter_db) - 1)
    within = np.minimum.reduceat(mix.limiter_db, edges[:-1])
    return np.asarray(np.minimum(within, mix.limiter_db[edges[1:]]), np.float32)


def _placed(block: Samples, channels: int) -> Samples:
    """A block of a file with the channels of the mix."""
    if channels == 1:
        return block if block.ndim == 1 else np.asarray(block.mean(axis=1))
    return block if block.ndim == 2 else np.repeat(block[:, None], 2, axis=1)


def _files(paths: Sequence[Path]) -> list[Path]:
    """The audio files named, a folder's by name."""
    if not paths:
        raise InputError("no file given: expected the finished cut, or its stems")
    out: list[Path] = []
    for path in paths:
        if not os.path.isdir(path):
            out.append(path)
            continue
        found = audio_files(path)
        if not found:
            raise InputError(f"{path}: no audio files directly in this folder")
        out += found
    twice = [path for path, count in Counter(path.resolve() for path in out).items() if count > 1]
    if twice:
        raise InputError(f"{twice[0]}: named twice, and would be heard twice as loud. Name each file once")
    return out


def _track(name: str, path: Path, facts: FileFacts, rate_hz: int) -> Track:
    """A file as a track that is left as it is."""
    frames = max(1, (2 * facts.frames * rate_hz + facts.rate_hz) // (2 * facts.rate_hz))
    return Track(
        name=name, path=path, channels=tuple(range(facts.channels)), width=facts.channels, role="bed", offset_frames=0,
        frames=frames, source_rate_hz=facts.rate_hz, source_frames=facts.frames, is_float=facts.is_float, polarity=1,
        pan=0.0, trim_db=0.0, high_pass_hz=None, loud_dbfs=0.0)


def _say(
    notes: list[str], tracks: Sequence[Track], facts: Sequence[FileFacts], rate_hz: int, frames: int, channels: int
) -> None:
    """Say what is not taken as it is."""
    for track, fact in zip(tracks, facts, strict=True):
        if fact.frames < fact.header_frames:
            there_s, promised_s = fact.frames / fact.rate_hz, fact.header_frames / fact.rate_hz
            notes.append(f"{track.name}: {there_s:.3f} s of {promised_s:.3f} s are there and taken")
        if track.source_rate_hz != rate_hz:
            notes.append(f"{track.name}: resampled from {track.source_rate_hz} to {rate_hz} Hz")
        if track.frames < frames:
            notes.append(f"{track.name}: ends {(frames - track.frames) / rate_hz:.3f} s before the end, "
                         "padded with silence")
        if track.width > channels:
            notes.append(f"{track.name}: its two channels are averaged, since the delivery has one")
        elif track.width < channels:
            notes.append(f"{track.name}: one channel, heard unchanged on both")


def _settings(values: Mapping[str, Any] | None) -> Settings:
    """Settings, of which only the limiter's count here."""
    for key in values or {}:
        if not key.startswith("limiter."):
            raise SettingsError(f"--set {key}: nothing but the limiter works on a finished cut; expected limiter.NAME")
    return Settings().changed(values or {}, where="--set ")
