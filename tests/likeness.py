"""How alike two outputs of the same session are: gains hop by hop, and the samples of stems and mix.

Run it on two folders that `leveller process` or `render` wrote, for example on two machines:

    python tests/likeness.py HERE THERE

It prints the share of hops whose gain agrees and the largest difference of each file, and ends with exit code 1 where
fewer than 99.9 % of the hops agree within 0.05 dB. Gains are read from automation.csv as its documentation says
(linear in dB between rows) in the middle of each hop, where no step lies. Nothing here uses leveller.
"""

from __future__ import annotations

import csv
import sys
from collections import defaultdict
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import soundfile

HOP_S = 0.01
NEAR_DB = 0.05  # the promise across machines, with the share below
NEAR_SHARE = 0.999


@dataclass(frozen=True)
class Likeness:
    """Two folders against each other."""

    hops: int  # of all tracks
    near: int  # hops whose gains agree within NEAR_DB
    equal: int  # hops whose gains are the same
    worst_db: float  # largest difference of a hop's gain
    samples_dbfs: dict[str, float]  # largest difference of a sample by file; -inf where the files hold the same

    @property
    def near_share(self) -> float:
        """The part of the hops that agree."""
        return self.near / self.hops

    @property
    def kept(self) -> bool:
        """Whether the promise holds."""
        return self.near_share >= NEAR_SHARE

    def __str__(self) -> str:
        lines = [f"gains: {self.hops} hops, {100 * self.near_share:.4f} % within {NEAR_DB} dB, "
                 f"{100 * self.equal / self.hops:.4f} % equal, at most {self.worst_db:.2f} dB apart"]
        return "\n".join(lines + [f"{name}: samples at most {level:.1f} dBFS apart"
                                  for name, level in self.samples_dbfs.items()])


def compare(one: Path, other: Path) -> Likeness:
    """Every track's gains, every stem and the mix of two folders."""
    here, there = gains(one / "automation.csv"), gains(other / "automation.csv")
    assert here.keys() == there.keys(), "the folders hold different tracks"
    apart = np.abs(np.concatenate([here[name] - there[name] for name in here]))
    files = [Path("mix.wav"), *(path.relative_to(one) for path in sorted((one / "stems").glob("*.wav")))]
    assert len(files) == 1 + len(here)
    return Likeness(len(apart), int(np.sum(apart <= NEAR_DB + 1e-9)), int(np.sum(apart == 0)), float(apart.max()),
                    {str(file): samples_apart_dbfs(one / file, other / file) for file in files})


def gains(path: Path) -> dict[str, np.ndarray]:
    """Track to gain in dB in the middle of every hop."""
    rows: dict[str, list[tuple[float, float]]] = defaultdict(list)
    with open(path, encoding="utf-8", newline="") as file:
        for row in csv.DictReader(file):
            rows[row["track"]].append((float(row["time_s"]), float(row["gain_db"])))
    out = {}
    for track, points in rows.items():
        times, levels = np.array(points).T
        out[track] = np.interp((np.arange(round(times[-1] / HOP_S)) + 0.5) * HOP_S, times, levels)
    return out


def samples_apart_dbfs(one: Path, other: Path) -> float:
    """The largest difference of a sample between two files of the same length."""
    (here, rate_hz), (there, other_hz) = soundfile.read(one), soundfile.read(other)
    assert (here.shape, rate_hz) == (there.shape, other_hz), f"{one} and {other} differ in shape or rate"
    most = float(np.max(np.abs(here - there), initial=0.0))
    return 20 * float(np.log10(most)) if most else -np.inf


if __name__ == "__main__":
    found = compare(Path(sys.argv[1]), Path(sys.argv[2]))
    print(found)
    sys.exit(not found.kept)
