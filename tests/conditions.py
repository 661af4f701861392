"""Recording conditions under which attribution is judged, and the helpers that run and score them.

Purpose: one list for the tests and for the accuracy table of the docs. `CONDITIONS` names what goes wrong in
recordings (a knob turned, lapels, a live room, a call that returns late), each as a few `ConversationSpec`s; `build`
makes the sound, `opened` the session, `judged` measures, attributes, plans and scores it.

Conventions: a template's seed and voices are replaced by those asked for, so the same condition can be run with
voices to work on (`sounds.DEV`) and with voices kept apart (`sounds.HELD_OUT`). 16 kHz except where the rate matters.
Levels in dB against the own voice at its microphone.

Method: noises at one microphone only (a pen on that stand) are added here, scaled by the level of the own voice, so
that the gain of the microphone plays no part. A person who joins late is two conversations of one room in a row.
"""

from __future__ import annotations

import dataclasses
import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import scoring
import sounds
from conversations import EVERYWHERE, Conversation, ConversationSpec, Event, Spans, simulate

from leveller.attribute import attribute
from leveller.measure import measure
from leveller.plan import PARTS, GainPlan, make_plan
from leveller.session import Session, open_session

FIXED_RANGE = {"expander.range_db": scoring.RANGE_DB}
OURS = "leveller"
REFERENCES: dict[str, Callable[[Conversation], np.ndarray]] = {
    "fixed gate": scoring.fixed_gate, "voice activity": scoring.voice_activity, "gain sharing": scoring.gain_sharing,
    "true segments": scoring.true_segments}
NOISE_KINDS = ("thump", "click", "keyboard", "paper")
VOICE_SETS = {"dev": sounds.DEV, "held-out": sounds.HELD_OUT}


@dataclass(frozen=True)
class Noise:
    """Noises at one microphone only (`mic`), or at all (None), so many a minute."""

    kind: str  # one of NOISE_KINDS
    mic: int | None
    per_min: float
    level_db: float = 0.0  # over the usual level of its kind


@dataclass(frozen=True)
class Condition:
    """Something that goes wrong, or not, and the conversations that show it."""

    name: str
    specs: tuple[ConversationSpec, ...]
    noises: tuple[Noise, ...] = ()
    late_joiner: bool = False  # the last person says nothing but in the last minute
    room_role: int | None = None  # this track's role is `room`; the last one
    hard: bool = False  # beyond what the numbers to reach are meant for


def _specs(*changes: dict[str, object], seconds: float = 75.0) -> tuple[ConversationSpec, ...]:
    """Templates at 16 kHz."""
    return tuple(ConversationSpec(**{"rate_hz": 16_000, "seconds": seconds, **c}) for c in changes)  # type: ignore[arg-type]


def _of(name: str, *changes: dict[str, object], seconds: float = 75.0, noises: tuple[Noise, ...] = (),
        late_joiner: bool = False, room_role: int | None = None, hard: bool = False) -> Condition:
    return Condition(name, _specs(*changes, seconds=seconds), noises, late_joiner, room_role, hard)


