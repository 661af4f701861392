"""The gain plan as CSV, both ways: the file an editor reads, changes and renders again.

RFC 4180, header on line 1, rows by time, then session order; times on the 10 ms grid, gains to 0.01 dB, linear in dB
between rows; a step is two rows of one track at one time. Only `gain_db` is read back; the parts explain it.

Reading takes what a spreadsheet saves (`spreadsheet`). Rows may be added and deleted, but every track keeps one at 0
and one at the end. A row whose parts do not add up to its gain is an edited gain, unless that very gain was written
there (same track, time and gain): then a part was edited, which would silently do nothing, and the row is refused. What
an edit adds goes to `auto_trim_db` with the cause `edit`, so that the parts of every file written add up.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from leveller.errors import AutomationError, nearest
from leveller.plan import CAUSES, GAIN_LIMITS_DB, PARTS, STATES, GainPlan, TrackGain
from leveller.session import Session
from leveller.spreadsheet import number, read_rows
from leveller.timeline import TIMELINE_COLUMN, timeline_of
from leveller.units import HOPS_PER_S, hop_to_frame

PART_COLUMNS = tuple(f"{part}_db" for part in PARTS)
COLUMNS = ("time_s", "time", "sample", "track", "gain_db", *PART_COLUMNS, "state", "cause")
PARTS_SLACK_CDB = 3  # hundredths of a dB by which the parts may miss the gain
OFF_GRID_HOPS = 1e-4
OFF_GRID_CDB = 1e-6
_FORMULA = ("=", "+", "-", "@", "\t", "\r", "\uff1d", "\uff0b", "\uff0d", "\uff20")  # the wide ones run in East Asia
_EDIT = CAUSES.index("edit")
NO_ROWS = np.empty(0, np.int64)  # for `written`: nothing is known of the file before it was edited

Ints = npt.NDArray[np.int64]


@dataclass(frozen=True)
class ReadBack:
    """An automation file as it will be rendered."""

    plan: GainPlan
    notes: tuple[str, ...]  # sentences for the user: what was edited and what was rounded
    edited_rows: int  # rows of the cause `edit`: an editor's, of this file or of an earlier one


@dataclass(frozen=True, slots=True)
class _Row:
    """One row of the file."""

    line: int
    hop: int
    track: int
    gain_cdb: int
    parts_cdb: tuple[int, ...] | None  # None where the cells are empty
    state: int  # -1: not said
    cause: int
    time_off: bool
    gain_off: bool


def write_automation(path: Path, plan: GainPlan, session: Session) -> None:
    """Write the plan of all tracks."""
    order = np.concatenate([np.stack([gain.hop, np.full(len(gain.hop), i), np.arange(len(gain.hop))], 1)
                            for i, gain in enumerate(plan.tracks)])
    order = order[np.lexsort((order[:, 2], order[:, 1], order[:, 0]))]
    names = [text_cell(track.name) for track in session.tracks]
    with open(path, "w", encoding="utf-8", newline="") as file:
        aligned = session.zero_s is not None
        end = f",{timeline_of(session)}\r\n" if aligned else "\r\n"
        file.write(",".join((*COLUMNS, TIMELINE_COLUMN) if aligned else COLUMNS) + "\r\n")
        for hop, track, row in order.tolist():
            gain = plan.tracks[track]
            levels = ",".join(_db(value) for value in (gain.gain_cdb[row], *gain.parts_cdb[row]))
            file.write(f"{hop / HOPS_PER_S:.2f},{_clock(hop)},{hop_to_frame(hop, session.rate_hz)},{names[track]},"
                       f"{levels},{STATES[gain.state[row]]},{CAUSES[gain.cause[row]]}{end}")


def row_keys(plan: GainPlan) -> Ints:
    """One number a row for track, time and gain, sorted: how a row is known again."""
    keys = [_key(gain.hop, np.int64(i), gain.gain_cdb.astype(np.int64), len(plan.tracks))
            for i, gain in enumerate(plan.tracks)]
    return np.unique(np.concatenate(keys))


def read_automation(path: Path, session: Session, *, hops: int, written: Ints) -> ReadBack:
    """Read and check an automation file.

    Parameters
    ----------
    path : Path
    session : Session
    hops : int
        of the session
    written : shape=(rows,)
        `row_keys` of the file before it was edited

    Raises
    ------
    InputError
        where the file cannot be read
    AutomationError
        for a row that cannot be rendered; the message names file and line
    """
    rows = _rows(path, session, hops)
    tracks = len(session.tracks)
    out = []
    for i, track in enumerate(session.tracks):
        own = [row for row in rows if row.track == i]
        _check_rows_of(own, track.name, path.name, hops)
        out.append(_track_gain(own, written, tracks, path.name, track.name))
    edited = sum(int(np.count_nonzero(gain.cause == _EDIT)) for gain in out)
    ranges = tuple(max(0.0, -float(gain.parts_cdb[:, PARTS.index("expander")].min()) / 100) for gain in out)
    return ReadBack(GainPlan(hops, tuple(out), ranges), _notes(rows, edited, path.name), edited)


def harmless(text: str) -> str:
    """The text with a quote before it where a spreadsheet would run it, or could take that quote for ours."""
    return "'" + text if text.lstrip("' ").startswith(_FORMULA) else text


def text_cell(text: str) -> str:
    """A text cell that no spreadsheet runs as a formula, quoted where RFC 4180 asks for it."""
    text = harmless(text)
    return '"' + text.replace('"', '""') + '"' if any(c in text for c in ',;"\r\n\'') else text


def track_index(cell: str, session: Session, where: str) -> int:
    """Which track a cell names, also where our own tables have quoted the name; raises AutomationError."""
    names = [track.name for track in session.tracks]
    for known in ([harmless(name).strip() for name in names], [name.strip() for name in names]):
        if cell in known:  # cells lose the spaces round them
            return known.index(cell)
    raise AutomationError(f"{where}: unknown track {cell!r}{nearest(cell, names)}; known: {', '.join(names)}")


def _rows(path: Path, session: Session, hops: int) -> list[_Row]:
    """All rows, each by itself as it should be, in order."""
    out: list[_Row] = []
    for line, cells in read_rows(path, ("time_s", "track", "gain_db"), (*PART_COLUMNS, "state", "cause")):
        row = _row(cells, session, hops, line, f"{path.name}, line {line}")
        before = out[-1] if out else row
        if (row.hop, row.track) < (before.hop, before.track):
            here, there = (f"{r.hop / HOPS_PER_S:.2f} s, {session.tracks[r.track].name}" for r in (row, before))
            raise AutomationError(f"{path.name}, line {line}: out of order: {here} stands after {there}. Sort the rows "
                                  "by time_s, rows of one time as the session has the tracks")
        out.append(row)
    return out


def _row(cells: tuple[str, ...], session: Session, hops: int, line: int, where: str) -> _Row:
    """One row, or AutomationError."""
    time_s, gain_db = _number(cells[0], "time_s", where), _number(cells[2], "gain_db", where)
    track = track_index(cells[1], session, where)
    hop, cdb = round(time_s * HOPS_PER_S), round(gain_db * 100)
    if not 0 <= hop <= hops:
        raise AutomationError(f"{where}: time_s = {cells[0]} lies outside the session, which lasts from 0 to "
                              f"{hops / HOPS_PER_S:.2f} s")
    low, high = GAIN_LIMITS_DB
    if not low <= gain_db <= high:
        raise AutomationError(f"{where}: gain_db = {cells[2]}: expected {low:+g} to {high:+g} dB")
    part_cells = cells[3 : 3 + len(PARTS)]
    parts = None if not any(part_cells) else tuple(
        round(100 * _number(cell or "0", name, where)) for cell, name in zip(part_cells, PART_COLUMNS, strict=True))
    state, cause = cells[-2].lower(), cells[-1].lower()
    return _Row(line, hop, track, cdb, parts, STATES.index(state) if state in STATES else -1,
                CAUSES.index(cause) if cause in CAUSES else _EDIT,
                abs(time_s * HOPS_PER_S - hop) > OFF_GRID_HOPS, abs(gain_db * 100 - cdb) > OFF_GRID_CDB)


def _number(cell: str, name: str, where: str) -> float:
    """A cell's number, or AutomationError."""
    try:
        return number(cell)
    except ValueError:
        raise AutomationError(f"{where}: {name} = {cell!r}: expected a number") from None


