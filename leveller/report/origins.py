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
ALIGN_OPTION = {True: "--align", False: "--no-align"}
ALIGN_WHY = "off takes the tracks as they lie; on lines up those of separate recorders"

Row = tuple[str, str, str, str, str]  # key, value, unit, where it came from, reason of the default


def settings_in_force(session: Path | None, assignments: Mapping[str, Any], *, align: bool | None = None) -> list[Row]:
    """All settings as they would count for a session, `align` first; no audio is opened.

    Parameters
    ----------
    session : Path or None
        A folder or a session.toml; None for the defaults alone.
    assignments : mapping of key to value
        As `--set` gives them.
    align : bool or None
        As `--align` and `--no-align` give it; None where neither is given.

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

    stages = [(key, value_text(value), unit, origin(key), why) for key, value, unit, why in settings.rows()]
    return [_align_row(said, align), *stages]


def delivery_in_force(session: Path | None) -> str:
    """Name, target and ceiling that would count for a session, rate and channels where given, each with its origin.

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
    parts = [part(chosen.name, "delivery", DEFAULT), part(f"{target:.1f} LUFS", "target_lufs", chosen.name),
             part(f"{ceiling:.1f} dBTP", "ceiling_dbtp", chosen.name)]
    if said.sample_rate is not None:
        parts.append(part(f"{said.sample_rate} Hz", "sample_rate", DEFAULT))
    if said.mix_channels is not None:
        parts.append(part("2 channels" if said.mix_channels == 2 else "1 channel", "mix_channels", DEFAULT))
    return ", ".join(parts)


def value_text(value: Any) -> str:
    """A value as session.toml and --set take it."""
    return str(value).lower() if isinstance(value, bool) else f"{value:g}" if isinstance(value, float) else str(value)


def _align_row(said: SessionFile, option: bool | None) -> Row:
    """Whether tracks are lined up: the option says, else a file, else they are not."""
    value = said.align if option is None else option
    origin = said.where_of("align") if option is None else ALIGN_OPTION[option]
    return ("align", value_text(bool(value)), "on/off", DEFAULT if value is None else origin, ALIGN_WHY)


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
