"""How far `sure`, the listen list, the cleaner voices and the sum can be believed, over `conditions.py`.

Purpose: the second command behind docs/accuracy.md. `python tests/reliability.py` prints, over the conditions, how
often a `sure` of so much is right, how much of what went wrong the listen list names, by how much each voice stands
out more clearly at its own microphone (SI-SDR), and how deep a comb filter the sum of the microphones has.

Conventions: truth, lost words and open bleed as in `scoring`; fixed range of 18 dB; hops whose truth is ambiguous
(neither own speech that counts nor bleed that counts) are left out. Seeds from 201 on and voices kept apart. A lost
word is a run of 100 ms or longer; the strict count of lost runs begins at 30 ms. Wrong time is told as it is, and with
a collar of 0.25 s round every true edge left out.

Method: the expander's cut alone is applied to the microphones, for leveller and for three reference methods. A random
list of the same length is the same list moved by a seeded time, round the end of the session. Comb ripple is that of
two paths, and counts where one person alone speaks: own microphone and the loudest other one, levels matched.

References: SI-SDR: fast-bss-eval. Ripple of two paths of amplitude 1 and a, 20 log10((1 + a) / (1 - a)): from memory.
"""

from __future__ import annotations

import sys
import tempfile
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import fast_bss_eval.numpy
import numpy as np

sys.path[:0] = [str(Path(__file__).parent), str(Path(__file__).parents[1])]  # also without an installed package

import scoring  # noqa: E402 - the path comes first
from conditions import (  # noqa: E402
    CONDITIONS,
    OURS,
    REFERENCES,
    Condition,
    build,
    expander_cut_db,
    opened,
    without_last,
)
from conversations import Conversation  # noqa: E402
from sweep import Job, sweep, table  # noqa: E402

from leveller.attribute import attribute  # noqa: E402
from leveller.attribute.decode import sure_of  # noqa: E402
from leveller.listen import Place, places_to_hear  # noqa: E402
from leveller.measure import measure  # noqa: E402
from leveller.plan import make_plan  # noqa: E402

FIRST_SEED = 201  # seeds from here on; neither development nor the accuracy table looked at them
BINS = (0.5, 0.8, 0.9, 0.95, 0.99, 1.0)  # of `sure`
BIN_NAMES = ("0.5 to 0.8", "0.8 to 0.9", "0.9 to 0.95", "0.95 to 0.99", "over 0.99")
LOST_DB, OPEN_DB = 6.0, 10.0  # as in scoring.Figures
WORD_HOPS = 10  # own speech lost for less is no word: the shortest syllables take 0.1 s (from memory)
SLIVER_HOPS = 3  # the strict count takes every lost run of this length, be it the edge of a word
COLLAR_HOPS = 25  # either side of a true edge; NIST Rich Transcription evaluations do not score 0.25 s (from memory)
DRAWS = 50  # of a random list
MOST_RATIO = 0.99  # of two paths: 46 dB of ripple; beyond it a number says nothing
METHODS = {OURS: None, **{name: REFERENCES[name] for name in ("fixed gate", "gain sharing", "true segments")}}


@dataclass(frozen=True)
class Share:
    """How much of something a listen list names: all of it, what lies in a place, and in places moved at random."""

    all: int
    named: int
    random: float  # mean of `DRAWS`

    def __add__(self, other: Share) -> Share:
        return Share(self.all + other.all, self.named + other.named, self.random + other.random)


@dataclass(frozen=True)
class Listened:
    """What a listen list names of what went wrong."""

    words: Share  # of `WORD_HOPS` or more
    slivers: Share  # every lost run of `SLIVER_HOPS` or more, words too
    collared_hops: Share  # wrong time further than `COLLAR_HOPS` from every true edge
    wrong_hops: Share
    asked_hops: int  # of the session, whichever track
    hops: int


@dataclass(frozen=True)
class Comb:
    """Ripple of the sum while one person alone speaks, in dB; nan where there is none or one microphone only."""

    before_db: float  # all microphones open, median
    after_db: float  # with the expander's cuts, median
    two_open_pct: float  # of that time: a second microphone cut by less than 10 dB
    before_there_db: float  # median over that time, all open
    after_there_db: float  # median over that time, with the cuts


@dataclass(frozen=True)
class Found:
    """Everything about one session."""

    called: np.ndarray  # (2, bins) hops by decision (not own, own) and `sure`
    right: np.ndarray  # (2, bins) of them
    listened: Listened
    better_db: dict[str, float]  # SI-SDR, by method, mean over microphones
    si_sdr_db: float  # before
    comb: Comb


