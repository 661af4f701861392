"""Which times a table means, once tracks have been lined up; no correction lands anywhere else than it was meant.

A session has two timelines: as its files lie (`opened`), and, after `align` moved tracks, `aligned`. Tables that
leveller writes of an aligned run say so in a column `timeline`: `aligned+5.0000`, where 5 s is where the zero of the
session as opened lies now. The rules:

* `[[skip]]` and `[[correction]]` of session.toml mean the session as opened, and are moved along: a correction with the
  sound of its track, a skip with the reference, whose clock is the session's.
* A corrections.csv means what its column says. Without the column it is taken only where both readings are the same.
* speech.csv and automation.csv describe one run; they are taken on its own timeline only.

What cannot be placed for sure is refused in one line. Moving is exact to the frame; hops are what counts.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from pathlib import Path

from leveller.errors import AutomationError, LevellerError, SettingsError
from leveller.session import Correction, Session, Track
from leveller.sessionfile import OPENED, TIMELINE, Skip
from leveller.spreadsheet import columns_of, read_rows
from leveller.units import HOP_S

ALIGNED = "aligned"
SAME_S = HOP_S  # another version may find a zero some microseconds away
TIMELINE_COLUMN = "timeline"


def timeline_of(session: Session) -> str:
    """How tables of this session name their times."""
    return OPENED if session.zero_s is None else f"{ALIGNED}+{session.zero_s:.4f}"


def check_asked(session: Session, tables: Sequence[Path] = ()) -> None:
    """Refuse early what only an aligned run can place.

    Raises
    ------
    InputError, SettingsError, AutomationError
    """
    if session.align:
        return
    rows: tuple[Skip | Correction, ...] = (*session.skips, *session.corrections)
    for row in rows:
        _check_said(row, session)
    for table in tables:
        check_table(table, session)


def check_table(path: Path, session: Session) -> None:
    """Refuse a speech.csv or automation.csv that was written on another timeline than the session's; as `check_asked`.

    Cells left empty in a table that has the column are as the others.
    """
    said = _said_in(path)
    for one in sorted(said):
        if not TIMELINE.fullmatch(one):
            raise AutomationError(f"{path.name}: timeline = {one!r}: expected {OPENED} or {ALIGNED}")
    for one in sorted(said) or [OPENED]:
        if one == OPENED and session.zero_s is not None:
            raise AutomationError(f"{path.name}: was written before the tracks were lined up, so its times are others. "
                                  "Take that of a run with --align, or leave --align out")
        if one != OPENED:
            _check_aligned(one, session, path.name, AutomationError)


def retimed(opened: Session, session: Session) -> Session:
    """A session with its skips and corrections on its own timeline.

    Parameters
    ----------
    opened : Session
        as its files lie
    session : Session
        the same, lined up

    Raises
    ------
    SettingsError, AutomationError
        where a skip or correction cannot be placed for sure.
    """
    skips, corrections = [], []
    notes: list[str] = []
    for skip in session.skips:
        _check_said(skip, session)
        by_s = 0.0 if skip.timeline.startswith(ALIGNED) else session.zero_s or 0.0
        skips.append(dataclasses.replace(skip, from_s=skip.from_s + by_s, to_s=skip.to_s + by_s))
    for correction in session.corrections:
        _check_said(correction, session)
        moved = correction if correction.timeline.startswith(ALIGNED) else _moved(correction, opened, session)
        corrections += [] if moved is None else [moved]
        notes += [] if moved else [f"{_where(correction)}: lies before anything sounds once lined up, left out"]
    if session.zero_s is not None:
        counts = [sum(not row.timeline.startswith(ALIGNED) for row in rows)
                  for rows in (session.skips, session.corrections)]
        said = " and ".join(_counted(n, what) for n, what in zip(counts, ("skip", "correction"), strict=True) if n)
        notes += [f"{said}: given in times of the session as opened, moved along with the tracks"] if said else []
    return dataclasses.replace(session, skips=tuple(skips), corrections=tuple(corrections),
                               notes=(*session.notes, *notes))


def _said_in(path: Path) -> set[str]:
    """What the column of a table holds; nothing where there is none."""
    if TIMELINE_COLUMN not in columns_of(path):
        return set()
    return {cells[0] for _, cells in read_rows(path, (TIMELINE_COLUMN,)) if cells[0]}


def _check_said(row: Skip | Correction, session: Session) -> None:
    """Refuse a row of another timeline, or one that lies behind the end of this one."""
    if row.timeline.startswith(ALIGNED):
        kind: type[LevellerError] = AutomationError if isinstance(row, Correction) else SettingsError
        _check_aligned(row.timeline, session, _where(row), kind)
        length_s = session.frames / session.rate_hz
        if row.from_s >= length_s:
            raise kind(f"{_where(row)} lies behind the session's end at {length_s:.3f} s")


def _check_aligned(said: str, session: Session, where: str, kind: type[LevellerError]) -> None:
    """Refuse times of tracks that were lined up where they are not, or not in that way."""
    if session.zero_s is None:
        way_out = ("no track had to be moved now. Make it again from this session's own report" if session.align else
                   "they are not now. Give --align here too")
        raise kind(f"{where}: its times ({said}) are of a session whose tracks --align had lined up; {way_out}")
    zero_s = float(said.partition("+")[2] or session.zero_s)
    if abs(zero_s - session.zero_s) > SAME_S:
        raise kind(f"{where}: its times ({said}) are of a session lined up otherwise, now it is "
                   f"{timeline_of(session)}. Make it again from this session's own report")


def _moved(correction: Correction, opened: Session, session: Session) -> Correction | None:
    """A correction in times as opened, with the sound of its track; None where it ends before any sound.

    Refused where the row does not say which times it means and it makes a difference.
    """
    old, new = (next(t for t in one.tracks if t.name == correction.track) for one in (opened, session))
    times = [_on_track(time_s, old, new, session.rate_hz) for time_s in (correction.from_s, correction.to_s)]
    by_s = max(times[0] - correction.from_s, times[1] - correction.to_s, key=abs)
    if not correction.timeline and abs(by_s) > HOP_S / 2:
        raise AutomationError(
            f"{_where(correction)}: --align moves this by {by_s:+.3f} s, and nothing says which times are meant. "
            f"Add a column timeline: {OPENED} (as the files lie) or {ALIGNED} (as in the tables of a run with --align)")
    if times[1] <= 0:
        return None
    return dataclasses.replace(correction, from_s=max(times[0], 0.0), to_s=times[1])


def _on_track(time_s: float, old: Track, new: Track, rate_hz: int) -> float:
    """When the sound of a track at a time as opened is heard now."""
    if (old.offset_frames, old.clock_ppm) == (new.offset_frames, new.clock_ppm):
        return time_s
    speed = (1 + new.clock_ppm * 1e-6) / (1 + old.clock_ppm * 1e-6)
    return new.offset_frames / rate_hz + (time_s - old.offset_frames / rate_hz) / speed


def _where(row: Skip | Correction) -> str:
    """How a message names a row."""
    if isinstance(row, Correction) and row.where:
        return f"{row.where}: correction of {row.track}, from_s = {row.from_s:g}"
    what = f"correction of {row.track}" if isinstance(row, Correction) else "skip"
    return f"{what}, from_s = {row.from_s:g}"


def _counted(count: int, what: str) -> str:
    """'1 skip', '2 skips'."""
    return f"{count} {what}{'' if count == 1 else 's'}"


__all__ = ["ALIGNED", "TIMELINE_COLUMN", "check_asked", "check_table", "retimed", "timeline_of"]
