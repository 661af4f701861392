"""A season unattended: every episode in a worker, one failure stopping nothing, a report on all at the end.

`batch` is what the command calls. It hands out as many episodes as there are places, takes what comes back (`Outcome`:
a few hundred bytes an episode, so that memory stays flat), and gives an episode whose worker was lost to another worker
once. Finished episodes are whole folders; an interrupted run leaves them and nothing else, and the next run goes on
from there, since `worker` leaves alone what has not changed. The season's own report is written in any case.
"""

from __future__ import annotations

import dataclasses
import os
import re
import time
from collections import deque
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import FIRST_COMPLETED, Future, wait
from contextlib import AbstractContextManager, ExitStack, nullcontext
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Protocol

from leveller.cluster import ClusterWorkers
from leveller.desk import Desk
from leveller.errors import OutputError, SettingsError
from leveller.fingerprint import made_by
from leveller.folder import clean_up, remove
from leveller.interruptions import Interruptions
from leveller.lanes import processor_count
from leveller.render.mix import LEVELS
from leveller.report.season import FAILED, FINISHED, WAITING, Outcome, SeasonReport, read_json, season_report
from leveller.report.season_files import write_season
from leveller.season import Episode, Season, read_season, told_from
from leveller.settings import Settings, delivery_named
from leveller.worker import LOST, MOST_TRIES, Task, work
from leveller.workers import LocalWorkers, default_jobs

RESTS = re.compile(r"\.(?P<name>.+)\.(?P<kind>part|old)-\d+", re.DOTALL)  # as `folder` names them
TICK_S = 0.25  # between two looks at what is running
MOST_JOBS = 256
TAKEN_BACK = "the cluster took it back: its scheduler has ended or is out of reach. Start it again and go on"


@dataclass(frozen=True)
class Standing:
    """How far a season is."""

    episodes: int
    ended: int
    failed: int
    running: tuple[tuple[str, str, float, float], ...]  # name, stage, done, total


OnSeason = Callable[[Standing], None]


class Workers(Protocol):
    """Whoever runs episodes."""

    @property
    def places(self) -> int: ...
    @property
    def lost(self) -> tuple[type[BaseException], ...]: ...
    def submit(self, function: Callable[..., Any], *arguments: Any) -> Future[Any]: ...
    def stop(self) -> None: ...


def batch(
    season: Path | str,
    *,
    out: Path | str,
    jobs: int | None = None,
    again: bool = False,
    delivery: str | None = None,
    stems: str | None = None,
    settings: Mapping[str, Any] | None = None,
    accept_short: bool = False,
    align: bool | None = None,
    cluster: str | None = None,
    on_season: OnSeason | None = None,
) -> SeasonReport:
    """Process every episode of a season; write season.csv, season.json and season.html beside them.

    Parameters
    ----------
    season : path
        A folder of session folders or polyphonic files, or a list of them (`leveller.season`).
    out : path
        Folder to write, one folder in it for each episode.
    jobs : int, optional
        Episodes at once on this computer, each on one processor; by default as many as there are processors and free
        memory for. Only then, where the episodes are fewer than the processors, they share them.
    again : bool
        Process unchanged and edited episodes too.
    delivery, stems, settings, accept_short, align
        As for `pipeline.process`, for all episodes; stronger than a list and session.toml.
    cluster : str, optional
        Address of a Dask scheduler, whose workers take the episodes.
    on_season : callable (Standing), optional
        Called about four times a second.

    Returns
    -------
    SeasonReport
        Its `exit_code` is 0, 7 where an episode failed, 130 after an interruption (Ctrl-C, SIGTERM or SIGHUP; it ends
        the work, not the report).

    Raises
    ------
    LevellerError
        Where nothing can begin: no season, an output folder that cannot be used, no cluster.
    """
    _check_options(jobs, delivery, stems, settings)
    found, folder, started_s = read_season(Path(season)), Path(os.path.abspath(out)), time.monotonic()
    _check_place(found, Path(season), folder)
    with Interruptions() as interruptions, Desk(folder) as desk, ExitStack() as stack:
        _clean_up_behind(folder, {episode.name for episode in found.episodes})
        options: dict[str, Any] = {"delivery": delivery, "stems": stems, "settings": tuple((settings or {}).items()),
                   "accept_short": accept_short, "align": align, "again": again, "made_by": tuple(made_by().items()),
                   "threads": _threads_each(len(found.episodes), jobs, cluster)}
        tasks = [Task(e, str(folder / e.name), str(desk.path), **options) for e in found.episodes]
        with interruptions.at_once():
            workers = stack.enter_context(_workers(cluster, jobs or default_jobs(), len(tasks), desk))
        run = _Run(workers, desk, tasks, on_season, interruptions, nullcontext if cluster is None
                   else interruptions.at_once)
        run.all()
        stack.close()
        for suspect in run.suspects:
            clean_up(Path(suspect))
        outcomes = _with_earlier_times(_told_from(found, Path(season), run.in_order(), folder), folder)
        report = season_report(found.title, outcomes, made_by=made_by(), notes=found.notes,
                               interrupted=run.interrupted, took_s=time.monotonic() - started_s)
        write_season(folder, report, by=desk.path)
    return report


