"""What an editor hands back, as the pipeline needs it: an edited speech.csv as corrections, an earlier report compared.

An edited speech.csv is recognised by its header. Each of its rows says what is heard of one track in one stretch; where
own voice is said and was not decided, or decided and not said, the row is a correction. (Between bleed and silence no
difference is made: they sound alike.) Rows may be split, shifted, added; of two that differ from the decision in one
place the later counts. What no row speaks of stays as decided, and that is said.
"""

from __future__ import annotations

import dataclasses
import json
import shutil
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.attribute import Activity
from leveller.automation import track_index
from leveller.errors import AutomationError, nearest
from leveller.folder import OutputFolder
from leveller.plan import OWN, STATES
from leveller.plan.stretches import stretches
from leveller.session import Correction, Session
from leveller.spreadsheet import columns_of, number, read_rows
from leveller.units import HOPS_PER_S, seconds_to_hops

SPEECH_COLUMNS = ("from_s", "to_s", "track", "state")
_UNSAID, _AGREED = -1, -2

Grid = npt.NDArray[np.int8]


def is_speech_table(path: Path) -> bool:
    """Whether a file is a speech.csv (and not a corrections.csv); raises as `spreadsheet.read_rows` does."""
    return "state" in columns_of(path)


def with_speech_table(session: Session, activity: Activity, path: Path) -> Session:
    """The session with the corrections and notes that an edited speech.csv comes to.

    Raises
    ------
    InputError, AutomationError
        where the file cannot be read, or for a row that is not understood; the message names file and line
    """
    wanted = _wanted(path, session, activity)
    corrections, notes = [], []
    for i, track in enumerate(session.tracks):
        for state, word in enumerate(STATES):
            for first, after in stretches(wanted[:, i] == state):
                corrections.append(Correction(track.name, int(first) / HOPS_PER_S, int(after) / HOPS_PER_S, word, None))
        gaps = stretches(wanted[:, i] == _UNSAID)
        if len(gaps) and track.role == "voice":
            notes.append(f"{track.name}: {path.name} has no row for {len(gaps)} "
                         f"stretch{'' if len(gaps) == 1 else 'es'} (first from {gaps[0, 0] / HOPS_PER_S:.2f} to "
                         f"{gaps[0, 1] / HOPS_PER_S:.2f} s), left as decided")
    if not corrections:
        notes.append(f"{path.name}: says nothing else than was decided, so it changes nothing")
    return dataclasses.replace(
        session, corrections=(*session.corrections, *corrections), notes=(*session.notes, *notes))


def differences(folder: Path, session: Session) -> tuple[str, ...]:
    """Sentences on how the report.json of an earlier run, if there is one, differs from what is asked for now."""
    try:
        said = json.loads((folder / "report.json").read_text(encoding="utf-8"))
        was = (said["delivery"]["name"], said["delivery"]["target_lufs"], said["delivery"]["ceiling_dbtp"])
        rate_hz, channels = said["mix"]["rate_hz"], said["mix"]["channels"]
    except (OSError, ValueError, KeyError, TypeError):
        return ()
    asked = session.delivery
    now = (asked.name, round(asked.target_lufs, 1), round(asked.ceiling_dbtp, 1))
    pairs = (("delivery", "{} ({} LUFS, {} dBTP)".format(*was), "{} ({} LUFS, {} dBTP)".format(*now)),
             ("rate", f"{rate_hz} Hz", f"{session.rate_hz} Hz"),
             ("channels", f"{channels}", f"{session.mix_channels}"))
    return tuple(f"{what}: {before} in the report.json beside the automation, {after} by session and options now"
                 for what, before, after in pairs if before != after)


def without_effect(settings: Mapping[str, Any] | None, corrections: Path | None) -> tuple[str, ...]:
    """Sentences on options that cannot change gains which come from a file."""
    notes = [f"--set {key}: no effect, the gains come from the automation file"
             for key in settings or {} if not key.startswith("limiter.")]
    if corrections is not None:
        notes.append(f"{corrections.name}: changes the states in the tables only, the gains come from the automation "
                     "file")
    return tuple(notes)


def keep_file(folder: OutputFolder, file: Path) -> None:
    """Take a file over that lies in the very folder to be replaced, unless one of its name is written anyway."""
    if file.resolve().parent == folder.path.resolve() and not folder.file(file.name).exists():
        shutil.copyfile(file, folder.file(file.name))


def _wanted(path: Path, session: Session, activity: Activity) -> Grid:
    """What the rows say, shape=(hops, tracks): a state where they differ from the decision, else agreed or unsaid."""
    hops = len(activity.own)
    out = np.full((hops, len(session.tracks)), _UNSAID, np.int8)
    for line, cells in read_rows(path, SPEECH_COLUMNS):
        first, after, track, state = _row(cells, session, hops, f"{path.name}, line {line}")
        part = out[first:after, track]
        differs = activity.own[first:after, track] != (state == OWN)
        part[differs] = state
        part[~differs & (part == _UNSAID)] = _AGREED
    return out


def _row(cells: tuple[str, ...], session: Session, hops: int, where: str) -> tuple[int, int, int, int]:
    """First hop, hop after the last, track and state of a row."""
    times = []
    for name, cell in zip(SPEECH_COLUMNS, cells[:2], strict=False):
        try:
            times.append(number(cell))
        except ValueError:
            raise AutomationError(f"{where}: {name} = {cell!r}: expected a number") from None
    first, after = (seconds_to_hops(time_s) for time_s in times)
    if not 0 <= first < after <= hops:
        raise AutomationError(f"{where}: from {cells[0]} to {cells[1]} s: expected a stretch within 0 and "
                              f"{hops / HOPS_PER_S:.2f} s")
    track = track_index(cells[2], session, where)
    state = cells[3].lower()
    if state not in STATES:
        raise AutomationError(f"{where}: state = {cells[3]!r}: expected {', '.join(STATES)}{nearest(state, STATES)}")
    if state == "own" and session.tracks[track].role != "voice":
        raise AutomationError(f"{where}: state = own, but {session.tracks[track].name} has the role "
                              f"{session.tracks[track].role}")
    return first, after, track, STATES.index(state)
