"""What an episode's result depends on, as a digest: how a later run knows that nothing has changed.

`fingerprint` covers the versions at work, what session.toml, season.toml and the options come to, the corrections, and
which files are read. What is in the files stands beside it in report.json: name, size and SHA-256 of each source.
`SOURCES_FILE` in an output folder notes each source's size and time of change, so that unchanged files need not be read
again; where these differ, as after a copy to another disk, the contents decide.
"""

from __future__ import annotations

import contextlib
import dataclasses
import functools
import hashlib
import json
from collections.abc import Iterable, Mapping, Sequence
from importlib import metadata
from pathlib import Path
from typing import Any

import leveller
from leveller.errors import InputError
from leveller.session import chosen_delivery, located
from leveller.settings import Settings

SOURCES_FILE = ".sources.json"
LIBRARIES = ("numpy", "scipy", "soundfile", "soxr", "webrtcvad-wheels")  # shape the bytes


@functools.cache
def _versions() -> tuple[tuple[str, str], ...]:
    """Names and versions, looked up once."""
    return (("leveller", leveller.__version__), *((name, metadata.version(name)) for name in LIBRARIES))


def made_by() -> dict[str, str]:
    """The versions at work, by name."""
    return dict(_versions())


def fingerprint(
    sources: Sequence[Path | str],
    *,
    delivery: str | None = None,
    stems: str = "",
    settings: Mapping[str, Any] | None = None,
    corrections: Path | None = None,
    accept_short: bool = False,
    align: bool | None = None,
    season: Path | None = None,
) -> str:
    """A digest of all that a result depends on but the sources' contents; parameters as of `pipeline.process`.

    Raises
    ------
    InputError, SettingsError
        as `open_session`
    """
    title, said, files, _ = located(sources, season)
    values = Settings().changed(dict(said.settings), where=f"{said.where}: ").changed(settings or {}, where="--set ")
    chosen = chosen_delivery(delivery, said)
    parts = (
        made_by(), said.title or title, said.sample_rate, said.mix_channels, said.skips, said.corrections, said.tracks,
        (chosen.name, chosen.target_lufs, chosen.ceiling_dbtp, chosen.channels), stems, accept_short,
        [row[:2] for row in values.rows()], [file.path.name for file in files],
        "" if corrections is None else sha256(Path(corrections)), bool(said.align) if align is None else align)
    return hashlib.sha256(json.dumps(parts, default=dataclasses.asdict).encode()).hexdigest()


def source_files(sources: Sequence[Path | str]) -> list[Path]:
    """Every audio file that a session reads, each once."""
    return list(dict.fromkeys(file.path for file in located(sources)[2]))


def same_sources(files: Sequence[Path], folder: Path, written: Sequence[Mapping[str, Any]]) -> bool:
    """Whether the files are those that the report.json of a folder lists as its `sources`."""
    try:
        sizes = sorted((file.name, file.stat().st_size) for file in files)
        if sizes != sorted((entry["file"], entry["bytes"]) for entry in written):
            return False
        if _noted(folder) == _marks(files):
            return True
        return sorted(map(sha256, files)) == sorted(entry["sha256"] for entry in written)
    except (OSError, KeyError, TypeError):
        return False


def note_sources(files: Sequence[Path], folder: Path) -> None:
    """Write down size and time of change of the files, for `same_sources`; where that cannot be, nothing is lost."""
    with contextlib.suppress(OSError):
        (folder / SOURCES_FILE).write_text(json.dumps(_marks(files)), encoding="utf-8")


def _noted(folder: Path) -> Any:
    """What `note_sources` wrote, or None."""
    try:
        return json.loads((folder / SOURCES_FILE).read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None


def _marks(files: Sequence[Path]) -> list[list[Any]]:
    """Name, size and time of change of each file."""
    return [[file.name, file.stat().st_size, file.stat().st_mtime_ns] for file in files]


def digests_of(paths: Iterable[Path]) -> dict[Path, str]:
    """SHA-256 of each file's contents, each named once, in order; raises InputError where one cannot be read."""
    return {path: sha256(path) for path in dict.fromkeys(paths)}


def sha256(path: Path) -> str:
    """The digest of a file's contents; raises InputError where it cannot be read."""
    try:
        with open(path, "rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()
    except OSError as error:
        raise InputError(f"{path}: cannot be read ({error.strerror})") from error
