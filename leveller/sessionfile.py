"""Reads session.toml and corrections.csv into plain records; knows the keys and their bounds, opens no audio.

session.toml holds, all optional but a track's `file`: `title`, `delivery`, `target_lufs`, `ceiling_dbtp`,
`sample_rate`, `mix_channels`, `align`; tables `[[track]]`, `[[skip]]`, `[[correction]]`; and a table per stage.
corrections.csv has the columns of `[[correction]]`, as any spreadsheet saves them (`spreadsheet`). An unknown key is
refused, with the nearest known one as a hint; so is a value out of bounds. Times are in seconds of session time, levels
in dB.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, TypeVar

from leveller.errors import AutomationError, InputError, SettingsError, nearest
from leveller.names import why_unsafe
from leveller.settings import STAGES
from leveller.spreadsheet import number, read_rows

Record = TypeVar("Record")

ROLES = ("voice", "room", "bed")
DECISIONS = ("own", "bleed", "silence")
LONGEST_S = 7 * 24 * 3600.0

SESSION_BOUNDS = {
    "target_lufs": (-40.0, -5.0, "LUFS"),
    "ceiling_dbtp": (-20.0, 0.0, "dBTP"),
    "sample_rate": (8000.0, 192000.0, "Hz"),
    "mix_channels": (1.0, 2.0, "channels"),
}
TRACK_BOUNDS = {
    "channel": (1.0, 1024.0, "counted from 1"),
    "offset_s": (0.0, LONGEST_S, "s"),
    "pan": (-1.0, 1.0, "left to right"),
    "trim_db": (-40.0, 40.0, "dB"),
    "high_pass_hz": (10.0, 1000.0, "Hz"),
}
GAIN_BOUNDS = (-120.0, 40.0, "dB")
TIME_BOUNDS = (0.0, LONGEST_S, "s")

SESSION_KEYS = ("title", "delivery", *SESSION_BOUNDS, "align", "track", "skip", "correction", *STAGES)
TRACK_KEYS = ("file", "channels", "name", "role", "polarity", *TRACK_BOUNDS)
SKIP_KEYS = ("from_s", "to_s", "why", "timeline")
CORRECTION_KEYS = ("track", "from_s", "to_s", "decide", "gain_db", "timeline")
OPENED = "opened"  # times of the session as its files lie, before any alignment
TIMELINE = re.compile(r"opened|aligned(\+\d+(\.\d+)?)?")  # (by how much its zero lies earlier, in seconds)


@dataclass(frozen=True)
class Skip:
    """A stretch that is kept in the audio but left out of every statistic."""

    from_s: float
    to_s: float
    why: str
    timeline: str = ""  # which times these are (`timeline`); "" where it is not said


@dataclass(frozen=True)
class Correction:
    """An editor's word on one track and stretch: what is heard there, or the gain it shall have."""

    track: str
    from_s: float
    to_s: float
    decide: str | None  # own | bleed | silence
    gain_db: float | None
    timeline: str = ""  # as of a skip
    where: str = field(default="", compare=False, repr=False)  # file and line it stands in, for messages


@dataclass(frozen=True)
class TrackEntry:
    """One `[[track]]`; None where the file or a default decides."""

    file: str
    channel: int | None = None  # counted from 1
    channels: str | None = None  # split | together
    name: str | None = None
    role: str = "voice"
    offset_s: float | None = None  # None: by the recorder's clock, else 0
    polarity: int = 1
    pan: float = 0.0
    trim_db: float = 0.0
    high_pass_hz: float | None = None


@dataclass(frozen=True)
class SessionFile:
    """All that a session.toml says; `SessionFile()` says nothing."""

    where: str = "session.toml"
    title: str | None = None
    delivery: str | None = None
    target_lufs: float | None = None
    ceiling_dbtp: float | None = None
    sample_rate: int | None = None
    mix_channels: int | None = None
    align: bool | None = None
    tracks: tuple[TrackEntry, ...] = ()
    skips: tuple[Skip, ...] = ()
    corrections: tuple[Correction, ...] = ()
    settings: tuple[tuple[str, Any], ...] = ()  # ("expander.range_db", 18)
    origins: tuple[tuple[str, str], ...] = ()  # of keys that another file said: ("delivery", "season.toml")

    def where_of(self, key: str) -> str:
        """The file that said a key."""
        return dict(self.origins).get(key, self.where)


