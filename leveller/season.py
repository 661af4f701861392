"""What a season is: a folder of episodes, or a list of them, read into one `Season`.

* A folder: every folder in it that holds audio or a session.toml is an episode, and so is every audio file directly in
  it (a polyphonic recording); hidden ones, and output folders of leveller's own, are not. A season.toml in it that
  names episodes is the list instead.
* A TOML list: `[[episode]]` tables beside the show's defaults (`defaults`): `session` (a path, or a list of audio
  files), `name`, `delivery`, `stems`, `corrections`, `accept_short`, `align`, and a table per stage.
* A CSV list: the same as columns, settings by dotted name (`expander.range_db`); an empty cell says nothing.

Paths in a list count from where the list lies. What a row says is stronger than session.toml. Whether an episode can be
opened is found when its turn comes: here only the list itself must be right.
"""

from __future__ import annotations

import os
import re
import tomllib
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from leveller.defaults import SEASON_FILE, read_defaults
from leveller.errors import InputError, SettingsError, nearest
from leveller.names import safe_name, unique_names, why_unsafe
from leveller.session import AUDIO_SUFFIXES, SESSION_FILE
from leveller.settings import STAGES, Settings
from leveller.spreadsheet import columns_of, number, read_rows

REPORTS = ("season.csv", "season.json", "season.html")
EPISODE_KEYS = ("session", "name", "delivery", "stems", "corrections", "accept_short", "align")
SWITCH_WORDS = {"": False, "no": False, "false": False, "off": False, "yes": True, "true": True, "on": True}


@dataclass(frozen=True)
class Episode:
    """One session to process, and what its season says of it; plain values, so that it can be sent to a worker."""

    name: str  # its folder in the output folder
    sources: tuple[str, ...]
    delivery: str | None = None
    stems: str | None = None
    corrections: str | None = None
    accept_short: bool = False
    align: bool | None = None  # None: as its session.toml, or the show's season.toml, say
    settings: tuple[tuple[str, Any], ...] = ()
    season: str | None = None  # the season.toml that counts; None: the one beside the session


@dataclass(frozen=True)
class Season:
    """All episodes in order."""

    title: str
    episodes: tuple[Episode, ...]
    notes: tuple[str, ...]  # what was left out


def read_season(path: Path) -> Season:
    """Read a folder or a list.

    Raises
    ------
    InputError
        where there is nothing, or nothing that is an episode
    SettingsError, AutomationError
        for a list that is not understood; the message names file and line
    """
    path = Path(os.path.abspath(path))
    if os.path.isdir(path):
        listed = path / SEASON_FILE
        return _from_toml(listed) if _names_episodes(listed) else _from_folder(path)
    if not os.path.exists(path):
        raise InputError(f"{path}: no such file or folder")
    readers = {".toml": _from_toml, ".csv": _from_csv, ".tsv": _from_csv, ".txt": _from_csv}
    if path.suffix.lower() not in readers:
        raise InputError(f"{path}: expected a folder of sessions, or a list of them as .csv or .toml")
    return readers[path.suffix.lower()](path)


def told_from(base: Path, text: str, places: Iterable[str]) -> str:
    """A text with these absolute paths, and those below `base`, told from there: reports do not say where work was."""
    for place in sorted({*places, str(base)}, key=len, reverse=True):
        if os.path.dirname(place) == place:
            continue  # the root says nothing of anybody, and stands in every path
        shorter = os.path.relpath(place, base)
        text = text.replace(place + os.sep, "" if shorter == "." else shorter + os.sep)
        text = text.replace(place, base.name if shorter == "." else shorter)
    return text