def _check_options(jobs: int | None, delivery: str | None, stems: str | None, settings: Mapping[str, Any] | None
                   ) -> None:
    """Refuse what would fail for every episode alike."""
    if jobs is not None and not 1 <= jobs <= MOST_JOBS:
        raise SettingsError(f"--jobs {jobs}: expected a number from 1 to {MOST_JOBS}")
    if delivery is not None:
        delivery_named(delivery)
    if stems is not None and stems not in LEVELS:
        raise SettingsError(f"stems {stems!r}: expected {' or '.join(LEVELS)}")
    Settings().changed(settings or {}, where="--set ")


def _check_place(season: Season, path: Path, out: Path) -> None:
    """Refuse an output folder in which an episode's result would lie on its own source."""
    if path.is_dir() and out.resolve() == path.resolve():
        raise OutputError(f"{out}: is the season's own folder. Choose another --out")
    for episode in season.episodes:
        place = (out / episode.name).resolve()
        for source in episode.sources:
            if Path(source).resolve().is_relative_to(place):
                raise OutputError(f"{place}: is or holds the source of {episode.name}. Choose another --out")


def _clean_up_behind(out: Path, names: set[str]) -> None:
    """Remove what killed workers have left, also of episodes that are unchanged now and that no worker will open."""
    for place in list(out.iterdir()):
        rest = RESTS.fullmatch(place.name)
        if rest is None or rest["name"] not in names:
            continue
        if rest["kind"] == "part":
            clean_up(out / rest["name"])
        elif (out / rest["name"]).exists():  # where it does not, the episode's turn puts this one back
            remove(place)


def _told_from(season: Season, path: Path, outcomes: list[Outcome], out: Path) -> list[Outcome]:
    """Reasons with paths told from the season's folder, or from that which the output folder lies in."""
    base = Path(os.path.abspath(path if path.is_dir() else path.parent))
    return [dataclasses.replace(outcome, reason=told_from(out.parent, told_from(base, outcome.reason, (
        *episode.sources, *filter(None, [episode.corrections]))), ()))
        for episode, outcome in zip(season.episodes, outcomes, strict=True)]


