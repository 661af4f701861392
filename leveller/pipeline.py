"""The story: what `leveller process` does, one line a stage, and what it returns.

`process` is what the command itself calls. Nothing here computes; each stage is a room of its own.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Iterable, Mapping, Sequence
from concurrent.futures import Executor, Future
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from leveller.align import aligned, find_alignment
from leveller.attribute import Activity, attribute
from leveller.automation import NO_ROWS, read_automation, row_keys, write_automation
from leveller.cut import Finished, deliver_cut, open_cut
from leveller.edits import differences, keep_file, without_effect
from leveller.fingerprint import digests_of
from leveller.folder import OutputFolder
from leveller.kept import MEASUREMENTS_FILE, ROWS_FILE, keep_measurements, keep_rows, kept_measurements, kept_rows
from leveller.lanes import second_thread
from leveller.listen import Place, places_to_hear
from leveller.marks import mark_files
from leveller.measure import Measurements, OnProgress, measure, no_progress
from leveller.plan import GainPlan, make_plan
from leveller.plan.corrections import overruled
from leveller.render.mix import LEVELS, Mix, render
from leveller.report.finished import write_finished
from leveller.report.session_page import write_page
from leveller.report.tables import write_tables
from leveller.report.text import summary_blocks
from leveller.request import Request, cut_folder, default_out, output_folder, source_paths
from leveller.session import Session
from leveller.suspects import alignment_notes
from leveller.timeline import check_table, retimed
from leveller.units import frames_to_hops

__all__ = ["Finished", "Result", "finish", "process", "render_again"]


@dataclass(frozen=True)
class Result:
    """Everything known after a run; all reports are made from it."""

    session: Session
    measurements: Measurements
    activity: Activity
    plan: GainPlan
    mix: Mix
    stems: str
    out: Path
    places: tuple[Place, ...] = ()  # worth a listen, the most doubtful first
    fingerprint: str = ""  # of what the run depends on; empty after an edit by hand
    digests: Mapping[Path, str] = field(default_factory=dict)  # SHA-256 of every source


@dataclass(frozen=True)
class _Beside:
    """What may run beside the decisions, which are one thread: nothing waits for it until the reports."""

    notes: Future[tuple[str, ...]]  # of tracks that do not line up
    digests: Future[dict[Path, str]]


def process(
    sources: Sequence[Path | str] | Path | str,
    *,
    out: Path | str | None = None,
    replace: bool = False,
    delivery: str | None = None,
    stems: str = LEVELS[0],
    settings: Mapping[str, Any] | None = None,
    corrections: Path | None = None,
    accept_short: bool = False,
    season: Path | None = None,
    align: bool | None = None,
    on_progress: OnProgress = no_progress,
) -> Result:
    """Level a conversation: write stems, mix, automation and reports.

    Parameters
    ----------
    sources : path or sequence of paths
        A session folder, a session.toml, or the audio files of one conversation.
    out : path, optional
        Folder to write, `./levelled/<title>` by default; it appears whole or not at all.
    replace : bool
        Allow an existing folder to be replaced.
    delivery : str, optional
        Name of a delivery (`leveller.settings.DELIVERIES`).
    stems : "before-limiter" or "limited"
    settings : mapping, optional
        Settings by dotted name, such as `{"expander.range_db": 18}`.
    corrections : path, optional
        A corrections.csv, or an edited speech.csv.
    accept_short : bool
        Take what is there of a file that is shorter than its header says.
    season : path, optional
        The season.toml whose defaults count; by default the one beside the session.
    align : bool, optional
        Line up tracks that start or run differently, or are upside down; without it they are only warned of. By
        default what session.toml or season.toml say.
    on_progress : callable (stage, done, total), optional

    Returns
    -------
    Result

    Raises
    ------
    LevellerError
        With one line that says what, where and the way out; nothing is written then.
    """
    asked = Request(sources, delivery, stems, settings, corrections, accept_short, align, season)
    session, mark = asked.opened(), asked.fingerprint()
    folder = output_folder(session, out, replace=replace, stems=stems)
    with folder, second_thread() as second:
        session, measurements = _measured([folder.path], session, on_progress, folder.work)
        beside = _begun(second, session, measurements)
        keep_measurements(folder.file(MEASUREMENTS_FILE), measurements, session)
        activity = attribute(measurements, session)
        measurements = measurements.without_bands()
        session = asked.with_speech_table(session, activity)
        plan = make_plan(measurements, activity, session)
        result = _delivered(folder, session, measurements, activity, plan, stems, mark, beside, on_progress)
        if corrections is not None:
            keep_file(folder, Path(corrections))
    return result


def render_again(
    sources: Sequence[Path | str] | Path | str,
    automation: Path | str,
    *,
    out: Path | str | None = None,
    replace: bool = False,
    delivery: str | None = None,
    stems: str = LEVELS[0],
    settings: Mapping[str, Any] | None = None,
    corrections: Path | None = None,
    accept_short: bool = False,
    align: bool | None = None,
    on_progress: OnProgress = no_progress,
) -> Result:
    """Render a session from an automation file, edited or not; the delivery is met again.

    The gains are those of the file and nothing else; without an edit the stems and the mix have the same bytes as those
    of `process`. Measurements are taken from where they are kept: beside the file, in `out` or in the default folder.
    Corrections change what the tables say of the states, not the gains.

    Parameters
    ----------
    sources, out, replace, delivery, stems, settings, corrections, accept_short, align, on_progress
        As for `process`.
    automation : path
        An automation.csv as `process` writes it, or as a spreadsheet saves it.

    Returns
    -------
    Result
        Its session's notes say how many rows were edited, what was rounded, which options have no effect, and where
        delivery, rate or channels are not those of the report.json beside the file.

    Raises
    ------
    LevellerError
        `AutomationError` for a row that cannot be rendered, with file and line.
    """
    automation = Path(automation)
    asked = Request(sources, delivery, stems, settings, corrections, accept_short, align)
    session = asked.opened(tables=[automation])
    folder = output_folder(session, out, replace=replace, stems=stems)
    homes = dict.fromkeys((automation.parent, folder.path, default_out(session)))
    measurements = None
    if session.align:  # the rows of the file belong to the session as it was lined up
        session, measurements = _measured(homes, session, on_progress, None)
        check_table(automation, session)
    hops = frames_to_hops(session.frames, session.rate_hz)
    written = next((rows for home in homes if (rows := kept_rows(home, session, hops)) is not None), None)
    read = read_automation(automation, session, hops=hops, written=NO_ROWS if written is None else written)
    with folder, second_thread() as second:
        if measurements is None:
            session, measurements = _measured(homes, session, on_progress, folder.work)
        beside = _begun(second, session, measurements)
        keep_measurements(folder.file(MEASUREMENTS_FILE), measurements, session)
        activity = attribute(measurements, session)
        measurements = measurements.without_bands()
        session = asked.with_speech_table(session, activity)
        if written is None:
            planned = make_plan(measurements, activity, session)
            read = read_automation(automation, session, hops=hops, written=row_keys(planned))
        notes = (*differences(automation.parent, session), *without_effect(settings, corrections), *read.notes)
        session = dataclasses.replace(session, notes=(*session.notes, *notes))
        mark = "" if notes else asked.fingerprint()
        result = _delivered(folder, session, measurements, activity, read.plan, stems, mark, beside, on_progress)
        keep_file(folder, automation)
    return result


def finish(
    paths: Sequence[Path | str] | Path | str,
    *,
    out: Path | str | None = None,
    replace: bool = False,
    delivery: str | None = None,
    settings: Mapping[str, Any] | None = None,
    accept_short: bool = False,
    on_progress: OnProgress = no_progress,
) -> Finished:
    """Bring a cut to its delivery: write mix.wav, mix.csv and report.json.

    Parameters
    ----------
    paths : path or sequence of paths
        One file, several that are summed, or a folder whose audio files are summed.
    out : path, optional
        Folder to write, `./levelled/<title> finished` by default; it appears whole or not at all.
    replace : bool
        Allow an existing folder to be replaced.
    delivery : str, optional
        Name of a delivery; by default `podcast-stereo` or `podcast-mono`, after the files' channels.
    settings : mapping, optional
        Settings of the limiter, such as `{"limiter.release_s": 0.2}`.
    accept_short : bool
        Take what is there of a file that is shorter than its header says.
    on_progress : callable (stage, done, total), optional

    Raises
    ------
    LevellerError
        With one line that says what, where and the way out; nothing is written then.
    """
    given = [paths] if isinstance(paths, str | Path) else paths
    session = open_cut([Path(path) for path in given], delivery=delivery, settings=settings, accept_short=accept_short)
    with cut_folder(session, out, replace=replace) as folder:
        finished = dataclasses.replace(deliver_cut(session, folder, on_progress),
                                       digests=digests_of(source_paths(session)))
        write_finished(folder, finished)
    return finished


def _measured(
    homes: Iterable[Path], session: Session, on_progress: OnProgress, work: Path | None
) -> tuple[Session, Measurements]:
    """The session and its measurements, kept ones where there are any; its tracks lined up where that is asked for."""
    homes = list(homes)

    def measurements_of(one: Session) -> Measurements:
        kept = next((m for home in homes if (m := kept_measurements(home, one)) is not None), None)
        return kept or measure(one, on_progress=on_progress, folder=work)

    measurements = measurements_of(session)
    if not session.align:
        return session, measurements
    lined_up = retimed(session, aligned(session, find_alignment(session, measurements)))
    return lined_up, measurements if lined_up.tracks == session.tracks else measurements_of(lined_up)


def _begun(second: Executor, session: Session, measurements: Measurements) -> _Beside:
    """Warnings of tracks that do not line up (unless they were lined up), and the sources' digests, begun."""
    notes = second.submit(lambda: () if session.align else alignment_notes(session, measurements))
    return _Beside(notes, second.submit(digests_of, source_paths(session)))


def _delivered(
    folder: OutputFolder, session: Session, measurements: Measurements, activity: Activity, plan: GainPlan, stems: str,
    mark: str, beside: _Beside, on_progress: OnProgress,
) -> Result:
    """Render the plan and write all that belongs to it."""
    mix = render(session, plan, folder.work, stems=stems, on_progress=on_progress)
    session = dataclasses.replace(session, notes=(*session.notes, *beside.notes.result()))
    activity = overruled(activity, session)
    places = places_to_hear(activity, plan, session, measurements)
    result = Result(session, measurements, activity, plan, mix, stems, folder.path, places, mark,
                    beside.digests.result())
    mark_files(folder.work, session, mix, places)
    write_automation(folder.file("automation.csv"), plan, session)
    report = write_tables(folder, result)
    write_page(folder.file("report.html"), result, places, summary_blocks(report))
    keep_rows(folder.file(ROWS_FILE), plan, session)
    return result