def _from_folder(folder: Path) -> Season:
    """Every session of a folder."""
    if (folder / SESSION_FILE).is_file():
        raise InputError(f"{folder}: holds a {SESSION_FILE}, so it is one session. Use leveller process, or give the "
                         "folder above")
    title = read_defaults(folder / SEASON_FILE).title if (folder / SEASON_FILE).is_file() else None
    sessions, files, notes = _sorted_out(folder)
    if not sessions and not files:
        raise InputError(f"{folder}: no folder with audio in it, and no audio file")
    if not sessions and len(files) > 1:
        _check_polyphonic(folder, files)
    names = unique_names([*REPORTS, *(path.name for path in sessions), *(path.stem for path in files)])[len(REPORTS):]
    episodes = [Episode(safe_name(name), (str(path),)) for name, path in zip(names, [*sessions, *files], strict=True)]
    return Season(title or folder.name, tuple(sorted(episodes, key=lambda e: _natural(e.name))), tuple(notes))


def _sorted_out(folder: Path) -> tuple[list[Path], list[Path], list[str]]:
    """Session folders, audio files, and what was left out and why."""
    sessions, files, notes = [], [], []
    for path in _visible(folder):
        if path.is_file() and path.suffix.lower() in AUDIO_SUFFIXES:
            files.append(path)
        elif path.is_dir() and (path / "report.json").is_file() and (path / "automation.csv").is_file():
            notes.append(f"{path.name}: written by leveller, left out")
        elif path.is_dir() and _is_session(path):
            sessions.append(path)
        elif path.is_dir():
            notes.append(f"{path.name}: no audio directly in it, left out")
    return sessions, files, notes


def _visible(folder: Path) -> list[Path]:
    """What lies in a folder and is not hidden, in natural order."""
    try:
        return sorted((path for path in folder.iterdir() if not path.name.startswith(".")),
                      key=lambda path: _natural(path.name))
    except OSError as error:
        raise InputError(f"{folder}: cannot be listed ({error.strerror})") from None


def _is_session(folder: Path) -> bool:
    """Whether a folder holds a session; one that cannot be read counts, so that its fault is told."""
    try:
        return any(path.name == SESSION_FILE or (path.suffix.lower() in AUDIO_SUFFIXES and path.is_file())
                   for path in folder.iterdir() if not path.name.startswith("."))
    except OSError:
        return True


def _check_polyphonic(folder: Path, files: Sequence[Path]) -> None:
    """Refuse a folder of single microphones: it is one session."""
    from leveller.audio import probe

    for file in files:
        try:
            if probe(file).channels > 1:
                return
        except InputError:
            return  # told when its turn comes
    raise InputError(f"{folder}: {len(files)} files of one channel each, so it is one session. Use leveller process, "
                     "or give the folder above")


def _natural(name: str) -> list[tuple[int, int, str]]:
    """A key that sorts 'ep 2' before 'ep 10'."""
    parts = re.findall(r"\d+|\D+", name.casefold())
    return [(0, int(part), "") if part.isdecimal() else (1, 0, part) for part in parts] + [(0, 0, name)]


def _names_episodes(file: Path) -> bool:
    """Whether a season.toml is there and lists episodes."""
    return file.is_file() and "episode" in _toml(file)


def _toml(path: Path) -> dict[str, Any]:
    """A TOML file's tables."""
    try:
        return tomllib.loads(path.read_bytes().decode("utf-8-sig"))
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise SettingsError(f"{path.name}: not valid TOML: {error}") from None
    except (ValueError, RecursionError):
        raise SettingsError(f"{path.name}: a number has thousands of digits, or lists lie too deep in each other"
                            ) from None
    except OSError as error:
        raise InputError(f"{path}: cannot be read ({error.strerror})") from None


def _from_toml(path: Path) -> Season:
    """A TOML list, which is the show's season.toml at the same time."""
    data = _toml(path)
    read_defaults(path)
    tables = data.get("episode", [])
    if not isinstance(tables, list) or not tables or not all(isinstance(table, dict) for table in tables):
        raise SettingsError(f"{path.name}: names no episodes; expected [[episode]] tables, each with session = \"...\"")
    title = data.get("title", path.parent.name if path.name == SEASON_FILE else path.stem)
    rows = ((f"{path.name}: [[episode]] {n}", _flat(table)) for n, table in enumerate(tables, 1))
    return _listed(title, rows, path, str(path))


