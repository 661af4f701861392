"""A show's defaults: a season.toml beside its episodes, which every session.toml may override.

season.toml holds what session.toml may say of a whole show (`delivery`, `target_lufs`, `ceiling_dbtp`, `sample_rate`,
`mix_channels`, `align`, a table per stage), and may name its episodes (`season`). It counts for `process`, `render`,
`inspect` and `settings` as it does for `batch`: a session folder looks for it in the folder above, a file in its own
folder, then above. From weakest to strongest: the built-in default, season.toml, session.toml, an episode's row,
`--set`.

Delivery, target and ceiling are one decision: where session.toml names a delivery, nothing of season.toml's counts.
"""

from __future__ import annotations

import dataclasses
import os
from collections.abc import Sequence
from pathlib import Path

from leveller.errors import SettingsError
from leveller.sessionfile import SESSION_BOUNDS, SessionFile, read_session_file
from leveller.settings import STAGES, Settings, delivery_named

SEASON_FILE = "season.toml"
DEFAULT_KEYS = ("delivery", *SESSION_BOUNDS, "align", *STAGES)
SEASON_KEYS = ("title", *DEFAULT_KEYS, "episode")
_OF_DELIVERY = ("delivery", "target_lufs", "ceiling_dbtp")
_OF_SESSION = ("sample_rate", "mix_channels", "align")


def season_file_of(sources: Sequence[Path]) -> Path | None:
    """The season.toml that counts for a session's sources, or None."""
    if not sources:
        return None
    first = Path(os.path.abspath(sources[0]))
    above = os.path.isdir(first) or first.name == "session.toml"
    folders = [first.parent.parent if first.name == "session.toml" else first.parent]
    if not above:
        folders.append(first.parent.parent)
    found = (folder / SEASON_FILE for folder in folders)
    return next((file for file in found if os.path.isfile(file)), None)


def read_defaults(path: Path) -> SessionFile:
    """What a season.toml says for all its sessions.

    Raises
    ------
    InputError, SettingsError
        as `read_session_file`; settings and delivery are checked here, so that a message names this file
    """
    said = read_session_file(path, known=SEASON_KEYS)
    Settings().changed(dict(said.settings), where=f"{said.where}: ")
    if said.delivery is not None:
        try:
            delivery_named(said.delivery)
        except SettingsError as error:
            raise SettingsError(f"{said.where}: {error}") from None
    return said


def with_defaults(said: SessionFile, season: Path | None) -> SessionFile:
    """What a session says, over what its season says; `where_of` tells which said what."""
    if season is None:
        return said
    show = read_defaults(season)
    keys = _OF_SESSION if said.delivery is not None else (*_OF_SESSION, *_OF_DELIVERY)
    taken = {key: getattr(show, key) for key in keys
             if getattr(said, key) is None and getattr(show, key) is not None}
    own = dict(said.settings)
    from_show = [key for key, _ in show.settings if key not in own]
    return dataclasses.replace(
        said, **taken, settings=tuple({**dict(show.settings), **own}.items()),
        origins=tuple((key, show.where) for key in (*taken, *from_show)))