def read_session_file(path: Path, *, known: tuple[str, ...] = SESSION_KEYS) -> SessionFile:
    """Read and check a session.toml, or another file with some of its keys.

    Raises
    ------
    InputError
        where the file cannot be read
    SettingsError
        for a line that is no TOML, an unknown key, or a value out of bounds
    """
    where = path.name
    try:
        data = tomllib.loads(_text(path))
    except tomllib.TOMLDecodeError as error:
        raise SettingsError(f"{where}: not valid TOML: {error}") from None
    except (ValueError, RecursionError):
        raise SettingsError(f"{where}: a number has thousands of digits, or lists lie too deep in each other") from None
    _known(data, known, where)
    settings = tuple(
        (f"{stage}.{key}", value) for stage in STAGES if stage in data
        for key, value in _table(data[stage], f"{where}: [{stage}]").items())
    numbers = {key: _number(data, key, bounds, where) for key, bounds in SESSION_BOUNDS.items()}
    rate, channels = (_whole(numbers[key], key, where) for key in ("sample_rate", "mix_channels"))
    return SessionFile(
        where=where, title=_string(data, "title", where), delivery=_string(data, "delivery", where),
        target_lufs=numbers["target_lufs"], ceiling_dbtp=numbers["ceiling_dbtp"],
        sample_rate=rate, mix_channels=channels, align=_switch(data, "align", where),
        tracks=_each(data, "track", _track_entry, where), skips=_each(data, "skip", _skip, where),
        corrections=_each(data, "correction", _correction, where), settings=settings)


def read_corrections(path: Path) -> tuple[Correction, ...]:
    """Read and check a corrections.csv; whether its tracks exist is for the session to say.

    Raises
    ------
    InputError
        where the file cannot be read
    AutomationError
        for a header or a row that is not understood; the message names file and line
    """
    rows = read_rows(path, CORRECTION_KEYS[:3], CORRECTION_KEYS[3:], others=False)
    return tuple(_csv_correction(cells, path.name, line) for line, cells in rows)


def _text(path: Path) -> str:
    """A text file as UTF-8 without its byte-order mark."""
    try:
        return path.read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise SettingsError(f"{path.name}: not UTF-8 text (byte {error.start}). Save it as UTF-8") from None
    except OSError as error:
        raise InputError(f"{path}: cannot be read ({error.strerror})") from None


def _known(table: Mapping[str, Any], keys: tuple[str, ...], where: str) -> None:
    """Refuse the first unknown key."""
    for key in table:
        if key not in keys:
            raise SettingsError(f"{where}: unknown key {key!r}{nearest(key, keys)}; known: {', '.join(keys)}")


def _table(value: Any, where: str) -> dict[str, Any]:
    """A TOML table, or SettingsError."""
    if not isinstance(value, dict):
        raise SettingsError(f"{where}: expected a table of keys, found {value!r}")
    return value


def _switch(data: Mapping[str, Any], key: str, where: str) -> bool | None:
    """true or false, None where nothing is said."""
    value = data.get(key)
    if value is not None and not isinstance(value, bool):
        raise SettingsError(f"{where}: {key} = {value!r}: expected true or false")
    return value


def _each(
    data: Mapping[str, Any], key: str, read: Callable[[dict[str, Any], str], Record], where: str) -> tuple[Record, ...]:
    """All tables of an array such as `[[track]]`."""
    tables = data.get(key, [])
    if not isinstance(tables, list):
        raise SettingsError(f"{where}: {key} must be written as [[{key}]]")
    places = [f"{where}: [[{key}]] {n}" for n in range(1, len(tables) + 1)]
    return tuple(read(_table(table, place), place) for table, place in zip(tables, places, strict=True))


def _track_entry(table: dict[str, Any], where: str) -> TrackEntry:
    """One `[[track]]`."""
    _known(table, TRACK_KEYS, where)
    file = _string(table, "file", where)
    if not file:
        raise SettingsError(f'{where}: needs file = "..."')
    where = f"{where} ({file})"
    name = _string(table, "name", where)
    if name is not None and why_unsafe(name):
        raise SettingsError(f"{where}: name = {name!r} {why_unsafe(name)}; it becomes the stem's file name")
    polarity = table.get("polarity", 1)
    if isinstance(polarity, bool) or polarity not in (1, -1):
        raise SettingsError(f"{where}: polarity = {polarity!r}: expected 1 or -1")
    numbers = {key: _number(table, key, bounds, where) for key, bounds in TRACK_BOUNDS.items()}
    channel = _whole(numbers["channel"], "channel", where)
    channels = _choice(table, "channels", ("split", "together"), where)
    if channel is not None and channels is not None:
        raise SettingsError(f"{where}: channel and channels exclude each other; give one of them")
    return TrackEntry(
        file, channel, channels, name, _choice(table, "role", ROLES, where) or "voice", numbers["offset_s"],
        int(polarity), numbers["pan"] or 0.0, numbers["trim_db"] or 0.0, numbers["high_pass_hz"])


