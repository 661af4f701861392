"""Inspects a session before anything is rendered: levels, faults, bleed, delays, and what to do about them.

`inspect` tells the story: open, measure, attribute, listen to some seconds again (hum, delay, polarity), conclude.
`inspect_session` is the pure part. Two matrices describe the bleed: *coupling*, as recorded, changes with every knob;
*bleed* sets voice k at microphone m against m's own voice there, and the knobs cancel out of it: that is what an editor
hears under the voice, and what a better placed microphone improves.

Reference: ITU-R BS.1770-5 (K-weighting).
"""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.advice import AIR_MOST_S, advise
from leveller.align import Alignment as TrackAlignment
from leveller.align import aligned, find_alignment
from leveller.attribute import Activity, attribute
from leveller.attribute.coupling import LEAST_EVER, NONE_DB
from leveller.attribute.tone import steady_tone
from leveller.findings import Inspection, Matrix, Spans, TrackFindings
from leveller.measure import Measurements, OnProgress, measure, no_progress
from leveller.measure.alignment import CLEAR, LEAST_WINDOWS, Alignment, read_alignment
from leveller.measure.arrival import LAG_S
from leveller.measure.hum import Hum, read_hum
from leveller.measure.loudness import OFFSET_LU, power_to_lufs
from leveller.measure.polarity import heights_of, signs_of
from leveller.plan.levels import k_power, level_lufs, own_power, own_speech, spoken_alone
from leveller.quiet import floor_lufs, gaps, pauses, quiet_seconds, room_tone, runs
from leveller.session import Session, open_session
from leveller.suspects import alignment_notes
from leveller.timeline import check_asked, retimed
from leveller.units import HOP_S, HOPS_PER_S, Bools, db_to_power, frames_to_hops

__all__ = ["Heard", "Inspection", "inspect", "inspect_session", "listen"]

HUM_SECONDS = 40  # of each track are read again
ALONE_SECONDS = 16  # of each voice, in all tracks
ALONE_SECONDS_IN_ALL = 256  # fewer a voice in a session of many
ALONE_SHARE = 0.6  # of such a second is own speech
HIDDEN = 0.1  # of the noise's power
STRONG = 0.1  # height of an arrival's peak that counts, where waveforms were not read
LEAST_ARRIVALS = 5


@dataclass(frozen=True)
class Heard:
    """What the waveforms say beyond the measurements."""

    alignment: Alignment
    hum: tuple[Hum | None, ...]  # per track


def inspect(
    sources: Sequence[Path | str], *, align: bool | None = None, on_progress: OnProgress = no_progress, **opening: Any
) -> Inspection:
    """Open, measure, attribute and inspect a session; nothing is written.

    With `align` (by default as session.toml or season.toml say) it is looked at as `process --align` would take it, and
    what was found of every track's start, clock and polarity comes along.

    Parameters
    ----------
    sources : as of `open_session`, which also takes the further keywords (`delivery`, `assignments`, `accept_short`)
    on_progress : called with stage, done and total

    Raises
    ------
    InputError, SettingsError
    """
    session = open_session(sources, align=align, **opening)
    check_asked(session)
    measurements = measure(session, on_progress=on_progress)
    found: tuple[TrackAlignment, ...] = ()
    if session.align:
        found = find_alignment(session, measurements)
        as_opened, session = session, retimed(session, aligned(session, found))
        if session.tracks != as_opened.tracks:
            measurements = measure(session, on_progress=on_progress)
    else:
        notes = alignment_notes(session, measurements, polarity=False)  # of that alone there is advice
        session = dataclasses.replace(session, notes=(*session.notes, *notes))
    activity = attribute(measurements, session)
    inspected = inspect_session(session, measurements, activity, heard=listen(session, measurements, activity))
    return dataclasses.replace(inspected, alignment=found)


