"""Simulated conversations in front of several microphones, with exact truth.

Purpose: material for the tests and for the accuracy table of the docs. `simulate(ConversationSpec(...))` gives what
each microphone records, split into own speech, bleed and noise, and what happened when.

Conventions: signals are float32 `(frames, microphones)` at the rate asked for; times in seconds from the start of
the recording; levels in dB against the nominal level of a voice at its own microphone (`NOMINAL_DBFS`). Person p
and microphone m count from 0. The same spec gives the same samples.

Method: `turns` decides who says what when, `sounds` supplies it dry, `rooms` gives the impulse responses; speech is
computed at 16 kHz, as the recordings are, and resampled; noise of the microphones is made at the final rate. mics =
own + bleed + noise, sample by sample. Own is the sound of those who sit at the microphone (laughs, coughs and
breaths too), bleed that of all others, noise the rest. Gains (`gains_db`, `knobs`) work on all three, as a
preamplifier does.
"""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import rooms
import soundfile as sf
import sounds
import soxr
from rooms import Room
from scipy.signal import oaconvolve
from sounds import RATE_HZ
from turns import SPEECH, Habits, Sound, Talk, overlapped_frames

NOMINAL_DBFS = -32.0  # leaves room for +10 dB of gain, a cough and speech peaks
EVERYWHERE = -1  # the microphone number of an event that all hear alike

Spans = list[tuple[float, float]]


@dataclass(frozen=True)
class ConversationSpec:
    """What to simulate. All optional; the defaults are three people at a round table for a minute."""

    seed: int = 1
    seconds: float = 60.0
    rate_hz: int = 48_000
    room: str = "round table"  # one of rooms.KINDS
    rt60_s: float = 0.35
    people: int = 3
    voices: tuple[str, ...] = sounds.DEV  # recordings to draw from; sounds.HELD_OUT for figures in the docs
    shares: tuple[float, ...] | None = None  # of talk, one per person; None: all alike
    overlap_share: float = 0.12  # of speech during which somebody else speaks too
    gap_s: float = 0.2  # mean gap between turns
    short_answers_per_min: float = 5.0
    spoken_answers: float = 0.0  # share of them that are words; the others are an "mm"
    breath_share: float = 0.8  # phrases that may have a breath before them
    laughs_per_min: float = 0.7
    coughs_per_min: float = 0.3
    whisper_share: float = 0.0
    voice_spread_db: float = 3.0  # standard deviation between the people's own loudness
    gains_db: tuple[float, ...] | None = None  # error of each microphone's gain; None: drawn within +-gain_error_db
    gain_error_db: float = 10.0
    noise_db: float = -46.0  # of each microphone by itself
    common_noise_db: float = -48.0  # of the room, alike in all
    empty: int = 0  # microphones nobody speaks into (tracks at the end)
    shared: int = 0  # people who share the microphone of another (the last ones)
    knobs: tuple[tuple[float, float, tuple[int, ...]], ...] = ()  # (at_s, by_db, microphones)
    seat_changes: tuple[tuple[float, int], ...] = ()  # (at_s, person)
    leans: tuple[tuple[float, float, int], ...] = ()  # (from_s, to_s, person)
    thumps_per_min: float = 0.0
    clicks_per_min: float = 0.0
    keyboard: tuple[tuple[float, float], ...] = ()
    fan_from_s: float | None = None
    fan_db: float = -36.0
    hum_db: float | None = None
    rain_db: float | None = None
    mutes: tuple[tuple[int, float, float], ...] = ()  # (microphone, from_s, to_s): digital zero
    late_bleed_ms: tuple[tuple[int, float], ...] = ()  # (microphone, ms): a call returns the others late
    latency_ms: tuple[tuple[int, float], ...] = ()  # (microphone, ms): the whole track late
    slate_s: float = 0.0  # line-up tone before the programme


@dataclass(frozen=True)
class Event:
    """Something that happened, besides phrases."""

    kind: str  # short answer, whisper, laugh, cough, thump, click, keyboard, fan, knob, seat, lean, mute, slate
    mic: int  # EVERYWHERE: all of them
    from_s: float
    to_s: float


