"""Reports as lines of text: each line with the part it plays, no colour and no markup; `console` prints them.

`width` is that of a terminal: sentences are folded and long names shortened to fit. None is no terminal: one line stays
one line, and a name is printed whole. Columns are aligned by what a character takes on a screen (East Asian wide
characters two cells, combining marks none). Control characters of a name never reach a terminal: `visible` replaces
them.
"""

from __future__ import annotations

import itertools
import textwrap
import unicodedata
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from typing import Protocol

from leveller.report.origins import DEFAULT, Row
from leveller.report.quantities import shown
from leveller.report.records import TWO_CHANNELS_LU, Fault, FileReading, MixFigures, Place, Report, VoiceFigures
from leveller.settings import Delivery
from leveller.units import clock

HEAD, GOOD, BAD, DIM, PLAIN = "head", "good", "bad", "dim", "plain"
MOST_TO_HEAR = 5
LISTED_IN = "listen.csv and report.html"
MOST_PLACES = 4  # printed of a fault; report.json has them all
LONG_S = 1.0  # a place longer than this is printed with its end
SHORTEST_NAME = 8
LEGEND = ("in: the source; out: its stem, before the limiter",
          "others: while only others speak, against own speech; noise: while nobody speaks")
LEVELS = (("speech, LUFS", "before_lufs", "after_lufs"), ("others, dB", "bleed_before_db", "bleed_after_db"),
          ("noise, LUFS", "noise_before_lufs", "noise_after_lufs"))  # heading, figures in and out
MOVES = (("trim", "trim_db"), ("ride", "ride_db"), ("comp", "compressor_db"), ("close", "expander_db"))
_HIDDEN = ("Cc", "Cf", "Cs", "Zl", "Zp")  # control, format (text direction too), surrogates, line ends


class ToHear(Protocol):
    """A place worth a listen, of whatever kind."""

    @property
    def from_s(self) -> float: ...
    @property
    def to_s(self) -> float: ...
    @property
    def sentence(self) -> str: ...


@dataclass(frozen=True)
class Line:
    """A line of a report."""

    text: str
    part: str = PLAIN


@dataclass(frozen=True)
class Column:
    """A column of a table; those of one group stand close and share a heading."""

    title: str
    group: str = ""


def format_summary(
    report: Report, *, out: str, places: Sequence[ToHear] = (), listed_in: str = LISTED_IN, width: int | None = None
) -> list[Line]:
    """The summary of a run: delivery first, then voices, mix, where to listen, sources, what is left open."""
    blocks = [
        _delivery_lines(report, width), _voice_lines(report, width), _other_lines(report, width),
        _mix_lines(report.mix), _listen_lines(places, listed_in, width),
        _list_lines("Sources", map(fault_text, report.faults), width),
        _list_lines("Left open", report.left_open, width), [Line(f"Written to {visible(out)}")],
    ]
    return _joined(blocks)


def summary_blocks(report: Report) -> list[tuple[str, list[str]]]:
    """The summary as headings with their lines, for the page; lines with tabs are rows of a table, its head first."""
    blocks = [
        ("Delivery", _delivery_lines(report, None)),
        ("Voices", _voice_rows(report) + _other_lines(report, None)),
        ("Mix", _mix_sentences(report.mix)), ("Sources", _list_lines("Sources", map(fault_text, report.faults), None)),
        ("Left open", _list_lines("Left open", report.left_open, None))]
    return [(heading, [line.text for line in lines if line.text != heading]) for heading, lines in blocks if lines]


