"""Every setting with its value and where that came from: the default, season.toml, session.toml or the command line.

Nothing is opened but the two files; what they say of settings and delivery is checked as `open_session` checks it, so
that what `process` would refuse of them is refused here too.
"""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from leveller.defaults import season_file_of, with_defaults
from leveller.errors import InputError
from leveller.session import SESSION_FILE
from leveller.sessionfile import SessionFile, read_session_file
from leveller.settings import DEFAULT_DELIVERY, Settings, delivery_named

DEFAULT = "default"
SET = "--set"

Row = tuple[str, str, str, str, str]  # key, value, unit, where it came from, reason of the default


def settings_in_force(session: Path | None, assignments: Mapping[str, Any]) -> list[Row]:
    """All settings as they would count for a session; no audio is opened.

    Raises
    ------
    InputError, SettingsError
        for a session that is not there, and as `open_session` does
    """
    said = _said(session)
    written = dict(said.settings)
    settings = Settings().changed(written, where=f"{said.where}: ").changed(assignments, where="--set ")

    def origin(key: str) -> str:
        return SET if key in assignments else said.where_of(key) if key in written else DEFAULT

    return [(key, value_text(value), unit, origin(key), why) for key, value, unit, why in settings.rows()]


def delivery_in_force(session: Path | None) -> str:
    """Name, target and ceiling that would count for a session, each with where it came from.

    Raises
    ------
    InputError, SettingsError
        as `settings_in_force`
    """
    said = _said(session)
    chosen = delivery_named(said.delivery or DEFAULT_DELIVERY)

    def part(text: str, key: str, otherwise: str) -> str:
        given = getattr(said, key)
        return f"{text} ({otherwise if given is None else said.where_of(key)})"

    target = chosen.target_lufs if said.target_lufs is None else said.target_lufs
    ceiling = chosen.ceiling_dbtp if said.ceiling_dbtp is None else said.ceiling_dbtp
    return ", ".join((
        part(chosen.name, "delivery", DEFAULT), part(f"{target:.1f} LUFS", "target_lufs", chosen.name),
        part(f"{ceiling:.1f} dBTP", "ceiling_dbtp", chosen.name)))


def value_text(value: Any) -> str:
    """A value as session.toml and --set take it."""
    return str(value).lower() if isinstance(value, bool) else f"{value:g}" if isinstance(value, float) else str(value)


def _said(session: Path | None) -> SessionFile:
    """What the session's file says, nothing without one."""
    if session is None:
        return SessionFile()
    if not os.path.exists(session):
        raise InputError(f"{session}: no such file or folder")
    file = session / SESSION_FILE if os.path.isdir(session) else session
    if file.suffix.lower() != ".toml":
        raise InputError(f"{session}: expected a folder or a session.toml")
    said = read_session_file(file) if file.exists() else SessionFile()
    return with_defaults(said, season_file_of([session]))
