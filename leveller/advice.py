"""Findings into plain advice: what to do, why, and the number that says so.

Each rule is a small function over the finished findings; each threshold is a named constant with its reason. Advice on
placing microphones rests on the inverse-distance law: half the distance to the mouth gives 6 dB more of the own voice,
while the others stay as they are. Order: what spoils a recording first, what is good to know last.

References: 3:1 rule, which counts on 9.5 dB = 20 log10 3 (handbooks); n equal open microphones raise the noise by
10 log10 n (handbooks); speed of sound 343 m/s.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from leveller.findings import Advice, Inspection, TrackFindings
from leveller.units import clock, gain_to_db, power_to_db

KINDS = (
    "silent", "no voice", "clipping", "dropout", "repaired", "bleed", "polarity", "clock", "echo", "noise", "hum", "dc",
    "low", "levels", "muted", "open", "tone", "set aside", "room tone",
)
SPEED_M_S = 343.0
BLEED_DB = -20 * math.log10(3)  # 3:1 rule: a voice three times as far away comes 9.5 dB softer
HALVING_DB = 20 * math.log10(2)  # inverse-distance law: half the distance
AIR_MOST_S = 0.03  # 10 m of air: what comes later came through a machine
LATE_S = 0.01  # our choice: more than the air makes up in a room, and the copies begin to be heard apart
NOISE_DB = 30.0  # voice over noise; our choice: below it the noise is heard between words after levelling
NOISE_OPEN_DB = 36.0  # the same with all microphones open: 6 dB more, as the noise then never stops
HUM_DB = -40.0  # against the voice (unweighted RMS against LUFS); our choice
DC_DBFS = -50.0  # 0.3 % of full scale; our choice: more costs headroom and clicks at cuts
LOW_PEAK_DBFS = -20.0  # our choice: three bits and more of the converter lie idle
LEVELS_DB = 10.0  # between the softest and the loudest voice; our choice, twice what a good set-up leaves
LEAST_SPEECH_S = 1.0
PLACES = 3  # times named in one sentence


def advise(found: Inspection) -> tuple[Advice, ...]:
    """All advice, in the order of `KINDS`, then of the tracks."""
    lines = [line for track in found.tracks for line in _of_track(track)]
    lines += [*_bleed(found), *_hums(found), *_polarity(found), *_clocks(found), *_echoes(found), *_levels(found)]
    lines += [*_open(found), *_tone(found), *_set_aside(found), *_room_tone(found)]
    return tuple(sorted(lines, key=lambda line: KINDS.index(line.kind)))


def share_of_distance(missing_db: float) -> float:
    """To what part of its distance a microphone must come for so many dB more (inverse-distance law)."""
    return float(10 ** (-missing_db / 20))


def _of_track(t: TrackFindings) -> Iterator[Advice]:
    """What one track shows by itself."""
    if t.silent:
        yield Advice("silent", t.name, 0.0, "s", f"{t.name} is digital silence throughout: is it the right file?")
        return
    yield from _faults(t)
    if t.role == "voice":
        yield from _recording(t)
    if t.muted:
        total = sum(b - a for a, b in t.muted)
        yield Advice("muted", t.name, total, "s", f"{t.name} is digitally silent for {total:.1f} s in all, "
                     f"{_times(t.muted)}: muted, it seems. Nothing to do if that was meant")


def _faults(t: TrackFindings) -> Iterator[Advice]:
    """What is broken in the samples."""
    if t.clipped:
        yield Advice("clipping", t.name, len(t.clipped), "places", f"{t.name} is clipped {_count(len(t.clipped))}, "
                     f"{_times(t.clipped)}. Listen there; the waveform cannot be brought back by levelling")
    if t.dropouts:
        yield Advice("dropout", t.name, len(t.dropouts), "places", f"{t.name} drops to digital zero "
                     f"{_count(len(t.dropouts))}, {_times(t.dropouts)}. Look for a second recording to patch from")
    if t.repaired_frames:
        yield Advice("repaired", t.name, t.repaired_frames, "frames", f"{t.name} holds {t.repaired_frames} samples "
                     "that are no numbers (NaN or Inf); they are silenced. Export the file again if you can")
    dc_db = gain_to_db(abs(t.dc_offset))
    if dc_db > DC_DBFS:
        yield Advice("dc", t.name, dc_db, "dBFS", f"{t.name} has a DC offset of {100 * t.dc_offset:+.1f} % of full "
                     f"scale ({dc_db:.0f} dBFS). high_pass_hz = 20 for this track removes it")


def _recording(t: TrackFindings) -> Iterator[Advice]:
    """How well a voice was recorded."""
    if t.voice_lufs is None or t.speaking_s < LEAST_SPEECH_S:
        yield Advice("no voice", t.name, t.speaking_s, "s", f"Nobody is found speaking into {t.name} "
                     f"({t.speaking_s:.1f} s). If that is so, say role = \"room\" for it; if not, add a correction "
                     "where the voice is")
        return
    if t.floor_lufs is not None and t.voice_lufs - t.floor_lufs < NOISE_DB:
        over = t.voice_lufs - t.floor_lufs
        yield Advice("noise", t.name, over, "dB", f"{t.name}'s noise lies only {over:.0f} dB under the voice. "
                     "Nearer to the mouth helps: half the distance gives 6 dB")
    if t.peak_dbfs < LOW_PEAK_DBFS:
        yield Advice("low", t.name, t.peak_dbfs, "dBFS", f"{t.name} was recorded low: its highest peak is "
                     f"{t.peak_dbfs:.0f} dBFS. 10 dB more gain would have been safe")


def _bleed(found: Inspection) -> Iterator[Advice]:
    """The voice that disturbs a microphone most, where it breaks the 3:1 rule."""
    for m, t in enumerate(found.tracks):
        others = np.delete(found.bleed_db[:, m], m)
        names = [o.name for k, o in enumerate(found.tracks) if k != m]
        if not np.isfinite(others).any() or float(np.nanmax(others)) <= BLEED_DB:
            continue
        worst = float(np.nanmax(others))
        loud = names[int(np.nanargmax(others))]
        also = [f"{n} at {v:.1f}" for n, v in zip(names, others, strict=True) if v > BLEED_DB and n != loud]
        yield Advice("bleed", t.name, worst, "dB", f"{t.name}'s microphone hears {loud} at {worst:.1f} dB against "
                     f"{t.name}'s own voice{' (also ' + ', '.join(also) + ' dB)' if also else ''}; the 3:1 rule allows "
                     f"{BLEED_DB:.1f} dB. {_nearer(worst)} (or turn its deaf side to {loud})")


def _nearer(bleed_db: float) -> str:
    """How much nearer a microphone must come, by the inverse-distance law."""
    if bleed_db - BLEED_DB <= HALVING_DB:
        return f"Half its distance from the mouth would make that {bleed_db - HALVING_DB:.1f} dB"
    part = 100 * share_of_distance(bleed_db - BLEED_DB)
    return f"It would have to come to {part:.0f} % of its distance from the mouth"


def _hums(found: Inspection) -> Iterator[Advice]:
    """Hum near enough to the voice, in one sentence for all tracks: it has one source as a rule."""
    near = [(t.hum.level_dbfs - t.voice_lufs, t.name, t.hum) for t in found.tracks
            if t.role == "voice" and t.voice_lufs is not None and t.hum is not None]
    near = [entry for entry in near if entry[0] > HUM_DB]
    if not near:
        return
    over, name, hum = max(near, key=lambda entry: entry[0])
    strongest = max(hum.lines, key=lambda line: line[1])[0]
    who = f"{name} hums" if len(near) == 1 else f"{', '.join(n for _, n, _ in near)} hum, {name} most"
    yield Advice("hum", name, hum.level_dbfs, "dBFS", f"{who}: {hum.mains_hz} Hz mains and harmonics at "
                 f"{hum.level_dbfs:.0f} dBFS, {-over:.0f} dB under the voice, strongest at {strongest:.0f} Hz. "
                 "Look for a cable or a supply")


def _polarity(found: Inspection) -> Iterator[Advice]:
    """Microphones the other way round."""
    known = [sign for sign in found.polarity if sign is not None]
    for m, sign in enumerate(found.polarity):
        if sign == -1:
            name = found.tracks[m].name
            strongest = float(np.nanmax(np.abs(np.r_[found.correlation[m], found.correlation[:, m]])))
            against = "the others" if len(known) > 2 else "the other track, and one of the two is wrong"
            yield Advice("polarity", name, strongest, "correlation", f"{name} is the other way round against {against} "
                         f"(correlation {strongest:.2f}, with its sign turned). polarity = -1 for it in session.toml")


def _clocks(found: Inspection) -> Iterator[Advice]:
    """Tracks that start too early: delaying is what a session file can do."""
    latest = max((late for late in found.late_s if late is not None), default=0.0)
    for t, late in zip(found.tracks, found.late_s, strict=True):
        if late is not None and latest - late > LATE_S:
            early = latest - late
            yield Advice("clock", t.name, early, "s", f"{t.name} runs {1000 * early:.0f} ms ahead of the latest track. "
                         f"offset_s = {early:.3f} for it in session.toml brings them together")


def _echoes(found: Inspection) -> Iterator[Advice]:
    """Tracks that return the others late, as a call does."""
    for m, t in enumerate(found.tracks):
        way = (found.delay_s[:, m] + found.delay_s[m]) / 2
        late = found.delay_s[:, m][(way > AIR_MOST_S) & (found.delay_s[:, m] > AIR_MOST_S)]
        if len(late):
            delay = float(np.median(late))
            yield Advice("echo", t.name, delay, "s", f"{t.name} returns the others {1000 * delay:.0f} ms late, as a "
                         "call does. Ask for headphones at that end")


def _levels(found: Inspection) -> Iterator[Advice]:
    """Voices recorded far apart."""
    voices = [(t.voice_lufs, t.name) for t in found.tracks if t.role == "voice" and t.voice_lufs is not None]
    if len(voices) > 1 and max(voices)[0] - min(voices)[0] > LEVELS_DB:
        (low, soft), (high, loud) = min(voices), max(voices)
        yield Advice("levels", soft, high - low, "LU", f"{soft} lies {high - low:.0f} LU under {loud}. Levelling "
                     f"matches them; next time turn {soft} up or {loud} down before the recording")


def _open(found: Inspection) -> Iterator[Advice]:
    """The noise of all microphones together, once the voices are matched."""
    under = [t.floor_lufs - t.voice_lufs for t in found.tracks
             if t.role == "voice" and t.voice_lufs is not None and t.floor_lufs is not None]
    if len(under) < 2:
        return
    together = -float(power_to_db(sum(10 ** (u / 10) for u in under)))
    if together < NOISE_OPEN_DB:
        yield Advice("open", "", together, "dB", f"With all {len(under)} microphones open and the voices matched, the "
                     f"noise lies {together:.0f} dB under the voice; {len(under)} alike raise it by "
                     f"{10 * math.log10(len(under)):.1f} dB over one (10 log10 n). Closing the idle ones wins that "
                     "back")


def _tone(found: Inspection) -> Iterator[Advice]:
    """Line-up tone, which counts for nothing."""
    total = sum(b - a for a, b in found.tone)
    if total:
        yield Advice("tone", "", total, "s", f"{total:.1f} s of steady tone, {_times(found.tone)}: left out of every "
                     "level")


def _set_aside(found: Inspection) -> Iterator[Advice]:
    """Tracks that add nothing."""
    for name, why in found.set_aside:
        yield Advice("set aside", name, 1, "track", f"{name} is {why} and was set aside")


def _room_tone(found: Inspection) -> Iterator[Advice]:
    """Voices without a stretch to patch with."""
    voices = [t for t in found.tracks if t.role == "voice" and not t.silent]
    without = [t.name for t in voices if not t.room_tone]
    if without:
        whose = "No track has" if len(without) == len(voices) else f"{', '.join(without)}: there is not even"
        yield Advice("room tone", without[0] if len(without) == 1 else "", len(without), "tracks",
                     f"{whose} 1.5 s of clean room tone for patching. Next time, record half a minute "
                     "with everybody silent")


def _times(spans: tuple[tuple[float, float], ...]) -> str:
    """'at 0:00:03, 0:00:07 and 2 more'."""
    first = ", ".join(clock(a) for a, _ in spans[:PLACES])
    return f"at {first}" + (f" and {len(spans) - PLACES} more" if len(spans) > PLACES else "")


def _count(times: int) -> str:
    """'once', 'twice', '5 times'."""
    return {1: "once", 2: "twice"}.get(times, f"{times} times")