def format_readings(readings: Sequence[FileReading], *, width: int | None = None) -> list[Line]:
    """A row for each file that was measured."""
    columns = [Column("File"), Column("length"), Column("LUFS"), Column("range"), Column("most", "short-term"),
               Column("at", "short-term"), Column("most", "momentary"), Column("at", "momentary"),
               Column("dBTP", "true peak"), Column("at", "true peak")]
    fields = ("length_s", "integrated_lufs", "range_lu", "max_short_term_lufs", "max_short_term_s",
              "max_momentary_lufs", "max_momentary_s", "true_peak_dbtp", "true_peak_s")
    lines = format_table(columns, [[r.file, *(shown(r, name) for name in fields)] for r in readings], width=width)
    notes = [f"{visible(r.file)}: {r.repaired_frames} samples that held no number (NaN or Inf) were taken as silence"
             for r in readings if r.repaired_frames]
    if any(r.two_channels_lufs is not None for r in readings):
        notes.append(f"a file of one channel reads {TWO_CHANNELS_LU} LU more when two loudspeakers play it")
    return lines + [Line(text, DIM) for note in notes for text in folded(note, width, indent="")]


def format_settings(
    rows: Sequence[Row], deliveries: Sequence[Delivery], in_force: str, *, width: int | None = None
) -> list[Line]:
    """Every setting as (key, value, unit, where it came from, reason), then the deliveries and the one that counts."""
    sizes = [max(len(row[i]) for row in rows) for i in range(3)]
    lines = [Line("Settings", HEAD)]
    for key, value, unit, origin, why in rows:
        text = f"  {key:<{sizes[0]}}  {value:>{sizes[1]}} {unit:<{sizes[2]}}  {origin}".rstrip()
        lines.append(Line(text, GOOD if origin != DEFAULT else PLAIN))
        lines += [Line(part, DIM) for part in (folded(why, width, indent="      ") if why else [])]
    lines += [Line(""), Line("Deliveries", HEAD)]
    for d in deliveries:
        channels = {1: "1 channel", 2: "2 channels", None: "1 or 2"}[d.channels]
        text = f"{d.name:<14}  {d.target_lufs:5.1f} LUFS  {d.ceiling_dbtp:4.1f} dBTP  {channels:<10}  {d.source}"
        lines += map(Line, folded(text, width))
    return lines + [Line(text) for text in folded(f"in force: {in_force}", width)]


def fault_text(fault: Fault) -> str:
    """A fault and its places."""
    return f"{fault.sentence}: {places_text(fault.places)}" if fault.places else fault.sentence


def places_text(places: Sequence[Place]) -> str:
    """'0:00:12, 0:01:00 to 0:01:20 and 3 more'."""
    texts = [f"{clock(a)} to {clock(b)}" if b - a > LONG_S else clock(a) for a, b in places[:MOST_PLACES]]
    more = len(places) - len(texts)
    return ", ".join(texts) + (f" and {more} more" if more else "")


def visible(text: str) -> str:
    """A text without what would move a cursor, turn the writing direction or break the line."""
    return "".join("?" if unicodedata.category(c) in _HIDDEN else c for c in text)


def cells(text: str) -> int:
    """Cells that a text takes on a screen."""
    return sum(0 if unicodedata.combining(c) else 2 if unicodedata.east_asian_width(c) in "WF" else 1 for c in text)


def format_table(columns: Sequence[Column], rows: Sequence[Sequence[str]], *, width: int | None = None) -> list[Line]:
    """A table: first column to the left, the others to the right; it gives way in the first column only."""
    others = [max(len(column.title), *(len(row[i]) for row in rows)) for i, column in enumerate(columns)]
    gaps = [0] + [1 if b.group and a.group == b.group else 2 for a, b in itertools.pairwise(columns)]
    names = [visible(row[0]) for row in rows]
    first = max(len(columns[0].title), *map(cells, names))
    if width is not None:
        first = max(min(first, width - sum(others[1:]) - sum(gaps)), SHORTEST_NAME)

    def line(name: str, texts: Sequence[str]) -> str:
        right = (" " * gap + text.rjust(size) for gap, text, size in zip(gaps[1:], texts, others[1:], strict=True))
        return (_fitted(name, first) + "".join(right)).rstrip()

    starts = [first + sum(others[1:i]) + sum(gaps[1 : i + 1]) for i in range(len(columns))]
    heads = [Line(text, DIM) for text in [_group_heads(columns, starts)] if text]
    heads.append(Line(line(columns[0].title, [column.title for column in columns[1:]]), HEAD))
    return heads + [Line(line(name, row[1:])) for name, row in zip(names, rows, strict=True)]