def _flat(table: Mapping[str, Any]) -> dict[str, Any]:
    """An episode's table with its settings by dotted name."""
    out: dict[str, Any] = {}
    for key, value in table.items():
        out.update({f"{key}.{name}": v for name, v in value.items()} if isinstance(value, dict) else {key: value})
    return out


def _from_csv(path: Path) -> Season:
    """A CSV list."""
    columns = columns_of(path)
    optional = [column for column in columns if column and column != "session"]
    rows = []
    for line, cells in read_rows(path, ("session",), optional):
        said = {key: cell for key, cell in zip(("session", *optional), cells, strict=True) if cell}
        rows.append((f"{path.name}, line {line}", said))
    if not rows:
        raise InputError(f"{path}: lists no episodes")
    return _listed(path.stem, iter(rows), path, None)


def _listed(title: str, rows: Iterator[tuple[str, dict[str, Any]]], path: Path, season: str | None) -> Season:
    """Episodes of a list, each with a name of its own."""
    found = [_episode(said, path.parent, season, where) for where, said in rows]
    given = [episode.name for episode, named in found if named]
    for name in given:
        if given.count(name) > 1:
            raise SettingsError(f"{path.name}: the name {name!r} stands there twice; every episode needs its own")
    names = unique_names([*REPORTS, *(episode.name for episode, _ in found)])[len(REPORTS):]
    episodes = [Episode(**{**vars(episode), "name": name}) for (episode, _), name in zip(found, names, strict=True)]
    return Season(title, tuple(episodes), ())


def _episode(said: Mapping[str, Any], base: Path, season: str | None, where: str) -> tuple[Episode, bool]:
    """One row, and whether it was given a name."""
    known = (*EPISODE_KEYS, *(key for key, *_ in Settings().rows()))
    for key in said:
        if key not in known:
            raise SettingsError(f"{where}: unknown key {key!r}{nearest(key, known)}; known: {', '.join(EPISODE_KEYS)} "
                                f"and the settings ({', '.join(f'{stage}.*' for stage in STAGES)})")
    given = said.get("session")
    sources = [given] if isinstance(given, str) else given
    if not sources or not isinstance(sources, list) or not all(isinstance(s, str) and s.strip() for s in sources):
        raise SettingsError(f"{where}: needs session, a path or a list of paths, found {given!r}")
    for key in ("name", "delivery", "stems", "corrections"):
        if not isinstance(said.get(key, ""), str):
            raise SettingsError(f"{where}: {key} = {said[key]!r}: expected a text")
    name = said.get("name")
    if name is not None and why_unsafe(name):
        raise SettingsError(f"{where}: name = {name!r} {why_unsafe(name)}; it becomes the episode's folder")
    corrections = said.get("corrections")
    settings = tuple((key, _value(value)) for key, value in said.items() if "." in key)
    return Episode(
        name=name or safe_name(_name_of(base, sources)),
        sources=tuple(os.path.abspath(base / source) for source in sources), delivery=said.get("delivery"),
        stems=said.get("stems"), corrections=None if corrections is None else os.path.abspath(base / corrections),
        accept_short=_switch(said, "accept_short", where), settings=settings, season=season,
        align=_switch(said, "align", where) if "align" in said else None,
    ), name is not None


def _name_of(base: Path, sources: Sequence[str]) -> str:
    """An episode's name after what it is made from."""
    first = Path(os.path.abspath(base / sources[0]))
    if first.name == SESSION_FILE or len(sources) > 1:
        return first.parent.name
    return first.stem if first.suffix.lower() in (*AUDIO_SUFFIXES, ".toml") else first.name


def _value(value: Any) -> Any:
    """A setting's value; decimal commas are understood."""
    if not isinstance(value, str):
        return value
    try:
        return number(value)
    except ValueError:
        return value


def _switch(said: Mapping[str, Any], key: str, where: str) -> bool:
    """On or off; off where nothing is said."""
    value = said.get(key, False)
    word = str(value).strip().lower()
    if word not in SWITCH_WORDS:
        raise SettingsError(f"{where}: {key} = {value!r}: expected yes or no")
    return SWITCH_WORDS[word]
