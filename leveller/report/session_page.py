"""report.html of a session: every decision shown, played and open to correction.

Drawn are K-weighted levels per 10 ms, states run-length coded, the gain's own breakpoints, and short-term loudness ten
times a second. Beside them stand the doubtful places, the corrections made so far and the summary.

Sound is looked for beside the page (`mix.wav`, `stems/<track>.wav`), and the sources by relative path where there is
one.
"""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any
from urllib.parse import quote

import numpy as np
import numpy.typing as npt

from leveller.listen import Place
from leveller.measure.levels import SILENT, level_to_db
from leveller.plan import CAUSES, STATES, TrackGain, states_of
from leveller.report import page
from leveller.sessionfile import GAIN_BOUNDS
from leveller.timeline import timeline_of
from leveller.units import Bools

if TYPE_CHECKING:
    from leveller.pipeline import Result

MOST_CELLS = 3_000_000  # bytes of drawn levels over all tracks; an hour of three tracks has 1 080 000
EDIT = CAUSES.index("edit")
TOP_PERCENTILE = 99.9  # of a track's audible cells: what the drawing's upper edge stands for
SILENT_TOP_DB = -20.0  # the upper edge of a silent track's drawing
SESSION = page.PageKind(
    ("page_staff.js", "page_mend.js"), "page_mend.html",
    {"TRACK": "Track", "PIECE": "session", "NOTHING": "Nothing is in doubt.",
     "ASIDE": "Places, corrections, summary"})


def write_page(path: Path, result: Result, places: Sequence[Place], summary: page.Summary) -> None:
    """Write report.html.

    Parameters
    ----------
    path : Path
        the file to write; relative addresses count from `result.out`, where it will stand in the end
    result : Result
        a finished run
    places : sequence of Place
        what is worth a listen, most doubtful first; may be empty
    summary : page.Summary
        may be empty
    """
    path.write_text(page_html(result, places, summary), encoding="utf-8", newline="\n")


def page_html(result: Result, places: Sequence[Place], summary: page.Summary) -> str:
    """The whole page as text; the same result gives the same text."""
    return page.assembled(result.session.title, _record(result, places, summary), SESSION)


def _record(result: Result, places: Sequence[Place], summary: page.Summary) -> dict[str, Any]:
    """All that the page knows."""
    session, mix = result.session, result.mix
    hops = result.measurements.hops
    cell_hops = page.hops_per_cell(hops, len(session.tracks), most_cells=MOST_CELLS)
    return {
        **page.scale_record(session, hops=hops, cell_hops=cell_hops), "states": STATES,
        "gain_bounds_db": GAIN_BOUNDS[:2], "timeline": timeline_of(session),
        **page.mix_record(mix),
        "tracks": [_track(result, i, cell_hops) for i in range(len(session.tracks))],
        "skips": [{"from_s": skip.from_s, "to_s": skip.to_s, "why": skip.why} for skip in session.skips],
        "places": [_place(place) for place in places],
        "summary": page.summary_record(summary),
        "by_hand": not result.fingerprint and any(EDIT in gain.cause for gain in result.plan.tracks),
        "corrections": [{"track": c.track, "from_s": c.from_s, "to_s": c.to_s, "decide": c.decide, "gain_db": c.gain_db}
                        for c in session.corrections]}


def _track(result: Result, i: int, cell_hops: int) -> dict[str, Any]:
    """One track: what is drawn of it and where it is heard."""
    session, activity = result.session, result.activity
    track = session.tracks[i]
    cells = _cells(result.measurements.k_levels[:, i], cell_hops)
    hop, gain_cdb = _gain(result.plan.tracks[i])
    url, why = page.source_url(track, result.out)
    return {
        "name": track.name, "role": track.role, "levels": page.encoded(cells),
        "top_db": _top_db(cells), "runs": _runs(activity.own[:, i], activity.bleed[:, i]), "gain_hop_steps": hop,
        "gain_cdb": gain_cdb, "stem": f"stems/{quote(track.name, safe='')}.wav", "source": url, "source_why": why,
        "source_note": page.source_note(track, session), "offset_s": track.offset_frames / session.rate_hz}


def _cells(levels: npt.NDArray[np.int16], cell_hops: int) -> npt.NDArray[np.uint8]:
    """The loudest hop of every cell as a byte; 0 is silence."""
    starts = np.arange(0, len(levels), cell_hops)
    loudest = np.maximum.reduceat(levels, starts) if len(levels) else levels
    return np.where(loudest == SILENT, np.uint8(0), page.level_steps(level_to_db(loudest)))


def _top_db(cells: npt.NDArray[np.uint8]) -> float:
    """The level at the upper edge of a track's drawing."""
    audible = cells[cells > 0]
    if not len(audible):
        return SILENT_TOP_DB
    return float(np.percentile(audible, TOP_PERCENTILE)) / page.STEPS_PER_DB + page.LOWEST_DB


def _runs(own: Bools, bleed: Bools) -> list[int]:
    """States as state, hops, state, hops, ..."""
    states = states_of(own, bleed)
    if not len(states):
        return []
    starts = np.flatnonzero(np.concatenate([[True], states[1:] != states[:-1]]))
    lengths = np.diff(np.append(starts, len(states)))
    return [int(n) for n in np.stack([states[starts], lengths], axis=1).ravel()]


def _gain(gain: TrackGain) -> tuple[list[int], list[int]]:
    """Breakpoints: hops since the one before, and hundredths of a dB."""
    return np.diff(gain.hop, prepend=0).tolist(), gain.gain_cdb.tolist()


def _place(place: Place) -> dict[str, Any]:
    """One line of listen.csv."""
    return {"from_s": float(place.from_s), "to_s": float(place.to_s), "track": place.track, "decided": place.decided,
            "could_be": place.could_be, "reason": place.reason, "doubt": float(place.doubt)}
