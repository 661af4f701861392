"""season.html: a season on one page, without script and without anything from elsewhere.

It says in words first: what came to what, what failed and why, what stands out. Then a table of episodes, each with a
link to its own page, and for every voice of more than one episode a string of beads: one an episode, as high as the
voice lies against the target, on the band of 0.5 LU in which a season should keep it. What stands out is a hollow
diamond among round beads, and says so in words, so that nothing depends on colour.

The content security policy admits this style alone, by its hash. Names from files reach the page as text only.
"""

from __future__ import annotations

import base64
import hashlib
import statistics
from collections.abc import Sequence
from html import escape
from pathlib import Path
from urllib.parse import quote

from leveller.report.quantities import shown
from leveller.report.season import FAILED, KEPT_LU, WAITING, WIDER, KeptLevel, Outcome, SeasonReport, SeasonVoice
from leveller.report.text import visible

COLUMNS = ("Episode", "Outcome", "Delivery", "Length", "LUFS", "Range", "dBTP", "To listen", "Took", "Out of line")
WORD_COLUMNS, CLASS_WORDS = ("Outcome", "Delivery", "Out of line"), ' class="words"'
BEAD_STEP, LEFT, TOP, HEIGHT, SPAN_LU = 22, 46, 14, 120, 3.0  # of the drawing, in its own units; the scale's half
BEAD_SIZE = 5
HALF_BAND_LU = KEPT_LU / 2


def season_page(report: SeasonReport) -> str:
    """The page as text; the same report gives the same text."""
    style = Path(__file__).with_name("season.css").read_text(encoding="utf-8")
    digest = base64.b64encode(hashlib.sha256(style.encode()).digest()).decode()
    policy = f"default-src 'none'; style-src 'sha256-{digest}'; img-src data:; base-uri 'none'; form-action 'none'"
    title = _safe(report.title)
    parts = (_head(report), _undone(report), _standing_out(report), _episodes(report), _voices(report), _foot(report))
    return (f'<!doctype html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
            f'<meta http-equiv="Content-Security-Policy" content="{policy}">\n'
            '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
            '<meta name="color-scheme" content="light dark">\n<link rel="icon" href="data:,">\n'
            f"<title>{title} - season - leveller</title>\n<style>{style}</style>\n</head>\n<body>\n"
            + "".join(parts) + "</body>\n</html>\n")


def _safe(text: str) -> str:
    """A text as the page shows it."""
    return escape(visible(text))


def _head(report: SeasonReport) -> str:
    """What came to what."""
    have = [episode for episode in report.episodes if episode.figures is not None]
    met = sum(episode.figures is not None and episode.figures.met for episode in have)
    delivered = f"Delivery met in {met} of {len(have)}." if have else "No episode has a result."
    listen_s = sum(e.figures.listen_s or 0.0 for e in have if e.figures is not None)
    listen = f" To listen to in all: {listen_s / 60:.0f} min." if listen_s else ""
    stopped = '<p class="off">The run was interrupted; run it again and it goes on.</p>\n' if report.interrupted else ""
    return (f"<header>\n<h1>{_safe(report.title)}</h1>\n<p class=\"sum\">{_safe(report.sentence)}. {delivered}{listen}"
            f"</p>\n{stopped}</header>\n<main>\n")


def _undone(report: SeasonReport) -> str:
    """What failed, and why."""
    items = [f"<li><strong>{_safe(e.episode)}</strong>: {_safe(e.reason)}</li>" for e in report.episodes
             if e.outcome == FAILED]
    return _section("Not done", "undone", _list(items)) if items else ""


def _standing_out(report: SeasonReport) -> str:
    """What a listener would notice, in words."""
    items = [f"<li><strong>{_safe(name)}</strong>: {_safe(words)}</li>" for name, words in out_of_line(report)]
    nothing = "<p>Nothing stands out.</p>\n"
    return _section("Out of line", "out", _list(items) if items else nothing)


def out_of_line(report: SeasonReport) -> list[tuple[str, str]]:
    """Everything that stands out, as (where, what)."""
    found: list[tuple[str, str]] = []
    for episode in report.episodes:
        if episode.figures is None:
            continue
        if not episode.figures.met:
            found.append((episode.episode, f"delivery not met: {episode.figures.why_not}"))
        found += [(episode.episode, remark) for remark in episode.remarks]
        found += [(f"{episode.episode}, {voice.voice}", remark)
                  for voice in episode.figures.voices for remark in voice.remarks]
    found += [(voice.voice, f"not kept within {KEPT_LU} LU over the season: {shown(voice, 'lowest_lu')} to "
               f"{shown(voice, 'highest_lu')} LU against target") for voice in report.voices if not voice.kept]
    return found


def _episodes(report: SeasonReport) -> str:
    """The table of episodes."""
    heads = "".join(f'<th scope="col"{CLASS_WORDS if name in WORD_COLUMNS else ""}>{name}</th>' for name in COLUMNS)
    rows = "".join(_episode_row(episode) for episode in report.episodes)
    table = (f'<table>\n<caption>In the season\'s order; range in LU; a diamond marks what stands out</caption>\n'
             f"<thead><tr>{heads}</tr></thead>\n<tbody>\n{rows}</tbody>\n</table>\n")
    return _section("Episodes", "episodes", _wide(table, "Table of episodes"))


