"""What reaches the screen: progress, reports, errors. The sole user of rich; it prints, it makes no text of its own.

On a terminal lines are coloured by the part they play, and work that lasts over two seconds shows how far it is and how
long it has to go. Anywhere else (a pipe, a file, TERM=dumb) a line is plain text: no colour, no markup, no folding.
NO_COLOR is respected. Text is never read as markup, so that a track named "[red]" stays that.
"""

from __future__ import annotations

import contextlib
import os
import sys
import time
from collections.abc import Callable, Iterable, Iterator, Mapping
from typing import TYPE_CHECKING, Any, TextIO

if TYPE_CHECKING:
    from leveller.batch import Standing
    from leveller.report.text import Line

OnProgress = Callable[[str, float, float], None]
OnSeason = Callable[["Standing"], None]

MOST_NAME = 28  # characters of an episode in the display
WAIT_S = 2.0  # shorter work shows no progress
PROCESS_SHARES = {"measure": 0.45, "decide": 0.25, "render": 0.17, "mix": 0.13}  # of the wall time, measured
INSPECT_SHARES = {"measure": 0.8, "decide": 0.2}
FINISH_SHARES = {"render": 0.6, "mix": 0.4}
READ_SHARES = {"read": 1.0}
STYLES = {"head": "bold", "good": "green", "bad": "bold red", "dim": "dim", "plain": ""}


def is_terminal(stream: TextIO) -> bool:
    """Whether somebody reads along."""
    return stream.isatty() and os.environ.get("TERM", "") != "dumb"


def terminal_width(stream: TextIO) -> int | None:
    """Columns of the terminal, None where there is none."""
    return int(_console(stream).width) if is_terminal(stream) else None


def print_lines(lines: Iterable[Line], stream: TextIO | None = None) -> None:
    """Lines of a report, to the standard output by default."""
    stream = stream or sys.stdout
    if not is_terminal(stream):
        stream.writelines(f"{line.text}\n" for line in lines)
        return
    from rich.text import Text

    console = _console(stream)
    for line in lines:
        console.print(Text(line.text, STYLES[line.part]), soft_wrap=True)


def print_error(message: str) -> None:
    """One line on the standard error, whatever the message holds."""
    text = "".join(c if c.isprintable() else repr(c)[1:-1] for c in f"leveller: {message}")
    if not is_terminal(sys.stderr):
        sys.stderr.write(f"{text}\n")
        return
    from rich.text import Text

    _console(sys.stderr).print(Text(text, STYLES["bad"]), soft_wrap=True)


@contextlib.contextmanager
def progress(shares: Mapping[str, float], *, quiet: bool = False) -> Iterator[OnProgress]:
    """How far the work is, on the standard error; yields what to call with stage, done and total.

    Parameters
    ----------
    shares : mapping of stage to part of the whole, adding up to 1
    quiet : bool
        Show nothing.
    """
    if quiet or not is_terminal(sys.stderr):
        yield lambda stage, done, total: None
        return
    bar = _Bar(shares)
    try:
        yield bar.update
    finally:
        bar.stop()


@contextlib.contextmanager
def season_progress(*, quiet: bool = False) -> Iterator[OnSeason | None]:
    """How far a season and each of its running episodes are; yields what to call with a `batch.Standing`."""
    if quiet or not is_terminal(sys.stderr):
        yield None
        return
    board = _Board()
    try:
        yield board.update
    finally:
        board.stop()


class Pace:
    """How far the work is as a whole, and how long it has to go."""

    def __init__(self, shares: Mapping[str, float], *, now: Callable[[], float] = time.monotonic) -> None:
        self._shares, self._now, self._started = shares, now, now()
        self.part = 0.0  # of the whole, never falling
        self.stage = ""

    @property
    def elapsed_s(self) -> float:
        """Since the start."""
        return self._now() - self._started

    @property
    def left_s(self) -> float | None:
        """Estimated rest; None while nothing is known."""
        return self.elapsed_s * (1 - self.part) / self.part if self.part > 0 else None

    def update(self, stage: str, done: float, total: float) -> None:
        """Take a report of a stage; a stage that is repeated does not go back, and one that is done gives way."""
        names = list(self._shares)
        if stage not in names:
            return
        at, done_part = names.index(stage), min(1.0, done / max(total, 1e-9))
        before = sum(self._shares[name] for name in names[:at])
        self.part = min(1.0, max(self.part, before + self._shares[stage] * done_part))
        self.stage = names[min(at + 1, len(names) - 1)] if done_part == 1.0 else stage


