"""What every report.html is made of: one page that opens from disk, draws what was done and plays it.

The page is one file. `page.html` holds its bones, `page.css` its look, and scripts what it does. Most of them serve a
session (`session_page`) and a finished cut (`cut_page`) alike; a `PageKind` says which belong to one alone. All are
inlined here, and the record of the run goes in as JSON in a block that no browser runs, with `<`, `>` and `&` escaped.
The content security policy admits exactly this script and this style (by hash), media beside the page, and no network.
A name from a file reaches the document as text only.

What is drawn needs no second look at the audio. Grids go in as bytes, half a dB a step; very long sessions get cells of
20, 40, ... ms, so that the page stays small. Sound is looked for where it lies, by relative path from the page.

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
from typing import Any
from urllib.parse import quote

import numpy as np
import numpy.typing as npt

from leveller.render.mix import Mix
from leveller.session import Session, Track
from leveller.units import HOPS_PER_S, Floats

SHARED_SCRIPTS = ("page_record.js", "page_sound.js", "page_score.js", "page_drawing.js")
LOWEST_DB = -127.0  # byte 0; half a dB a step from here
STEPS_PER_DB = 2
LOUDNESS_EVERY_HOPS = 10
SHORT_TERM_HOPS = 300  # EBU Tech 3341, 2.2: window of 3 s
NO_LOUDNESS = -32768
PLAYED_BY_BROWSERS = frozenset({".wav", ".wave", ".bwf", ".flac", ".ogg", ".oga", ".opus", ".mp3"})

Summary = Sequence[tuple[str, Sequence[str]]]  # headings with their lines, plain text


@dataclass(frozen=True)
class PageKind:
    """What a page of one kind is made of besides what all share."""

    scripts: tuple[str, ...]  # its own
    mend: str  # file of bones for what can be mended; empty where nothing can
    words: Mapping[str, str]  # for the bones


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


def mix_record(mix: Mix) -> dict[str, Any]:
    """What every page knows of the mix: what was asked for, what it reads, its loudness over time."""
    delivery = {
        "name": mix.delivery.name, "target_lufs": mix.delivery.target_lufs, "ceiling_dbtp": mix.delivery.ceiling_dbtp,
        "reads_lufs": _finite(mix.loudness.integrated_lufs), "peak_dbtp": _finite(mix.true_peak_dbtp), "met": mix.met,
        "reason": mix.reason}
    return {"delivery": delivery, "loudness": _loudness(mix.short_term_lufs),
            "loudness_from_s": SHORT_TERM_HOPS / HOPS_PER_S, "loudness_every_s": LOUDNESS_EVERY_HOPS / HOPS_PER_S}


def scale_record(session: Session, *, hops: int, cell_hops: int) -> dict[str, Any]:
    """What every page knows of its piece: title, length, and how levels are drawn."""
    return {"title": session.title, "length_s": session.frames / session.rate_hz, "hops": hops, "cell_hops": cell_hops,
            "lowest_db": LOWEST_DB, "steps_per_db": STEPS_PER_DB}


def summary_record(summary: Summary) -> list[dict[str, Any]]:
    """Headings with their lines."""
    return [{"heading": heading, "lines": list(lines)} for heading, lines in summary]


def hops_per_cell(hops: int, rows: int, *, most_cells: int) -> int:
    """Hops that one drawn cell covers: a power of two, so that the cells of all rows together are not too many."""
    return int(2 ** max(0, math.ceil(math.log2(max(1, hops * rows) / most_cells))))


def _loudness(short_term_lufs: npt.NDArray[np.float64]) -> str:
    """Short-term loudness in hundredths of an LU, ten a second, 16 bit, little-endian."""
    values = np.asarray(short_term_lufs)[::LOUDNESS_EVERY_HOPS]
    audible = np.isfinite(values) & (values > -300)
    steps = np.where(audible, np.rint(np.where(audible, values, 0) * 100), NO_LOUDNESS)
    return encoded(steps.astype("<i2"))


def level_steps(level_db: Floats) -> npt.NDArray[np.uint8]:
    """Levels as bytes, half a dB a step from -127 dB; 0 is silence."""
    steps = np.rint((level_db - LOWEST_DB) * STEPS_PER_DB)
    return np.asarray(np.clip(steps, 0, 255), np.uint8)


def encoded(steps: npt.NDArray[Any]) -> str:
    """Bytes as JSON holds them: base64."""
    return base64.b64encode(steps.tobytes()).decode()


def _finite(value: float) -> float | None:
    """A number that JSON can hold, else None."""
    return float(value) if math.isfinite(value) else None


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
