"""The accuracy table: leveller beside four reference methods, under every condition of `conditions.py`.

Purpose: the one command behind the figures in the docs. `python tests/accuracy.py` prints a table of leveller's
figures per condition (mean and worst session) and one of all methods over all conditions; `--markdown FILE` writes
both. Voices are the ones kept apart from development unless `--voices dev` is given.

Conventions: the expander's cut alone is judged, at a fixed range of 18 dB (`scoring.RANGE_DB`), as for the
references; percentages and dB as defined in `scoring.Figures` and `conditions.Extra`.

Method: sessions run side by side (`sweep`).
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

sys.path[:0] = [str(Path(__file__).parent), str(Path(__file__).parents[1])]  # also without an installed package

from conditions import CONDITIONS, OURS, REFERENCES, judged  # noqa: E402 - the path comes first
from sweep import Job, sweep, table  # noqa: E402

FIRST_SEED = 101  # seeds from here on; development looked at others
COLUMNS = {  # figure: its heading
    "lost_pct": "lost %", "worst_lost_pct": "worst mic %", "onset_bad_pct": "onset %", "tail_bad_pct": "tail %",
    "breath_bad_pct": "breath %", "bleed_cut_db": "bleed cut dB", "open_pct": "open %", "laugh_lost_pct": "laugh %",
    "answer_lost_pct": "answer %", "noise_open_pct": "noise %",
}
MORE_IS_BETTER = {"bleed_cut_db"}
METHODS = (OURS, *REFERENCES)

Figures = dict[str, dict[str, float]]  # by method, by figure


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
    """Of each figure of a method, over sessions."""
    values = np.array([[figures[method][name] for name in COLUMNS] for figures in part])
    sign = np.array([-1 if name in MORE_IS_BETTER else 1 for name in COLUMNS])
    return values.mean(axis=0), sign * (sign * values).max(axis=0)


def report(found: list[tuple[Job, Figures]]) -> str:
    """Both tables."""
    return "\n".join([
        "Each cell: mean / worst session.", "",
        *table(("condition", *COLUMNS.values()), _cells(by_condition(found))), "",
        *table(("method, all conditions", *COLUMNS.values()), _cells(by_method(found)))]) + "\n"


def _cells(rows: list[tuple[str, np.ndarray, np.ndarray]]) -> list[list[str]]:
    """Rows as text: the name, then mean and worst of each figure."""
    return [[name, *(f"{m:.2f} / {w:.2f}" for m, w in zip(mean, worst, strict=True))] for name, mean, worst in rows]


if __name__ == "__main__":
    sweep(__doc__ or "", judged, report, first_seed=FIRST_SEED)
