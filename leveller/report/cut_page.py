"""report.html of a finished cut: the given files, the mix as delivered, what make-up and limiter did, where to listen.

The page is that of a session (`session_page`) without what a cut does not have: states, gain per track, stems,
corrections. Drawn are outlines (sample peak per 10 ms) and the limiter's gain (deepest per 10 ms, one byte of a tenth
of a dB), and short-term loudness as on a session's page.

Sound is looked for where it lies: mix.wav beside the page, the given files by relative path from the output folder.
"""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.cut import Finished
from leveller.measure.outline import Outlined
from leveller.report import page
from leveller.spots import Spot, strongest
from leveller.units import gain_to_db

MOST_CELLS = 1_500_000  # over all rows, a byte each: the page stays under 3 MB; an hour of two files has 1 440 000
STEPS_PER_LIMITER_DB = 10
CUT = page.PageKind(("page_cut.js",), "", {
    "TRACK": "File", "PIECE": "cut", "NOTHING": "Nothing stands out.", "ASIDE": "Places, summary"})


def write_cut_page(path: Path, finished: Finished, spots: Sequence[Spot], summary: page.Summary) -> None:
    """Write report.html.

    Parameters
    ----------
    path : Path
        the file to write; relative addresses count from `finished.out`, where it will stand in the end
    finished : Finished
    spots : sequence of Spot
        what is worth a listen, the strongest first; may be empty
    summary : page.Summary
        may be empty
    """
    path.write_text(cut_page_html(finished, spots, summary), encoding="utf-8", newline="\n")


def cut_page_html(finished: Finished, spots: Sequence[Spot], summary: page.Summary) -> str:
    """The whole page as text; the same cut gives the same text."""
    session, mix = finished.session, finished.mix
    cell_hops = page.hops_per_cell(len(finished.mix_peaks), len(session.tracks) + 2, most_cells=MOST_CELLS)
    listed = strongest(spots)
    record = {
        **page.scale_record(session, hops=len(finished.mix_peaks), cell_hops=cell_hops),
        "steps_per_limiter_db": STEPS_PER_LIMITER_DB, **page.mix_record(mix), "make_up_db": float(mix.make_up_db),
        "tracks": [_file(finished, i, cell_hops) for i in range(len(session.tracks))],
        "mix": {"levels": page.encoded(_peak_steps(finished.mix_peaks, cell_hops))},
        "limiter_steps": page.encoded(_limiter_steps(finished.limiter_db, cell_hops)), "skips": [],
        "places": [{"from_s": spot.from_s, "to_s": spot.to_s, "track": spot.track, "kind": spot.kind,
                    "reason": spot.reason} for spot in listed],
        "places_more": len(spots) - len(listed), "summary": page.summary_record(summary)}
    return page.assembled(session.title, record, CUT)


def _file(finished: Finished, i: int, cell_hops: int) -> dict[str, Any]:
    """One given file: its outline, and where it is heard."""
    track = finished.session.tracks[i]
    url, why = page.source_url(track, finished.out)
    return {"name": track.name, "levels": page.encoded(_peak_steps(finished.file_peaks[i], cell_hops)), "source": url,
            "source_why": why, "source_note": page.source_note(track, finished.session), "offset_s": 0.0}


def _peak_steps(peaks: Outlined, cell_hops: int) -> npt.NDArray[np.uint8]:
    """The highest peak of every cell as a byte, half a dB a step; 0 is silence."""
    highest = np.maximum.reduceat(peaks, np.arange(0, len(peaks), cell_hops))
    return page.level_steps(gain_to_db(highest))


def _limiter_steps(limiter_db: Outlined, cell_hops: int) -> npt.NDArray[np.uint8]:
    """The deepest reduction of every cell as a byte, a tenth of a dB a step."""
    deepest = np.minimum.reduceat(limiter_db, np.arange(0, len(limiter_db), cell_hops))
    return np.asarray(np.clip(np.rint(-deepest * STEPS_PER_LIMITER_DB), 0, 255), np.uint8)
