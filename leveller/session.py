"""Opens a session: a folder, a session.toml or some audio files, checked, named and aligned.

`open_session` settles every doubt about the sources once, at the door, and what it decides it says in `notes`: which
channels make a track and which files one take (`drafts`, `takes`), the session's rate (the most common; a tie takes the
higher), what is delayed, padded or resampled, and what is set aside as a copy or as the recorder's mix. Inner code
trusts the `Session` it returns.

Session zero is 0 s; a track's `offset_frames` delay it; the session lasts until the latest end of its tracks. No audio
is decoded here but the preview: up to a minute of each file, spread evenly.
"""

from __future__ import annotations

import dataclasses
import os
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from leveller import audio
from leveller.defaults import season_file_of, with_defaults
from leveller.drafts import Draft, SourceFile, drafts_of
from leveller.duplicates import find_duplicates
from leveller.errors import AutomationError, InputError, LevellerError, SettingsError, nearest
from leveller.names import safe_name
from leveller.sessionfile import (
    OPENED,
    Correction,
    SessionFile,
    Skip,
    TrackEntry,
    read_corrections,
    read_session_file,
)
from leveller.settings import DEFAULT_DELIVERY, Delivery, Settings, delivery_named
from leveller.takes import session_reference

__all__ = ["AUDIO_SUFFIXES", "Correction", "Session", "SetAside", "Skip", "Track", "open_session", "safe_name"]

SESSION_FILE = "session.toml"
LONGEST_S = 24 * 3600  # our choice: memory grows by about 0.5 MB a minute and track; no conversation lasts a day
AUDIO_SUFFIXES = frozenset({
    ".wav", ".wave", ".bwf", ".rf64", ".w64", ".aif", ".aiff", ".aifc", ".caf", ".au", ".snd", ".flac", ".ogg", ".oga",
    ".opus", ".mp3",
    ".m4a", ".aac", ".wma",  # cannot be read, but a voice must not be missing silently: refused, not ignored
})


@dataclass(frozen=True)
class Track:
    """One microphone, or one sound, of the session."""

    name: str  # unique; the stem's file name
    path: Path
    channels: tuple[int, ...]  # of the file, from 0; two are averaged, or kept for width 2
    width: int  # 1, or 2 for a stereo bed
    role: str  # voice | room | bed
    offset_frames: int  # silence before it, at the session's rate
    frames: int  # its own length at the session's rate, without the offset
    source_rate_hz: int
    source_frames: int
    is_float: bool
    polarity: int  # +1 | -1
    pan: float  # -1 left .. 1 right
    trim_db: float
    high_pass_hz: float | None
    loud_dbfs: float  # 95th percentile of 10 ms RMS in the preview; -inf where silent
    time_reference: int | None = None  # frames of the file since midnight at its start, where the recorder says so
    parts: tuple[audio.Part, ...] = ()  # the files of a split take in order, `path` the first; empty for one file
    clock_ppm: float = 0.0  # how much too fast its recorder's clock ran, as `align` found it; read at that rate


@dataclass(frozen=True)
class SetAside:
    """A source that is not processed, and why."""

    name: str
    path: Path
    why: str


@dataclass(frozen=True)
class Session:
    """All that is known before the audio is read."""

    title: str
    rate_hz: int
    frames: int  # latest end of all tracks
    tracks: tuple[Track, ...]
    set_aside: tuple[SetAside, ...]
    skips: tuple[Skip, ...]
    corrections: tuple[Correction, ...]
    delivery: Delivery
    mix_channels: int
    settings: Settings
    notes: tuple[str, ...]  # sentences for the user: padded, split, joined, delayed, resampled, taken short
    time_reference: int | None = None  # of session zero, frames since midnight at the session's rate
    align: bool = False  # tracks are to be lined up, as session.toml, season.toml or an option say
    zero_s: float | None = None  # where the zero of the session as opened lies, once `align` has moved tracks
    origination: tuple[str, str] = ("", "")  # date and time that the recorder gave the first file of session zero


