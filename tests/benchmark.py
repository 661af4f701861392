"""What leveller costs, against copying the same files: `python tests/benchmark.py [--minutes 60] [--tracks 3]`.

`--minutes 10 60 180 --tracks 1 3 8` measures every pair of them, one row each.

Material: a simulated conversation of the development voices (`conversations.py`), tiled to length, 48 kHz / 24 bit.
Yardstick: one thread copies the files block by block through soundfile (all tracks read; as many stems and a mono mix
written, PCM_24). Both run in turn as processes of their own; wall and CPU seconds and peak memory are the operating
system's. Only ratios carry over from machine to machine. `--stages` times the stages of one run from inside.

`--season N` instead: `leveller batch` over N episodes of that length with one job and with two, in turn. Beside it
stands what the machine itself gives: a loop of Fourier transforms, twice in a row against two at once. `--keep DIR`
leaves the material in DIR, so that the next run need not make it.
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
ENVIRONMENT = {**os.environ, "OPENBLAS_NUM_THREADS": "1", "PYTHONPATH": str(TESTS.parent)}
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
SPIN = """
import numpy
x = numpy.ones(8192)
for _ in range(24_000):
    numpy.fft.irfft(numpy.fft.rfft(x))
"""
STAGES = """
import sys, time
from leveller import pipeline, request
def timed(name, home=pipeline):
    step = getattr(home, name)
    def run(*args, **kwargs):
        wall, cpu = time.perf_counter(), time.process_time()
        out = step(*args, **kwargs)
        print(f"{name:20s} {time.perf_counter() - wall:8.2f} {time.process_time() - cpu:8.2f}")
        return out
    setattr(home, name, run)
timed("open_session", request)
for name in ("measure", "attribute", "make_plan", "render", "write_automation", "write_tables", "write_page",
             "keep_measurements"):
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

    paths = [folder / f"mic {track + 1}.wav" for track in range(tracks)]
    if all(path.exists() for path in paths):
        return paths
    folder.mkdir(parents=True, exist_ok=True)
    spoken = simulate(ConversationSpec(seconds=120.0, seed=7, rate_hz=RATE_HZ, people=min(tracks, 8)))
    frames = round(minutes * 60 * RATE_HZ)
    for track in range(tracks):
        mic = np.roll(spoken.mics[:, track % spoken.mics.shape[1]], track // spoken.mics.shape[1] * RATE_HZ * 7)
        with soundfile.SoundFile(paths[track], "w", RATE_HZ, 1, "PCM_24") as file:
            for start in range(0, frames, len(mic)):
                file.write(mic[: min(len(mic), frames - start)])
    return paths


def cost_of(command: list[str]) -> Cost:
    """Run a command to its end."""
    start = time.perf_counter()
    process = subprocess.Popen(command, env=ENVIRONMENT, stdout=subprocess.DEVNULL)
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
        subprocess.run([sys.executable, "-c", STAGES, str(room / "out"), *paths], check=True, env=ENVIRONMENT)


def season(room: Path, paths: list[Path], episodes: int, runs: int) -> None:
    """Print what a second job brings, beside what a second processor brings to a mere loop."""
    listed = room / "season.csv"
    listed.write_text("session\n" + f"{paths[0].parent}\n" * episodes)
    print(f"{episodes} episodes; load {os.getloadavg()[0]:.1f}\n{'':10s} {'wall s':>8s} {'CPU s':>8s}")
    gains = []
    for _ in range(runs):
        alone, both = gain_of_a_processor()
        costs = []
        for jobs in (1, 2):
            costs.append(cost_of([sys.executable, "-m", "leveller", "batch", str(listed), "--out", str(room / "out"),
                                  "--jobs", str(jobs), "--quiet"]))
            shutil.rmtree(room / "out")
            print(f"{f'--jobs {jobs}':10s} {costs[-1].wall_s:8.2f} {costs[-1].cpu_s:8.2f}", flush=True)
        gains.append((costs[0].wall_s / costs[1].wall_s, alone / both))
    two, machine = np.median(gains, axis=0)
    print(f"two jobs are {two:.2f} times one; the machine runs two loops {machine:.2f} times as fast as one after the "
          f"other   (median of {runs})")


def gain_of_a_processor() -> tuple[float, float]:
    """Seconds of two loops, one after the other and at once."""
    command = [sys.executable, "-c", SPIN]
    start = time.perf_counter()
    for _ in range(2):
        cost_of(command)
    between = time.perf_counter()
    for process in [subprocess.Popen(command, env=ENVIRONMENT) for _ in range(2)]:
        process.wait()
    return between - start, time.perf_counter() - between


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--minutes", type=float, nargs="+", default=[60])
    parser.add_argument("--tracks", type=int, nargs="+", default=[3])
    parser.add_argument("--runs", type=int, default=3)
    parser.add_argument("--stages", action="store_true")
    parser.add_argument("--season", type=int, metavar="N", help="a batch of N episodes instead, one job against two")
    parser.add_argument("--keep", type=Path, metavar="DIR", help="with --season: the material stays in DIR")
    asked = parser.parse_args()
    if asked.season:
        with tempfile.TemporaryDirectory() as folder:
            talk = (asked.keep or Path(folder)) / f"{asked.minutes[0]:g} min of {asked.tracks[0]}"
            season(Path(folder), material(talk, asked.minutes[0], asked.tracks[0]), asked.season, asked.runs)
        return
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
