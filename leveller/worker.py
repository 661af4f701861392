"""One episode in one worker, wherever that is: `work` takes a `Task` and returns an `Outcome`; it raises nothing.

Before anything is read the worker makes sure that it runs the same versions as the batch, and sees the same storage.
An episode is left alone where its folder holds a result of the same sources, settings and versions, or one that was
edited by hand: then its report has no fingerprint, or a table lies there that is younger than the report. A folder that
is no result of leveller's is never replaced.
"""

from __future__ import annotations

import contextlib
import threading
import time
import traceback
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from leveller.desk import ENDED, Seat
from leveller.errors import LevellerError, OutputError
from leveller.fingerprint import fingerprint, made_by, note_sources, same_sources, source_files
from leveller.lanes import limited_to
from leveller.report.season import EDITED, FAILED, FINISHED, UNCHANGED, Outcome, episode_figures, read_json
from leveller.season import Episode
from leveller.settings import Settings

MOST_TRIES = 2  # a worker that is lost takes its episode along once, not twice
EDITED_S = 2.0  # a table this much younger than the report was saved by somebody
TABLES = ("automation.csv", "speech.csv", "corrections.csv")
LOST = (f"its worker was lost {MOST_TRIES} times (killed, or out of memory). Try it alone with --jobs 1, or on a "
        "computer with more memory")

busy = threading.Lock()  # held while an episode is at work in this process


@dataclass(frozen=True)
class Task:
    """All a worker needs to know; plain values only."""

    episode: Episode
    folder: str  # where its result goes
    desk: str
    made_by: tuple[tuple[str, str], ...]
    delivery: str | None = None
    stems: str | None = None
    settings: tuple[tuple[str, Any], ...] = ()
    accept_short: bool = False
    align: bool | None = None
    again: bool = False
    threads: int = 1  # as many processors as it may use

    @property
    def options(self) -> dict[str, Any]:
        """Options of `pipeline.process`; the command line is stronger than the list."""
        episode = self.episode
        return {
            "delivery": self.delivery or episode.delivery, "stems": self.stems or episode.stems or "before-limiter",
            "settings": {**dict(episode.settings), **dict(self.settings)},
            "corrections": None if episode.corrections is None else Path(episode.corrections),
            "accept_short": self.accept_short or episode.accept_short,
            "align": episode.align if self.align is None else self.align,
            "season": None if episode.season is None else Path(episode.season)}


def work(task: Task) -> Outcome:
    """Process an episode, or find that there is nothing to do."""
    tries = 0
    with _held(busy):
        try:
            seat = Seat(Path(task.desk), task.episode.name)
            _check_versions(task)
            tries = seat.begin()
            if tries > MOST_TRIES:  # a scheduler hands an episode out again by itself
                return Outcome(task.episode.name, FAILED, LOST, tries=tries - 1)
            with limited_to(task.threads):
                return _outcome(task, seat, tries)
        except LevellerError as error:
            return Outcome(task.episode.name, FAILED, str(error), tries=tries)
        except Exception as error:  # whatever it is, the other episodes go on
            return Outcome(task.episode.name, FAILED, _unexpected(error), tries=tries)


@contextlib.contextmanager
def _held(lock: threading.Lock) -> Iterator[None]:
    """The lock, where it is free: threads of one process need not wait for each other."""
    free = lock.acquire(blocking=False)
    try:
        yield
    finally:
        if free:
            lock.release()


def _check_versions(task: Task) -> None:
    """Refuse to work with other versions than the batch has: its episodes would not be alike."""
    difference = version_difference(dict(task.made_by), made_by())
    if difference:
        raise LevellerError(f"the worker has {difference}. Install the same versions on all computers")


def version_difference(wanted: Mapping[str, str], found: Mapping[str, str]) -> str:
    """'leveller 0.1.0 instead of 0.2.0', or '' where all agree."""
    return ", ".join(f"{name} {found.get(name, 'missing')} instead of {version}"
                     for name, version in wanted.items() if found.get(name) != version)


def _outcome(task: Task, seat: Seat, tries: int) -> Outcome:
    """What the episode comes to."""
    folder, name = Path(task.folder), task.episode.name
    Settings().changed(dict(task.episode.settings), where=f"{name}, in the season's list: ")
    said = read_json(folder / "report.json")
    if folder.exists() and said is None:
        raise OutputError(f"{folder}: exists and is no result of leveller's. Move it away, or choose another --out")
    if said is not None and not task.again:
        found = _kept(task, folder, said)
        if found:
            return Outcome(name, found, figures=episode_figures(folder, said), tries=tries)
    from leveller.pipeline import process

    wall, cpu = time.perf_counter(), time.process_time()
    process(task.episode.sources, out=folder, replace=said is not None, on_progress=seat.say, **task.options)
    took_s, cpu_s = time.perf_counter() - wall, time.process_time() - cpu
    note_sources(source_files(task.episode.sources), folder)
    return Outcome(name, FINISHED, figures=episode_figures(folder, read_json(folder / "report.json") or {}),
                   tries=tries, took_s=took_s, cpu_s=cpu_s)


def _kept(task: Task, folder: Path, said: Mapping[str, Any]) -> str:
    """Why an earlier result stays as it is; empty where it is out of date."""
    if not said.get("fingerprint") or _edited(folder):
        return EDITED
    sources = task.episode.sources
    if said["fingerprint"] != fingerprint(sources, **task.options):
        return ""
    files = source_files(sources)
    if not same_sources(files, folder, said.get("sources", ())):
        return ""
    note_sources(files, folder)
    return UNCHANGED


def _edited(folder: Path) -> bool:
    """Whether a table was saved after the report."""
    written_s = (folder / "report.json").stat().st_mtime
    return any(path.stat().st_mtime > written_s + EDITED_S for name in TABLES if (path := folder / name).exists())


def _unexpected(error: Exception) -> str:
    """An error that nobody foresaw: what and where."""
    last = traceback.extract_tb(error.__traceback__)[-1]
    return (f"unexpected {type(error).__name__}: {error} ({Path(last.filename).name}, line {last.lineno}). Try it "
            "alone with leveller process --debug")


__all__ = ["ENDED", "LOST", "MOST_TRIES", "Task", "busy", "version_difference", "work"]