def _threads_each(episodes: int, jobs: int | None, cluster: str | None) -> int:
    """Processors for each episode: one, unless nobody said how many at once and there are more than are needed."""
    if jobs is not None or cluster is not None:
        return 1
    return max(1, processor_count() // min(default_jobs(), episodes))


def _workers(cluster: str | None, jobs: int, tasks: int, desk: Desk) -> AbstractContextManager[Workers]:
    """Those of a cluster, or of this computer."""
    return LocalWorkers(min(jobs, tasks)) if cluster is None else ClusterWorkers(cluster, desk.path)


@dataclass
class _Run:
    """The work on all episodes."""

    workers: Workers
    desk: Desk
    tasks: list[Task]
    on_season: OnSeason | None
    interruptions: Interruptions
    waiting_for_others: Callable[[], AbstractContextManager[None]]  # round what a cluster may never answer
    interrupted: bool = False
    outcomes: dict[str, Outcome] = field(default_factory=dict)
    running: dict[Future[Outcome], Task] = field(default_factory=dict)
    losses: dict[str, int] = field(default_factory=dict)
    suspects: list[str] = field(default_factory=list)  # folders whose worker may have died at work

    def all(self) -> None:
        """Work until all is done, or somebody interrupts."""
        waiting = deque(self.tasks)
        try:
            while waiting or self.running:
                self.interruptions.check()
                self.desk.beat()
                with self.waiting_for_others():
                    self._hand_out(waiting)
                done, _ = wait(self.running, timeout=TICK_S, return_when=FIRST_COMPLETED)
                for future in done:
                    self._take(future, waiting)
                self._say()
        except KeyboardInterrupt:
            self.interrupted = True
            self.workers.stop()
            for future, task in list(self.running.items()):
                self.suspects.append(task.folder)
                if future.done():
                    self._take(future, deque())

    def in_order(self) -> list[Outcome]:
        """All outcomes in the season's order."""
        names = [task.episode.name for task in self.tasks]
        return [self.outcomes.get(name, Outcome(name, WAITING)) for name in names]

    def _hand_out(self, waiting: deque[Task]) -> None:
        """Fill the places that are free."""
        free = self.workers.places - len(self.running)
        while waiting and free > 0:
            task = waiting.popleft()
            try:
                self.running[self.workers.submit(work, task)] = task
            except Exception as error:  # no process to be had, no scheduler any more
                self._note(Outcome(task.episode.name, FAILED, f"could not be handed out: {error}"))
            free -= 1

    def _take(self, future: Future[Outcome], waiting: deque[Task]) -> None:
        """What a worker hands back; an episode whose worker was lost waits again, once."""
        task = self.running.pop(future)
        name = task.episode.name
        if future.cancelled():
            return None if self.interrupted else self._note(Outcome(name, FAILED, TAKEN_BACK))
        error = future.exception()
        if error is None:
            if future.result().tries > 1:
                self.suspects.append(task.folder)
            return self._note(future.result())
        if not isinstance(error, self.workers.lost):
            if self.interrupted:
                return None
            return self._note(Outcome(name, FAILED, f"its worker failed: {type(error).__name__}: {error}"))
        self.losses[name] = self.losses.get(name, 0) + 1
        self.suspects.append(task.folder)
        tries = max(self.losses[name], self.desk.tries(name))
        if self.interrupted:
            return None
        if tries < MOST_TRIES:
            return waiting.appendleft(task)
        return self._note(Outcome(name, FAILED, LOST, tries=tries))

    def _note(self, outcome: Outcome) -> None:
        """Keep an outcome."""
        self.outcomes[outcome.episode] = outcome

    def _say(self) -> None:
        """Tell how things stand."""
        if self.on_season is None:
            return
        running = tuple((task.episode.name, *self.desk.standing(task.episode.name)) for task in self.running.values())
        failed = sum(outcome.outcome == FAILED for outcome in self.outcomes.values())
        self.on_season(Standing(len(self.tasks), len(self.outcomes), failed, running))


def _with_earlier_times(outcomes: list[Outcome], out: Path) -> list[Outcome]:
    """Episodes that were left alone keep the time that an earlier season.json says they took."""
    earlier = read_json(out / "season.json") or {}
    times = {entry.get("episode"): (entry.get("took_s"), entry.get("cpu_s"))
             for entry in earlier.get("episodes", ()) if isinstance(entry, dict)}

    def known(outcome: Outcome) -> Iterator[Any]:
        for value in times.get(outcome.episode, (None, None)):
            yield float(value) if isinstance(value, int | float) else None

    return [outcome if outcome.outcome == FINISHED or outcome.figures is None
            else dataclasses.replace(outcome, **dict(zip(("took_s", "cpu_s"), known(outcome), strict=True)))
            for outcome in outcomes]


__all__ = ["Episode", "OnSeason", "Standing", "batch"]