def open_session(
    sources: Sequence[Path | str],
    *,
    delivery: str | None = None,
    assignments: Mapping[str, Any] | None = None,
    accept_short: bool = False,
    corrections: Path | None = None,
    season: Path | None = None,
    align: bool | None = None,
) -> Session:
    """Open and check a session.

    Parameters
    ----------
    sources : sequence of paths
        one folder, one session.toml, or one or more audio files; a folder's session.toml is used where there is one
    delivery : str, optional
        a delivery's name; it replaces what session.toml says of delivery, target and ceiling
    assignments : mapping, optional
        settings such as `{"expander.range_db": 18}`, stronger than session.toml
    accept_short : bool
        take what is there of a file that is shorter than its header says
    corrections : Path, optional
        a corrections.csv, after those of session.toml
    season : Path, optional
        the season.toml whose defaults count; by default the one beside the session (`defaults`)
    align : bool, optional
        whether tracks are to be lined up; stronger than session.toml

    Raises
    ------
    InputError, SettingsError, AutomationError
    """
    title, said, files, notes = located(sources, season)
    settings = Settings().changed(dict(said.settings), where=f"{said.where}: ").changed(
        assignments or {}, where="--set ")
    chosen = chosen_delivery(delivery, said)
    drafts = drafts_of(files, accept_short, notes)
    _check_length(drafts)
    rate_hz = said.sample_rate or _common_rate(drafts)
    tracks, set_aside = _without_duplicates(_tracks(drafts, rate_hz), rate_hz)
    frames = max(track.offset_frames + track.frames for track in tracks)
    _note_lengths(tracks, rate_hz, frames, notes)
    mix_channels = _mix_channels(said, chosen, tracks, notes)
    _check_skips(said, frames / rate_hz)
    return Session(
        title=said.title or title, rate_hz=rate_hz, frames=frames, tracks=tracks, set_aside=set_aside,
        skips=said.skips, corrections=_corrections(said, corrections, tracks, set_aside, frames / rate_hz),
        delivery=chosen, mix_channels=mix_channels, settings=settings, notes=tuple(notes),
        time_reference=session_reference([(d.take, _offset_frames(d, rate_hz)) for d in drafts], rate_hz),
        origination=_origination(drafts), align=bool(said.align) if align is None else align)


def located(
    sources: Sequence[Path | str], season: Path | None = None
) -> tuple[str, SessionFile, list[SourceFile], list[str]]:
    """Title, what session.toml says over season.toml, the files, and notes so far; no audio is opened."""
    paths = [Path(source) for source in sources]
    title, said, files, notes = _located(paths)
    return title, with_defaults(said, season or season_file_of(paths)), files, notes


def _located(sources: list[Path]) -> tuple[str, SessionFile, list[SourceFile], list[str]]:
    """Title, session.toml's words, the files, and notes so far."""
    if not sources:
        raise InputError("no source given: expected a folder, a session.toml or audio files")
    first = sources[0]
    if len(sources) == 1 and first.suffix.lower() == ".toml":
        return _from_session_file(first)
    if len(sources) == 1 and os.path.isdir(first):  # false, not an error, for a name that no folder can have
        if os.path.isfile(first / SESSION_FILE):
            return _from_session_file(first / SESSION_FILE)
        return _folder_title(first), SessionFile(), _all_of(first), []
    for source in sources:
        if os.path.isdir(source) or source.suffix.lower() == ".toml":
            raise InputError(f"{source}: give one folder, one session.toml, or audio files only")
    title = first.stem if len(sources) == 1 else _folder_title(first.parent)
    return title, SessionFile(), [SourceFile(path, TrackEntry(str(path))) for path in sources], []


def _from_session_file(path: Path) -> tuple[str, SessionFile, list[SourceFile], list[str]]:
    """A session.toml; without any [[track]] all audio files beside it count."""
    said = read_session_file(path)
    folder = path.parent
    if not said.tracks:
        return _folder_title(folder), said, _all_of(folder), []
    beside = audio_files(folder)
    sources = []
    for entry in said.tracks:
        file = folder / entry.file
        if not os.path.isfile(file):  # false, not an error, for a name that no file can have
            hint = nearest(entry.file, [other.name for other in beside])
            raise InputError(f"{file}: no such file, but {said.where} names it{hint}")
        sources.append(SourceFile(file, entry))
    named = {source.path.resolve() for source in sources}
    left = [f"{file.name}: not named in {said.where}, left out" for file in beside if file.resolve() not in named]
    return _folder_title(folder), said, sources, left


