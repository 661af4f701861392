"""Measurements and activity in, gain breakpoints out: all decisions, no samples.

For each voice, in this order: a static `trim` that brings it to `VOICE_LUFS`, the `expander`, the slow `ride`, the
gentle `compressor`. Every part is a curve in dB at hop edges; their sum is the track's gain. `thinning` takes the
curves to the fewest rows, rounded to 0.01 dB, and from then on the rows *are* the plan: the automation file holds
them and the renderer reads nothing else.

Roles: `room` keeps its trim from the session file and is never expanded; `bed` likewise.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from leveller.attribute import Activity
from leveller.measure import Measurements
from leveller.measure.levels import level_to_db
from leveller.plan.compressor import compressor_nodes_db
from leveller.plan.corrections import EXPANDER, TRIM, corrected_curve, overruled, spliced
from leveller.plan.expander import auto_range_db, expander_nodes_db, opened
from leveller.plan.levels import level_lufs, own_power, own_speech, spoken_alone
from leveller.plan.ride import ride_nodes_db
from leveller.plan.trim import trim_nodes_db
from leveller.session import Session
from leveller.settings import AUTO
from leveller.units import Bools

PARTS = ("auto_trim", "expander", "ride", "compressor")
TOLERANCE_DB = 0.1
MOST_ROWS = 1_000_000
GAIN_LIMITS_DB = (-120.0, 40.0)
STATES = ("silence", "bleed", "own")
SILENCE, BLEED, OWN = range(len(STATES))
CAUSES = ("hold", "trim", "opening", "closing", "ride", "compressor", "edit")

Nodes = npt.NDArray[np.float32]


@dataclass(frozen=True)
class TrackGain:
    """Breakpoints of one track: linear in dB between rows, gain = sum of the parts, in hundredths of a dB."""

    hop: npt.NDArray[np.int64]  # (rows,) hop edges, never falling; a step is two rows at one hop
    parts_cdb: npt.NDArray[np.int32]  # (rows, 4) in the order of `PARTS`
    gain_cdb: npt.NDArray[np.int32]  # (rows,)
    state: npt.NDArray[np.int8]  # (rows,) index into `STATES`, from this row on
    cause: npt.NDArray[np.int8]  # (rows,) index into `CAUSES`: what moves the gain from this row on


@dataclass(frozen=True)
class GainPlan:
    """The gain of every track over time."""

    hops: int
    tracks: tuple[TrackGain, ...]
    range_db: tuple[float, ...]  # of each track's expander; 0 where there is none


def states_of(own: Bools, bleed: Bools) -> npt.NDArray[np.int8]:
    """Index into `STATES` of each hop, of the shape of both."""
    return np.where(own, OWN, np.where(bleed, BLEED, SILENCE)).astype(np.int8)


def make_plan(m: Measurements, activity: Activity, session: Session) -> GainPlan:
    """Decide the gain of every track."""
    counted, alone = own_speech(activity), spoken_alone(activity)
    voices = [i for i, track in enumerate(session.tracks) if track.role == "voice"]
    trims = {
        i: trim_nodes_db(own_power(m, activity, i), counted[:, i], [step for step in activity.steps if step.track == i],
                         settings=session.settings.trim)
        for i in voices
    }
    ranges = _ranges(activity, session, voices, trims)
    open_ = np.ones_like(activity.own)
    if activity.own.any():
        lone = len(voices) == 1
        open_[:, voices] = opened(activity.own[:, voices], settings=session.settings.expander, lone=lone)

    def curves_of(i: int) -> tuple[Nodes, Nodes]:
        """The parts of one track, without and with corrections."""
        if i in trims:
            heard = (counted[:, i], alone[:, i], open_[:, i])
            parts = _voice_parts(m, activity, session, i, heard, trims[i], ranges[i])
        else:
            parts = np.zeros((m.hops + 1, len(PARTS)), np.float32)
        parts[:, TRIM] += session.tracks[i].trim_db
        return parts, corrected_curve(parts, i, activity.own, open_, session, range_db=ranges[i])

    return GainPlan(m.hops, _thinned(curves_of, len(session.tracks), overruled(activity, session)), tuple(ranges))


def _ranges(activity: Activity, session: Session, voices: list[int], trims: dict[int, Nodes]) -> list[float]:
    """Expander range of every track."""
    wanted = session.settings.expander.range_db
    out = [0.0] * len(session.tracks)
    middle = np.array([float(np.median(trims[i])) for i in voices], np.float32)
    coupling = activity.coupling.overall_db[np.ix_(voices, voices)]
    auto = auto_range_db(coupling, activity.coupling.heard_hops[voices], middle)
    for place, i in enumerate(voices):
        out[i] = float(auto[place]) if wanted == AUTO else float(wanted)
    return out


def _voice_parts(
    m: Measurements, activity: Activity, session: Session, i: int, heard: tuple[Bools, Bools, Bools], trim: Nodes,
    range_db: float,
) -> Nodes:
    """All parts of one voice, shape=(hops + 1, parts); the trim makes up for what ride and compressor take.

    `heard`: own speech, that of it which is spoken alone, and where the microphone is open.
    """
    settings, (counted, alone, open_) = session.settings, heard
    expander = expander_nodes_db(open_, activity.own_to_bleed_db[:, i], range_db=range_db, settings=settings.expander)
    power = own_power(m, activity, i)
    level = level_lufs(power * _per_hop_gain(trim), counted)
    if level is None:
        return np.stack([trim, expander, np.zeros_like(trim), np.zeros_like(trim)], axis=1)
    speech_db = level_to_db(m.voice_levels[:, i]) + _middles(trim)
    usual_db = 10 * np.log10(np.mean(10 ** (speech_db[alone] / 10)))
    ride = ride_nodes_db(speech_db - usual_db, alone, open_ & ~activity.own[:, i], settings=settings.ride)
    compressor = compressor_nodes_db(
        speech_db - usual_db + _middles(ride), activity.own[:, i], settings=settings.compressor)
    after = level_lufs(power * _per_hop_gain(trim + ride + compressor), counted)
    if settings.trim.enabled and after is not None:
        trim = trim + np.float32(level - after)
    return np.stack([trim, expander, ride, compressor], axis=1)


def _middles(nodes: Nodes) -> Nodes:
    """Gain in the middle of each hop."""
    return np.asarray((nodes[:-1] + nodes[1:]) / 2)


def _per_hop_gain(nodes: Nodes) -> Nodes:
    """Power gain of each hop."""
    return np.asarray(10 ** (_middles(nodes) / 10))


def _thinned(
    curves_of: Callable[[int], tuple[Nodes, Nodes]], tracks: int, activity: Activity
) -> tuple[TrackGain, ...]:
    """Corrected curves as rows, track by track, since they take 16 bytes a hop.

    The tolerance widens only where a very long session would pass `MOST_ROWS`.
    """
    tolerance = TOLERANCE_DB * 0.8  # rounding to 0.01 dB, four parts, takes the rest
    while True:
        found = [_track_gain(*spliced(*curves_of(i), tolerance), activity, i) for i in range(tracks)]
        if sum(len(gain.hop) for gain in found) <= MOST_ROWS:
            return tuple(found)
        tolerance *= 1.5


def _track_gain(
    curve: Nodes, rows: npt.NDArray[np.int64], touched: Bools, activity: Activity, track: int
) -> TrackGain:
    """Rounded rows of one track with state and cause."""
    parts = np.rint(curve[rows].astype(np.float64) * 100).astype(np.int32)
    low, high = (round(100 * limit) for limit in GAIN_LIMITS_DB)
    parts[:, TRIM] += np.clip(parts.sum(axis=1), low, high) - parts.sum(axis=1)
    hop = np.minimum(rows, len(activity.own) - 1)
    state = states_of(activity.own[hop, track], activity.bleed[hop, track])
    causes = _causes(parts)
    causes[touched & (causes != CAUSES.index("hold"))] = CAUSES.index("edit")
    return TrackGain(rows, parts, parts.sum(axis=1, dtype=np.int32), state, causes)


def _causes(parts: npt.NDArray[np.int32]) -> npt.NDArray[np.int8]:
    """What moves the gain most from each row to the next."""
    moves = np.diff(parts, axis=0, append=parts[-1:])
    most = np.abs(moves).argmax(axis=1)
    named = np.array([CAUSES.index(c) for c in ("trim", "opening", "ride", "compressor")], np.int8)[most]
    named[(most == EXPANDER) & (moves[:, EXPANDER] < 0)] = CAUSES.index("closing")
    named[~moves.any(axis=1)] = CAUSES.index("hold")
    return np.asarray(named)
