"""Look-ahead true-peak limiter on linked channels, and the make-up gain that brings a programme to its target.

Conventions: gains in dB, 0 or less for the limiter; *nodes* are the edges of the peak cells (`measure.peaks`), so a
programme of n cells has n + 1 nodes, node j at frame j * cell_frames; between nodes the gain is linear (not in dB).

Method: interpolation is linear, so the true peak of a scaled signal is the scaled true peak, and the limiter's gain is
a pure function of the peak cells before limiting, the make-up gain and the ceiling: no audio is read to decide.
1. The reduction a cell needs goes to its two nodes and, as the interpolator looks beyond the cell, to one more on
   either side.
2. Largest need over the look-ahead to come; exponential release in dB; mean over the look-ahead that has passed. So the
   gain has come down, without a corner, when the peak arrives; it is never above what the node needs.
Within the interpolator's reach the gain is not quite constant, and what the samples' sum loses by that can add up to a
peak over the ceiling: `CEILING_MARGIN_DB_S` covers it.

The make-up gain is found on cells alone: the loudness of the limited programme is predicted by multiplying each
K-weighted 10 ms cell by the mean square of the gain over it.

References
----------
D. Giannoulis, M. Massberg, J. D. Reiss, JAES 60(6), 2012: limiter curve, detector in dB after the gain computer,
one-pole release. ITU-R BS.1770-5 for loudness and true peak.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from leveller import settings as settings_
from leveller.measure.loudness import Cells, integrated_lufs, sliding_sum
from leveller.units import HOP_S, db_to_gain, gain_to_db

Nodes = npt.NDArray[np.float32]

# The limiter aims this much under the ceiling, divided by its look-ahead: 0.03 dB at 5 ms. Measured without it at 8 to
# 96 kHz, on noise, square waves and tones of a quarter of the rate that jump by up to 40 dB: at most 0.022 dB over at
# 5 ms (release 10 ms), 0.053 dB at 1 ms.
CEILING_MARGIN_DB_S = 1.5e-4
RELEASED_DB = 0.001  # a release under this is over
MOST_MAKE_UP_DB = 40.0  # a choice of ours: past this one amplifies noise
WITHIN_LU = 0.002  # a choice of ours: a fiftieth of what a delivery may miss its target by
MOST_ROUNDS = 24  # halving 40 dB so often leaves less than 0.00001 dB
AT_WORK_DB = 0.1  # "limited" in the summary
HEAVY_DB = 3.0  # common practice, no source: up to 3 dB of limiting on speech is not heard

_MARGIN_CELLS = 1  # the interpolator reaches 6 frames, a cell is no shorter (checked in the tests)
_CHUNK_NODES = 1 << 12  # nodes worked on at once, about 4 s: memory stays small, and stretches at rest cost nothing
_CHUNK_HOPS = 400  # as long, in 10 ms cells


@dataclass(frozen=True)
class MakeUp:
    """Make-up gain and limiter gain for a programme."""

    make_up_db: float
    nodes_db: Nodes  # shape=(cells + 1,), 0 or less
    expected_lufs: float  # integrated loudness predicted for the limited programme
    reason: str = ""  # why the target is not reached; empty where it is


@dataclass(frozen=True)
class LimiterSummary:
    """How hard the limiter worked."""

    most_db: float  # largest reduction, 0 or more
    most_s: float  # when; 0 where there is none
    limited_s: float  # time with more than 0.1 dB of reduction
    heavy_share: float  # share of the programme with more than 3 dB, 0 to 1


def limiter_nodes_db(
    peak_cells: npt.NDArray[Any],
    *,
    make_up_db: float,
    ceiling_dbtp: float,
    settings: settings_.Limiter,
    cell_s: float,
) -> Nodes:
    """The limiter's gain at the edges of the peak cells.

    Parameters
    ----------
    peak_cells : np.ndarray, shape=(cells,)
        True peak of each cell before make-up, linear, over all channels (`TruePeakMeter`).
    make_up_db, ceiling_dbtp : float
    settings : settings.Limiter
    cell_s : float
        Length of a peak cell.

    Returns
    -------
    np.ndarray, shape=(cells + 1,), float32
        dB, 0 or less; 0 where nothing comes near the ceiling.
    """
    ahead = max(1, math.ceil(settings.lookahead_s / cell_s - 1e-9))
    decay = cell_s / settings.release_s
    allowed = float(db_to_gain(ceiling_dbtp - CEILING_MARGIN_DB_S / settings.lookahead_s - make_up_db))
    nodes = np.zeros(ahead + len(peak_cells) + 1, np.float32)  # starts one look-ahead before the programme
    held = np.zeros(ahead + 1)  # released need of the nodes just before the chunk
    for start in range(0, len(nodes), _CHUNK_NODES):
        count = min(_CHUNK_NODES, len(nodes) - start)
        need = _node_need_db(peak_cells, allowed, start - ahead, count + ahead)
        if need.any() or held.any():
            released = _released_db(_sliding_max(need, ahead + 1), float(held[-1]), decay)
            past = np.concatenate([held[1:], released])
            mean = sliding_sum(past, ahead + 1) / (ahead + 1)
            nodes[start : start + count] = 0.0 - np.maximum(mean, need[:count])  # 0.0 at rest, not -0.0
            held = past[-(ahead + 1) :]
    return nodes[ahead:]


def apply_nodes(
    block: npt.NDArray[np.float32],
    nodes_db: Nodes,
    *,
    first_frame: int,
    cell_frames: int,
    make_up_db: float,
) -> npt.NDArray[np.float32]:
    """A block after make-up and limiter gain; the same bits wherever the blocks are cut.

    Parameters
    ----------
    block : np.ndarray, shape=(frames,) or (frames, channels)
    nodes_db : np.ndarray, shape=(cells + 1,)
        After its end the last value holds.
    first_frame : int
        Where the block starts in the programme.
    cell_frames : int
        Frames from node to node.
    make_up_db : float
    """
    if not len(block):
        return block.copy()
    first = first_frame // cell_frames
    last = (first_frame + len(block) - 1) // cell_frames
    own = nodes_db[np.minimum(np.arange(first, last + 2), len(nodes_db) - 1)].astype(np.float64)
    make_up = np.float32(db_to_gain(make_up_db))
    if not own.any():
        return np.asarray(block * make_up, np.float32)
    gain = np.asarray(db_to_gain(own) * float(make_up), np.float32)
    ramp = (np.arange(cell_frames) / cell_frames).astype(np.float32)
    per_frame = (gain[:-1, None] + np.diff(gain)[:, None] * ramp).reshape(-1)
    skip = first_frame - first * cell_frames
    own_gain = per_frame[skip : skip + len(block)]
    return np.asarray(block * (own_gain if block.ndim == 1 else own_gain[:, None]), np.float32)


def find_make_up(
    cells: Cells,
    peak_cells: npt.NDArray[Any],
    *,
    target_lufs: float,
    ceiling_dbtp: float,
    settings: settings_.Limiter,
    cell_s: float,
) -> MakeUp:
    """The make-up gain with which the limited programme reads the target.

    Parameters
    ----------
    cells : np.ndarray, shape=(cells,)
        K-weighted power per 10 ms before make-up (`LoudnessMeter`).
    peak_cells, ceiling_dbtp, settings, cell_s
        As for `limiter_nodes_db`.
    target_lufs : float

    Returns
    -------
    MakeUp
        With a `reason` where the target is out of reach: a silent programme and one that would need more than 40 dB
        keep their level, one whose peaks the limiter holds down gets the gain it would need without a limiter.
    """

    def limited(make_up_db: float) -> tuple[Nodes, float]:
        nodes = limiter_nodes_db(
            peak_cells, make_up_db=make_up_db, ceiling_dbtp=ceiling_dbtp, settings=settings, cell_s=cell_s)
        return nodes, integrated_lufs(limited_cells(cells, nodes, cell_s=cell_s, make_up_db=make_up_db))

    plain_lufs = integrated_lufs(cells)
    wanted_db = target_lufs - plain_lufs
    if wanted_db > MOST_MAKE_UP_DB:
        nodes, expected_lufs = limited(0.0)
        reads = "no sound over the -70 LUFS gate" if plain_lufs == -math.inf else f"only {plain_lufs:.1f} LUFS"
        reason = f"{reads}: {target_lufs:g} LUFS is more than {MOST_MAKE_UP_DB:g} dB away"
        return MakeUp(0.0, nodes, expected_lufs, reason)
    make_up_db = _solved(lambda gain: limited(gain)[1] - target_lufs, wanted_db)
    if make_up_db is None:
        nodes, expected_lufs = limited(wanted_db)
        return MakeUp(
            wanted_db, nodes, expected_lufs,
            f"peaks: under {ceiling_dbtp:g} dBTP the mix does not reach {target_lufs:g} LUFS with any make-up gain "
            f"up to {MOST_MAKE_UP_DB:g} dB")
    nodes, expected_lufs = limited(make_up_db)
    return MakeUp(make_up_db, nodes, expected_lufs)


def limited_cells(cells: Cells, nodes_db: Nodes, *, cell_s: float, make_up_db: float = 0.0) -> Cells:
    """K-weighted cells after make-up and limiter, shape=(cells,): each times the mean square of the gain over it."""
    out = cells * float(db_to_gain(2.0 * make_up_db))
    edges = np.ceil(np.arange(len(cells) + 1) * (HOP_S / cell_s) - 0.5).astype(np.int64)  # peak cells by their middle
    edges = np.minimum(edges, len(nodes_db) - 1)
    for start in range(0, len(cells), _CHUNK_HOPS):
        own = edges[start : start + _CHUNK_HOPS + 1]
        nodes = nodes_db[own[0] : own[-1] + 1]
        if nodes.any():
            gain = np.asarray(db_to_gain(nodes.astype(np.float64)))
            square = (gain[:-1] ** 2 + gain[:-1] * gain[1:] + gain[1:] ** 2) / 3.0  # mean of a linear ramp's square
            out[start : start + len(own) - 1] *= np.add.reduceat(square, own[:-1] - own[0]) / np.diff(own)
    return out


def summarise(nodes_db: Nodes, *, cell_s: float) -> LimiterSummary:
    """How hard the limiter worked; all zero for a limiter at rest or a programme without cells."""
    if not nodes_db.any():
        return LimiterSummary(0.0, 0.0, 0.0, 0.0)
    at = int(nodes_db.argmin())
    limited = int(np.count_nonzero(nodes_db < -AT_WORK_DB))
    heavy = int(np.count_nonzero(nodes_db < -HEAVY_DB))
    return LimiterSummary(-float(nodes_db[at]), at * cell_s, limited * cell_s, heavy / len(nodes_db))


def _node_need_db(peak_cells: npt.NDArray[Any], allowed: float, start: int, count: int) -> npt.NDArray[np.float64]:
    """Reduction that nodes start to start + count need, 0 or more; nodes off the programme need none."""
    around = 1 + _MARGIN_CELLS  # node j lies between cells j - 1 and j
    first, end = start - around, start + count + around - 1
    own = peak_cells[max(0, first) : max(0, end)]
    if not len(own) or float(own.max()) <= allowed:
        return np.zeros(count)
    cells = np.zeros(end - first)
    cells[max(0, -first) : max(0, -first) + len(own)] = np.maximum(own / allowed, 1.0)
    need_db: npt.NDArray[np.float64] = gain_to_db(_sliding_max(np.maximum(cells, 1.0), 2 * around))
    return need_db


def _sliding_max(values: npt.NDArray[np.float64], width: int) -> npt.NDArray[np.float64]:
    """Largest of `width` neighbours from each on, shape=(len - width + 1,), by doubling."""
    highest, span = values, 1
    while 2 * span <= width:
        highest = np.maximum(highest[:-span], highest[span:])
        span *= 2
    count = len(values) - width + 1
    rest = width - span
    return np.maximum(highest[:count], highest[rest : rest + count])


def _released_db(need_db: npt.NDArray[np.float64], before_db: float, decay: float) -> npt.NDArray[np.float64]:
    """D[j] = max(need[j], exp(-decay) * D[j - 1]), under 0.001 dB nothing, as a running maximum of logarithms."""
    falling = decay * np.arange(len(need_db) + 1)
    with np.errstate(divide="ignore"):
        logs = np.log(np.concatenate([[before_db], need_db]))
    released = np.exp(np.maximum.accumulate(logs + falling) - falling)[1:]
    released[released < RELEASED_DB] = 0.0
    return np.asarray(np.maximum(released, need_db))


def _solved(error: Callable[[float], float], first_db: float) -> float | None:
    """The gain at which a growing error is within 0.002 LU of 0, by a guarded secant; None if over 40 dB.

    A gate that a block falls through makes a small jump: the nearest gain tried is the answer then.
    """
    low, high, gain, slope = first_db - 1.0, MOST_MAKE_UP_DB, first_db, 1.0
    tried: list[tuple[float, float]] = []
    for _ in range(MOST_ROUNDS):
        off = error(gain)
        if tried and gain != tried[-1][0]:
            slope = (off - tried[-1][1]) / (gain - tried[-1][0])
        tried.append((gain, off))
        if abs(off) <= WITHIN_LU:
            return gain
        if off < 0.0 and gain == MOST_MAKE_UP_DB:
            return None
        low, high = (gain, high) if off < 0.0 else (low, gain)
        gain -= off / slope if slope > 0.0 else math.copysign(math.inf, off)
        if not low < gain < high:
            gain = high if high == MOST_MAKE_UP_DB and gain >= high else (low + high) / 2.0
    return min(tried, key=lambda pair: abs(pair[1]))[0]
