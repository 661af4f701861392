"""Tracks that do not line up: found, said, and put right when asked for.

Recorders of their own start when they like and run on clocks of their own. `find_alignment` compares every track with a
reference where both hear the same sounds (bleed, a clap), and a track that does not hear the reference with one that is
known already. Tracks of one file have one clock. `aligned` gives the session with the tracks moved, their clocks and
their polarity put right. (Where that is not asked for, `suspects` warns.)

Conventions: session times of the reference. A track that is late by offset_s at 0 and whose clock is fast by drift_ppm
hears the reference's sound of t at t + offset_s + drift_ppm * 1e-6 * t. The track's frames then lie
1 / (rate * (1 + drift)) apart: its reader resamples once, from that rate to the session's, and no block is ever moved.

What cannot be told: where only one of two tracks hears the other, the way of the sound through the air (3 ms a metre)
looks like an offset. Offsets that a way can explain are left alone then; of longer ones, 3 ms are taken for the way.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from leveller.audio import parts_of
from leveller.measure import Measurements
from leveller.measure.claps import CLAP_HEIGHT, common_clap
from leveller.measure.clocks import Fit, Heard, clock_of
from leveller.measure.levels import level_to_db
from leveller.measure.onsets import ENOUGH_SCORE, Line, common_line, onsets
from leveller.measure.polarity import heights_of, signs_of
from leveller.session import Session, Track

LEAST_S = 0.006  # two metres of air: microphones that stand differently look that far apart without any fault
LONGEST_WAY_S = 0.03  # five metres, or a strong echo taken for the direct sound (17 ms seen)
USUAL_WAY_S = 0.003
LEAST_DRIFT_S = 0.0015  # by the session's end; less is no drift
LEAST_PLACES = 3
LEAST_SHARE = 0.4  # of the clear places
DRIFT_SPAN_S = 20.0  # over less time the slope means nothing
LEFT = "so it was not aligned"  # how the note on a track that nothing is known of ends


@dataclass(frozen=True)
class Alignment:
    """How one track lies against the reference; all None and 0 where they have no common sound."""

    track: str
    against: str  # the track it was compared with; "" for the reference itself
    offset_s: float | None  # positive: late
    drift_ppm: float | None  # positive: its clock is fast
    polarity: int | None  # -1: upside down against the reference
    confidence: float  # 0 .. 1: the share of clear places on one line, less where few onsets are shared
    way_s: float | None = None  # of the sound between the two; None where only one hears the other
    places: int = 0  # on the line


@dataclass(frozen=True)
class _Clock:
    """One track against the reference."""

    against: int | None
    offset_s: float = 0.0
    drift: float = 0.0
    polarity: int | None = 1
    confidence: float = 1.0
    way_s: float | None = None
    places: int = 0


def find_alignment(
    session: Session, m: Measurements, *, suspects: Sequence[int] | None = None
) -> tuple[Alignment, ...]:
    """Compare every track that has a microphone; beds are left out.

    Parameters
    ----------
    session : Session
    m : Measurements
        of this session
    suspects : sequence of int, optional
        the tracks that are looked at; all by default. The others are taken to line up with each other.

    Raises
    ------
    InputError
        where a file has become unreadable.
    """
    tracks = [i for i, track in enumerate(session.tracks) if track.role != "bed"]
    if len(tracks) < 2:
        return ()
    reference = reference_of(session, tracks)
    looked_at = [i for i in tracks if (suspects is None or i in suspects) and i != reference]
    known = {i: _Clock(None) for i in tracks if i not in looked_at}
    heard = {i: Heard(session.tracks[i], onsets(m.levels[:, i]), level_to_db(m.voice_levels[:, i])) for i in tracks}
    while new := _next_found(session, heard, known, [i for i in looked_at if i not in known]):
        known |= new
        heard |= {i: dataclasses.replace(heard[i], offset_s=c.offset_s, drift=c.drift) for i, c in new.items()}
    signs = signs_of(heights_of(m.arrivals, m.levels.shape[1]), reference=reference)
    return tuple(_record(session, i, _with_sign(known.get(i), signs[i], signs[reference]), reference) for i in tracks)


def aligned(session: Session, found: Sequence[Alignment]) -> Session:
    """The session with its tracks lined up; the very same one where nothing is to be done.

    Nothing of a track is cut: where one begins before the session's zero, all move later by whole frames.
    Its notes say what was moved and what was left alone.
    """
    by_name = {a.track: a for a in found}
    turned = turned_tracks(found)
    tracks, starts, notes = [], [], []
    for track in session.tracks:
        record = by_name.get(track.name)
        start_s = track.offset_frames / session.rate_hz
        if record is not None:
            track, start_s = _moved(track, record, session, start_s)
            track = dataclasses.replace(track, polarity=track.polarity * (-1 if track.name in turned else 1))
            notes += said_of(record, session, track.name in turned)
        tracks.append(track)
        starts.append(start_s)
    if tracks == list(session.tracks) and not notes:
        return session
    zero = max(0, math.ceil(-min(starts) * session.rate_hz - 1e-6))
    tracks = [dataclasses.replace(track, offset_frames=round(start * session.rate_hz) + zero)
              for track, start in zip(tracks, starts, strict=True)]
    if zero:
        notes.append(f"the session begins {zero / session.rate_hz:.3f} s earlier, with the earliest track")
    moved = [(t.offset_frames, t.clock_ppm) for t in tracks] != [(t.offset_frames, t.clock_ppm) for t in session.tracks]
    day = 86400 * session.rate_hz
    time_reference = None if session.time_reference is None else (session.time_reference - zero) % day
    return dataclasses.replace(
        session, tracks=tuple(tracks), frames=max(t.offset_frames + t.frames for t in tracks),
        notes=(*session.notes, *notes), time_reference=time_reference,
        zero_s=zero / session.rate_hz if moved else session.zero_s)


def misaligned(session: Session, found: Alignment) -> bool:
    """Whether the track is off by more than its place in the room explains."""
    if found.offset_s is None or found.drift_ppm is None:
        return False
    drifted_s = found.drift_ppm * 1e-6 * session.frames / session.rate_hz
    late_s = max(abs(found.offset_s), abs(found.offset_s + drifted_s))
    return late_s > (LEAST_S if found.way_s is not None else LONGEST_WAY_S) or abs(drifted_s) > LEAST_S


def reference_of(session: Session, tracks: list[int]) -> int:
    """The first track of the file that holds the most of them; of voices before others."""
    files = [parts_of(session.tracks[i]) for i in tracks]
    return max(tracks, key=lambda i: (session.tracks[i].role == "voice", files.count(parts_of(session.tracks[i])), -i))


def _next_found(
    session: Session, heard: dict[int, Heard], known: dict[int, _Clock], left: list[int]
) -> dict[int, _Clock]:
    """The first of the tracks left that can be compared with a known one, by the first that it hears both ways."""
    for i in left:
        mates = [k for k in known if parts_of(session.tracks[k]) == parts_of(session.tracks[i])]
        one_way: _Clock | None = None
        for k in mates or list(known):
            clock = _compared(session, heard, known[k], k, i, bool(mates))
            if clock is not None and (clock.way_s is not None or mates):
                return {i: clock}
            if clock is not None and (one_way is None or clock.confidence > one_way.confidence):
                one_way = clock
        if one_way is not None:
            return {i: one_way}
    return {}


def _compared(
    session: Session, heard: dict[int, Heard], base: _Clock, k: int, i: int, same_file: bool
) -> _Clock | None:
    """Track i against the reference by way of track k, or None where they share no sound."""
    others = [heard[j] for j in heard if j not in (i, k)]

    def fit_of(line: Line | None) -> Fit | None:
        return None if line is None else clock_of(heard[k], heard[i], line, session.rate_hz, others=others)

    line: Line | None = Line(0.0, 0.0, ENOUGH_SCORE) if same_file else common_line(heard[k].onsets, heard[i].onsets)
    fit = fit_of(line) if line is not None and line.score >= ENOUGH_SCORE else None
    if (fit is None or not _sure(fit)) and not same_file:
        line = common_clap(heard[k], heard[i], session.rate_hz)
        fit = fit_of(line)
    sure = fit is not None and _sure(fit)
    polarity = fit.sign * base.polarity if fit is not None and sure and fit.sign and base.polarity else None
    if same_file:
        return dataclasses.replace(base, polarity=polarity)
    if line is None or fit is None or not sure:
        return None
    offset_s, drift = _without_way(fit), fit.drift
    if abs(drift) * session.frames / session.rate_hz < LEAST_DRIFT_S or np.ptp(fit.near.at_s) < DRIFT_SPAN_S:
        offset_s, drift = offset_s + drift * float(np.mean(fit.near.at_s)), 0.0
    confidence = fit.share * (1 - math.exp(-line.score / ENOUGH_SCORE))
    return _Clock(
        k, base.offset_s + offset_s + drift * base.offset_s, base.drift + drift + base.drift * drift, polarity,
        confidence * base.confidence, fit.way_s, len(fit.near.at_s))


def _sure(fit: Fit) -> bool:
    """Whether a line is more than chance."""
    enough = len(fit.near.at_s) >= LEAST_PLACES or float(fit.near.height.max()) > CLAP_HEIGHT
    return enough and fit.share >= LEAST_SHARE


def _without_way(fit: Fit) -> float:
    """The offset; where only one track hears the other's voice, the usual way is taken off what it hears late."""
    voices = fit.sides - {0}
    if fit.way_s is not None or len(voices) != 1 or len(fit.near.at_s) < LEAST_PLACES:  # a clap is nobody's voice
        return fit.offset_s
    side = max(voices)
    return fit.offset_s - side * min(USUAL_WAY_S, max(side * fit.offset_s, 0.0))


