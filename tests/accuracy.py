"""The accuracy table: leveller beside four reference methods, under every condition of `conditions.py`.

Purpose: the one command behind the figures in the docs. `python tests/accuracy.py` prints a table of leveller's
figures per condition (mean and worst session) and one of all methods over all conditions; `--markdown FILE` writes
both. Voices are the ones kept apart from development unless `--voices dev` is given.

Conventions: the expander's cut alone is judged, at a fixed range of 18 dB (`scoring.RANGE_DB`), as for the
references; percentages and dB as defined in `scoring.Figures` and `conditions.Extra`.

Method: sessions run side by side in two processes. A session that fails counts as a failure of the whole run.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np

sys.path[:0] = [str(Path(__file__).parent), str(Path(__file__).parents[1])]  # also without an installed package

from conditions import CONDITIONS, OURS, REFERENCES, VOICE_SETS, judged, named  # noqa: E402 - the path comes first

FIRST_SEED = 101  # seeds from here on; development looked at others
COLUMNS = {  # figure: its heading
    "lost_pct": "lost %", "worst_lost_pct": "worst mic %", "onset_bad_pct": "onset %", "tail_bad_pct": "tail %",
    "breath_bad_pct": "breath %", "bleed_cut_db": "bleed cut dB", "open_pct": "open %", "laugh_lost_pct": "laugh %",
    "answer_lost_pct": "answer %", "noise_open_pct": "noise %",
}
MORE_IS_BETTER = {"bleed_cut_db"}
METHODS = (OURS, *REFERENCES)

Figures = dict[str, dict[str, float]]  # by method, by figure


@dataclass(frozen=True)
class Job:
    """One session to judge."""

    condition: int
    which: int
    seed: int
    voices: str

    def run(self) -> tuple[Job, Figures]:
        """All methods' figures."""
        found = judged(CONDITIONS[self.condition], self.which, seed=self.seed, voices=VOICE_SETS[self.voices])
        return self, found


def jobs(pattern: str, seeds: Sequence[int], voices: Sequence[str]) -> list[Job]:
    """Every session of the conditions whose name contains the pattern."""
    wanted = named(pattern)
    return [Job(i, which, seed, name) for i, condition in enumerate(CONDITIONS) if condition in wanted
            for which in range(len(condition.specs)) for name in voices for seed in seeds]


def by_condition(found: list[tuple[Job, Figures]]) -> list[tuple[str, np.ndarray, np.ndarray]]:
    """Name, mean and worst of leveller's figures, one row a condition, then one over all sessions."""
    rows = []
    for i, condition in enumerate(CONDITIONS):
        part = [figures for job, figures in found if job.condition == i]
        if part:
            rows.append((condition.name, *_mean_and_worst(part, OURS)))
    usual = [figures for job, figures in found if not CONDITIONS[job.condition].hard]
    return [*rows, ("all but the hard ones", *_mean_and_worst(usual or [f for _, f in found], OURS))]


def by_method(found: list[tuple[Job, Figures]]) -> list[tuple[str, np.ndarray, np.ndarray]]:
    """Name, mean and worst of each method's figures over all sessions."""
    return [(method, *_mean_and_worst([figures for _, figures in found], method)) for method in METHODS]


def _mean_and_worst(part: list[Figures], method: str) -> tuple[np.ndarray, np.ndarray]:
    values = np.array([[figures[method][name] for name in COLUMNS] for figures in part])
    sign = np.array([-1 if name in MORE_IS_BETTER else 1 for name in COLUMNS])
    return values.mean(axis=0), sign * (sign * values).max(axis=0)


def format_table(title: str, rows: list[tuple[str, np.ndarray, np.ndarray]]) -> Iterator[str]:
    """A Markdown table; each cell holds mean and worst."""
    width = max(len(title), *(len(name) for name, _, _ in rows))
    headings = [f"{heading:>15}" for heading in COLUMNS.values()]
    yield f"| {title:{width}} | " + " | ".join(headings) + " |"
    yield f"|{'-' * (width + 2)}|" + "|".join("-" * 16 + ":" for _ in headings) + "|"
    for name, mean, worst in rows:
        cells = (f"{f'{m:.2f} / {w:.2f}':>15}" for m, w in zip(mean, worst, strict=True))
        yield f"| {name:{width}} | " + " | ".join(cells) + " |"


def report(found: list[tuple[Job, Figures]]) -> str:
    """Both tables."""
    return "\n".join([
        "Each cell: mean / worst session.", "",
        *format_table("condition", by_condition(found)), "",
        *format_table("method, all conditions", by_method(found))]) + "\n"


def main() -> None:
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--only", default="", metavar="WORDS", help="conditions whose name contains these words")
    parser.add_argument("--seeds", type=int, default=3, metavar="N", help="conversations of each kind (default 3)")
    parser.add_argument("--voices", choices=[*VOICE_SETS, "both"], default="held-out")
    parser.add_argument("--markdown", type=Path, metavar="FILE", help="write the tables there, too")
    parser.add_argument("--jobs", type=int, default=2, metavar="N", help="processes (default 2)")
    args = parser.parse_args()
    voices = list(VOICE_SETS) if args.voices == "both" else [args.voices]
    todo = jobs(args.only, range(FIRST_SEED, FIRST_SEED + args.seeds), voices)
    with ProcessPoolExecutor(args.jobs) as pool:
        text = report(list(pool.map(Job.run, todo)))
    print(f"{len(todo)} sessions. {text}", end="")
    if args.markdown:
        args.markdown.write_text(text, encoding="utf-8")


if __name__ == "__main__":
    main()
