"""A finished cut -> the same kinds of report as a session has: delivery, mix, what was said of the files, the page.

A cut has no voices and no decisions: the tables of those are not written, and report.json has empty lists for them. Of
the settings it holds those of the limiter, the only stage that was at work.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Iterator

from leveller.cut import Finished
from leveller.folder import OutputFolder
from leveller.report.cut_page import write_cut_page
from leveller.report.faults import mix_left_open, over_full_scale
from leveller.report.figures import delivery_figures, mix_figures
from leveller.report.records import Fault, Report
from leveller.report.tables import write_mix, write_report
from leveller.report.text import summary_blocks
from leveller.spots import spots_to_hear
from leveller.units import HOPS_PER_S, gain_to_db


def finished_figures(finished: Finished) -> Report:
    """All figures of a finished cut; it has no voices, and its speech is not told from the rest."""
    report = Report(
        title=finished.session.title, delivery=delivery_figures(finished.mix),
        mix=mix_figures(finished, speech_lufs=None), voices=(), others=(), faults=_faults(finished), left_open=())
    return dataclasses.replace(report, left_open=tuple(mix_left_open(report)))


def write_finished(folder: OutputFolder, finished: Finished) -> Report:
    """Write mix.csv, report.json and report.html; returns the report they were made from."""
    report = finished_figures(finished)
    write_mix(folder.file("mix.csv"), finished)
    write_report(folder.file("report.json"), report, finished, stages=("limiter",))
    write_cut_page(folder.file("report.html"), finished, spots_to_hear(finished), summary_blocks(report))
    return report


def _faults(finished: Finished) -> tuple[Fault, ...]:
    """What was not taken as it is, and what was repaired."""
    names = [track.name for track in finished.session.tracks]
    said = [Fault("note", next((name for name in names if note.startswith(f"{name}: ")), ""), note, ())
            for note in finished.session.notes]
    repaired = [Fault("repaired", name, f"{name}: {count} sample{'' if count == 1 else 's'} that held no number "
                      "(NaN or Inf) silenced", ())
                for name, count in zip(names, finished.repaired_frames, strict=True) if count]
    return (*said, *repaired, *_over_full_scale(finished))


def _over_full_scale(finished: Finished) -> Iterator[Fault]:
    """Files that pass full scale and lose nothing, since they hold floats."""
    for track, peaks in zip(finished.session.tracks, finished.file_peaks, strict=True):
        peak = float(peaks.max(initial=0.0))
        if track.is_float and peak > 1:
            yield over_full_scale(track.name, float(gain_to_db(peak)), int(peaks.argmax()) / HOPS_PER_S)
