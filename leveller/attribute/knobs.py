"""Recording gains that were turned in the middle: when, on which track, by how much.

A knob moves everything on its track for good: the room's noise, the bleed and the voice. The noise floor shows it
best, since it is steady: between two quiet moments it steps by the same number of dB in every band. A fan or an air
conditioner that starts moves floors too, but on all tracks at once, and leaves the speech where it was. So a step
of the floor is a knob's when no other track's floor steps likewise at the same moment and the track's own speech
steps with it.

Method: change points of the quietest 90 ms of each second, median over bands, by least squares with binary
segmentation (A. J. Scott, M. Knott, Biometrics 30, 1974). A person who leans away or changes seat moves no floor
and is left to the ride.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from leveller.units import HOPS_PER_S, Bools

LEAST_STEP_DB = 2.0
LEAST_S = 15  # of a level on either side of a step
SMOOTH_S = 21  # running low percentile, so that seconds without a quiet moment do not count
LOW = 0.15
LEAST_RATIO = 4.0  # step over the scatter of the floor round it
SHARED = 0.5  # another floor that steps by this part at the same moment makes it the room's
MOMENT_S = 4
WINDOW_S = 30  # sizes are medians over this on either side
SPEECH_S = 90  # own speech this far on either side is compared
LEAST_SPEECH_HOPS = 150
FOLLOWS = 0.4  # speech steps by at least this part of the floor's step

Grid = npt.NDArray[np.float32]


@dataclass(frozen=True)
class Step:
    """One turn of a knob."""

    track: int
    hop: int
    size_db: float


def knob_steps(quiet_db: Grid, speech_db: Grid, own: Bools) -> list[Step]:
    """Steps of all tracks in order of time.

    Parameters
    ----------
    quiet_db : shape=(seconds, tracks, bands)
        The quietest moment of every second; nan where there is none.
    speech_db : shape=(hops, tracks)
        Level of each hop.
    own : shape=(hops, tracks)
        Hops of own speech.
    """
    steps = [_floor_steps(_one_floor(quiet_db[:, track])) for track in range(quiet_db.shape[1])]
    found = []
    for track, own_steps in enumerate(steps):
        others = [step for k, other in enumerate(steps) if k != track for step in other]
        for second, size in own_steps:
            if any(_alike((second, size), other) for other in others):
                continue
            follows = _speech_step(speech_db[:, track], own[:, track], second * HOPS_PER_S)
            if follows is not None and follows * np.sign(size) >= FOLLOWS * abs(size):
                found.append(Step(track, second * HOPS_PER_S, size))
    return sorted(found, key=lambda step: step.hop)


def _alike(step: tuple[int, float], other: tuple[int, float]) -> bool:
    """Whether another floor steps likewise at the same moment: that is the room, not a knob."""
    return abs(step[0] - other[0]) <= MOMENT_S and other[1] / step[1] > SHARED


def _one_floor(quiet_db: Grid) -> Grid:
    """One quiet level a second: median over bands, each against its own usual level; gaps filled."""
    known = np.isfinite(quiet_db).all(axis=1)
    if not known.any():
        return np.zeros(len(quiet_db), np.float32)
    away = np.median(quiet_db[known] - np.median(quiet_db[known], axis=0), axis=1)
    return np.asarray(np.interp(np.arange(len(quiet_db)), np.flatnonzero(known), away), np.float32)


def _floor_steps(quiet: Grid) -> list[tuple[int, float]]:
    """Seconds at which the floor steps from one lasting level to another, with the sizes in dB."""
    padded = np.pad(quiet, SMOOTH_S // 2, mode="edge")
    floor = np.quantile(np.lib.stride_tricks.sliding_window_view(padded, SMOOTH_S), LOW, axis=1)
    found = []
    todo = [(0, len(floor))]
    while todo:
        first, after = todo.pop()
        split = _split(floor[first:after])
        if split is None:
            continue
        todo += [(first, first + split), (first + split, after)]
        size = _size(floor, first + split)
        if size is not None:
            found.append((_moment(quiet, floor, first + split, size), size))
    return sorted(found)


def _split(floor: npt.NDArray[np.floating]) -> int | None:
    """The best change point of a row, None where one level serves."""
    count = len(floor)
    if count < 2 * LEAST_S:
        return None
    left = np.arange(LEAST_S, count - LEAST_S + 1)
    total = np.concatenate([[0.0], np.cumsum(floor, dtype=np.float64)])
    before, after = total[left] / left, (total[-1] - total[left]) / (count - left)
    best = int(((after - before) ** 2 * left * (count - left)).argmax())
    return int(left[best]) if abs(after[best] - before[best]) >= LEAST_STEP_DB / 2 else None


def _size(floor: npt.NDArray[np.floating], second: int) -> float | None:
    """Size of a step, None where it is small or no larger than what the floor does anyway."""
    before, after = floor[max(0, second - WINDOW_S) : second], floor[second : second + WINDOW_S]
    size = float(np.median(after) - np.median(before))
    scatter = np.median(np.abs(np.concatenate([before - np.median(before), after - np.median(after)])))
    return size if abs(size) >= LEAST_STEP_DB and abs(size) >= LEAST_RATIO * scatter else None


def _moment(quiet: Grid, floor: npt.NDArray[np.floating], second: int, size: float) -> int:
    """The second of the step: on its louder side no moment is as quiet as on the other."""
    near = slice(max(0, second - SMOOTH_S), second + SMOOTH_S)
    half = float(np.median(floor[max(0, second - WINDOW_S) : second])) + size / 2
    low = np.flatnonzero(quiet[near] < half)
    if not len(low):
        return second
    return near.start + int(low[0] if size < 0 else low[-1] + 1)


def _speech_step(level_db: Grid, own: Bools, hop: int) -> float | None:
    """Step of own speech at a hop: upper quartiles of its level before and after, None where there is too little."""
    reach = SPEECH_S * HOPS_PER_S
    start = max(0, hop - reach)
    before = level_db[start:hop][own[start:hop]]
    after = level_db[hop : hop + reach][own[hop : hop + reach]]
    if min(len(before), len(after)) < LEAST_SPEECH_HOPS:
        return None
    return float(np.quantile(after, 0.75) - np.quantile(before, 0.75))