def _check_rows_of(rows: list[_Row], name: str, file: str, hops: int) -> None:
    """A row at 0 and one at the end; never more than two at one time, since what lies between them is not heard."""
    end_s = hops / HOPS_PER_S
    if not rows or rows[0].hop != 0:
        line = rows[0].line if rows else 1
        raise AutomationError(f"{file}, line {line}: {name} has no row at 0 s. Every track needs one")
    if rows[-1].hop != hops:
        last_s = rows[-1].hop / HOPS_PER_S
        raise AutomationError(f"{file}, line {rows[-1].line}: {name} has its last row at {last_s:.2f} s, but needs one "
                              f"at the session's end at {end_s:.2f} s")
    for first, third in zip(rows, rows[2:], strict=False):
        if first.hop == third.hop:
            time_s = third.hop / HOPS_PER_S
            raise AutomationError(f"{file}, line {third.line}: {name} has a third row at {time_s:.2f} s; a step is two "
                                  "rows at one time. Delete those between them")


def _track_gain(rows: list[_Row], written: Ints, tracks: int, file: str, name: str) -> TrackGain:
    """The rows of one track as breakpoints."""
    gain = np.array([row.gain_cdb for row in rows], np.int32)
    parts = np.array([row.parts_cdb or (0,) * len(PARTS) for row in rows], np.int32)
    missing = gain - parts.sum(axis=1, dtype=np.int32)
    unsaid = np.array([row.parts_cdb is None for row in rows])
    edited = unsaid | (np.abs(missing) > PARTS_SLACK_CDB)
    hop = np.array([row.hop for row in rows], np.int64)
    known = np.isin(_key(hop, np.int64(rows[0].track), gain.astype(np.int64), tracks), written)
    refused = np.flatnonzero(edited & known & ~unsaid)
    if len(refused):
        row = rows[refused[0]]
        total_db, time_s = sum(row.parts_cdb or ()) / 100, row.hop / HOPS_PER_S
        raise AutomationError(
            f"{file}, line {row.line}: {name}, {time_s:.2f} s: the parts add up to {total_db:.2f} dB, but gain_db = "
            f"{row.gain_cdb / 100:.2f} is as it was written. Only gain_db is rendered: change that instead")
    parts[:, 0] += missing
    cause = np.where(edited, _EDIT, [row.cause for row in rows]).astype(np.int8)
    return TrackGain(hop, parts, gain, _states(rows), cause)


