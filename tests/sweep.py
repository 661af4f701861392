"""Every session of `conditions.CONDITIONS`, judged side by side: what the commands behind docs/accuracy.md share.

Purpose: `sweep` is the whole of such a command. It reads the options, judges every session that they ask for in some
processes, prints what the command's own `report` makes of the findings, and writes it to a file where one is asked for.

Conventions: seeds are counted from the command's own first one, which nothing else has looked at; voices are those
kept apart from development unless others are asked for. A session that fails counts as a failure of the whole run.
"""

from __future__ import annotations

import argparse
import functools
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol, TypeVar

from conditions import CONDITIONS, VOICE_SETS, Condition, named

T = TypeVar("T")
T_co = TypeVar("T_co", covariant=True)


class Judge(Protocol[T_co]):
    """Finds out about one session of a condition; a function of a module, since it goes to other processes."""

    def __call__(self, condition: Condition, which: int, *, seed: int, voices: tuple[str, ...]) -> T_co: ...


@dataclass(frozen=True)
class Job:
    """One session to judge."""

    condition: int  # place in CONDITIONS
    which: int  # of its specs
    seed: int
    voices: str  # name in VOICE_SETS


def jobs(patterns: Sequence[str], seeds: Sequence[int], voices: Sequence[str]) -> list[Job]:
    """Every session of the conditions whose name contains one of the patterns."""
    wanted = [condition for pattern in patterns for condition in named(pattern)]
    return [Job(i, which, seed, name) for i, condition in enumerate(CONDITIONS) if condition in wanted
            for which in range(len(condition.specs)) for name in voices for seed in seeds]


def sweep(description: str, judge: Judge[T], report: Callable[[list[tuple[Job, T]]], str], *, first_seed: int) -> None:
    """The command: judge what the options ask for, print the report, write it where that is asked for."""
    parser = argparse.ArgumentParser(description=description.splitlines()[0])
    parser.add_argument("--only", nargs="+", default=[""], metavar="WORDS",
                        help="conditions whose name contains one of these")
    parser.add_argument("--seeds", type=int, default=3, metavar="N", help="conversations of each kind (default 3)")
    parser.add_argument("--voices", choices=[*VOICE_SETS, "both"], default="held-out")
    parser.add_argument("--markdown", type=Path, metavar="FILE", help="write the tables there, too")
    parser.add_argument("--jobs", type=int, default=2, metavar="N", help="processes (default 2)")
    args = parser.parse_args()
    voices = list(VOICE_SETS) if args.voices == "both" else [args.voices]
    todo = jobs(args.only, range(first_seed, first_seed + args.seeds), voices)
    with ProcessPoolExecutor(args.jobs) as pool:
        text = report(list(zip(todo, pool.map(functools.partial(_judged, judge), todo), strict=True)))
    print(f"{len(todo)} sessions.\n\n{text}", end="")
    if args.markdown:
        args.markdown.write_text(text, encoding="utf-8")


def table(headings: Sequence[str], rows: Sequence[Sequence[str]]) -> Iterator[str]:
    """A Markdown table, the first column on the left."""
    widths = [max(len(row[c]) for row in (headings, *rows)) for c in range(len(headings))]
    for k, row in enumerate((headings, *rows)):
        first, *others = (cell.ljust(w) if c == 0 else cell.rjust(w)
                          for c, (cell, w) in enumerate(zip(row, widths, strict=True)))
        yield "| " + " | ".join([first, *others]) + " |"
        if k == 0:
            yield f"|{'-' * (widths[0] + 2)}|" + "|".join("-" * (w + 1) + ":" for w in widths[1:]) + "|"


def _judged(judge: Judge[T], job: Job) -> T:
    """What a session comes to, in the process where it is worked on."""
    return judge(CONDITIONS[job.condition], job.which, seed=job.seed, voices=VOICE_SETS[job.voices])