@dataclass(frozen=True, eq=False)
class Conversation:
    """What was recorded, and the truth about it."""

    mics: np.ndarray  # (frames, n) float32, own + bleed + noise
    own: np.ndarray  # (frames, n)
    bleed: np.ndarray  # (frames, n)
    noise: np.ndarray  # (frames, n)
    rate_hz: int
    segments: list[Spans]  # per microphone: own speech, phrase by phrase
    breaths: list[Spans]  # per microphone
    events: list[Event]
    names: tuple[str, ...]
    spec: ConversationSpec
    overlap_share: float  # reached
    placed: Room = field(repr=False)

    @property
    def hops(self) -> int:
        """How many 10 ms hops there are."""
        return len(self.mics) * 100 // self.rate_hz

    def write(self, folder: Path) -> list[Path]:
        """Each microphone as a 24 bit WAV file named after it, and nothing else."""
        peak = float(np.abs(self.mics).max(initial=0.0))
        assert peak < 1, f"peak of {peak:.2f} would clip: lower gains_db"
        folder.mkdir(parents=True, exist_ok=True)
        paths = [folder / f"{name}.wav" for name in self.names]
        for path, samples in zip(paths, self.mics.T, strict=True):
            sf.write(path, samples, self.rate_hz, subtype="PCM_24")
        return paths


def simulate(spec: ConversationSpec) -> Conversation:
    """The conversation of that spec; the same spec gives the same samples."""
    streams = [np.random.default_rng([spec.seed, k]) for k in range(5)]  # stream 1 is the script's
    room = rooms.furnish(
        spec.room, spec.people, streams[0], rt60_s=spec.rt60_s, empty=spec.empty, shared=spec.shared)
    said = script(spec)
    loudness_db = np.clip(streams[2].normal(0, spec.voice_spread_db, spec.people), -6, 6)
    own, bleed = _through_the_room(said, loudness_db, room, spec, streams[0])
    nominal = _nominal_gain(room)
    errors_db = spec.gains_db or tuple(streams[3].uniform(-1, 1, len(nominal)) * spec.gain_error_db)
    assert len(errors_db) == len(nominal), f"gains_db: {len(errors_db)} given, {len(nominal)} microphones"
    common, events = _common_noise(spec, streams[4], len(own))
    noise = _mic_noise(spec, streams[4], _at_rate(common, spec))
    own, bleed = _at_rate(own * nominal, spec), _at_rate(bleed * nominal, spec)
    gain = _gain_curve(spec, errors_db, len(noise))
    own, bleed, noise = (_latency(np.float32(x * gain), spec) for x in (own, bleed, noise))
    return Conversation(
        mics=own + bleed + noise, own=own, bleed=bleed, noise=noise, rate_hz=spec.rate_hz,
        segments=_spans(said, SPEECH, room, spec), breaths=_spans(said, ("breath",), room, spec),
        events=sorted(events + _events(said, room, spec), key=lambda e: e.from_s), names=_names(spec, room), spec=spec,
        overlap_share=overlap_share(said), placed=room)


def script(spec: ConversationSpec) -> list[Sound]:
    """Who says what when, dry: the conversation without its room."""
    people = sounds.cast(spec.voices, spec.people)
    rng = np.random.default_rng([spec.seed, 1])
    return Talk(people, habits(spec), rng, _begin_s(spec), spec.seconds - 0.6).run()


def habits(spec: ConversationSpec) -> Habits:
    """The part of the spec that says how people talk."""
    shares = spec.shares or (1 / spec.people,) * spec.people
    assert len(shares) == spec.people, f"shares: {len(shares)} given, {spec.people} people"
    names = {f.name for f in dataclasses.fields(Habits)} - {"shares"}
    return Habits(shares=tuple(s / sum(shares) for s in shares), **{name: getattr(spec, name) for name in names})


def _begin_s(spec: ConversationSpec) -> float:
    return (spec.slate_s + 1.0 if spec.slate_s else 0.0) + 0.8


