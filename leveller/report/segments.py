"""States over time as stretches, for speech.csv: own, bleed or silence, never a gap and never an overlap.

Own speech is taken as decided. Between it, whether others are heard flickers from hop to hop; gaps and runs of less
than 0.2 s are joined there, so that a stretch is something to listen to.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from leveller.attribute import Activity
from leveller.attribute.decode import sure_of
from leveller.measure.loudness import power_to_lufs
from leveller.plan import OWN, states_of
from leveller.plan.levels import k_power
from leveller.plan.stretches import without_short_gaps
from leveller.units import Bools

if TYPE_CHECKING:
    from leveller.pipeline import Result

SHORTEST_HOPS = 20


@dataclass(frozen=True)
class Segments:
    """The stretches of one track, in order; all arrays of shape=(stretches,)."""

    first_hop: npt.NDArray[np.int64]
    end_hop: npt.NDArray[np.int64]
    state: npt.NDArray[np.int8]  # index into `plan.STATES`
    sure: npt.NDArray[np.float64]  # mean over the stretch, 0.5 to 1
    level_lufs: npt.NDArray[np.float64]  # of the source; nan but for own speech


def segments_of(result: Result, track: int) -> Segments:
    """Stretches of one track."""
    state = steady_states(result.activity, track)
    first = np.concatenate([[0], np.flatnonzero(np.diff(state)) + 1])
    end = np.append(first[1:], len(state))
    length = end - first
    sure = np.add.reduceat(sure_of(result.activity.margin[:, track]).astype(np.float64), first) / length
    power = np.add.reduceat(k_power(result.measurements, track).astype(np.float64), first) / length
    kinds = state[first]
    return Segments(first, end, kinds, sure, np.where(kinds == OWN, power_to_lufs(power), np.nan))


def steady_states(activity: Activity, track: int) -> npt.NDArray[np.int8]:
    """State of every hop, index into `plan.STATES`, without flicker."""
    own, bleed = activity.own[:, track], activity.bleed[:, track]
    return states_of(own, _steady(bleed | own))


def _steady(flags: Bools) -> Bools:
    """Short gaps filled, then short runs dropped."""
    filled = without_short_gaps(flags, SHORTEST_HOPS)
    return ~without_short_gaps(~filled, SHORTEST_HOPS)