def _states(rows: list[_Row]) -> npt.NDArray[np.int8]:
    """The state of every row; where none is said, that of the row before holds."""
    out, now = [], 0
    for row in rows:
        now = row.state if row.state >= 0 else now
        out.append(now)
    return np.array(out, np.int8)


def _key(hop: Ints, track: np.int64, gain_cdb: Ints, tracks: int) -> Ints:
    """Track, time and gain in one number."""
    low, high = (round(100 * limit) for limit in GAIN_LIMITS_DB)
    return (hop * tracks + track) * (high - low + 1) + (gain_cdb - low)


def _notes(rows: list[_Row], edited: int, file: str) -> tuple[str, ...]:
    """What was edited and what was rounded, in words."""
    notes = [f"{file}: {edited} row{' has' if edited == 1 else 's have'} an editor's gain"] if edited else []
    for what, step, off in (("time_s", "the 10 ms grid", [row.line for row in rows if row.time_off]),
                            ("gain_db", "0.01 dB", [row.line for row in rows if row.gain_off])):
        if off:
            notes.append(f"{file}: {what} rounded to {step} in {len(off)} row{'' if len(off) == 1 else 's'} "
                         f"(first on line {off[0]})")
    return tuple(notes)


def _db(hundredths: int) -> str:
    """Hundredths of a dB with two decimals; no minus sign before zero."""
    return f"{int(hundredths) / 100:.2f}"


def _clock(hop: int) -> str:
    """h:mm:ss.cc."""
    seconds, part = divmod(hop, HOPS_PER_S)
    return f"{seconds // 3600}:{seconds // 60 % 60:02d}:{seconds % 60:02d}.{part:02d}"