CONDITIONS: tuple[Condition, ...] = (
    _of("plain", {}),
    _of("knob, one track", {"knobs": ((35.0, 10.0, (0,)),)}, {"knobs": ((35.0, -10.0, (1,)),)}),
    _of("knob, several tracks", {"knobs": ((25.0, 10.0, (0,)), (50.0, -8.0, (1, 2)))}),
    _of("seat change", {"seat_changes": ((35.0, 0),)}),
    _of("leaning away", {"leans": ((20.0, 80.0, 0),)}, seconds=100),
    _of("lapels 0.3", {"room": "lapels", "rt60_s": 0.3}),
    _of("lapels 0.6", {"room": "lapels", "rt60_s": 0.6}),
    _of("lapels 0.4, five", {"room": "lapels", "rt60_s": 0.4, "people": 5}),
    _of("live room 0.6", {"rt60_s": 0.6}),
    _of("live room 0.8", {"rt60_s": 0.8}),
    _of("live room 1.0", {"rt60_s": 1.0}, hard=True),
    _of("far table 0.5", {"room": "far table", "rt60_s": 0.5}),
    _of("desk, close", {"room": "desk", "people": 2}),
    _of("very dry", {"rt60_s": 0.18}),
    _of("speaks 2 %", {"shares": (0.49, 0.49, 0.02)}, seconds=120),
    _of("joins for the last minute", {"laughs_per_min": 0.0, "coughs_per_min": 0.0}, seconds=60, late_joiner=True),
    _of("spare microphone", {"empty": 1}, {"empty": 2, "rt60_s": 0.6}),
    _of("two at one microphone", {"people": 4, "shared": 1}),
    _of("room microphone", {"empty": 1}, room_role=3),
    _of("heavy overlap", {"overlap_share": 0.4}, {"overlap_share": 0.35, "people": 5}),
    _of("short answers", {"short_answers_per_min": 20.0}),
    _of("thumps and clicks, all", {"thumps_per_min": 12.0, "clicks_per_min": 12.0}),
    _of("keyboard, all", {"keyboard": ((15.0, 25.0), (45.0, 55.0))}),
    _of("paper, all", {}, noises=(Noise("paper", None, 8.0),)),
    _of("thumps, one microphone", {}, noises=(Noise("thump", 0, 12.0),)),
    _of("clicks and keys, one microphone", {}, noises=(Noise("click", 1, 12.0), Noise("keyboard", 0, 3.0))),
    _of("paper, one microphone", {}, noises=(Noise("paper", 0, 8.0),)),
    _of("breaths, coughs, laughter", {"breath_share": 1.0, "laughs_per_min": 5.0, "coughs_per_min": 4.0}),
    _of("whispers", {"whisper_share": 0.3}),
    _of("one track", {"people": 1}),
    _of("two tracks", {"people": 2}),
    _of("five tracks", {"people": 5}),
    _of("eight tracks", {"people": 8, "room": "panel"}, {"people": 8}),
    _of("twelve tracks", {"people": 12, "room": "panel"}, seconds=100),
    _of("air conditioning", {"common_noise_db": -28.0}),
    _of("hum and rain", {"hum_db": -30.0}, {"rain_db": -28.0}),
    _of("fan starts", {"fan_from_s": 35.0, "fan_db": -30.0}),
    _of("muted call", {"mutes": ((0, 12.0, 30.0), (0, 50.0, 58.0))}),
    _of("call returns late", {"late_bleed_ms": ((0, 120.0),)}, {"late_bleed_ms": ((0, 400.0),)}),
    _of("slate and tone", {"slate_s": 8.0}),
    _of("noisy microphones", {"noise_db": -20.0}, {"noise_db": -16.0}),
    _of("one clock off, 2 ms", {"latency_ms": ((1, 2.0),)}),
    _of("one clock off, 50 ms", {"latency_ms": ((1, 50.0),)}),
    _of("one clock off, 300 ms", {"latency_ms": ((1, 300.0),)}, hard=True),
    _of("44.1 kHz", {"rate_hz": 44_100}),
    _of("8 kHz", {"rate_hz": 8_000}),
)


def named(pattern: str) -> list[Condition]:
    """The conditions whose name contains the words, all for an empty one."""
    found = [c for c in CONDITIONS if pattern.lower() in c.name.lower()]
    assert found, f"no condition's name contains {pattern!r}; known: {', '.join(c.name for c in CONDITIONS)}"
    return found


def build(condition: Condition, which: int, *, seed: int, voices: tuple[str, ...]) -> Conversation:
    """The sound of one of its conversations.

    Parameters
    ----------
    which : int
        which of `condition.specs`
    seed : int
        replaces the template's
    voices : tuple of str
        recordings to draw from
    """
    spec = dataclasses.replace(condition.specs[which], seed=seed, voices=voices)
    if condition.late_joiner:
        before = dataclasses.replace(spec, seconds=2 * spec.seconds, shares=(0.5,) * (spec.people - 1) + (-0.3,))
        conversation = joined(simulate(before), simulate(spec))
    else:
        conversation = simulate(spec)
    for k, noise in enumerate(condition.noises):
        conversation = with_noise(conversation, noise, np.random.default_rng([seed, 100 + k]))
    return with_headroom(conversation)


