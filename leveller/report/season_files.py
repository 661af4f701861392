"""season.csv, season.json and season.html: one `SeasonReport`, three files, each whole or as it was before.

season.csv has two kinds of rows, told apart in its first column: one for every episode, and after it one for each of
its voices; so every number stands once, and a spreadsheet can filter either kind. Numbers that were not measured are
empty cells. season.json holds the same and the levels of each voice over the season. Both have the time that the
processing took, which the reports of an episode never have.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from leveller.automation import text_cell
from leveller.errors import OutputError
from leveller.report.quantities import rounded
from leveller.report.season import EpisodeFigures, Outcome, SeasonReport, SeasonVoice
from leveller.report.season_page import season_page
from leveller.report.tables import as_json

SEASON_COLUMNS = (
    "row", "episode", "outcome", "voice", "delivery", "delivery_met", "length_s", "integrated_lufs", "range_lu",
    "true_peak_dbtp", "speaks_s", "source_lufs", "level_lufs", "against_lu", "listen_places", "listen_s", "took_s",
    "remarks", "reason")
JSON_FORM = 1  # raised when a key of season.json changes its meaning


class SeasonUnwritten(OutputError):
    """The season's reports cannot be written; what they would say is in `report`."""

    def __init__(self, message: str, report: SeasonReport) -> None:
        super().__init__(message)
        self.report = report


def write_season(folder: Path, report: SeasonReport, *, by: Path) -> None:
    """Write the three files, each whole or as it was; where one of them has no room, none is touched.

    Parameters
    ----------
    folder : Path
        where they go
    report : SeasonReport
    by : Path
        the batch's own folder on the same file system, where they are written first; it goes in any case, so that an
        interrupted run leaves nothing beside the reports

    Raises
    ------
    SeasonUnwritten
        where that cannot be; it has the report, so that it can be told at least
    """
    texts = {"season.csv": season_csv, "season.json": season_json, "season.html": season_page}
    try:
        for name, text in texts.items():
            (by / name).write_bytes(text(report).encode("utf-8", "backslashreplace"))
        for name in texts:
            (by / name).replace(folder / name)
    except OSError as error:
        raise SeasonUnwritten(f"{folder}: {name} cannot be written ({error.strerror}). The episodes are not touched by "
                              "that; make room and give the same command again", report) from error


def season_csv(report: SeasonReport) -> str:
    """All rows, header first."""
    rows = [dict(zip(SEASON_COLUMNS, SEASON_COLUMNS, strict=True))]
    for episode in report.episodes:
        rows.append({"row": "episode", **_episode_cells(episode)})
        for voice in () if episode.figures is None else episode.figures.voices:
            rows.append({"row": "voice", "episode": text_cell(episode.episode), **_voice_cells(voice)})
    return "".join(",".join(str(row.get(name, "")) for name in SEASON_COLUMNS) + "\r\n" for row in rows)


def season_json(report: SeasonReport) -> str:
    """The whole report as JSON."""
    said: dict[str, Any] = as_json(report)
    voices = [{**as_json(voice), "kept": voice.kept} for voice in report.voices]
    content = {"form": JSON_FORM, "sentence": report.sentence, **said, "voices": voices}
    return json.dumps(content, indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def _episode_cells(episode: Outcome) -> dict[str, Any]:
    """Cells of an episode's row."""
    figures = episode.figures
    cells = {"episode": text_cell(episode.episode), "outcome": episode.outcome, "took_s": _number(episode, "took_s"),
             "remarks": text_cell("; ".join(episode.remarks)), "reason": text_cell(episode.reason)}
    if figures is None:
        return cells
    places = "" if figures.listen_places is None else figures.listen_places
    numbers = ("length_s", "integrated_lufs", "range_lu", "true_peak_dbtp", "listen_s")
    return {**cells, "delivery": text_cell(figures.delivery), "delivery_met": "yes" if figures.met else "no",
            "reason": text_cell(episode.reason or figures.why_not), "listen_places": places,
            **{name: _number(figures, name) for name in numbers}}


def _voice_cells(voice: SeasonVoice) -> dict[str, Any]:
    """Cells of a voice's row."""
    numbers = ("speaks_s", "source_lufs", "level_lufs", "against_lu")
    return {"voice": text_cell(voice.voice), "remarks": text_cell("; ".join(voice.remarks)),
            **{name: _number(voice, name) for name in numbers}}


def _number(record: Outcome | EpisodeFigures | SeasonVoice, name: str) -> Any:
    """A number, or an empty cell."""
    value = rounded(record, name)
    return "" if value is None else value
