"""report.html: one page that opens from disk, shows every decision, plays it, and takes corrections.

The page is one file. `page.html` holds its bones, `page.css` its look, and scripts what it does. Most of them serve a
session and a finished cut alike; a `PageKind` says which belong to one alone (`cut_page` has the other). All
are inlined here, and the record of the run goes in as JSON in a block that no browser runs, with `<`, `>` and `&`
escaped. The content security policy admits exactly this script and this style (by hash), media beside the page, and
no network. A name from a file reaches the document as text only.

What is drawn needs no second look at the audio: K-weighted levels per 10 ms as one byte each (half a dB a step), states
run-length coded, the gain's own breakpoints, short-term loudness ten times a second. Very long sessions get cells
of 20, 40, ... ms, so that the page stays small (`MOST_CELLS`). Sound is looked for beside the page: `mix.wav`,
`stems/<track>.wav`, and the sources by relative path where there is one.

References: W3C Content Security Policy Level 3 (hashes, 6.7.3); WCAG 2.2 (2.1.1 keyboard, 1.4.1 use of colour).
"""

from __future__ import annotations

import base64
import hashlib
import html
import json
import math
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol
from urllib.parse import quote

import numpy as np
import numpy.typing as npt

from leveller.measure.levels import SILENT, level_to_db
from leveller.plan import CAUSES, STATES, TrackGain
from leveller.render.mix import Mix
from leveller.session import Session, Track
from leveller.sessionfile import GAIN_BOUNDS
from leveller.timeline import timeline_of
from leveller.units import HOPS_PER_S, Bools

if TYPE_CHECKING:
    from leveller.pipeline import Result

SHARED_SCRIPTS = ("page_record.js", "page_sound.js", "page_score.js", "page_drawing.js")
MOST_CELLS = 3_000_000  # bytes of drawn levels over all tracks; an hour of three tracks has 1 080 000
EDIT = CAUSES.index("edit")
LOWEST_DB = -127.0  # byte 0; half a dB a step from here
STEPS_PER_DB = 2
TOP_PERCENTILE = 99.9  # of a track's audible cells: what the drawing's upper edge stands for
LOUDNESS_EVERY_HOPS = 10
SHORT_TERM_HOPS = 300  # EBU Tech 3341, 2.2: window of 3 s
NO_LOUDNESS = -32768
PLAYED_BY_BROWSERS = frozenset({".wav", ".wave", ".bwf", ".flac", ".ogg", ".oga", ".opus", ".mp3"})


@dataclass(frozen=True)
class PageKind:
    """What a page of one kind is made of besides what all share."""

    scripts: tuple[str, ...]  # its own
    mend: str  # file of bones for what can be mended; empty where nothing can
    words: Mapping[str, str]  # for the bones


SESSION = PageKind(
    ("page_staff.js", "page_mend.js"), "page_mend.html",
    {"TRACK": "Track", "PIECE": "session", "NOTHING": "Nothing is in doubt.",
     "ASIDE": "Places, corrections, summary"})


class Place(Protocol):
    """What the page needs of a doubtful place; `leveller.listen.Place` has it."""

    @property
    def from_s(self) -> float: ...
    @property
    def to_s(self) -> float: ...
    @property
    def track(self) -> str: ...
    @property
    def decided(self) -> str: ...
    @property
    def could_be(self) -> str: ...
    @property
    def reason(self) -> str: ...
    @property
    def doubt(self) -> float: ...


def write_page(
    path: Path, result: Result, places: Sequence[Place], summary: Sequence[tuple[str, Sequence[str]]]
) -> None:
    """Write report.html.

    Parameters
    ----------
    path : Path
        the file to write; relative addresses count from `result.out`, where it will stand in the end
    result : Result
        a finished run
    places : sequence of Place
        what is worth a listen, most doubtful first; may be empty
    summary : sequence of (heading, lines)
        plain text; may be empty
    """
    path.write_text(page_html(result, places, summary), encoding="utf-8", newline="\n")


def page_html(result: Result, places: Sequence[Place], summary: Sequence[tuple[str, Sequence[str]]]) -> str:
    """The whole page as text; the same result gives the same text."""
    return assembled(result.session.title, _record(result, places, summary), SESSION)


