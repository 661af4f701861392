"""speech.csv, mix.csv and report.json: one Result, three files to read by machine or in a spreadsheet.

CSV after RFC 4180, header on line 1; text cells that a spreadsheet would run as a formula are quoted; what was not
measured, and silence, is an empty cell. speech.csv holds every track's states as stretches, by time, then session
order. mix.csv has a row every 0.1 s: the limiter's gain is the deepest of the 0.1 s that begin there, short-term
loudness that of the 3 s that end there. report.json holds the whole `Report`, the settings, what made it and the
sources' fingerprints; no clock time, no folder name, so that two runs give the same bytes.
"""

from __future__ import annotations

import dataclasses
import json
import math
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from leveller.automation import text_cell
from leveller.fingerprint import made_by
from leveller.folder import OutputFolder
from leveller.listen import Place
from leveller.measure.loudness import SHORT_TERM_CELLS
from leveller.plan import STATES
from leveller.render.mix import Mix
from leveller.report.figures import figures_of
from leveller.report.quantities import quantities, rounded
from leveller.report.records import Report, Run
from leveller.report.segments import segments_of
from leveller.settings import STAGES
from leveller.timeline import TIMELINE_COLUMN, timeline_of
from leveller.units import HOPS_PER_S

if TYPE_CHECKING:
    from leveller.pipeline import Result
    from leveller.session import Session

SPEECH_COLUMNS = ("from_s", "to_s", "track", "state", "sure", "level_lufs")
LISTEN_COLUMNS = ("from_s", "to_s", "track", "decided", "could_be", "reason", "doubt")
MIX_COLUMNS = ("time_s", "make_up_db", "limiter_db", "short_term_lufs")
STEPS_PER_S = 10  # rows of mix.csv
JSON_FORM = 1  # raised when a key of report.json changes its meaning


def write_tables(folder: OutputFolder, result: Result) -> Report:
    """Write speech.csv, mix.csv and report.json; returns the report they were made from."""
    report = figures_of(result)
    write_speech(folder.file("speech.csv"), result)
    write_mix(folder.file("mix.csv"), result)
    write_listen(folder.file("listen.csv"), result.places, result.session)
    write_report(folder.file("report.json"), report, result)
    return report


def write_speech(path: Path, result: Result) -> None:
    """Who speaks when, track by track."""
    rows = []
    for i, track in enumerate(result.session.tracks):
        found, name = segments_of(result, i), text_cell(track.name)
        columns = (found.first_hop, found.end_hop, found.state, found.sure, found.level_lufs)
        for first, end, state, sure, level in zip(*(column.tolist() for column in columns), strict=True):
            rows.append((first, i, f"{first / HOPS_PER_S:.2f},{end / HOPS_PER_S:.2f},{name},{STATES[state]},"
                                   f"{sure:.2f},{_number(level, 1)}\r\n"))
    _write(path, SPEECH_COLUMNS, [text for _, _, text in sorted(rows)], result.session)


def write_listen(path: Path, places: Sequence[Place], session: Session) -> None:
    """The places to hear, the most doubtful first."""
    _write(path, LISTEN_COLUMNS, [
        f"{place.from_s:.2f},{place.to_s:.2f},{text_cell(place.track)},{place.decided},{place.could_be},"
        f"{text_cell(place.reason)},{place.doubt:.3f}\r\n" for place in places], session)


def write_mix(path: Path, result: Run) -> None:
    """Make-up, limiter and short-term loudness over time."""
    mix = result.mix
    steps = math.ceil(result.session.frames / result.session.rate_hz * STEPS_PER_S - 1e-9)
    make_up = _number(mix.make_up_db, 2)
    limiter, loudness = _cells(_deepest_db(mix, steps), 2), _cells(_short_term_lufs(mix, steps), 1)
    _write(path, MIX_COLUMNS, [f"{step / STEPS_PER_S:.1f},{make_up},{deepest},{heard}\r\n"
                               for step, (deepest, heard) in enumerate(zip(limiter, loudness, strict=True))])


def _deepest_db(mix: Mix, steps: int) -> npt.NDArray[np.float32]:
    """The limiter's deepest gain from each step to the next one's first node."""
    nodes = np.append(mix.limiter_db, np.float32(0))  # behind the end there is nothing to limit
    edges = np.minimum(np.rint(np.arange(steps + 1) / STEPS_PER_S / mix.cell_s).astype(np.int64), len(nodes) - 1)
    within = np.minimum.reduceat(nodes, edges[:-1]) if steps else nodes[:0]
    return np.asarray(np.minimum(within, nodes[edges[1:]]), np.float32)


def _short_term_lufs(mix: Mix, steps: int) -> npt.NDArray[np.float64]:
    """Short-term loudness at each step, nan in the first 3 s."""
    known = mix.short_term_lufs[:: HOPS_PER_S // STEPS_PER_S]
    first = SHORT_TERM_CELLS * STEPS_PER_S // HOPS_PER_S
    out = np.full(steps, np.nan)
    out[first : first + len(known)] = known[: max(0, steps - first)]
    return out


def write_report(path: Path, report: Report, result: Run, *, stages: Sequence[str] = STAGES) -> None:
    """The whole report, with what made it and the settings of the stages that were at work."""
    content = {
        "form": JSON_FORM,
        "made_by": made_by(),
        "fingerprint": getattr(result, "fingerprint", ""),
        **as_json(report),
        "timeline": timeline_of(result.session),
        "stems": result.stems,
        "trims_asked_db": {track.name: track.trim_db for track in result.session.tracks if track.trim_db},
        "settings": {key: value for key, value, _, _ in result.session.settings.rows()
                     if key.split(".")[0] in stages},
        "sources": sources_of(result),
    }
    path.write_text(json.dumps(content, indent=1, ensure_ascii=False, allow_nan=False) + "\n", encoding="utf-8")


def as_json(value: Any) -> Any:
    """A record as plain values: quantities rounded, silence and what was not measured null, times to 10 ms."""
    if dataclasses.is_dataclass(value):
        known = quantities(value)
        return {f.name: rounded(value, f.name) if f.name in known else as_json(getattr(value, f.name))
                for f in dataclasses.fields(value)}
    if isinstance(value, tuple):
        return [as_json(part) for part in value]
    return round(value, 2) if isinstance(value, float) else value


def sources_of(result: Run) -> list[dict[str, Any]]:
    """Name, size and SHA-256 of every file that was read, in session order, then those set aside."""
    return [{"file": path.name, "bytes": path.stat().st_size, "sha256": digest}
            for path, digest in result.digests.items()]


def _number(value: float, decimals: int) -> str:
    """A cell; empty for what is no number. No minus sign before zero."""
    return f"{np.round(value, decimals) + 0.0:.{decimals}f}" if math.isfinite(value) else ""


def _cells(values: npt.NDArray[np.floating], decimals: int) -> list[str]:
    """`_number` of many."""
    near = np.round(values.astype(np.float64), decimals) + 0.0
    return [f"{value:.{decimals}f}" if math.isfinite(value) else "" for value in near.tolist()]


def _write(path: Path, columns: tuple[str, ...], rows: list[str], session: Session | None = None) -> None:
    """A CSV file; it says which times it means where tracks were moved."""
    if session is not None and session.zero_s is not None:
        columns = (*columns, TIMELINE_COLUMN)
        rows = [f"{row.removesuffix(chr(13) + chr(10))},{timeline_of(session)}\r\n" for row in rows]
    with open(path, "w", encoding="utf-8", newline="") as file:
        file.write(",".join(columns) + "\r\n")
        file.writelines(rows)