def _folder_title(folder: Path) -> str:
    """A folder's own name, also for '.'."""
    return folder.resolve().name or "session"


def audio_files(folder: Path) -> list[Path]:
    """The audio files directly in a folder, by name; raises InputError where it cannot be read."""
    try:
        with os.scandir(folder) as entries:
            names = [folder / entry.name for entry in entries if entry.is_file()]
    except OSError as error:
        raise InputError(f"{folder}: cannot be read ({error.strerror})") from None
    files = [path for path in names if not path.name.startswith(".") and path.suffix.lower() in AUDIO_SUFFIXES]
    return sorted(files, key=lambda path: (path.name.casefold(), path.name))


def _all_of(folder: Path) -> list[SourceFile]:
    """Every audio file of a folder, or InputError where there is none."""
    files = audio_files(folder)
    if not files:
        raise InputError(f"{folder}: no audio files directly in this folder (expected .wav, .flac, .mp3 and the like)")
    return [SourceFile(path, TrackEntry(path.name)) for path in files]


def chosen_delivery(name: str | None, said: SessionFile) -> Delivery:
    """The delivery that counts: the option's, else session.toml's with its own target and ceiling."""
    if name is not None:
        return delivery_named(name)
    try:
        base = delivery_named(said.delivery or DEFAULT_DELIVERY)
    except SettingsError as error:
        raise SettingsError(f"{said.where}: {error}") from None
    changes = {"target_lufs": said.target_lufs, "ceiling_dbtp": said.ceiling_dbtp}
    given: dict[str, Any] = {key: value for key, value in changes.items() if value is not None}
    return dataclasses.replace(base, **given, source=said.where_of(next(iter(given)))) if given else base


def _check_length(drafts: list[Draft]) -> None:
    """Refuse a session that no memory was meant for, before any of it is worked on."""
    for draft in drafts:
        end_s = float(draft.take.offset_s) + draft.take.facts.frames / draft.take.facts.rate_hz
        if end_s > LONGEST_S:
            raise InputError(f"{draft.take.path}: ends {end_s / 3600:.1f} h after the session's start, expected at "
                             f"most {LONGEST_S // 3600} h. Cut the recording into sessions, or check its offset_s")


def _common_rate(drafts: list[Draft]) -> int:
    """The rate of most tracks; a tie takes the higher."""
    counts = Counter(draft.take.facts.rate_hz for draft in drafts)
    return max(counts, key=lambda rate: (counts[rate], rate))


def _tracks(drafts: list[Draft], rate_hz: int) -> list[Track]:
    """Drafts at the session's rate."""
    out = []
    for draft in drafts:
        take, entry, facts = draft.take, draft.take.entry, draft.take.facts
        frames = (2 * facts.frames * rate_hz + facts.rate_hz) // (2 * facts.rate_hz)
        out.append(Track(
            name=draft.name, path=take.path, channels=draft.channels, width=draft.width, role=entry.role,
            offset_frames=_offset_frames(draft, rate_hz), frames=max(frames, 1),
            source_rate_hz=facts.rate_hz, source_frames=facts.frames, is_float=facts.is_float,
            polarity=entry.polarity, pan=entry.pan, trim_db=entry.trim_db, high_pass_hz=entry.high_pass_hz,
            loud_dbfs=draft.loud_dbfs, time_reference=take.time_reference,
            parts=take.parts if len(take.parts) > 1 else ()))
    return out


def _offset_frames(draft: Draft, rate_hz: int) -> int:
    """Where a draft begins in the session."""
    return round(draft.take.offset_s * rate_hz)