def _with_sign(clock: _Clock | None, sign: int | None, reference_sign: int | None) -> _Clock | None:
    """The clock with the polarity that the arrivals show, where the places read do not."""
    if clock is None or clock.polarity is not None or sign is None or reference_sign is None:
        return clock
    return dataclasses.replace(clock, polarity=sign * reference_sign)


def _record(session: Session, i: int, clock: _Clock | None, reference: int) -> Alignment:
    """What is told of a track."""
    name = session.tracks[i].name
    if clock is None:
        return Alignment(name, session.tracks[reference].name, None, None, None, 0.0)
    against = "" if clock.against is None else session.tracks[clock.against].name
    return Alignment(name, against, clock.offset_s, clock.drift * 1e6, clock.polarity, clock.confidence, clock.way_s,
                     clock.places)


def turned_tracks(found: Sequence[Alignment]) -> set[str]:
    """The tracks that are upside down: the fewer ones, and never the reference of two."""
    down = {a.track for a in found if a.polarity == -1}
    up = {a.track for a in found if a.polarity == 1}
    return down if len(down) <= len(up) else up


def _moved(track: Track, found: Alignment, session: Session, start_s: float) -> tuple[Track, float]:
    """The track with its clock put right, and when it then begins."""
    if not misaligned(session, found) or found.offset_s is None or found.drift_ppm is None:
        return track, start_s
    speed = 1 + found.drift_ppm * 1e-6
    frames = round(track.source_frames / (track.source_rate_hz * speed) * session.rate_hz)
    if found.drift_ppm:
        track = dataclasses.replace(track, clock_ppm=found.drift_ppm, frames=max(frames, 1))
    return track, (start_s - found.offset_s) / speed


def said_of(found: Alignment, session: Session, turned: bool, *, done: bool = True) -> list[str]:
    """One line on a track that is off or unknown, none on another; `done` where it was put right."""
    if found.offset_s is None or found.drift_ppm is None:
        return [f"{found.track}: no sound in common with the other tracks, {LEFT}"]
    parts = []
    if misaligned(session, found):
        parts.append(f"{abs(found.offset_s):.3f} s {'late' if found.offset_s >= 0 else 'early'}")
        if found.drift_ppm:
            parts.append(f"its clock {'fast' if found.drift_ppm > 0 else 'slow'} by {abs(found.drift_ppm):.1f} ppm")
    if turned:
        parts.append("upside down")
    if not parts:
        return []
    against = f" against {found.against}" if found.against else ""
    unsure = "" if found.way_s is not None or not misaligned(session, found) else (
        f", within {LONGEST_WAY_S * 1000:.0f} ms, since only one of the two hears the other")
    return [f"{found.track}: {', '.join(parts)}{against} (confidence {found.confidence:.2f}{unsure})"
            + (", put right" if done else "")]