def found_in(condition: Condition, which: int, *, seed: int, voices: tuple[str, ...]) -> Found:
    """Measure, attribute, plan, list, and compare with the truth."""
    conversation = build(condition, which, seed=seed, voices=voices)
    with tempfile.TemporaryDirectory() as folder:
        session = opened(conversation, Path(folder), room_role=condition.room_role)
        measurements = measure(session)
    activity = attribute(measurements, session)
    plan = make_plan(measurements, activity, session)
    places = places_to_hear(activity, plan, session, measurements)
    tracks = [track.name for track in session.tracks]
    if condition.room_role is not None:
        conversation = without_last(conversation)
    mics = len(conversation.names)
    truth = scoring.truth_of(conversation)
    cut_db, own, margin = (scoring._fitted(grid[:, :mics], truth.heard.shape)
                           for grid in (expander_cut_db(plan), activity.own, activity.margin))
    cuts = {name: cut_db if method is None else method(conversation) for name, method in METHODS.items()}
    before_db = si_sdr_db(conversation, np.zeros_like(cut_db))
    better_db = {name: float(np.mean(si_sdr_db(conversation, cut) - before_db)) for name, cut in cuts.items()}
    return Found(*reliability(own, sure_of(margin), truth), listened(cut_db, places, tracks[:mics], truth),
                 better_db, float(before_db.mean()), comb(cut_db, truth))


def reliability(own: np.ndarray, sure: np.ndarray, truth: scoring.Truth) -> tuple[np.ndarray, np.ndarray]:
    """Hops per decision and bin of `sure`, and how many of them are right, each of shape (2, bins)."""
    clear = truth.heard | truth.only_bleed
    bins = np.clip(np.searchsorted(BINS, sure, side="right") - 1, 0, len(BIN_NAMES) - 1)
    called, right = (np.zeros((2, len(BIN_NAMES)), np.int64) for _ in range(2))
    np.add.at(called, (own[clear].astype(int), bins[clear]), 1)
    good = clear & (own == truth.heard)
    np.add.at(right, (own[good].astype(int), bins[good]), 1)
    return called, right


def listened(
    cut_db: np.ndarray, places: Sequence[Place], tracks: Sequence[str], truth: scoring.Truth, *, seed: int = 1
) -> Listened:
    """How much of what went wrong lies in a place on its own track; a word counts as named where its middle is."""
    asked = np.zeros(cut_db.shape, bool)
    for place in places:
        if place.track in tracks:
            asked[round(place.from_s * 100) : round(place.to_s * 100), tracks.index(place.track)] = True
    shifts = np.random.default_rng(seed).integers(1, len(asked), DRAWS)
    moved = [np.roll(asked, shift, axis=0) for shift in shifts]

    def share(at: tuple[np.ndarray, ...]) -> Share:
        return Share(len(at[0]), int(asked[at].sum()), float(np.mean([grid[at].sum() for grid in moved])))

    lost = truth.heard & (cut_db > LOST_DB)
    wrong = lost | (truth.only_bleed & (cut_db < OPEN_DB))
    return Listened(
        words=share(middles(lost, WORD_HOPS)), slivers=share(middles(lost, SLIVER_HOPS)),
        collared_hops=share(np.nonzero(wrong & ~collar(truth.speaking)[:, None])), wrong_hops=share(np.nonzero(wrong)),
        asked_hops=int(asked.any(axis=1).sum()), hops=len(asked))


def collar(speaking: np.ndarray) -> np.ndarray:
    """Hops near a true edge, of whomever, shape (hops,)."""
    edges = np.diff(speaking.astype(np.int8), axis=0, prepend=0).any(axis=1)
    return scoring._widened(edges, COLLAR_HOPS, COLLAR_HOPS - 1)


def middles(lost: np.ndarray, hops: int) -> tuple[np.ndarray, np.ndarray]:
    """Hop and microphone in the middle of each lost run of so many hops or more."""
    found = np.array(runs(lost, hops), np.int64).reshape(-1, 3)
    return (found[:, 1] + found[:, 2]) // 2, found[:, 0]


def runs(lost: np.ndarray, hops: int) -> list[tuple[int, int, int]]:
    """Microphone, first hop and the one after the last of each run of so many hops or more."""
    out = []
    for mic, column in enumerate(lost.T):
        edges = np.flatnonzero(np.diff(np.concatenate([[0], column.astype(np.int8), [0]])))
        out += [(mic, int(a), int(b)) for a, b in edges.reshape(-1, 2) if b - a >= hops]
    return out


def si_sdr_db(conversation: Conversation, cut_db: np.ndarray) -> np.ndarray:
    """SI-SDR of the own voice at each microphone that has one, after the cut, in dB."""
    hop = conversation.rate_hz // 100
    middles = (np.arange(len(cut_db)) + 0.5) * hop
    frames = np.arange(len(conversation.mics))
    values = []
    for own, mic, cut in zip(conversation.own.T, conversation.mics.T, cut_db.T, strict=True):
        if own.any():
            heard = mic * 10 ** (-np.interp(frames, middles, cut) / 20)
            values.append(fast_bss_eval.numpy.si_sdr(own[None].astype(np.float64), heard[None]).item())
    return np.array(values)


