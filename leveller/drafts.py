"""Which channels of which files make a track, and what it is called, before the session's rate is known.

Each file is checked, asked what its recorder wrote (`bwf`, `ixml`), joined and placed in time (`takes`), and listened
to for up to a minute. Two channels that agree are one voice; the channels of a polyphonic file are tracks named by the
recorder, or `<file> ch1` where it gave no name. A name from session.toml is stronger than both.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from leveller import audio, takes
from leveller.bwf import Bext, read_bext
from leveller.errors import SettingsError
from leveller.ixml import TrackList, read_track_list
from leveller.names import safe_name, unique_names
from leveller.samples import FileFacts, Part, Preview
from leveller.sessionfile import TrackEntry
from leveller.takes import Take
from leveller.units import power_to_db

AGREE_CORRELATION = 0.98  # two channels above this are one voice, on loud hops
LOUD_RANGE_DB = 20.0  # hops this far below the loud ones still count as loud
LOUD_PERCENTILE = 95.0
SILENT_POWER = 1e-12  # -120 dBFS: below the last bit of 16


@dataclass(frozen=True)
class SourceFile:
    """A file to open and what was said about it."""

    path: Path
    entry: TrackEntry


@dataclass(frozen=True)
class Draft:
    """A track before the session's rate is known."""

    name: str
    take: Take
    channels: tuple[int, ...]
    width: int
    loud_dbfs: float


def drafts_of(files: list[SourceFile], accept_short: bool, notes: list[str]) -> list[Draft]:
    """Tracks of all files with their final names; what was decided is added to the notes."""
    heard: dict[tuple[Part, ...], Preview] = {}
    drafts: list[Draft] = []
    for take in takes.placed(takes.joined(_takes(files, accept_short, notes), notes), notes):
        if take.parts not in heard:
            heard[take.parts] = audio.preview(take.parts, take.facts)
        drafts.extend(_of_take(take, heard[take.parts], notes))
    names = unique_names([draft.name for draft in drafts])
    return [dataclasses.replace(draft, name=name) for draft, name in zip(drafts, names, strict=True)]


def _takes(files: list[SourceFile], accept_short: bool, notes: list[str]) -> list[Take]:
    """Each file as a take of its own; a file that is named twice is read once."""
    known: dict[Path, tuple[FileFacts, Bext | None, TrackList]] = {}
    out = []
    for source in files:
        path = source.path
        if path not in known:
            facts = audio.probe(path, accept_short=accept_short)
            known[path] = facts, read_bext(path), read_track_list(path)
            if facts.frames < facts.header_frames:
                notes.append(f"{path.name}: {facts.frames / facts.rate_hz:.3f} s of "
                             f"{facts.header_frames / facts.rate_hz:.3f} s are there and taken")
            if known[path][2].problem:
                notes.append(f"{path.name}: the recorder's track names (iXML) are left out: {known[path][2].problem}")
        out.append(takes.take_of(path, source.entry, *known[path], notes))
    return out


def _of_take(take: Take, heard: Preview, notes: list[str]) -> Iterator[Draft]:
    """One track, or one a channel."""
    entry, facts = take.entry, take.facts
    _check_channels(take)
    base = entry.name or safe_name(take.path.stem)
    named = take.track_list.names(facts.channels) if entry.name is None else (None,) * facts.channels

    def draft(name: str, channels: tuple[int, ...], width: int = 1) -> Draft:
        return Draft(name, take, channels, width, _loud_dbfs(heard, channels))

    def one(channel: int) -> Draft:
        name = named[channel]
        return draft(safe_name(name) if name else f"{base} ch{channel + 1}", (channel,))

    if entry.channel is not None:
        lone = entry.name is not None or facts.channels == 1
        yield draft(base, (entry.channel - 1,)) if lone else one(entry.channel - 1)
    elif facts.channels == 1:
        yield draft(base, (0,))
    elif facts.channels == 2 and entry.role == "bed" and entry.channels != "split":
        yield draft(base, (0, 1), 2)
    elif facts.channels == 2 and _together(take, heard, notes):
        yield draft(base, (0, 1))
    else:
        if any(named):
            notes.append(f"{take.path.name}: tracks named by the recorder: "
                         f"{', '.join(name or f'{base} ch{n}' for n, name in enumerate(named, 1))}")
        yield from (one(channel) for channel in range(facts.channels))


def _check_channels(take: Take) -> None:
    """The channels that session.toml asks for are there."""
    entry, there = take.entry, take.facts.channels
    if entry.channel is not None and entry.channel > there:
        raise SettingsError(f"{take.path}: channel = {entry.channel}, but the file has {there}")
    if entry.channels == "together" and there > 2:
        raise SettingsError(f'{take.path}: channels = "together" needs two channels, but the file has '
                            f"{there}. Use channel = N")


def _together(take: Take, heard: Preview, notes: list[str]) -> bool:
    """Whether two channels are one voice; said where it was found out and not told."""
    if take.entry.channels is not None:
        return take.entry.channels == "together"
    correlation = _correlation(heard)
    if correlation is None:
        notes.append(f"{take.path.name}: two silent channels, taken as one track")
        return True
    one = correlation > AGREE_CORRELATION
    notes.append(f"{take.path.name}: its two channels {'agree' if one else 'differ'} (correlation "
                 f"{correlation:.3f}), taken as {'one track' if one else 'two tracks'}")
    return one


def _correlation(heard: Preview) -> float | None:
    """Correlation of the first two channels over loud hops; None where both are silent, 0 where one is."""
    total = heard.power[:, 0] + heard.power[:, 1]
    level = np.percentile(total, LOUD_PERCENTILE)
    if total.max() <= SILENT_POWER:
        return None
    loud = total >= max(level * 10 ** (-LOUD_RANGE_DB / 10), SILENT_POWER)
    left, right = heard.power[loud, 0].sum(), heard.power[loud, 1].sum()
    return float(heard.cross[loud].sum() / math.sqrt(left * right)) if left * right > 0 else 0.0


def _loud_dbfs(heard: Preview, channels: tuple[int, ...]) -> float:
    """The level that the loud hops of a track reach; two channels are averaged."""
    power = heard.power[:, channels[0]]
    if len(channels) == 2:
        power = (power + heard.power[:, channels[1]] + 2 * heard.cross) / 4
    return float(power_to_db(max(float(np.percentile(power, LOUD_PERCENTILE)), 0.0)))
