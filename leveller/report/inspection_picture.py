"""An inspection as one picture (SVG 1.1, drawn here): the table, the levels, the bleed.

Left, the people round a table in session order (how they really sat is not known): arrows from voices to the
microphones that hear them, the wider the louder, each with its number; of a large session only those that break the
3:1 rule. Right, a bar from noise to voice for every track and a mark for the peak. Under it (for a large session, below
all) the bleed matrix: a disc a cell whose area is the bleed's amplitude, with its number; what breaks the 3:1 rule is
ringed. Nothing rests on colour; light and dark follow the viewer's preference. Names are escaped.
"""

from __future__ import annotations

import math
from html import escape

import numpy as np

from leveller.advice import BLEED_DB
from leveller.findings import Inspection, TrackFindings

WIDTH = 960
TABLE = (255.0, 320.0, 140.0)  # centre and radius of the ring of people
LOWEST_LUFS, HIGHEST_LUFS = -90.0, 0.0
BAR_LEFT, BAR_RIGHT = 640.0, 920.0
BAR_STEP = 34.0
CELL = 64.0
LONGEST_NAME = 16
RING_NAME = 12
LABEL_AT = 0.36  # along an arrow: nearer the voice, so that the numbers of crossing arrows stay apart
FEW = 4  # tracks: all arrows are drawn, and the matrix fits on the right
ARROWS_EACH = 2  # into one microphone of a larger session; the matrix has them all
RING_BOTTOM = 570.0

STYLE = """
.lvi { --paper: #fbfaf7; --ink: #1d2126; --soft: #6b7178; --line: #cfd2d4; --mark: #2d6a8e; --warn: #b4471f }
@media (prefers-color-scheme: dark) {
.lvi { --paper: #16191c; --ink: #e9e7e2; --soft: #9aa1a8; --line: #3c4248; --mark: #7db8d8; --warn: #f0936b } }
.lvi text { font: 14px system-ui, sans-serif; fill: var(--ink) }
.lvi .title { font-size: 22px; font-weight: 600 }
.lvi .head { font-size: 15px; font-weight: 600 }
.lvi .soft { fill: var(--soft); font-size: 12px }
.lvi .num { font-size: 13px; font-variant-numeric: tabular-nums }
.lvi .halo { stroke: var(--paper); stroke-width: 5px; paint-order: stroke; stroke-linejoin: round }
.lvi .c { text-anchor: middle } .lvi .e { text-anchor: end }
"""


def inspection_svg(inspection: Inspection) -> str:
    """The whole picture as a text that is an SVG document."""
    found = inspection.of_voices()
    count = len(found.tracks)
    bars_bottom = 200.0 + BAR_STEP * len(inspection.tracks)
    several = count > 1
    left, top = (BAR_LEFT, bars_bottom) if count <= FEW else (190.0, max(RING_BOTTOM + 20, bars_bottom))
    height = max(RING_BOTTOM if several else 0.0, top + (126 + CELL * count if several else 0))
    width = max(WIDTH, left + CELL * count + 300 if count > FEW else 0)
    parts = [
        f'<svg xmlns="http://www.w3.org/2000/svg" class="lvi" viewBox="0 0 {width:.0f} {height:.0f}" '
        f'width="{width:.0f}" height="{height:.0f}" role="img" aria-label="{_safe(found.title)}: microphones">',
        f"<style>{STYLE}</style>", f'<rect width="{width:.0f}" height="{height:.0f}" fill="var(--paper)"/>',
        _text(40, 48, found.title, "title"),
        *_bars(inspection.tracks), *((*_ring(found), *_cells(found, left, top)) if several else ()), "</svg>",
    ]
    return "\n".join(parts) + "\n"


def _ring(found: Inspection) -> list[str]:
    """People round the table and the bleed between them."""
    x, y, radius = TABLE
    out = [_text(40, 84, "Who is heard where", "head"),
           f'<circle cx="{x}" cy="{y}" r="{radius - 52:.0f}" fill="none" stroke="var(--line)" stroke-width="2"/>']
    places = [_seat(k, len(found.tracks)) for k in range(len(found.tracks))]
    arrows = _arrows(found)
    out += [_arrow(places[k], places[m], value) for k, m, value in arrows]
    out += [_arrow_label(places[k], places[m], value) for k, m, value in arrows]
    for (px, py), track in zip(places, found.tracks, strict=True):
        out.append(f'<circle cx="{px:.1f}" cy="{py:.1f}" r="15" fill="var(--paper)" stroke="var(--ink)" '
                   'stroke-width="2.5"/>')
        out.append(_seat_name(px - x, py - y, track.name))
    words = "Arrow: voice to microphone; dB against that microphone's own voice"
    return [*out, _text(40, RING_BOTTOM - 24, words, "soft")]


def _seat(k: int, count: int) -> tuple[float, float]:
    """Where a person is drawn."""
    x, y, radius = TABLE
    turn = 2 * math.pi * k / max(count, 1) - math.pi / 2
    return x + radius * math.cos(turn), y + radius * math.sin(turn)