def comb(cut_db: np.ndarray, truth: scoring.Truth) -> Comb:
    """Ripple before and after the cuts, where one person alone speaks."""
    alone = np.flatnonzero((truth.speaking.sum(axis=1) == 1) & truth.heard.any(axis=1))
    if not len(alone) or cut_db.shape[1] < 2:
        return Comb(*[float("nan")] * 5)
    voice_db = scoring._mean_db(truth.own_db, truth.heard)
    matched_db = np.where(np.isfinite(voice_db), voice_db, np.mean(voice_db[np.isfinite(voice_db)]))
    speaker, rows = truth.heard[alone].argmax(axis=1), np.arange(len(alone))
    own_db = (truth.own_db[alone] - matched_db)[rows, speaker]
    other_db = truth.bleed_db[alone] - matched_db
    other_db[rows, speaker] = -np.inf  # of silence, too
    cuts = cut_db[alone]
    before = ripple_db(other_db.max(axis=1) - own_db)
    after = ripple_db((other_db - cuts).max(axis=1) - (own_db - cuts[rows, speaker]))
    second = cuts < OPEN_DB
    second[rows, speaker] = False
    two = second.any(axis=1)
    there = (float(np.median(x[two])) if two.any() else float("nan") for x in (before, after))
    return Comb(float(np.median(before)), float(np.median(after)), 100 * float(two.mean()), *there)


def ripple_db(ratio_db: np.ndarray) -> np.ndarray:
    """Highest less lowest gain of two paths, the second so much under or over the first."""
    a = np.minimum(10 ** (-np.abs(ratio_db) / 20), MOST_RATIO)
    return 20 * np.log10((1 + a) / (1 - a))


def by_condition(found: list[tuple[Job, Found]]) -> Iterator[tuple[str, list[Found]]]:
    """Sessions of each condition, then all."""
    for i, condition in enumerate(CONDITIONS):
        part = [f for job, f in found if job.condition == i]
        if part:
            yield condition.name, part
    yield "all", [f for _, f in found]


def share(part: float, whole: float) -> str:
    """A percentage; a dash of nothing."""
    return f"{100 * part / whole:.1f}" if whole else "-"


def reliability_rows(found: list[Found]) -> list[list[str]]:
    """Per bin of `sure`."""
    called, right = (sum(getattr(f, name) for f in found) for name in ("called", "right"))
    return [[name, *(cell for n, r in ((called[1][b], right[1][b]), (called[0][b], right[0][b]),
                                       (called[:, b].sum(), right[:, b].sum())) for cell in (str(n), share(r, n)))]
            for b, name in enumerate(BIN_NAMES)]


def listen_row(name: str, part: list[Found]) -> list[str]:
    """Of one condition's listen lists."""
    row = [name]
    for key, per in (("words", 1), ("slivers", 1), ("wrong_hops", 100), ("collared_hops", 100)):
        total = sum((getattr(f.listened, key) for f in part), Share(0, 0, 0.0))
        row += [f"{total.all / per:.{1 if per > 1 else 0}f}", share(total.named, total.all),
                share(total.random, total.all)]
    return [*row, share(sum(f.listened.asked_hops for f in part), sum(f.listened.hops for f in part))]


def sound_row(name: str, part: list[Found]) -> list[str]:
    """SI-SDR and ripple of one condition, means of sessions."""
    gains = [np.mean([f.better_db[method] for f in part]) for method in METHODS]
    ripples = np.array([[getattr(f.comb, key) for key in Comb.__dataclass_fields__] for f in part])
    there = [float(np.mean(c[np.isfinite(c)])) if np.isfinite(c).any() else float("nan") for c in ripples.T]
    return [name, f"{np.mean([f.si_sdr_db for f in part]):.1f}", *(f"{g:+.1f}" for g in gains),
            *("-" if np.isnan(value) else f"{value:.1f}" for value in there)]


def report(found: list[tuple[Job, Found]]) -> str:
    """All tables."""
    rows = list(by_condition(found))
    own = "called own, hops", "right %", "called not own, hops", "right %", "both, hops", "right %"
    return "\n".join([
        *table(("sure", *own), reliability_rows(rows[-1][1])), "",
        *table(("listen list", *(cell for what in ("lost words", "lost runs", "wrong s", "collared s")
                                 for cell in (what, "named %", "random %")), "asked %"),
               [listen_row(*row) for row in rows]), "",
        *table(("sound", "SI-SDR before dB", *(f"{m} dB" for m in METHODS), "ripple before dB", "ripple after dB",
                "two open %", "there before dB", "there after dB"), [sound_row(*row) for row in rows])]) + "\n"


if __name__ == "__main__":
    sweep(__doc__ or "", found_in, report, first_seed=FIRST_SEED)
