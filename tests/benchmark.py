"""What leveller costs, against copying the same files: `python tests/benchmark.py [--minutes 60] [--tracks 3]`.

`--minutes 10 60 180 --tracks 1 3 8` measures every pair of them, one row each.

Material: a simulated conversation of the development voices (`conversations.py`), tiled to length, 48 kHz / 24 bit.
Yardstick: one thread copies the files block by block through soundfile (all tracks read; as many stems and a mono mix
written, PCM_24). Both run in turn as processes of their own; wall and CPU seconds and peak memory are the operating
system's. Only ratios carry over from machine to machine. `--stages` times the stages of one run from inside.
"""

from __future__ import annotations

import argparse
import os
import shutil
import subprocess
import sys
import tempfile
import time
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from multiprocessing import get_context
from pathlib import Path

import numpy as np

TESTS = Path(__file__).parent
sys.path[:0] = [str(TESTS), str(TESTS.parent)]  # also without an installed package

RATE_HZ = 48_000
COPY = """
import sys, soundfile
files = [soundfile.SoundFile(path) for path in sys.argv[2:]]
rate = files[0].samplerate
outs = [soundfile.SoundFile(f"{sys.argv[1]}/{i}.wav", "w", rate, 1, "PCM_24") for i in range(len(files) + 1)]
while len((blocks := [f.read(4 * rate, dtype="float32") for f in files])[0]):
    for out, block in zip(outs, [*blocks, sum(blocks)]):
        out.write(block)
for out in outs:
    out.close()
"""
STAGES = """
import sys, time
from leveller import pipeline
def timed(name):
    step = getattr(pipeline, name)
    def run(*args, **kwargs):
        wall, cpu = time.perf_counter(), time.process_time()
        out = step(*args, **kwargs)
        print(f"{name:20s} {time.perf_counter() - wall:8.2f} {time.process_time() - cpu:8.2f}")
        return out
    setattr(pipeline, name, run)
for name in ("open_session", "measure", "attribute", "make_plan", "render", "write_automation", "write_tables",
             "write_page", "keep_measurements"):
    timed(name)
print(f"{'stage':20s} {'wall s':>8s} {'CPU s':>8s}")
pipeline.process(sys.argv[2:], out=sys.argv[1])
"""


@dataclass(frozen=True)
class Cost:
    """One finished process."""

    wall_s: float
    cpu_s: float
    peak_mb: float


def material(folder: Path, minutes: float, tracks: int) -> list[Path]:
    """Files of a conversation, tiled to length; each track of more than there are people starts elsewhere."""
    import soundfile
    from conversations import ConversationSpec, simulate

    spoken = simulate(ConversationSpec(seconds=120.0, seed=7, rate_hz=RATE_HZ, people=min(tracks, 8)))
    frames = round(minutes * 60 * RATE_HZ)
    paths = []
    for track in range(tracks):
        mic = np.roll(spoken.mics[:, track % spoken.mics.shape[1]], track // spoken.mics.shape[1] * RATE_HZ * 7)
        paths.append(folder / f"mic {track + 1}.wav")
        with soundfile.SoundFile(paths[-1], "w", RATE_HZ, 1, "PCM_24") as file:
            for start in range(0, frames, len(mic)):
                file.write(mic[: min(len(mic), frames - start)])
    return paths


def cost_of(command: list[str]) -> Cost:
    """Run a command to its end."""
    environment = {**os.environ, "OPENBLAS_NUM_THREADS": "1", "PYTHONPATH": str(TESTS.parent)}
    start = time.perf_counter()
    process = subprocess.Popen(command, env=environment, stdout=subprocess.DEVNULL)
    _, status, usage = os.wait4(process.pid, 0)
    if status:
        raise SystemExit(f"{command[:3]} ended with status {status}")
    peak = usage.ru_maxrss / (1024 if sys.platform != "darwin" else 1 << 20)
    return Cost(time.perf_counter() - start, usage.ru_utime + usage.ru_stime, peak)


def paired(room: Path, paths: list[str]) -> tuple[Cost, Cost]:
    """Copying the files, then processing them; what was written is gone afterwards."""
    (room / "copy").mkdir()
    copy = cost_of([sys.executable, "-c", COPY, str(room / "copy"), *paths])
    shutil.rmtree(room / "copy")
    own = cost_of([sys.executable, "-m", "leveller", "process", *paths, "--out", str(room / "out"), "--quiet"])
    shutil.rmtree(room / "out")
    return copy, own


def row(minutes: float, tracks: int, runs: int) -> str:
    """One row of the table: medians of some runs."""
    with tempfile.TemporaryDirectory() as folder:
        room = Path(folder)
        with ProcessPoolExecutor(1, mp_context=get_context("spawn")) as apart:  # its memory must not count as theirs
            paths = [str(path) for path in apart.submit(material, room, minutes, tracks).result()]
        costs = [paired(room, paths) for _ in range(runs)]
    wall, cpu = np.median([(own.wall_s / copy.wall_s, own.cpu_s / copy.cpu_s) for copy, own in costs], axis=0)
    copy_s, wall_s, cpu_s = np.median([(copy.wall_s, own.wall_s, own.cpu_s) for copy, own in costs], axis=0)
    peak_mb = max(own.peak_mb for _, own in costs)
    return (f"| {minutes:g} min x {tracks} | {copy_s:.1f} | {wall_s:.1f} | {cpu_s:.1f} | {peak_mb:.0f} | {wall:.2f} | "
            f"{cpu:.2f} |")


def stages(minutes: float, tracks: int) -> None:
    """The stages of one run from inside."""
    with tempfile.TemporaryDirectory() as folder:
        room = Path(folder)
        paths = [str(path) for path in material(room, minutes, tracks)]
        subprocess.run([sys.executable, "-c", STAGES, str(room / "out"), *paths], check=True,
                       env={**os.environ, "OPENBLAS_NUM_THREADS": "1", "PYTHONPATH": str(TESTS.parent)})


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--minutes", type=float, nargs="+", default=[60])
    parser.add_argument("--tracks", type=int, nargs="+", default=[3])
    parser.add_argument("--runs", type=int, default=3)
    parser.add_argument("--stages", action="store_true")
    asked = parser.parse_args()
    if asked.stages:
        stages(asked.minutes[0], asked.tracks[0])
        return
    print(f"medians of {asked.runs}; load {os.getloadavg()[0]:.1f}, {os.cpu_count()} processors\n")
    print("| session | copy s | wall s | CPU s | peak MB | wall / copy | CPU / copy's |")
    print("|---|--:|--:|--:|--:|--:|--:|")
    for minutes in asked.minutes:
        for tracks in asked.tracks:
            print(row(minutes, tracks, asked.runs), flush=True)


if __name__ == "__main__":
    main()