def _skip(table: dict[str, Any], where: str) -> Skip:
    """One `[[skip]]`."""
    _known(table, SKIP_KEYS, where)
    return Skip(*_span(table, where), _string(table, "why", where) or "", _timeline(table, where))


def _correction(table: dict[str, Any], where: str) -> Correction:
    """One `[[correction]]`."""
    _known(table, CORRECTION_KEYS, where)
    track = _string(table, "track", where)
    if not track:
        raise SettingsError(f'{where}: needs track = "..."')
    decide, gain_db = _choice(table, "decide", DECISIONS, where), _number(table, "gain_db", GAIN_BOUNDS, where)
    if decide is None and gain_db is None:
        raise SettingsError(f"{where}: needs decide ({', '.join(DECISIONS)}) or gain_db")
    return Correction(track, *_span(table, where), decide, gain_db, _timeline(table, where))


def _timeline(table: Mapping[str, Any], where: str) -> str:
    """Which times a table means, or '' where it does not say."""
    said = _string(table, "timeline", where) or ""
    if said and not TIMELINE.fullmatch(said):
        raise SettingsError(f"{where}: timeline = {said!r}: expected {OPENED} (as the files lie), or aligned (as in "
                            "the tables of a run with --align)")
    return said


def _span(table: Mapping[str, Any], where: str) -> tuple[float, float]:
    """`from_s` and `to_s`, in order."""
    start, end = (_number(table, key, TIME_BOUNDS, where) for key in ("from_s", "to_s"))
    if start is None or end is None:
        raise SettingsError(f"{where}: needs from_s and to_s")
    if end <= start:
        raise SettingsError(f"{where}: to_s = {end:g} does not lie behind from_s = {start:g}")
    return start, end


def _string(table: Mapping[str, Any], key: str, where: str) -> str | None:
    """A text value, or None where the key is missing."""
    value = table.get(key)
    if value is not None and not isinstance(value, str):
        raise SettingsError(f"{where}: {key} = {value!r}: expected a text in quotes")
    return value


def _choice(table: Mapping[str, Any], key: str, words: tuple[str, ...], where: str) -> str | None:
    """One of some words, or None where the key is missing."""
    value = table.get(key)
    if value is not None and value not in words:
        raise SettingsError(f"{where}: {key} = {value!r}: expected {', '.join(words)}{nearest(str(value), words)}")
    return value


def _number(table: Mapping[str, Any], key: str, bounds: tuple[float, float, str], where: str) -> float | None:
    """A number within bounds, or None where the key is missing."""
    value = table.get(key)
    if value is None:
        return None
    low, high, unit = bounds
    if isinstance(value, bool) or not isinstance(value, int | float) or not low <= value <= high:
        raise SettingsError(f"{where}: {key} = {value!r}: expected a number from {low:g} to {high:g} ({unit})")
    return float(value)


def _whole(value: float | None, key: str, where: str) -> int | None:
    """A whole number."""
    if value is not None and value != int(value):
        raise SettingsError(f"{where}: {key} = {value!r}: expected a whole number")
    return None if value is None else int(value)


def _csv_correction(cells: tuple[str, ...], file: str, line: int) -> Correction:
    """One row; empty cells count as missing."""
    where = f"{file}, line {line}"
    table: dict[str, Any] = {key: cell for key, cell in zip(CORRECTION_KEYS, cells, strict=True) if cell}
    for key in ("from_s", "to_s", "gain_db"):
        if key in table:
            try:
                table[key] = number(table[key])
            except ValueError:
                raise AutomationError(f"{where}: {key} = {table[key]!r}: expected a number") from None
    if "decide" in table:
        table["decide"] = table["decide"].lower()
    try:
        return replace(_correction(table, where), where=where)
    except SettingsError as error:
        raise AutomationError(str(error)) from None
