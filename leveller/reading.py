"""The loudness of any files: what `leveller measure` reads.

Each file by itself, at its own rate and channels, in one pass: ITU-R BS.1770-5 loudness, EBU Tech 3342 range, the
loudest 3 s and 400 ms (EBU Tech 3341), true peak, each with its time. Nothing is written. Samples that hold no number
are silenced and counted, as in a session.
"""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path

import numpy as np

from leveller.audio import file_blocks, probe
from leveller.errors import InputError
from leveller.measure import OnProgress, no_progress
from leveller.measure.loudness import LoudnessMeter
from leveller.measure.peaks import TruePeakMeter
from leveller.report.records import FileReading, loudness_figures
from leveller.samples import FileFacts, repair

__all__ = ["FileReading", "measure_files"]

BLOCK_S = 2.0


def measure_files(
    files: Sequence[Path | str], *, accept_short: bool = False, on_progress: OnProgress = no_progress
) -> list[FileReading]:
    """Read the loudness of audio files.

    Parameters
    ----------
    files : sequence of paths
    accept_short : bool
        Take what is there of a file that is shorter than its header says.
    on_progress : callable (stage, done, total), optional
        Called with "read" and seconds of all files.

    Returns
    -------
    list of FileReading
        In the order given.

    Raises
    ------
    InputError
        for the first file that cannot be read
    """
    paths = [Path(file) for file in files]
    for path in paths:
        if os.path.isdir(path):
            raise InputError(f"{path}: is a folder, expected audio files such as {path / '*.wav'}")
    facts = [probe(path, accept_short=accept_short) for path in paths]
    total_s, before_s = sum(fact.frames / fact.rate_hz for fact in facts), 0.0
    out = []
    for path, name, fact in zip(paths, told_apart(paths), facts, strict=True):
        out.append(_one_file(path, name, fact, before_s, total_s, on_progress))
        before_s += fact.frames / fact.rate_hz
    return out


def told_apart(paths: Sequence[Path]) -> list[str]:
    """The name of each file, with as many of its folders as tell it from the others: 'ep 1/mix.wav', 'ep 2/mix.wav'."""
    whole = [Path(os.path.abspath(path)).parts for path in paths]

    def shared(parts: tuple[str, ...], count: int) -> bool:
        return any(other != parts and other[-count:] == parts[-count:] for other in whole)

    counts = [next(n for n in range(1, len(parts) + 1) if not shared(parts, n)) for parts in whole]
    return [Path(*parts[-count:]).as_posix() for parts, count in zip(whole, counts, strict=True)]


def _one_file(
    path: Path, name: str, facts: FileFacts, before_s: float, total_s: float, on_progress: OnProgress
) -> FileReading:
    """One pass over one file."""
    rate_hz, channels = facts.rate_hz, facts.channels
    loudness, peaks = LoudnessMeter(rate_hz, channels), TruePeakMeter(rate_hz, channels)
    frames = repaired = 0
    for block in file_blocks(path, round(BLOCK_S * rate_hz), length=facts.frames):
        bad = repair(block)
        repaired += 0 if bad is None else int(np.count_nonzero(bad.any(axis=1)))
        loudness.push(block)
        peaks.push(block)
        frames += len(block)
        on_progress("read", before_s + frames / rate_hz, total_s)
    heard, peak = loudness.result(), peaks.result()
    return FileReading(file=name, repaired_frames=repaired, **loudness_figures(
        heard, true_peak_dbtp=peak.true_peak_dbtp, true_peak_s=peak.true_peak_s, channels=channels, rate_hz=rate_hz,
        length_s=frames / rate_hz))