def folded(text: str, width: int | None, *, indent: str = "  ") -> list[str]:
    """A sentence, indented; folded where there is a width."""
    if width is None:
        return [indent + text]
    return textwrap.wrap(text, width, initial_indent=indent, subsequent_indent=indent + "  ", break_on_hyphens=False)


def _delivery_lines(report: Report, width: int | None) -> list[Line]:
    """Met or not, then what it is about."""
    asked, mix = report.delivery, report.mix
    reads = f"{shown(mix, 'integrated_lufs', unit=True)}, true peak {shown(mix, 'true_peak_dbtp', unit=True)}"
    verdict = f"Delivery met: {reads}" if asked.met else f"Delivery NOT met: {visible(asked.why_not)}"
    channels = {1: "one channel", 2: "two channels"}.get(mix.channels, f"{mix.channels} channels")
    wants = (f"{asked.name} asks for {shown(asked, 'target_lufs', unit=True)} and at most "
             f"{shown(asked, 'ceiling_dbtp', unit=True)}")
    about = f"{visible(report.title)}: {shown(mix, 'length_s')}, {channels} at {mix.rate_hz} Hz"
    return [*(Line(text, GOOD if asked.met else BAD) for text in folded(verdict, width, indent="")),
            *(Line(text, DIM) for text in (*folded(wants, width, indent=""), *folded(about, width, indent="")))]


def _voice_lines(report: Report, width: int | None) -> list[Line]:
    """The table of voices."""
    if not report.voices:
        return []
    getters: list[tuple[Column, Callable[[VoiceFigures], str]]] = [(Column("speaks"), _cell("speaks_s"))]
    for group, before, after in LEVELS:
        getters += [(Column("in", group), _cell(before)), (Column("out", group), _cell(after))]
    getters += [(Column(title, "gain moved, dB"), _cell(name)) for title, name in MOVES]
    rows = [[voice.track, *(get(voice) for _, get in getters)] for voice in report.voices]
    return [*format_table([Column("Voice"), *(column for column, _ in getters)], rows, width=width),
            *(Line(text, DIM) for sentence in LEGEND for text in folded(sentence, width, indent=""))]


def _voice_rows(report: Report) -> list[Line]:
    """The same as two narrow tables, for the page: levels in and out, and what moved the gain."""
    if not report.voices:
        return []
    levels = [("Voice, speaks", "", *(group for group, _, _ in LEVELS))]
    moves = [("Gain moved", *(f"{title}, dB" for title, _ in MOVES))]
    for voice in report.voices:
        name = visible(voice.track)
        levels += [(name, "in", *(shown(voice, before) for _, before, _ in LEVELS)),
                   (shown(voice, "speaks_s"), "out", *(shown(voice, after) for _, _, after in LEVELS))]
        moves += [(name, *(shown(voice, figure) for _, figure in MOVES))]
    rows = [*levels, *((sentence,) for sentence in LEGEND), *moves]
    return [Line("\t".join(row)) for row in rows]


def _cell(name: str) -> Callable[[VoiceFigures], str]:
    """A getter of a quantity's text."""
    return lambda voice: shown(voice, name)


def _other_lines(report: Report, width: int | None) -> list[Line]:
    """Tracks that are no voices."""
    texts = [f"{visible(other.track)}: {other.role}, {shown(other, 'gain_db', unit=True)}" for other in report.others]
    return _list_lines("Other tracks", texts, width)