def assembled(title: str, record: dict[str, Any], kind: PageKind) -> str:
    """A page of some kind about a record."""
    style = _part("page.css")
    names = (*SHARED_SCRIPTS, *kind.scripts, "page.js")
    script = '(() => {\n"use strict";\n' + "\n".join(_part(name) for name in names) + "})();\n"
    inserts = {
        **kind.words, "POLICY": _policy(script, style), "TITLE": html.escape(title), "STYLE": style, "SCRIPT": script,
        "MEND": _part(kind.mend) if kind.mend else "", "RECORD": _escaped_json(record)}
    pieces = _part("page.html").split("%%")  # bones, key, bones, key, ...
    return "".join(inserts[piece] if i % 2 else piece for i, piece in enumerate(pieces))


def _part(name: str) -> str:
    """One of the files beside this one."""
    return Path(__file__).with_name(name).read_text(encoding="utf-8")


def _policy(script: str, style: str) -> str:
    """What the page may do: run its own script, look its own way, play what lies beside it."""
    return (f"default-src 'none'; script-src {_hash(script)}; style-src {_hash(style)}; media-src 'self' file: blob:; "
            "img-src data:; base-uri 'none'; form-action 'none'")


def _hash(text: str) -> str:
    """A source expression that admits exactly this text."""
    return f"'sha256-{base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()}'"


def _escaped_json(record: dict[str, Any]) -> str:
    """JSON that cannot end the block it stands in; it carries a digest of itself."""
    text = json.dumps(record, separators=(",", ":"), allow_nan=False)
    record = {"digest": hashlib.sha256(text.encode()).hexdigest()[:24], **record}
    text = json.dumps(record, separators=(",", ":"), allow_nan=False)
    return text.replace("&", "\\u0026").replace("<", "\\u003c").replace(">", "\\u003e")


def _record(
    result: Result, places: Sequence[Place], summary: Sequence[tuple[str, Sequence[str]]]) -> dict[str, Any]:
    """All that the page knows."""
    session, mix = result.session, result.mix
    cell_hops = hops_per_cell(result.measurements.hops, len(session.tracks))
    return {
        "title": session.title, "length_s": session.frames / session.rate_hz, "hops": result.measurements.hops,
        "cell_hops": cell_hops, "lowest_db": LOWEST_DB, "steps_per_db": STEPS_PER_DB, "states": STATES,
        "gain_bounds_db": GAIN_BOUNDS[:2], "timeline": timeline_of(session),
        **mix_record(mix),
        "tracks": [_track(result, i, cell_hops) for i in range(len(session.tracks))],
        "skips": [{"from_s": skip.from_s, "to_s": skip.to_s, "why": skip.why} for skip in session.skips],
        "places": [_place(place) for place in places],
        "summary": summary_record(summary),
        "by_hand": not result.fingerprint and any(EDIT in gain.cause for gain in result.plan.tracks),
        "corrections": [{"track": c.track, "from_s": c.from_s, "to_s": c.to_s, "decide": c.decide, "gain_db": c.gain_db}
                        for c in session.corrections]}


def mix_record(mix: Mix) -> dict[str, Any]:
    """What every page knows of the mix: what was asked for, what it reads, its loudness over time."""
    delivery = {
        "name": mix.delivery.name, "target_lufs": mix.delivery.target_lufs, "ceiling_dbtp": mix.delivery.ceiling_dbtp,
        "reads_lufs": _finite(mix.loudness.integrated_lufs), "peak_dbtp": _finite(mix.true_peak_dbtp), "met": mix.met,
        "reason": mix.reason}
    return {"delivery": delivery, "loudness": _loudness(mix.short_term_lufs),
            "loudness_from_s": SHORT_TERM_HOPS / HOPS_PER_S, "loudness_every_s": LOUDNESS_EVERY_HOPS / HOPS_PER_S}


def summary_record(summary: Sequence[tuple[str, Sequence[str]]]) -> list[dict[str, Any]]:
    """Headings with their lines."""
    return [{"heading": heading, "lines": list(lines)} for heading, lines in summary]


def hops_per_cell(hops: int, rows: int, most_cells: int = MOST_CELLS) -> int:
    """Hops that one drawn cell covers: a power of two, so that the cells of all rows together are not too many."""
    return int(2 ** max(0, math.ceil(math.log2(max(1, hops * rows) / most_cells))))