def _episode_row(episode: Outcome) -> str:
    """One episode."""
    figures, name = episode.figures, _safe(episode.episode)
    if figures is None:
        word = "off" if episode.outcome == FAILED else ""
        return (f'<tr><th scope="row">{name}</th><td class="words {word}">{episode.outcome}</td>'
                f'<td class="words tell" colspan="{len(COLUMNS) - 2}">{_safe(episode.reason)}</td></tr>\n')
    link = f'<a href="{escape(quote(episode.episode))}/report.html">{name}</a>'
    asked = _safe(figures.delivery)
    delivery = f"{asked} met" if figures.met else f'<span class="off">{asked} NOT met</span>'
    spread = shown(figures, "range_lu")
    if any(remark.endswith(WIDER) for remark in episode.remarks):
        spread = f'<span class="off">{spread}</span>'
    cells = (shown(figures, "length_s"), shown(figures, "integrated_lufs"), spread, shown(figures, "true_peak_dbtp"),
             shown(figures, "listen_s"), shown(episode, "took_s"))
    remarks = [*episode.remarks, *(f"{voice.voice} {remark}" for voice in figures.voices for remark in voice.remarks)]
    return (f'<tr><th scope="row">{link}</th><td class="words">{episode.outcome}</td><td class="words">{delivery}</td>'
            + "".join(f"<td>{cell}</td>" for cell in cells)
            + f'<td class="words tell">{_safe("; ".join(remarks))}</td></tr>\n')


def _voices(report: SeasonReport) -> str:
    """Each voice over the season."""
    if not report.voices:
        return ""
    strings = "".join(_string(report.episodes, voice) for voice in report.voices)
    about = ('<p class="quiet">Own speech after make-up gain, against the delivery\'s target, in LU; the band is '
             f"{KEPT_LU} LU wide round the voice's median.</p>\n")
    return _section("Voices from episode to episode", "voices", about + strings)


def _string(episodes: Sequence[Outcome], level: KeptLevel) -> str:
    """One voice: its figures in words, then its beads."""
    places = [(i, episode.episode, voice) for i, episode in enumerate(episodes) if episode.figures is not None
              for voice in episode.figures.voices if voice.voice == level.voice and voice.against_lu is not None]
    middle = statistics.median(voice.against_lu or 0.0 for _, _, voice in places)
    width = LEFT + BEAD_STEP * len(episodes) + 10
    word = "kept" if level.kept else f"not kept within {KEPT_LU} LU"
    facts = (f"{level.episodes} episodes, {shown(level, 'lowest_lu')} to {shown(level, 'highest_lu')} LU: spread "
             f"{shown(level, 'spread_lu')} LU, {word}")
    band = (f'<rect class="band" x="{LEFT}" y="{_y(middle + HALF_BAND_LU):.1f}" width="{width - LEFT}" '
            f'height="{_y(middle - HALF_BAND_LU) - _y(middle + HALF_BAND_LU):.1f}"/>')
    lines = "".join(f'<line class="{"zero" if lu == 0 else "grid"}" x1="{LEFT}" x2="{width}" y1="{_y(lu):.1f}" '
                    f'y2="{_y(lu):.1f}"/><text x="{LEFT - 8}" y="{_y(lu) + 4:.1f}" text-anchor="end">{lu:+d}</text>'
                    for lu in range(-3, 4, 1 if SPAN_LU <= 3 else 2)).replace(">+0<", ">0<")
    beads = "".join(_bead(i, name, voice, middle) for i, name, voice in places)
    drawing = (f'<svg viewBox="0 0 {width} {HEIGHT + 2 * TOP}" width="{width}" height="{HEIGHT + 2 * TOP}" role="img" '
               f'aria-label="{_safe(level.voice)}: {facts}">{band}{lines}{beads}</svg>\n')
    return f"<h3>{_safe(level.voice)}</h3>\n<p>{facts}</p>\n{_wide(drawing, f'Levels of {_safe(level.voice)}')}"


def _bead(i: int, episode: str, voice: SeasonVoice, middle: float) -> str:
    """A bead, or a diamond where it lies off the band."""
    against = voice.against_lu or 0.0
    x, y, size = LEFT + BEAD_STEP * (i + 0.5), _y(max(-SPAN_LU, min(SPAN_LU, against))), BEAD_SIZE
    title = f"<title>{_safe(episode)}: {shown(voice, 'against_lu', unit=True)}</title>"
    if abs(against - middle) > HALF_BAND_LU + 1e-9:
        points = f"{x},{y - size - 1:.1f} {x + size + 1},{y:.1f} {x},{y + size + 1:.1f} {x - size - 1},{y:.1f}"
        return f'<polygon class="stray" points="{points}">{title}</polygon>'
    return f'<circle class="bead" cx="{x}" cy="{y:.1f}" r="{size}">{title}</circle>'


def _y(level_lu: float) -> float:
    """Height of a level in the drawing."""
    return TOP + (SPAN_LU - level_lu) / (2 * SPAN_LU) * HEIGHT


def _foot(report: SeasonReport) -> str:
    """What was left out, and what made this."""
    notes = _list([f"<li>{_safe(note)}</li>" for note in report.notes]) if report.notes else ""
    waiting = report.count(WAITING)
    left = f"<p>{waiting} not reached.</p>\n" if waiting else ""
    versions = ", ".join(f"{name} {version}" for name, version in report.made_by.items())
    return f'</main>\n<footer class="quiet">\n{left}{notes}<p>Made by {_safe(versions)}</p>\n</footer>\n'


def _section(title: str, name: str, content: str) -> str:
    """A part of the page with its heading."""
    return f'<section aria-labelledby="{name}">\n<h2 id="{name}">{title}</h2>\n{content}</section>\n'


def _list(items: Sequence[str]) -> str:
    """A list."""
    return "<ul>\n" + "\n".join(items) + "\n</ul>\n"


def _wide(content: str, label: str) -> str:
    """What may be wider than the window; it can be scrolled by keyboard."""
    return f'<div class="wide" tabindex="0" role="group" aria-label="{label}">\n{content}</div>\n'
