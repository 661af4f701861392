"""Each voice before and after, from the hop grid alone: levels of the source times the gain of the plan.

*Before* is the source, *after* the stem with make-up gain, before the limiter. Own speech is what levelling itself
counts (`plan.levels`: sure, audible, without the others' bleed); others are heard where only somebody else speaks;
noise where nobody speaks and nothing of it is heard.
"""

from __future__ import annotations

import dataclasses
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from leveller.measure.levels import SILENT
from leveller.measure.loudness import power_to_lufs
from leveller.plan import PARTS, TrackGain
from leveller.plan.levels import k_power, level_lufs, own_power, own_speech, spoken_alone
from leveller.quiet import LEAST_PAUSE_HOPS
from leveller.render.gain import hop_gains_db
from leveller.report.records import OtherFigures, VoiceFigures
from leveller.units import HOPS_PER_S, Bools

if TYPE_CHECKING:
    from leveller.pipeline import Result

Grid = npt.NDArray[np.float32]


def voice_figures(result: Result) -> tuple[VoiceFigures, ...]:
    """All voices, in session order."""
    counted, alone = own_speech(result.activity), spoken_alone(result.activity)
    pause = ~result.activity.own.any(axis=1) & result.activity.programme
    return tuple(_one_voice(result, i, counted, alone, pause)
                 for i, track in enumerate(result.session.tracks) if track.role == "voice")


def other_figures(result: Result) -> tuple[OtherFigures, ...]:
    """All tracks that are no voice, in session order."""
    return tuple(OtherFigures(track.name, track.role, float(gain.gain_cdb[0]) / 100)
                 for track, gain in zip(result.session.tracks, result.plan.tracks, strict=True)
                 if track.role != "voice")


def gain_db(gain: TrackGain, hops: int) -> Grid:
    """Gain in the middle of every hop, shape=(hops,)."""
    start, end = hop_gains_db(gain, hops)
    return np.asarray((start + end) / 2)


def _one_voice(result: Result, i: int, counted: Bools, alone: Bools, pause: Bools) -> VoiceFigures:
    """Figures of one voice."""
    gain, activity, hops = result.plan.tracks[i], result.activity, result.measurements.hops
    before, own = k_power(result.measurements, i), own_power(result.measurements, activity, i)
    gained = np.asarray(10 ** ((gain_db(gain, hops) + result.mix.make_up_db) / 10), np.float32)
    after = before * gained
    others = np.delete(alone, i, axis=1).any(axis=1) & ~activity.own[:, i]
    quiet = pause & ~activity.bleed[:, i] & (result.measurements.k_levels[:, i] != SILENT)
    own_before, own_after = level_lufs(own, counted[:, i]), level_lufs(own * gained, counted[:, i])
    trim = _trims(gain, hops, activity.own[:, i])
    furthest = {part: _furthest(gain.parts_cdb[:, k]) for k, part in enumerate(PARTS)}
    return VoiceFigures(
        track=result.session.tracks[i].name,
        speaks_s=int(np.count_nonzero(activity.own[:, i] & activity.programme)) / HOPS_PER_S,
        before_lufs=own_before, after_lufs=own_after,
        noise_before_lufs=_median_lufs(before, quiet), noise_after_lufs=_median_lufs(after, quiet),
        bleed_before_db=_against(level_lufs(before, others), own_before),
        bleed_after_db=_against(level_lufs(after, others), own_after),
        trim_db=float(np.median(trim)), trim_low_db=float(trim.min()), trim_high_db=float(trim.max()),
        ride_db=furthest["ride"], compressor_db=furthest["compressor"], expander_db=furthest["expander"],
        range_db=result.plan.range_db[i])


def _trims(gain: TrackGain, hops: int, own: Bools) -> Grid:
    """Trim during own speech, or throughout where there is none."""
    trim = gain_db(dataclasses.replace(gain, gain_cdb=gain.parts_cdb[:, PARTS.index("auto_trim")]), hops)
    return trim[own] if own.any() else trim


def _furthest(part_cdb: npt.NDArray[np.int32]) -> float:
    """The value furthest from 0, in dB."""
    return float(part_cdb[np.abs(part_cdb).argmax()]) / 100


def _median_lufs(power: Grid, where: Bools) -> float | None:
    """Median level of some hops, None where there are too few."""
    if np.count_nonzero(where) < LEAST_PAUSE_HOPS:
        return None
    return float(power_to_lufs(float(np.median(power[where]))))


def _against(level: float | None, own: float | None) -> float | None:
    """A level less the own one."""
    return None if level is None or own is None else level - own