def _track(result: Result, i: int, cell_hops: int) -> dict[str, Any]:
    """One track: what is drawn of it and where it is heard."""
    track, activity = result.session.tracks[i], result.activity
    cells = _cells(result.measurements.k_levels[:, i], cell_hops)
    hop, gain_cdb = _gain(result.plan.tracks[i])
    url, why = source_url(track, result.out)
    return {
        "name": track.name, "role": track.role, "levels": base64.b64encode(cells.tobytes()).decode(),
        "top_db": _top_db(cells), "runs": _runs(activity.own[:, i], activity.bleed[:, i]), "gain_hop_steps": hop,
        "gain_cdb": gain_cdb, "stem": f"stems/{quote(track.name, safe='')}.wav", "source": url, "source_why": why,
        "source_note": source_note(track, result.session), "offset_s": track.offset_frames / result.session.rate_hz}


def _cells(levels: npt.NDArray[np.int16], cell_hops: int) -> npt.NDArray[np.uint8]:
    """The loudest hop of every cell as a byte; 0 is silence."""
    starts = np.arange(0, len(levels), cell_hops)
    loudest = np.maximum.reduceat(levels, starts) if len(levels) else levels
    steps = np.rint((level_to_db(loudest) - LOWEST_DB) * STEPS_PER_DB)
    return np.where(loudest == SILENT, 0, np.clip(steps, 0, 255)).astype(np.uint8)


def _top_db(cells: npt.NDArray[np.uint8]) -> float:
    """The level at the upper edge of a track's drawing; -20 for a silent one."""
    audible = cells[cells > 0]
    return float(np.percentile(audible, TOP_PERCENTILE)) / STEPS_PER_DB + LOWEST_DB if len(audible) else -20.0


def _runs(own: Bools, bleed: Bools) -> list[int]:
    """States as state, hops, state, hops, ..."""
    states = np.where(own, STATES.index("own"), np.where(bleed, STATES.index("bleed"), STATES.index("silence")))
    if not len(states):
        return []
    starts = np.flatnonzero(np.concatenate([[True], states[1:] != states[:-1]]))
    lengths = np.diff(np.append(starts, len(states)))
    return [int(n) for n in np.stack([states[starts], lengths], axis=1).ravel()]


def _gain(gain: TrackGain) -> tuple[list[int], list[int]]:
    """Breakpoints: hops since the one before, and hundredths of a dB."""
    return np.diff(gain.hop, prepend=0).tolist(), gain.gain_cdb.tolist()


def _loudness(short_term_lufs: npt.NDArray[np.float64]) -> str:
    """Short-term loudness in hundredths of an LU, ten a second, 16 bit, little-endian."""
    values = np.asarray(short_term_lufs)[::LOUDNESS_EVERY_HOPS]
    audible = np.isfinite(values) & (values > -300)
    steps = np.where(audible, np.rint(np.where(audible, values, 0) * 100), NO_LOUDNESS)
    return base64.b64encode(steps.astype("<i2").tobytes()).decode()


def _finite(value: float) -> float | None:
    """A number that JSON can hold, else None."""
    return float(value) if math.isfinite(value) else None


def _place(place: Place) -> dict[str, Any]:
    """One line of listen.csv."""
    return {"from_s": float(place.from_s), "to_s": float(place.to_s), "track": place.track, "decided": place.decided,
            "could_be": place.could_be, "reason": place.reason, "doubt": float(place.doubt)}


def source_url(track: Track, out: Path) -> tuple[str | None, str]:
    """The source's address from the page, or None and why there is none."""
    suffix = track.path.suffix.lower()
    if suffix not in PLAYED_BY_BROWSERS:
        return None, f"browsers do not play {suffix or 'a file without a suffix'}"
    try:
        relative = os.path.relpath(os.path.abspath(track.path), os.path.abspath(out))
    except ValueError:  # another drive
        return None, "the source lies on another drive"
    return "/".join(quote(step, safe="") for step in Path(relative).parts), ""


def source_note(track: Track, session: Session) -> str:
    """A word where the source's file holds more than this track."""
    sharing = sum(other.path == track.path for other in session.tracks) > 1
    return "all channels of the file" if sharing or track.channels not in ((0,), (0, 1)) else ""
