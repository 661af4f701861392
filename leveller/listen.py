"""Where to listen: the doubtful places, ranked by how likely and how harmful a mistake there is.

A closed microphone that may have had its own voice costs a word; an open one that only hears the others costs a little
bleed: the first weighs ten times the second. Likelihood is that of the decoder's margin, and both count only as far as
the hop is audible. The doubt of a moment is the mean over half a second; stretches over a threshold become places of a
second or more with half a second of lead-in, on one track each. The threshold is the lowest with which all places
together stay within `MOST_SHARE` of the session: a list that asks to hear everything again helps nobody.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from leveller.attribute import Activity
from leveller.plan import GainPlan
from leveller.plan.stretches import flagged, stretches, without_short_gaps
from leveller.session import Session
from leveller.units import HOPS_PER_S, Bools

MOST_SHARE = 0.08  # of the session's time
WORD_HARM, BLEED_HARM = 10.0, 1.0
LEAST_DOUBT = 0.003  # of a lost word for certain; below it nothing is worth a listen
CLOSED_DB = 6.0  # a cut that loses a word
FULLY_AUDIBLE_DB = 20.0
WINDOW_HOPS = 51
LEAST_HOPS = 100
LEAD_IN_HOPS = 50
JOIN_HOPS = 100
SEARCHES = 24

Grid = npt.NDArray[np.float32]


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


def places_to_hear(activity: Activity, plan: GainPlan, session: Session) -> tuple[Place, ...]:
    """Places ranked by doubt, the most doubtful first; none where nothing is in doubt."""
    doubt = _averaged(doubt_of(activity, cuts_db(plan)))
    spans = _spans_within(doubt, MOST_SHARE)
    found = [_place(activity, session, doubt, track, first, after)
             for track, own in enumerate(spans) for first, after in own]
    return tuple(sorted(found, key=lambda place: (-place.doubt, place.from_s, place.track)))


def cuts_db(plan: GainPlan) -> Grid:
    """How deep the expander cuts, per hop and track, in dB, positive."""
    columns = []
    for gain in plan.tracks:
        at = np.arange(plan.hops) + 0.5
        columns.append(-np.interp(at, gain.hop, gain.parts_cdb[:, 1] / 100))
    return np.asarray(np.stack(columns, axis=1), np.float32)


def doubt_of(activity: Activity, cut_db: Grid) -> Grid:
    """Likelihood times harm of a mistake, per hop and track, 1 = a word lost for certain."""
    margin, own = activity.margin, activity.own
    wrong = 1 / (1 + np.exp(np.abs(margin)))
    others = (own.sum(axis=1, keepdims=True) - own) > 0
    audible = np.clip(activity.audible_db / FULLY_AUDIBLE_DB, 0, 1) ** 2
    closed = cut_db > CLOSED_DB
    word = wrong * (closed & ~own & others)
    bleed = ~closed * np.where(own, wrong, np.where(others, 1 - wrong, 0))
    weighed = (word + bleed * (BLEED_HARM / WORD_HARM)) * audible * activity.programme[:, None]
    return np.asarray(weighed, np.float32)


def _averaged(doubt: Grid) -> Grid:
    """Mean over half a second round each hop."""
    half = WINDOW_HOPS // 2
    total = np.cumsum(np.pad(doubt, ((half + 1, half), (0, 0))), axis=0, dtype=np.float64)
    return np.asarray((total[WINDOW_HOPS:] - total[:-WINDOW_HOPS]) / WINDOW_HOPS, np.float32)


def _spans_within(doubt: Grid, share: float) -> list[list[tuple[int, int]]]:
    """Places per track over the lowest threshold with which they fill at most this share of the time."""
    low, high = LEAST_DOUBT, float(doubt.max(initial=0.0)) + 1e-6
    best: list[list[tuple[int, int]]] = [[] for _ in range(doubt.shape[1])]
    if high <= low:
        return best
    for search in range(SEARCHES):
        threshold = low if search == 0 else (low + high) / 2
        spans = [_widened(doubt[:, track] > threshold) for track in range(doubt.shape[1])]
        asked = np.logical_or.reduce([flagged(np.array(s, np.int64).reshape(-1, 2), len(doubt)) for s in spans])
        if asked.mean() > share:
            low = threshold
        else:
            best, high = spans, threshold
            if search == 0:
                break
    return best


def _widened(flags: Bools) -> list[tuple[int, int]]:
    """Stretches joined, at least a second long, with their lead-in."""
    hops = len(flags)
    out = []
    for first, after in stretches(without_short_gaps(flags, JOIN_HOPS)).tolist():
        more = max(0, LEAST_HOPS - (after - first))
        out.append((max(0, first - more // 2 - LEAD_IN_HOPS), min(hops, after + more - more // 2)))
    return out


def _place(activity: Activity, session: Session, doubt: Grid, track: int, first: int, after: int) -> Place:
    """One stretch with its reason in words."""
    part = slice(min(first + LEAD_IN_HOPS, after - 1), after)
    own = activity.own[part, track]
    bleed = activity.bleed[part, track]
    most = int(np.argmax(doubt[part, track]))
    decided = "own" if own[most] else "bleed" if bleed[most] else "silence"
    return Place(first / HOPS_PER_S, after / HOPS_PER_S, session.tracks[track].name, decided,
                 "bleed" if decided == "own" else "own", _reason(activity, session, track, part, decided),
                 round(float(doubt[part, track].max()), 3))


def _reason(activity: Activity, session: Session, track: int, part: slice, decided: str) -> str:
    """Why it is doubtful, with the numbers that say so."""
    names = [t.name for t in session.tracks]
    others = activity.own[part].copy()
    others[:, track] = False
    speaker = names[int(others.sum(axis=0).argmax())] if others.any() else None
    doubtful = np.abs(activity.margin[part, track]) < 4.5  # below what the decoder gives where all agrees
    seconds = max(0.1, np.count_nonzero(doubtful) / HOPS_PER_S)
    same = activity.own[part, track] == (decided == "own")
    ratio = float(np.quantile(activity.own_to_bleed_db[part, track][same], 0.9))
    if decided == "own":
        heard = f"while {speaker} speaks" if speaker else "while nobody else speaks"
        return f"own voice only {ratio:.0f} dB over what the others explain for {seconds:.1f} s, {heard}"
    if speaker is None:
        return f"something sounds for {seconds:.1f} s that nobody else explains; too weak for a voice"
    if ratio > 1:
        return f"up to {ratio:.0f} dB more than {speaker}'s bleed for {seconds:.1f} s: a short answer may be under it"
    return f"own voice and {speaker}'s bleed within 2 dB for {seconds:.1f} s"
