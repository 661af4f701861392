"""A season as lines of text: a row an episode, each voice's level, what stands out, last what failed and what to do.

Whoever looks at the end of a long log reads the failures first. `width` as in `text`.
"""

from __future__ import annotations

from leveller.report.quantities import shown
from leveller.report.season import EDITED, FAILED, KEPT_LU, UNCHANGED, WAITING, Outcome, SeasonReport
from leveller.report.season_page import out_of_line
from leveller.report.text import BAD, DIM, GOOD, HEAD, Column, Line, folded, format_table, visible


def format_season(report: SeasonReport, *, out: str, width: int | None = None) -> list[Line]:
    """The whole summary of a batch."""
    lines = [*_episode_lines(report, width), *_voice_lines(report, width), *_standing_out(report, width)]
    lines += [Line(text, DIM) for note in report.notes for text in folded(visible(note), width, indent="")]
    lines.append(Line(f"Written to {visible(out)}"))
    return lines + last_lines(report, width=width)


def last_lines(report: SeasonReport, *, width: int | None = None) -> list[Line]:
    """The sentence on the whole; before it what failed, after it what to do."""
    failed = [episode for episode in report.episodes if episode.outcome == FAILED]
    lines = [Line(text, BAD) for episode in failed
             for text in folded(visible(f"failed: {episode.episode}: {episode.reason}"), width, indent="")]
    lines += [Line(text, BAD if report.exit_code else GOOD) for text in folded(report.sentence, width, indent="")]
    advice = []
    if failed:
        advice.append("Mend what the lines above name and give the same command again: finished episodes are not "
                      "processed twice")
    if report.interrupted:
        advice.append(f"Interrupted; {report.count(WAITING)} not reached. The same command goes on from here")
    if not failed and report.count(EDITED):
        advice.append("Edited episodes were left alone; --again processes them anew and drops the edits")
    if not advice and report.count(UNCHANGED) == len(report.episodes):
        advice.append("Nothing has changed; --again processes all anew")
    return lines + [Line(text) for sentence in advice for text in folded(sentence, width, indent="")]


def _episode_lines(report: SeasonReport, width: int | None) -> list[Line]:
    """A row for each episode that has figures."""
    have = [episode for episode in report.episodes if episode.figures is not None]
    columns = [Column("Episode"), Column("outcome"), Column("delivery"), Column("length"), Column("LUFS"),
               Column("range"), Column("dBTP"), Column("listen"), Column("took")]
    return format_table(columns, [_cells(episode) for episode in have], width=width) if have else []


def _cells(episode: Outcome) -> list[str]:
    """One row."""
    figures = episode.figures
    assert figures is not None
    return [episode.episode, episode.outcome, "met" if figures.met else "NOT met", shown(figures, "length_s"),
            shown(figures, "integrated_lufs"), shown(figures, "range_lu"), shown(figures, "true_peak_dbtp"),
            shown(figures, "listen_s"), shown(episode, "took_s")]


def _voice_lines(report: SeasonReport, width: int | None) -> list[Line]:
    """Each voice that is heard in several episodes."""
    if not report.voices:
        return []
    columns = [Column("Voice"), Column("episodes"), Column("lowest", "against target, LU"),
               Column("highest", "against target, LU"), Column("spread"), Column(f"within {KEPT_LU}")]
    rows = [[voice.voice, str(voice.episodes), shown(voice, "lowest_lu"), shown(voice, "highest_lu"),
             shown(voice, "spread_lu"), "yes" if voice.kept else "no"] for voice in report.voices]
    return [Line(""), *format_table(columns, rows, width=width)]


def _standing_out(report: SeasonReport, width: int | None) -> list[Line]:
    """What stands out, in words."""
    texts = [text for name, words in out_of_line(report) for text in folded(visible(f"{name}: {words}"), width)]
    return [Line(""), Line("Out of line", HEAD), *map(Line, texts), Line("")] if texts else [Line("")]