def _through_the_room(
    said: list[Sound], loudness_db: np.ndarray, room: Room, spec: ConversationSpec, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """Own speech and bleed at each microphone before any gain, at 16 kHz."""
    seats = {p: rooms.other_seat(room, p, rng) for _, p in spec.seat_changes}
    frames = round(spec.seconds * RATE_HZ)
    late = {m: round(ms * RATE_HZ / 1000) for m, ms in spec.late_bleed_ms}
    own, bleed = (np.zeros((frames, len(room.microphones))) for _ in range(2))
    for sound in said:
        mouth = _mouth(sound, room, seats, spec)
        wet = oaconvolve(sound.dry[:, None], rooms.responses(room, mouth, sound.person), axes=0)
        wet *= 10 ** (loudness_db[sound.person] / 20)
        home = room.sits_at[sound.person]
        for m in range(wet.shape[1]):
            start = sound.at_frame + (late.get(m, 0) if m != home else 0)
            end = min(start + len(wet), frames)
            (own if m == home else bleed)[start:end, m] += wet[: max(end - start, 0), m]
    return own, bleed


def _mouth(sound: Sound, room: Room, seats: dict[int, rooms.Point], spec: ConversationSpec) -> rooms.Point:
    """Where the person's mouth is when the sound begins."""
    at_s, person = sound.at_frame / RATE_HZ, sound.person
    if any(p == person and a <= at_s < b for a, b, p in spec.leans):
        return rooms.leaned_back(room, person)
    if any(p == person and at_s >= a for a, p in spec.seat_changes):
        return seats[person]
    return room.mouths[person]


def _nominal_gain(room: Room) -> np.ndarray:
    """Gains that bring a voice of 0 dB to `NOMINAL_DBFS` at its own microphone; where nobody sits, the mean gain."""
    gain = np.full(len(room.microphones), np.nan)
    for person in reversed(range(len(room.mouths))):
        mic = room.sits_at[person]
        response = rooms.responses(room, room.mouths[person], person)[:, mic]
        gain[mic] = 10 ** (NOMINAL_DBFS / 20) / np.sqrt(np.sum(response**2))
    return np.where(np.isnan(gain), np.exp(np.nanmean(np.log(gain))), gain)


def _common_noise(spec: ConversationSpec, rng: np.random.Generator, frames: int) -> tuple[np.ndarray, list[Event]]:
    """Room noise and knocks at 16 kHz, each microphone with its own distance to them, and the events in it."""
    events: list[Event] = []
    bed = _bed(spec, rng, frames, events)
    knocks = np.zeros(frames)
    first = int(_begin_s(spec) * RATE_HZ)
    makers = (("thump", spec.thumps_per_min, sounds.thump), ("click", spec.clicks_per_min, sounds.click))
    for kind, per_min, make in makers:
        count = round(per_min * (frames - first) / RATE_HZ / 60)
        for at in np.sort(rng.integers(first, max(frames - RATE_HZ, first + 1), count)):
            _knock(knocks, int(at), make(rng), kind, events)
    for a, b in spec.keyboard:
        events.append(Event("keyboard", EVERYWHERE, a, b))
        for at_s in np.arange(a, b, 0.14) + rng.uniform(0, 0.08, len(np.arange(a, b, 0.14))):
            _knock(knocks, int(at_s * RATE_HZ), sounds.click(rng), "", events)
    mics = _mic_count(spec)
    out = np.empty((frames, mics))
    for m in range(mics):
        shift = int(rng.integers(0, 60))
        out[:, m] = np.roll(bed, shift) + np.roll(knocks, shift) * 10 ** (rng.uniform(-3, 3) / 20)
    if spec.slate_s:
        n = int(spec.slate_s * RATE_HZ)
        out[:n] += (np.sqrt(2) * 10 ** (4 / 20) * np.sin(2 * np.pi * 1000 * np.arange(n) / RATE_HZ))[:, None]
        events.append(Event("slate", EVERYWHERE, 0.0, spec.slate_s))
    return out * 10 ** (NOMINAL_DBFS / 20), events


def _bed(spec: ConversationSpec, rng: np.random.Generator, frames: int, events: list[Event]) -> np.ndarray:
    """The steady noises of the room."""
    bed = sounds.at_level(sounds.band_noise(rng, frames, 80, 1200), spec.common_noise_db)
    if spec.hum_db is not None:
        bed += sounds.hum(frames) * 10 ** (spec.hum_db / 20)
    if spec.rain_db is not None:
        bed += sounds.rain(rng, frames) * 10 ** (spec.rain_db / 20)
    if spec.fan_from_s is not None:
        at = int(spec.fan_from_s * RATE_HZ)
        bed[at:] += sounds.fan(rng, frames - at) * 10 ** (spec.fan_db / 20)
        events.append(Event("fan", EVERYWHERE, spec.fan_from_s, spec.seconds))
    return bed


def _knock(onto: np.ndarray, at: int, dry: np.ndarray, kind: str, events: list[Event]) -> None:
    """One short noise added in place, and its event."""
    dry = dry[: len(onto) - at]
    onto[at : at + len(dry)] += dry
    if kind:
        events.append(Event(kind, EVERYWHERE, at / RATE_HZ, (at + len(dry)) / RATE_HZ))


def _mic_noise(spec: ConversationSpec, rng: np.random.Generator, common: np.ndarray) -> np.ndarray:
    """The common noise and each microphone's own hiss, at the final rate."""
    hiss = rng.standard_normal(common.shape, dtype=np.float32) * 10 ** ((spec.noise_db + NOMINAL_DBFS) / 20)
    return common + hiss


def _gain_curve(spec: ConversationSpec, errors_db: tuple[float, ...], frames: int) -> np.ndarray:
    """Linear gain per frame and microphone: errors, knobs turned, mutes. One row where nothing changes."""
    steady = np.array([errors_db], dtype=float)
    if not (spec.knobs or spec.mutes):
        return np.float32(10 ** (steady / 20))
    gain_db = np.repeat(steady, frames, axis=0)
    for at_s, by_db, mics in spec.knobs:
        at, turn = int(at_s * spec.rate_hz), int(0.2 * spec.rate_hz)
        ramp = np.clip((np.arange(frames) - at) / turn, 0, 1) * by_db
        gain_db[:, list(mics)] += ramp[:, None]
    gain = np.float32(10 ** (gain_db / 20))
    for mic, a, b in spec.mutes:
        gain[int(a * spec.rate_hz) : int(b * spec.rate_hz), mic] = 0
    return gain


def _latency(x: np.ndarray, spec: ConversationSpec) -> np.ndarray:
    """Whole tracks late, digital zero before them."""
    for mic, ms in spec.latency_ms:
        late = round(ms * spec.rate_hz / 1000)
        x[late:, mic] = x[: len(x) - late, mic].copy()
        x[:late, mic] = 0
    return x


def _at_rate(x: np.ndarray, spec: ConversationSpec) -> np.ndarray:
    """From 16 kHz to the rate of the spec, with exactly as many frames as its seconds hold."""
    out = x.astype(np.float32)
    if spec.rate_hz != RATE_HZ:
        out = soxr.resample(out, RATE_HZ, spec.rate_hz)
    frames = round(spec.seconds * spec.rate_hz)
    return np.pad(out, ((0, max(frames - len(out), 0)), (0, 0)))[:frames]


def _spans(said: list[Sound], kinds: tuple[str, ...], room: Room, spec: ConversationSpec) -> list[Spans]:
    """From and to of those kinds of sound, per microphone, in order; touching ones are joined."""
    late = dict(spec.latency_ms)
    out: list[Spans] = [[] for _ in room.microphones]
    for sound in said:
        if sound.kind in kinds:
            mic = room.sits_at[sound.person]
            a, b = (f / RATE_HZ + late.get(mic, 0) / 1000 for f in (sound.at_frame, sound.end_frame))
            if out[mic] and a <= out[mic][-1][1]:
                a, b = out[mic][-1][0], max(b, out[mic].pop()[1])
            out[mic].append((a, b))
    return out


def _events(said: list[Sound], room: Room, spec: ConversationSpec) -> list[Event]:
    """What people did besides phrases and breaths, and what was done to the recording."""
    people = [Event(s.kind, room.sits_at[s.person], s.at_frame / RATE_HZ, s.end_frame / RATE_HZ)
              for s in said if s.kind not in ("phrase", "breath")]
    return [
        *people,
        *(Event("knob", m, at_s, at_s + 0.2) for at_s, _, mics in spec.knobs for m in mics),
        *(Event("seat", room.sits_at[p], at_s, spec.seconds) for at_s, p in spec.seat_changes),
        *(Event("lean", room.sits_at[p], a, b) for a, b, p in spec.leans),
        *(Event("mute", m, a, b) for m, a, b in spec.mutes),
    ]


def _names(spec: ConversationSpec, room: Room) -> tuple[str, ...]:
    return tuple(f"seat {m + 1}" if m in room.sits_at else f"spare {m + 1}" for m in range(_mic_count(spec)))


def _mic_count(spec: ConversationSpec) -> int:
    return spec.people - spec.shared + spec.empty


def overlap_share(said: list[Sound]) -> float:
    """Share of speech during which somebody else speaks too."""
    spoken = [s for s in said if s.kind in SPEECH]
    return overlapped_frames(spoken) / max(sum(len(s.dry) for s in spoken), 1)