def opened(conversation: Conversation, folder: Path, *, room_role: int | None = None) -> Session:
    """Its session, written to `folder`; tracks keep the order of the microphones."""
    paths = conversation.write(folder)
    if room_role is None:
        return open_session(paths, assignments=FIXED_RANGE)
    lines = [f'[[track]]\nfile = "{p.name}"\nrole = "{"room" if m == room_role else "voice"}"\n'
             for m, p in enumerate(paths)]
    (folder / "session.toml").write_text("\n".join(lines), encoding="utf-8")
    return open_session([folder], assignments=FIXED_RANGE)


def with_headroom(conversation: Conversation) -> Conversation:
    """Halved until nothing would clip."""
    peak = float(np.abs(conversation.mics).max())
    if peak < 1:
        return conversation
    gain = np.float32(2.0 ** -(np.floor(np.log2(peak)) + 1))
    return dataclasses.replace(
        conversation, **{k: getattr(conversation, k) * gain for k in ("mics", "own", "bleed", "noise")})


def with_noise(conversation: Conversation, noise: Noise, rng: np.random.Generator) -> Conversation:
    """The same conversation with noises added to it, and their events."""
    assert noise.kind in NOISE_KINDS, f"{noise.kind!r} is none of {NOISE_KINDS}"
    rate_hz = conversation.rate_hz
    assert rate_hz == sounds.RATE_HZ, "noises are made at 16 kHz"
    mics = range(len(conversation.names)) if noise.mic is None else [noise.mic]
    truth = scoring.truth_of(conversation)
    level_db = scoring._mean_db(truth.own_db, truth.heard)
    added, events = np.zeros_like(conversation.noise), []
    count = round(noise.per_min * len(added) / rate_hz / 60)
    for at in np.sort(rng.integers(rate_hz, len(added) - 4 * rate_hz, count)):
        dry = _noise(noise.kind, rng) * 10 ** (noise.level_db / 20)
        for m in mics:
            added[at : at + len(dry), m] += np.float32(dry * 10 ** (level_db[m] / 20))
        mic = EVERYWHERE if noise.mic is None else noise.mic
        events.append(Event(noise.kind, mic, at / rate_hz, (at + len(dry)) / rate_hz))
    sum_of_noise = conversation.noise + added
    return dataclasses.replace(
        conversation, noise=sum_of_noise, mics=conversation.own + conversation.bleed + sum_of_noise,
        events=sorted([*conversation.events, *events], key=lambda e: e.from_s))