def _mix_rows(mix: MixFigures) -> list[tuple[str, str, str, str]]:
    """The mix, a figure a row: name, number, unit, when."""
    two = "" if mix.two_channels_lufs is None else f"{shown(mix, 'two_channels_lufs')} on two channels"
    spoken = [] if mix.speech_lufs is None else [("speech", shown(mix, "speech_lufs"), "LUFS", "")]
    return [
        ("integrated", shown(mix, "integrated_lufs"), "LUFS", two),
        *spoken,
        ("range", shown(mix, "range_lu"), "LU", ""),
        ("short-term, most", shown(mix, "max_short_term_lufs"), "LUFS", f"at {shown(mix, 'max_short_term_s')}"),
        ("momentary, most", shown(mix, "max_momentary_lufs"), "LUFS", f"at {shown(mix, 'max_momentary_s')}"),
        ("true peak", shown(mix, "true_peak_dbtp"), "dBTP", f"at {shown(mix, 'true_peak_s')}"),
        ("make-up gain", shown(mix, "make_up_db"), "dB", ""),
        ("limiting, most", shown(mix, "limiting_most_db"), "dB", _limiting(mix)),
    ]


def _mix_lines(mix: MixFigures) -> list[Line]:
    """The mix in columns, for the console."""
    return [Line("Mix", HEAD), *(Line(f"  {name:<17}{_at_point(number)} {unit:<4}  {when}".rstrip())
                                 for name, number, unit, when in _mix_rows(mix))]


def _mix_sentences(mix: MixFigures) -> list[Line]:
    """The mix where nothing stands in columns, for the page."""
    return [Line(f"{name}: {number} {unit}{', ' if when else ''}{when}") for name, number, unit, when in _mix_rows(mix)]


def _limiting(mix: MixFigures) -> str:
    """When, how long, how often."""
    if not mix.limiting_total_s:
        return ""
    return (f"at {shown(mix, 'limiting_most_s')}; {mix.limiting_total_s:.1f} s in all, over 3 dB for "
            f"{shown(mix, 'limiting_heavy_pct', unit=True)}")


def _listen_lines(places: Sequence[ToHear], listed_in: str, width: int | None) -> list[Line]:
    """The places at the head of the list; `listed_in` has them all."""
    texts = [f"{clock(place.from_s)} {place.sentence}" for place in places[:MOST_TO_HEAR]]
    if len(places) > MOST_TO_HEAR:
        seconds = sum(place.to_s - place.from_s for place in places)
        texts.append(f"{len(places)} places, {seconds:.0f} s in all: {listed_in}")
    return _list_lines("Listen here first", texts, width)


def _list_lines(title: str, sentences: Iterable[str], width: int | None) -> list[Line]:
    """A heading and sentences under it; nothing where there are none."""
    texts = [text for sentence in sentences for text in folded(visible(sentence), width)]
    return [Line(title, HEAD), *map(Line, texts)] if texts else []


def _at_point(number: str) -> str:
    """A number with its decimal point in a fixed place."""
    whole, point, part = number.partition(".")
    return f"{whole:>4}{point}{part}".ljust(7)


def _fitted(name: str, size: int) -> str:
    """A name in exactly so many cells, shortened where it is longer."""
    if cells(name) > size:
        while cells(name) > size - 1:
            name = name[:-1]
        name += "…"
    return name + " " * (size - cells(name))


def _group_heads(columns: Sequence[Column], starts: Sequence[int]) -> str:
    """The headings of groups over their first column."""
    text = ""
    for i, column in enumerate(columns):
        if column.group and (i == 0 or columns[i - 1].group != column.group):
            text = f"{text:<{starts[i]}}{column.group}"
    return text


def _joined(blocks: Iterable[list[Line]]) -> list[Line]:
    """Blocks with an empty line between them."""
    out: list[Line] = []
    for block in blocks:
        if block:
            out += [Line(""), *block] if out else block
    return out