def _seat_name(dx: float, dy: float, name: str) -> str:
    """A name outside its seat, which lies (dx, dy) from the middle of the table."""
    x, y, radius = TABLE
    out = (radius + 24) / radius
    style = "c" if abs(dx) < radius / 4 else "e" if dx < 0 else ""
    drop = 14 if dy > radius / 2 else 0 if dy < -radius / 2 else 5
    return _text(x + dx * out, y + dy * out + drop, _short(name, RING_NAME), f"head halo {style}".rstrip())


def _arrows(found: Inspection) -> list[tuple[int, int, float]]:
    """The bleed worth an arrow, softest first: all of a few tracks, else two a microphone that break the 3:1 rule."""
    few, out = len(found.tracks) <= FEW, []
    bleed = np.where(np.eye(len(found.tracks), dtype=bool), np.nan, found.bleed_db)
    for m in range(len(found.tracks)):
        column = sorted(((float(v), k) for k, v in enumerate(bleed[:, m]) if np.isfinite(v)), reverse=True)
        out += [(k, m, value) for n, (value, k) in enumerate(column) if few or (n < ARROWS_EACH and value > BLEED_DB)]
    return sorted(out, key=lambda arrow: arrow[2])


def _bow(start: tuple[float, float], end: tuple[float, float]) -> tuple[float, ...]:
    """Start, control point and end of an arrow's curve, bent to its right so that both ways stay apart."""
    (ax, ay), (bx, by) = start, end
    length = math.hypot(bx - ax, by - ay)
    ux, uy = (bx - ax) / length, (by - ay) / length
    cx, cy = (ax + bx) / 2 - uy * 34, (ay + by) / 2 + ux * 34
    first, last = math.hypot(cx - ax, cy - ay), math.hypot(bx - cx, by - cy)
    return (ax + (cx - ax) / first * 20, ay + (cy - ay) / first * 20, cx, cy,
            bx - (bx - cx) / last * 24, by - (by - cy) / last * 24)


def _arrow(start: tuple[float, float], end: tuple[float, float], value: float) -> str:
    """One arrow, 1.5 to 10 px wide."""
    ax, ay, cx, cy, bx, by = _bow(start, end)
    wide = min(10.0, max(1.5, 12 * 10 ** (value / 20)))
    ux, uy = (bx - cx) / math.hypot(bx - cx, by - cy), (by - cy) / math.hypot(bx - cx, by - cy)
    tip = 6 + wide
    sx, sy = bx - ux * tip, by - uy * tip
    half = 4 + wide * 0.7
    colour = "var(--warn)" if value > BLEED_DB else "var(--mark)"
    return (f'<path d="M{ax:.1f} {ay:.1f}Q{cx:.1f} {cy:.1f} {sx:.1f} {sy:.1f}" fill="none" stroke="{colour}" '
            f'stroke-width="{wide:.1f}"/><path d="M{bx:.1f} {by:.1f}L{sx - uy * half:.1f} {sy + ux * half:.1f}'
            f'L{sx + uy * half:.1f} {sy - ux * half:.1f}Z" fill="{colour}"/>')


def _arrow_label(start: tuple[float, float], end: tuple[float, float], value: float) -> str:
    """Its number."""
    ax, ay, cx, cy, bx, by = _bow(start, end)
    style = f"c {'head' if value > BLEED_DB else 'num'} halo"
    start_part, bend, end_part = (1 - LABEL_AT) ** 2, 2 * LABEL_AT * (1 - LABEL_AT), LABEL_AT**2
    x, y = (start_part * a + bend * c + end_part * b for a, c, b in ((ax, cx, bx), (ay, cy, by)))
    return _text(x, y + 5, _number(value), style)


def _bars(tracks: tuple[TrackFindings, ...]) -> list[str]:
    """A bar from noise to voice and a mark for the peak, a row a track."""
    bottom = 118 + BAR_STEP * len(tracks)
    out = [_text(500, 84, "From noise to voice, and the peak", "head")]
    for level in range(-80, 1, 20):
        x = _at(level)
        out.append(f'<line x1="{x:.1f}" y1="108" x2="{x:.1f}" y2="{bottom:.0f}" stroke="var(--line)"/>')
        out.append(_text(x, bottom + 18, str(level).replace("-", "\u2212"), "c soft"))
    for row, t in enumerate(tracks):
        out += _bar(t, 118 + BAR_STEP * row)
    return [*out, _text(BAR_RIGHT, bottom + 36, "bar: noise to voice in LUFS; triangle: peak in dBFS", "soft e")]