def listen(session: Session, m: Measurements, activity: Activity) -> Heard:
    """Read some quiet seconds of every track, and some in which one voice speaks alone.

    Raises
    ------
    InputError
        where a file has become unreadable.
    """
    voices = max(1, sum(track.role == "voice" for track in session.tracks))
    each = min(ALONE_SECONDS, max(4, ALONE_SECONDS_IN_ALL // voices))
    alone = [_alone_seconds(activity, track, each) for track in range(len(session.tracks))]
    hum = (read_hum(track, session.rate_hz, quiet_seconds(m, i, HUM_SECONDS)) for i, track in enumerate(session.tracks))
    return Heard(read_alignment(session, alone), tuple(hum))


def inspect_session(
    session: Session, m: Measurements, activity: Activity, *, heard: Heard | None = None
) -> Inspection:
    """All findings and the advice that follows; pure.

    Parameters
    ----------
    session, m, activity : from `open_session`, `measure`, `attribute`
    heard : Heard, optional
        from `listen`; without it hum is unknown, and delays and polarity come from the arrivals (within 12 ms)
    """
    tone = steady_tone(m.levels)
    quiet = pauses(activity, tone)
    counted = spoken_alone(activity)
    hums = heard.hum if heard else (None,) * len(session.tracks)
    tracks = tuple(_track(session, m, activity, i, quiet, hums[i]) for i in range(len(session.tracks)))
    coupling = _coupling(activity)
    alignment = heard.alignment if heard else _from_arrivals(m, counted)
    found = Inspection(
        title=session.title, rate_hz=session.rate_hz, length_s=session.frames / session.rate_hz, tracks=tracks,
        coupling_db=coupling, bleed_db=_bleed(m, counted, tracks), delay_s=alignment.delay_s,
        correlation=alignment.correlation, late_s=_late(alignment.delay_s),
        polarity=_polarity(alignment.correlation, heights_of(m.arrivals, len(tracks))),
        tone=_spans(tone), set_aside=tuple((aside.name, aside.why) for aside in session.set_aside), notes=session.notes)
    return dataclasses.replace(found, advice=advise(found))


def _track(
    session: Session, m: Measurements, activity: Activity, i: int, quiet: Bools, hum: Hum | None
) -> TrackFindings:
    """One track by itself."""
    track, peak = session.tracks[i], m.peaks[i]
    inside = (frames_to_hops(track.offset_frames, session.rate_hz),
              (track.offset_frames + track.frames) * HOPS_PER_S // session.rate_hz)
    dropouts, muted = gaps(m, i, inside)
    floor = floor_lufs(m, i, quiet)
    own = own_speech(activity)[:, i]
    return TrackFindings(
        name=track.name, role=track.role, speaking_s=np.count_nonzero(own) * HOP_S,
        own_share=float(own.mean()) if len(own) else 0.0, voice_lufs=level_lufs(own_power(m, activity, i), own),
        floor_lufs=floor, peak_dbfs=peak.sample_peak_dbfs, peak_s=peak.sample_peak_s, clipped=peak.clipped,
        dc_offset=max(peak.dc_offset, key=abs, default=0.0), hum=hum, dropouts=dropouts, muted=muted,
        silent=floor is None, repaired_frames=m.repaired_frames[i], room_tone=room_tone(m, i, quiet, floor))


def _coupling(activity: Activity) -> Matrix:
    """Coupling of every voice that was heard, nan elsewhere."""
    out = activity.coupling.overall_db.astype(np.float64)
    out[activity.coupling.heard_hops < LEAST_EVER] = np.nan
    out[out <= NONE_DB] = np.nan
    return out


def _bleed(m: Measurements, counted: Bools, tracks: tuple[TrackFindings, ...]) -> Matrix:
    """Loudness of voice k at microphone m against m's own voice, nan where either is unknown, 0 on the diagonal.

    The K-weighted power at m while k surely speaks alone, less the noise; what the noise hides reads 10 dB under it.
    """
    out = np.full((len(tracks), len(tracks)), np.nan)
    for mic, track in enumerate(tracks):
        if track.voice_lufs is None or track.floor_lufs is None:
            continue
        power, noise = k_power(m, mic), db_to_power(track.floor_lufs - OFFSET_LU)
        for voice, other in enumerate(tracks):
            if other.voice_lufs is not None:
                heard = float(power[counted[:, voice]].mean(dtype=np.float64)) - noise
                out[voice, mic] = power_to_lufs(max(heard, HIDDEN * noise)) - track.voice_lufs
        out[mic, mic] = 0.0
    return out


def _alone_seconds(activity: Activity, track: int, most: int) -> list[float]:
    """Where seconds begin in which this voice speaks and no other, in order of time.

    Where there are too few of those (a call whose late bleed passes for a voice), others may seem to speak as well.
    """
    own = activity.own & activity.programme[:, None]
    mine = own[:, track].astype(np.int64)
    others = own.sum(axis=1) - mine > 0
    strict = _best_seconds(np.where(others, -HOPS_PER_S, mine), most)
    return strict if len(strict) >= LEAST_WINDOWS else _best_seconds(mine, most)


def _best_seconds(worth: npt.NDArray[np.int64], most: int) -> list[float]:
    """Where the best seconds begin that do not overlap, by the sum of their hops' worth."""
    sums = np.concatenate([[0], np.cumsum(worth)])
    starts = np.arange(0, len(worth) - HOPS_PER_S + 1, HOPS_PER_S // 4)
    share = sums[starts + HOPS_PER_S] - sums[starts] if len(starts) else starts
    chosen: list[int] = []
    for at in np.argsort(-share, kind="stable"):
        if share[at] < ALONE_SHARE * HOPS_PER_S or len(chosen) == most:
            break
        if all(abs(starts[at] - other) >= HOPS_PER_S for other in chosen):
            chosen.append(int(starts[at]))
    return [start * HOP_S for start in sorted(chosen)]


def _from_arrivals(m: Measurements, counted: Bools) -> Alignment:
    """Delays as the median lag of the arrival windows in which a voice surely speaks alone; the sign is not known.

    A lag of 0 is noise that both microphones share by wire: no voice is equally near to two of them.
    """
    tracks = counted.shape[1]
    delay = np.full((tracks, tracks), np.nan)
    inside = m.arrivals.hop < len(counted)
    own = counted[m.arrivals.hop[inside]]
    for p, (i, j) in enumerate(m.arrivals.pairs):
        lag = m.arrivals.lag[inside, p]
        clear = (m.arrivals.strength[inside, p] > STRONG) & (lag != 0)
        for voice, mic, sign in ((i, j, -1), (j, i, 1)):  # a positive lag: i hears later
            at = own[:, voice] & clear
            if np.count_nonzero(at) >= LEAST_ARRIVALS:
                delay[voice, mic] = sign * float(np.median(lag[at])) * LAG_S
    return Alignment(delay, np.full((tracks, tracks), np.nan))


def _late(delay_s: Matrix) -> tuple[float | None, ...]:
    """How late each track's clock runs against the earliest, from delays both ways: half their difference.

    The way through the air cancels in it. Where both together are longer than any way, it is an echo and no clock.
    """
    skew = (delay_s - delay_s.T) / 2  # [k, m]: m against k
    skew[np.abs(delay_s + delay_s.T) / 2 > AIR_MOST_S] = np.nan
    late: list[float | None] = [None] * len(skew)
    for first in range(len(skew)):
        known = [m for m in range(len(skew)) if late[m] is None and np.isfinite(skew[first, m])]
        if known and late[first] is None:
            late[first] = 0.0
        for m in known:
            late[m] = float(skew[first, m]) + (late[first] or 0.0)
    least = min((value for value in late if value is not None), default=0.0)
    return tuple(None if value is None else value - least for value in late)


def _polarity(correlation: Matrix, arrivals: Matrix) -> tuple[int | None, ...]:
    """Signs that agree best with all correlations; with the arrivals where the waveforms say nothing."""
    strength = np.nan_to_num(correlation) * (np.abs(np.nan_to_num(correlation)) > CLEAR)
    both = strength + strength.T
    return signs_of(np.where(both, both, arrivals))


def _spans(flags: Bools) -> Spans:
    """Stretches of True in seconds."""
    return tuple((a * HOP_S, b * HOP_S) for a, b in runs(flags))