class _Bar:
    """One line that is redrawn, and gone at the end."""

    def __init__(self, shares: Mapping[str, float]) -> None:
        self._pace = Pace(shares)
        self._drawn: Any = None
        self._task: Any = None

    def update(self, stage: str, done: float, total: float) -> None:
        """Take a report; draws once the work has lasted long enough."""
        self._pace.update(stage, done, total)
        if self._drawn is None and self._pace.elapsed_s >= WAIT_S:
            self._start()
        if self._drawn is not None:
            from leveller.units import clock  # here, since it brings numpy, which help shall not wait for

            left_s = self._pace.left_s
            left = "" if left_s is None else f"{clock(left_s)} left"
            self._drawn.update(self._task, completed=self._pace.part, stage=self._pace.stage, left=left)

    def stop(self) -> None:
        """Take the line away."""
        if self._drawn is not None:
            self._drawn.stop()

    def _start(self) -> None:
        from rich.progress import BarColumn, Progress, TextColumn

        self._drawn = Progress(
            TextColumn("{task.fields[stage]:<8}", markup=False), BarColumn(bar_width=30),
            TextColumn("{task.percentage:>3.0f} %  {task.fields[left]}", markup=False),
            console=_console(sys.stderr), transient=True)
        self._task = self._drawn.add_task("", total=1.0, stage="", left="")
        self._drawn.start()


class _Board:
    """A line for the season, and one for each episode that is at work; all gone at the end."""

    def __init__(self) -> None:
        self._drawn: Any = None
        self._season: Any = None
        self._lines: dict[str, tuple[Any, Pace]] = {}
        self._started = time.monotonic()

    def update(self, standing: Standing) -> None:
        """Take how things stand."""
        if self._drawn is None:
            self._start(standing)
        running = {name for name, *_ in standing.running}
        for name in [name for name in self._lines if name not in running]:
            self._drawn.remove_task(self._lines.pop(name)[0])
        for name, stage, done, total in standing.running:
            self._update_episode(name, stage, done, total)
        part = standing.ended + sum(pace.part for _, pace in self._lines.values())
        from leveller.units import clock

        elapsed_s = time.monotonic() - self._started
        left = f"{clock(elapsed_s * (standing.episodes - part) / part)} left" if part > 0 else ""
        failed = f", {standing.failed} failed" if standing.failed else ""
        note = f"{standing.ended} of {standing.episodes}{failed}  {left}"
        self._drawn.update(self._season, completed=part, note=note)

    def stop(self) -> None:
        """Take the lines away."""
        if self._drawn is not None:
            self._drawn.stop()

    def _update_episode(self, name: str, stage: str, done: float, total: float) -> None:
        """One episode's line."""
        if name not in self._lines:
            self._lines[name] = (self._drawn.add_task(_shortened(name), total=1.0, note=""), Pace(PROCESS_SHARES))
        task, pace = self._lines[name]
        pace.update(stage, done, total)
        self._drawn.update(task, completed=pace.part, note=stage)

    def _start(self, standing: Standing) -> None:
        from rich.progress import BarColumn, Progress, TextColumn

        self._drawn = Progress(
            TextColumn("{task.description}", markup=False), BarColumn(bar_width=30),
            TextColumn("{task.percentage:>3.0f} %  {task.fields[note]}", markup=False),
            console=_console(sys.stderr), transient=True)
        self._season = self._drawn.add_task("season", total=standing.episodes, note="")
        self._drawn.start()


def _shortened(name: str) -> str:
    """A name for the display: nothing in it that moves the cursor, and not too long."""
    text = "".join(c if c.isprintable() else "?" for c in name)
    return text if len(text) <= MOST_NAME else text[: MOST_NAME - 1] + "…"


def _console(stream: TextIO) -> Any:
    """rich on a stream, with everything off that reads text as more than text."""
    from rich.console import Console

    return Console(file=stream, markup=False, highlight=False, emoji=False)