def paper(rng: np.random.Generator) -> np.ndarray:
    """A page turned: about a second of bright rustling, 14 dB under speech."""
    frames = int(rng.uniform(0.7, 1.4) * sounds.RATE_HZ)
    steps = rng.exponential(1.0, frames // 400 + 2)
    swell = np.interp(np.arange(frames), np.arange(len(steps)) * 400, steps) * np.hanning(frames)
    return sounds.at_level(sounds.band_noise(rng, frames, 1200, 7000) * swell, -14.0)


def keys(rng: np.random.Generator) -> np.ndarray:
    """Four seconds of typing."""
    out = np.zeros(4 * sounds.RATE_HZ)
    for at_s in np.arange(0.1, 3.7, 0.14) + rng.uniform(0, 0.08, len(np.arange(0.1, 3.7, 0.14))):
        dry, at = sounds.click(rng), int(at_s * sounds.RATE_HZ)
        out[at : at + len(dry)] += dry
    return out


def _noise(kind: str, rng: np.random.Generator) -> np.ndarray:
    makers: dict[str, Callable[[np.random.Generator], np.ndarray]] = {
        "thump": sounds.thump, "click": sounds.click, "keyboard": keys, "paper": paper}
    return makers[kind](rng)


def joined(first: Conversation, second: Conversation) -> Conversation:
    """One conversation after the other, in one room."""
    assert first.names == second.names
    assert first.rate_hz == second.rate_hz
    by_s = len(first.mics) / first.rate_hz

    def later(spans: list[Spans]) -> list[Spans]:
        return [[(a + by_s, b + by_s) for a, b in part] for part in spans]

    def added(name: str) -> list[Spans]:
        return [a + b for a, b in zip(getattr(first, name), later(getattr(second, name)), strict=True)]

    after = (dataclasses.replace(e, from_s=e.from_s + by_s, to_s=e.to_s + by_s) for e in second.events)
    events = [*first.events, *after]
    sound = {k: np.concatenate([getattr(first, k), getattr(second, k)]) for k in ("mics", "own", "bleed", "noise")}
    return dataclasses.replace(
        first, **sound, segments=added("segments"), breaths=added("breaths"), events=events)


def expander_cut_db(plan: GainPlan) -> np.ndarray:
    """The expander's share of a plan, as a cut at the middle of each hop, shape=(hops, tracks)."""
    part = PARTS.index("expander")
    middles = np.arange(plan.hops) + 0.5
    return np.stack(
        [-np.interp(middles, t.hop, t.parts_cdb[:, part] / 100) if len(t.hop) else np.zeros(plan.hops)
         for t in plan.tracks], axis=1)


@dataclass(frozen=True)
class Extra:
    """Figures of this module beside `scoring.Figures`."""

    laugh_lost_pct: float  # of laughs and coughs that can be heard, cut by more than 6 dB
    answer_lost_pct: float  # of short answers, the same
    noise_open_pct: float  # thumps, clicks, keys, paper while others speak: the microphone opened


def extra_figures(cut_db: np.ndarray, conversation: Conversation) -> Extra:
    """What happened to sounds that are no phrases."""
    truth = scoring.truth_of(conversation)
    cut_db = scoring._fitted(cut_db, truth.heard.shape)
    audible = (truth.own_db > scoring._mean_db(truth.own_db, truth.speaking) - 25) & (truth.own_db > truth.bleed_db - 6)
    lost: dict[str, list[np.ndarray]] = {"laugh": [], "cough": [], "short answer": []}
    noisy: list[bool] = []
    for e in conversation.events:
        span = slice(round(e.from_s * 100), round(e.to_s * 100))
        if e.kind in lost:
            lost[e.kind].append(cut_db[span, e.mic][audible[span, e.mic]] > 6)
        if e.kind in NOISE_KINDS:
            wide = slice(max(span.start - 10, 0), span.stop + 10)
            for m in range(cut_db.shape[1]) if e.mic < 0 else [e.mic]:
                if truth.only_bleed[wide, m].mean() > 0.6:
                    noisy.append(bool((cut_db[span, m] < 10).any()))
    return Extra(scoring._pct(_flat(lost["laugh"] + lost["cough"])), scoring._pct(_flat(lost["short answer"])),
                 scoring._pct(noisy))


def _flat(parts: list[np.ndarray]) -> np.ndarray:
    return np.concatenate(parts) if parts else np.zeros(0, bool)


def cut_of(session: Session) -> np.ndarray:
    """How far leveller's expander turns each microphone down, shape=(hops, tracks)."""
    measurements = measure(session)
    return expander_cut_db(make_plan(measurements, attribute(measurements, session), session))


def without_last(conversation: Conversation) -> Conversation:
    """Less its last microphone, at which nobody may sit: a `room` track is never expanded, so it is not judged."""
    assert not conversation.segments[-1]
    sound = {k: getattr(conversation, k)[:, :-1] for k in ("mics", "own", "bleed", "noise")}
    return dataclasses.replace(
        conversation, **sound, segments=conversation.segments[:-1], breaths=conversation.breaths[:-1],
        names=conversation.names[:-1])


def judged(condition: Condition, which: int, *, seed: int, voices: tuple[str, ...]) -> dict[str, dict[str, float]]:
    """All figures of one conversation: leveller's and those of the reference methods, by method."""
    conversation = build(condition, which, seed=seed, voices=voices)
    with tempfile.TemporaryDirectory() as folder:
        cut = cut_of(opened(conversation, Path(folder), room_role=condition.room_role))
    if condition.room_role is not None:
        conversation, cut = without_last(conversation), cut[:, :-1]
    cuts = {OURS: cut, **{name: method(conversation) for name, method in REFERENCES.items()}}
    return {name: dataclasses.asdict(scoring.figures(cut, conversation)) | dataclasses.asdict(
        extra_figures(cut, conversation)) for name, cut in cuts.items()}
