"""Who says what when: the conversation process of the simulator.

Purpose: a list of dry sounds with their start, speaker and kind, from which the microphones are computed.

Conventions: frames at 16 kHz; a *phrase* lasts from pause to pause, a *turn* is one to five phrases by one person.

Method: the next speaker is the one who lags most behind the share of talk asked for. A turn begins about 200 ms
after the last one ends (gaps of about 200 ms are the norm: S. C. Levinson, F. Torreira, Frontiers in Psychology
6:731, 2015), or before its end, as long as the overlapped share of speech is under what was asked for (10 to 15 %
of words in meetings is common). Short answers fall under another person's phrases. Breaths come before phrases that
have room for one.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import sounds
from sounds import RATE_HZ, Voice

SPEECH = ("phrase", "short answer", "whisper")


@dataclass(frozen=True)
class Sound:
    """One dry sound of one person."""

    kind: str  # phrase, short answer, whisper, breath, laugh, cough
    person: int
    at_frame: int
    dry: np.ndarray

    @property
    def end_frame(self) -> int:
        return self.at_frame + len(self.dry)


@dataclass(frozen=True)
class Habits:
    """How the people talk; see `conversations.ConversationSpec`."""

    shares: tuple[float, ...]
    overlap_share: float
    gap_s: float
    short_answers_per_min: float
    breath_share: float
    laughs_per_min: float
    coughs_per_min: float
    whisper_share: float
    spoken_answers: float = 0.0


class Talk:
    """The process: grows turn by turn until the time is full."""

    def __init__(self, voices: list[Voice], habits: Habits, rng: np.random.Generator, from_s: float, to_s: float):
        self.voices, self.habits, self.rng = voices, habits, rng
        self.now, self.until = int(from_s * RATE_HZ), int(to_s * RATE_HZ)
        self.sounds: list[Sound] = []
        self.said = np.zeros(len(voices))
        self.free = np.full(len(voices), self.now)
        self.queues: list[list[np.ndarray]] = [[] for _ in voices]
        self.last = -1

    def run(self) -> list[Sound]:
        """All sounds by their start."""
        while self._turn():
            pass
        self._scatter("laugh", self.habits.laughs_per_min)
        self._scatter("cough", self.habits.coughs_per_min)
        return sorted(self.sounds, key=lambda s: (s.at_frame, s.person))

    def _turn(self) -> bool:
        """One turn; False when the time is full."""
        person = self._next_speaker()
        most = int(np.clip(round(5 * self.habits.shares[person] * len(self.voices)), 1, 6))
        said = 0
        for _ in range(int(self.rng.integers(1, most + 1))):
            phrase = self._phrase(person)
            first = said == 0
            at = self._start(person, len(phrase)) if first else int(self.free[person] + self._pause())
            if at + len(phrase) > self.until or said > 8 * RATE_HZ:
                break
            self._say(person, at, phrase)
            said += len(phrase)
        self.last = person
        self.now = max(self.now, int(self.free.max()))
        return said > 0 and self.now < self.until - RATE_HZ

    def _pause(self) -> float:
        """Frames between two phrases of a turn; one in three is long enough for a breath."""
        return RATE_HZ * (self.rng.uniform(0.55, 0.75) if self.rng.random() < 0.33 else self.rng.uniform(0.12, 0.45))

    def _next_speaker(self) -> int:
        """Who lags most behind; the last speaker again only if far behind."""
        lag = np.array(self.habits.shares) - self.said / max(self.said.sum(), 1.0)
        lag = lag + self.rng.uniform(0, 0.05, len(lag)) * np.array(self.habits.shares)
        if self.last >= 0:
            lag[self.last] -= 0.2
        return int(np.argmax(lag))

    def _start(self, person: int, frames: int) -> int:
        """Where a turn begins: about 200 ms after the last, or early if the overlap lags behind what was asked for."""
        gap = max(0.04, self.rng.normal(self.habits.gap_s, 0.1)) * RATE_HZ
        spoken = [s for s in self.sounds if s.kind in SPEECH]
        if spoken and self.last not in (-1, person):
            owed = self.habits.overlap_share * self.said.sum() - overlapped_frames(spoken)
            before = next(s for s in reversed(spoken) if s.person == self.last and s.kind != "short answer")
            early = min(owed / 2, 0.6 * len(before.dry), 0.6 * frames, 1.6 * RATE_HZ)
            if early > 0.25 * RATE_HZ:
                gap = -early
        return max(int(self.now + gap), int(self.free[person] + 0.15 * RATE_HZ))

    def _phrase(self, person: int) -> np.ndarray:
        """The next of the person's phrases, in a new order each time round."""
        if not self.queues[person]:
            phrases = self.voices[person].phrases
            self.queues[person] = [phrases[i] for i in self.rng.permutation(len(phrases))]
        return self.queues[person].pop()

    def _say(self, person: int, at: int, phrase: np.ndarray) -> None:
        """A phrase, its breath if there is room, and perhaps somebody's short answer under it."""
        kind = "phrase"
        if self.rng.random() < self.habits.whisper_share:
            kind, phrase = "whisper", sounds.whisper(self.rng, phrase)
        if self.rng.random() < self.habits.breath_share:
            breath = sounds.breath(self.rng)
            from_frame = at - len(breath) - int(self.rng.uniform(0.03, 0.09) * RATE_HZ)
            if from_frame > self.free[person]:
                self.sounds.append(Sound("breath", person, from_frame, breath))
        self.sounds.append(Sound(kind, person, at, phrase * 10 ** (self.rng.normal(0, 1.2) / 20)))
        self.said[person] += len(phrase)
        self.free[person] = at + len(phrase)
        if self.rng.random() < self.habits.short_answers_per_min * len(phrase) / RATE_HZ / 60 and len(phrase) > RATE_HZ:
            self._answer(person, at, len(phrase))

    def _answer(self, person: int, at: int, frames: int) -> None:
        """Somebody else's "mm" in the middle of a phrase."""
        listeners = [p for p in range(len(self.voices)) if p != person and self.habits.shares[p] > 0]
        if not listeners:
            return
        who = int(self.rng.choice(listeners))
        if self.habits.spoken_answers and self.rng.random() < self.habits.spoken_answers:
            dry = sounds.spoken_answer(self.rng, self.voices[who].phrases)
        else:
            dry = sounds.short_answer(self.rng, self.voices[who].pitch_hz)
        start = at + int(self.rng.uniform(0.2, 0.6) * frames)
        if start > self.free[who] and start + len(dry) < at + frames:
            self.sounds.append(Sound("short answer", who, start, dry))
            self.free[who] = start + len(dry)

    def _scatter(self, kind: str, per_min: float) -> None:
        """Laughs and coughs where the person is not speaking."""
        first = min((s.at_frame for s in self.sounds), default=0)
        for _ in range(round(per_min * (self.until - first) / RATE_HZ / 60)):
            for _ in range(30):
                person = int(self.rng.integers(len(self.voices)))
                pitch_hz = self.voices[person].pitch_hz
                dry = sounds.cough(self.rng) if kind == "cough" else sounds.laugh(self.rng, pitch_hz)
                at = int(self.rng.integers(first, max(self.until - len(dry), first + 1)))
                margin = RATE_HZ // 10
                if not any(s.person == person and s.at_frame < at + len(dry) + margin and s.end_frame > at - margin
                           for s in self.sounds):
                    self.sounds.append(Sound(kind, person, at, dry))
                    break


def overlapped_frames(spoken: list[Sound]) -> int:
    """Frames of speech, summed over people, during which somebody else speaks too."""
    edges = sorted([(s.at_frame, 1) for s in spoken] + [(s.end_frame, -1) for s in spoken])
    total, talking, before = 0, 0, 0
    for frame, step in edges:
        if talking > 1:
            total += talking * (frame - before)
        talking, before = talking + step, frame
    return total
