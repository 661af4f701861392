"""Where to listen: the doubtful places, ranked by how likely and how harmful a mistake there is.

A closed microphone that may have had its own voice costs a word; an open one that only hears the others costs a little
bleed: a second of the first weighs ten times a second of the second. How likely each is, hop by hop and track by track,
is for `doubt` to say.

Candidates are single doubts: the moments at which a lost word is likeliest, and half seconds of what may be open bleed.
The most doubtful is taken first, as a place of a second or more with half a second of lead-in, merged with what lies
next to it on its track, as long as all places together stay within `MOST_SHARE` of the session: a list that asks to
hear everything again helps nobody. What another track has in doubt within time that is asked for anyway costs nothing
more and is named, too. Where the editor has decided, nothing is in doubt any more.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from leveller.attribute import Activity
from leveller.doubt import BLEED_HOPS, WORD_HOPS, bleed_doubt, most_round, silent, word_doubt
from leveller.measure import Measurements
from leveller.plan import GainPlan
from leveller.plan.corrections import EXPANDER, decided_by_hand
from leveller.plan.stretches import flagged, stretches
from leveller.session import Session
from leveller.units import HOPS_PER_S, Bools

MOST_SHARE = 0.08  # of the session's time
WORD_HARM, BLEED_HARM = 10.0, 1.0  # of a second
LOST_HOPS = 20  # lost of a word, where one is (median 0.18 s, measured)
BLOCK_HOPS = 50  # a candidate of open bleed
BLOCK_WEIGHT = BLEED_HARM * BLOCK_HOPS / (WORD_HARM * LOST_HOPS)  # of half a second of bleed, against a lost word
LEAST_DOUBT = 0.01  # of a lost word for certain; below it nothing is worth a listen
LEAST_HOPS = 100
LEAD_IN_HOPS = 50
JOIN_HOPS = 50
MOSTLY = 0.5  # of a candidate, so that another microphone counts as muted
BRIGHT_DB = 3.0  # high bands over low ones: a voice under a voice fills the low ones
SETTLED_HOPS = 30  # a doubt looks that far; round what the editor decided nothing is asked again

Row = npt.NDArray[np.float32]


@dataclass(frozen=True)
class Place:
    """One place worth a listen."""

    from_s: float
    to_s: float
    track: str
    decided: str  # own | bleed | silence
    could_be: str
    reason: str
    doubt: float  # 0 .. 1, of a word lost for certain

    @property
    def sentence(self) -> str:
        """For the console."""
        return f"{self.track}: {self.decided}, could be {self.could_be}; {self.reason}"


@dataclass(frozen=True)
class Candidate:
    """One doubt, on one track."""

    doubt: float
    track: int
    first: int
    after: int
    lost: bool  # it may be a lost word; else open bleed


def places_to_hear(activity: Activity, plan: GainPlan, session: Session, m: Measurements) -> tuple[Place, ...]:
    """Places ranked by doubt, the most doubtful first; none where nothing is in doubt.

    Parameters
    ----------
    activity : Activity
        With the editor's decisions in it.
    """
    candidates: list[Candidate] = []
    for track, row in enumerate(session.tracks):
        if row.role == "voice":
            undecided = _undecided(activity, session, track)
            candidates += _candidates(activity, m, cut_of(plan, track), undecided, track)
    taken, asked = _taken(candidates, activity.own.shape)
    places = _places(taken, asked, activity, session, m)
    return tuple(sorted(places, key=lambda place: (-place.doubt, place.from_s, place.track)))


def cut_of(plan: GainPlan, track: int) -> Row:
    """How far the expander cuts one track, per hop, as a share of its deepest cut; nan where it never cuts."""
    gain = plan.tracks[track]
    cut_db = -np.interp(np.arange(plan.hops) + 0.5, gain.hop, gain.parts_cdb[:, EXPANDER] / 100)
    return np.asarray(cut_db / (cut_db.max(initial=0.0) or np.nan), np.float32)


def _undecided(activity: Activity, session: Session, track: int) -> Bools:
    """Hops near which the editor has decided nothing."""
    decided = decided_by_hand(session, track, len(activity.own))
    return ~flagged(stretches(decided) + np.array([-SETTLED_HOPS, SETTLED_HOPS]), len(decided))


def _candidates(activity: Activity, m: Measurements, cut: Row, open_to: Bools, track: int) -> Iterator[Candidate]:
    """What may be lost words, and what may be open bleed, on one track."""
    word = word_doubt(activity, cut, track) * open_to
    peaks = np.flatnonzero((word > LEAST_DOUBT) & (word == most_round(word, WORD_HOPS)))
    for peak in peaks.tolist():
        yield Candidate(float(word[peak]), track, max(0, peak - WORD_HOPS // 2),
                        min(len(word), peak + WORD_HOPS // 2 + 1), lost=True)
    bleed = bleed_doubt(activity, m, cut, track) * open_to * np.float32(BLOCK_WEIGHT)
    starts = np.arange(0, len(bleed), BLOCK_HOPS)
    means = np.add.reduceat(bleed, starts) / BLOCK_HOPS if len(bleed) else np.zeros(0, np.float32)
    for block in np.flatnonzero(means > LEAST_DOUBT).tolist():
        first = block * BLOCK_HOPS
        yield Candidate(float(means[block]), track, first, min(first + BLOCK_HOPS, len(bleed)), lost=False)


def _taken(candidates: list[Candidate], shape: tuple[int, int]) -> tuple[list[Candidate], Bools]:
    """The most doubtful candidates whose places fill at most `MOST_SHARE`, and what they ask for, (hops, tracks)."""
    asked, any_asked = np.zeros(shape, np.bool_), np.zeros(shape[0], np.bool_)
    left = int(MOST_SHARE * shape[0])
    taken = []
    for found in sorted(candidates, key=lambda c: (-c.doubt, c.first, c.track)):
        column = asked[:, found.track]
        first, after = _widened(found, column)
        new = np.count_nonzero(~any_asked[first:after])
        if new <= left:
            left -= int(new)
            column[first:after] = any_asked[first:after] = True
            taken.append(found)
    return taken, asked


def _widened(found: Candidate, asked: Bools) -> tuple[int, int]:
    """With its lead-in, a second long, and joined with what is asked for shortly before or after."""
    first = max(0, found.first - LEAD_IN_HOPS)
    after = min(len(asked), max(found.after, first + LEAST_HOPS))
    before = np.flatnonzero(asked[max(0, first - JOIN_HOPS) : first])
    behind = np.flatnonzero(asked[after : after + JOIN_HOPS])
    return (max(0, first - JOIN_HOPS) + int(before[-1]) if len(before) else first,
            after + int(behind[0]) if len(behind) else after)


def _places(taken: list[Candidate], asked: Bools, activity: Activity, session: Session, m: Measurements) -> list[Place]:
    """What is asked for on each track, stretch by stretch, each named after its greatest doubt."""
    out = []
    for track in range(asked.shape[1]):
        spans = stretches(asked[:, track])
        worst: dict[int, Candidate] = {}
        for found in (c for c in taken if c.track == track):  # the most doubtful first
            worst.setdefault(int(np.searchsorted(spans[:, 0], found.first, side="right")) - 1, found)
        for at, found in worst.items():
            out.append(_place(found, int(spans[at, 0]), int(spans[at, 1]), activity, session, m))
    return out


def _place(
    worst: Candidate, first: int, after: int, activity: Activity, session: Session, m: Measurements
) -> Place:
    """One stretch with its reason in words."""
    heard = "bleed" if activity.bleed[worst.first : worst.after, worst.track].any() else "silence"
    decided, could_be = (heard, "own") if worst.lost else ("own", "bleed")
    reason = (_why_lost if worst.lost else _why_bleed)(worst, activity, session, m)
    return Place(first / HOPS_PER_S, after / HOPS_PER_S, session.tracks[worst.track].name, decided, could_be, reason,
                 round(worst.doubt, 3))


def _why_lost(found: Candidate, activity: Activity, session: Session, _: Measurements) -> str:
    """Why a word may be lost, with the numbers that say so."""
    part = slice(found.first, found.after), found.track
    best_db = float(activity.standing_out_db[part].mean(dtype=np.float32))
    all_db = float(activity.own_to_bleed_db[part].mean())
    speaker, seconds = _speaker(found, activity, session), (found.after - found.first) / HOPS_PER_S
    what = f"a short answer may be under {speaker}'s voice" if speaker else "a word may be lost"
    return (f"{what}: for {seconds:.1f} s the strongest bands are at {round(best_db):+d} dB against bleed, "
            f"all at {round(all_db):+d} dB")


def _why_bleed(found: Candidate, activity: Activity, session: Session, m: Measurements) -> str:
    """Why an open microphone may hear only the others, with the numbers that say so."""
    part = slice(found.first, found.after), found.track
    speaker = _speaker(found, activity, session)
    muted = [name.name for k, name in enumerate(session.tracks)
             if k != found.track and silent(m, k)[part[0]].mean() > MOSTLY]
    if muted:
        return f"open while {muted[0]} is muted: whose voice this is cannot be told from what {muted[0]} records"
    bright_db = float(activity.bright_db[part].mean(dtype=np.float32))
    if bright_db > BRIGHT_DB:
        when = f" while {speaker} speaks" if speaker else ""
        return f"paper or keys? high bands stand out by {bright_db:.0f} dB more than low ones{when}"
    ratio_db = round(float(activity.own_to_bleed_db[part].max()))
    over = f"at most {ratio_db} dB over" if ratio_db >= 0 else f"at its loudest {-ratio_db} dB under"
    if not speaker:
        return f"open, but {over} what the others explain"
    return f"open while {speaker} speaks, {over} {speaker}'s bleed: it may be bleed alone"


def _speaker(found: Candidate, activity: Activity, session: Session) -> str:
    """Who else speaks, or speaks next; empty for nobody."""
    others = activity.own[max(0, found.first - BLEED_HOPS) : found.after + BLEED_HOPS].copy()
    others[:, found.track] = False
    return session.tracks[int(others.sum(axis=0).argmax())].name if others.any() else ""