def _origination(drafts: list[Draft]) -> tuple[str, str]:
    """Date and time of the first file that starts at session zero and has them."""
    for draft in drafts:
        bext = draft.take.bext
        if bext is not None and bext.date and not draft.take.offset_s:
            return bext.date, bext.time
    return "", ""


def _without_duplicates(tracks: list[Track], rate_hz: int) -> tuple[tuple[Track, ...], tuple[SetAside, ...]]:
    """The tracks that stay, and those set aside."""
    frames = max(track.offset_frames + track.frames for track in tracks)
    candidates = [track.role == "voice" for track in tracks]
    found = find_duplicates(tracks, candidates=candidates, rate_hz=rate_hz, frames=frames)
    aside = tuple(SetAside(tracks[i].name, tracks[i].path, found[i]) for i in sorted(found))
    return tuple(track for i, track in enumerate(tracks) if i not in found), aside


def _note_lengths(tracks: tuple[Track, ...], rate_hz: int, frames: int, notes: list[str]) -> None:
    """Say what is resampled and what is padded."""
    for track in tracks:
        if track.source_rate_hz != rate_hz:
            notes.append(f"{track.name}: resampled from {track.source_rate_hz} to {rate_hz} Hz")
        missing = frames - track.offset_frames - track.frames
        if missing:
            notes.append(f"{track.name}: ends {missing / rate_hz:.3f} s before the session, padded with silence")


def _mix_channels(said: SessionFile, delivery: Delivery, tracks: tuple[Track, ...], notes: list[str]) -> int:
    """1 unless session.toml, the delivery, a pan or a stereo bed asks for 2."""
    wide = [track.name for track in tracks if track.pan or track.width == 2]
    asked = 2 if wide or delivery.channels == 2 else 1
    if said.mix_channels is not None and said.mix_channels < asked:
        notes.append(f"mix_channels = 1 in {said.where_of('mix_channels')}: pans and stereo are not heard in the mix")
    elif said.mix_channels is None and asked == 2 and delivery.channels == 1:
        notes.append(f"the mix has two channels, since {wide[0]} is panned or stereo; {delivery.name} is for one")
    return said.mix_channels or asked


def _check_skips(said: SessionFile, length_s: float) -> None:
    """A skip must start within the session."""
    for skip in said.skips:
        if skip.from_s >= length_s and skip.timeline in ("", OPENED):
            raise SettingsError(f"{said.where}: [[skip]] from_s = {skip.from_s:g} lies behind the session's end "
                                f"at {length_s:.3f} s")


def _corrections(
    said: SessionFile, path: Path | None, tracks: Sequence[Track], set_aside: Sequence[SetAside], length_s: float
) -> tuple[Correction, ...]:
    """All corrections, each for a track and a time that exist; later ones are stronger."""
    out = [dataclasses.replace(c, timeline=c.timeline or OPENED) for c in said.corrections]
    out = [_checked(c, tracks, set_aside, length_s, said.where, SettingsError) for c in out]
    if path is not None:
        out += [_checked(c, tracks, set_aside, length_s, path.name, AutomationError) for c in read_corrections(path)]
    return tuple(out)


def _checked(
    correction: Correction, tracks: Sequence[Track], set_aside: Sequence[SetAside], length_s: float, where: str,
    kind: type[LevellerError],
) -> Correction:
    """The correction with its track's name as the session has it."""
    names, where = [track.name for track in tracks], correction.where or where
    name = correction.track
    if name not in names and name.startswith("'") and name[1:] in names:
        name = name[1:]  # as our own tables quote a name that a spreadsheet would run
    if name in [aside.name for aside in set_aside]:
        raise kind(f"{where}: track {name!r} was set aside and is not processed")
    if name not in names:
        raise kind(f"{where}: unknown track {name!r}{nearest(name, names)}; known: {', '.join(names)}")
    if correction.from_s >= length_s and correction.timeline in ("", OPENED):  # else `timeline` knows the length
        raise kind(f"{where}: {name}, from_s = {correction.from_s:g} lies behind the session's end at {length_s:.3f} s")
    return dataclasses.replace(correction, track=name)