def _bar(t: TrackFindings, y: float) -> list[str]:
    """One row of it."""
    out = [_text(BAR_LEFT - 12, y + 15, _short(t.name), "e")]
    if t.silent:
        return [*out, _text(_at(-80) + 6, y + 15, "digital silence", "soft")]
    floor = -math.inf if t.floor_lufs is None else t.floor_lufs
    if t.voice_lufs is None:
        out.append(f'<line x1="{_at(floor):.1f}" y1="{y}" x2="{_at(floor):.1f}" y2="{y + 20}" stroke="var(--mark)" '
                   'stroke-width="3"/>')
        words = "no voice" if t.role == "voice" else t.role
        before = _at(floor) > BAR_LEFT + 70  # the peak lies to the right
        out.append(_text(_at(floor) + (-8 if before else 8), y + 15, words, "soft halo e" if before else "soft halo"))
    else:
        left, right = _at(floor), _at(t.voice_lufs)
        out.append(f'<rect x="{left:.1f}" y="{y}" width="{max(right - left, 2):.1f}" height="20" rx="2" '
                   'fill="var(--mark)" fill-opacity="0.35" stroke="var(--mark)" stroke-width="1.5"/>')
        out.append(_text(left + 6, y + 15, _number(floor), "num"))
        out.append(_text(right - 6, y + 15, _number(t.voice_lufs), "num e"))
    x = _at(t.peak_dbfs)
    colour = "var(--warn)" if t.clipped else "var(--ink)"
    out.append(f'<path d="M{x:.1f} {y + 18:.0f}L{x - 6:.1f} {y + 4:.0f}L{x + 6:.1f} {y + 4:.0f}Z" fill="{colour}"/>')
    if t.clipped:
        out.append(_text(x - 10, y + 15, f"clipped \u00d7{len(t.clipped)}", "soft e halo"))
    return out


def _cells(found: Inspection, left: float, top: float) -> list[str]:
    """The bleed matrix, its first cell at `left`."""
    out = [_text(left - 140, top, "Bleed in dB against the microphone's own voice", "head"),
           _text(left, top + 36, "at the microphone of", "soft"), _text(left - 14, top + 64, "voice of", "soft e")]
    for m, t in enumerate(found.tracks):
        middle = left + CELL * (m + 0.5)
        out.append(_text(middle, top + 64, _short(t.name, 8), "c num"))
        out.append(_text(left - 14, top + 85 + CELL * (m + 0.5), _short(t.name), "e"))
        out += [_cell(found, k, m, middle, top + 80 + CELL * (k + 0.5)) for k in range(len(found.tracks))]
    few, bottom = len(found.tracks) <= FEW, top + 80 + CELL * len(found.tracks)
    ring = f"ringed: breaks the 3:1 rule (over {BLEED_DB:.1f} dB)".replace("-", "\u2212")
    return [*out, _text(left - 140 if few else left, bottom + 26, ring, "soft")]


def _cell(found: Inspection, k: int, m: int, x: float, y: float) -> str:
    """Disc and number of one voice at one microphone."""
    frame = (f'<rect x="{x - CELL / 2:.1f}" y="{y - CELL / 2:.1f}" width="{CELL}" height="{CELL}" fill="none" '
             'stroke="var(--line)"/>')
    if k == m:
        return frame + _text(x, y + 4, "own", "c soft")
    value = float(found.bleed_db[k, m])
    if not math.isfinite(value):
        return frame + _text(x, y + 4, "?", "c soft")
    return frame + _disc(x, y - 7, value) + _text(x, y + 27, _number(value), "c num")


def _disc(x: float, y: float, value: float) -> str:
    """A disc whose area goes with the amplitude; ringed where it breaks the 3:1 rule."""
    radius = min(18.0, max(1.5, 20 * 10 ** (value / 40)))
    if value > BLEED_DB:
        return (f'<circle cx="{x:.1f}" cy="{y:.1f}" r="{radius:.1f}" fill="var(--warn)"/>'
                f'<circle cx="{x:.1f}" cy="{y:.1f}" r="{radius + 3:.1f}" fill="none" stroke="var(--warn)" '
                'stroke-width="1.5"/>')
    return f'<circle cx="{x:.1f}" cy="{y:.1f}" r="{radius:.1f}" fill="var(--mark)"/>'


def _at(level: float) -> float:
    """Where a level lies on the axis."""
    inside = min(HIGHEST_LUFS, max(LOWEST_LUFS, level))
    return BAR_LEFT + (BAR_RIGHT - BAR_LEFT) * (inside - LOWEST_LUFS) / (HIGHEST_LUFS - LOWEST_LUFS)


def _text(x: float, y: float, words: str, style: str) -> str:
    """A piece of text."""
    return f'<text x="{x:.1f}" y="{y:.1f}" class="{style}">{_safe(words)}</text>'


def _safe(words: str) -> str:
    """Escaped, without what XML does not allow."""
    return escape("".join(c for c in words if c.isprintable()))


def _short(name: str, most: int = LONGEST_NAME) -> str:
    """A name cut to fit."""
    return name if len(name) <= most else name[: most - 1] + "\u2026"


def _number(value: float) -> str:
    """A whole number with a true minus sign."""
    return f"{round(value) + 0:d}".replace("-", "\u2212") if math.isfinite(value) else "\u2212\u221e"
