"""Warnings of tracks that do not line up, from what is measured anyway, where nobody has asked to line them up.

A full comparison (`align.find_alignment`) reads parts of the files again, so it is left to tracks under suspicion. A
pair of microphones behaves where each voice comes first at its own one, by a way that a room explains, and no later at
the end of the session than at its beginning. Tracks that a chain of such pairs joins to the reference line up; the
others are suspects. Those that are only upside down are told from the signs of the same arrivals.

Conventions: levels in dB over each microphone's own loud speech; lags in `LAG_S`, positive where the first of a pair
hears later.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.align import LEAST_S, LEFT, find_alignment, reference_of, said_of, turned_tracks
from leveller.audio import parts_of
from leveller.measure import Measurements
from leveller.measure.arrival import LAG_S
from leveller.measure.levels import level_to_db
from leveller.measure.polarity import agreement, heights_of, signs_of
from leveller.session import Session
from leveller.units import Floats

CORRECTS = "--align corrects it"  # how a warning ends, or goes on
SURE_OF_SIGN = 0.9  # of what a track has in common with others, its sign must explain so much
LOUD_PERCENTILE = 95  # of a microphone's levels: its own loud speech
LOUD_DB = 15.0  # arrivals softer than so much under it do not count
PERCENTILE_HOPS = 20_000  # of as many at least, where there are so many, the percentile is taken
STEADY_LAGS = 4  # arrivals this near to the commonest lag agree with it
STEADY_SHARE = 0.15  # chance is 0.05
STEADY_S = 0.0015  # what the commonest lag may move from the first half to the second
LEAST_ARRIVALS = 40  # of one voice
AHEAD_DB = 6.0  # over the other one: the voice is its own

Lags = npt.NDArray[np.int16]


def alignment_notes(session: Session, m: Measurements, *, polarity: bool = True) -> tuple[str, ...]:
    """Sentences for a run without correction: tracks that do not line up, and those that are only upside down.

    Costs next to nothing where the arrivals behave: where the voice of each track comes first there and stays so.
    """
    suspects = _suspects(session, m)
    found = find_alignment(session, m, suspects=suspects) if suspects else ()
    turned = turned_tracks(found)
    notes = tuple(f"{line}. {CORRECTS}" for a in found if a.offset_s is not None
                  for line in said_of(a, session, a.track in turned, done=False))
    return notes + (_polarity_notes(session, m, known=turned) if polarity else ())


def warns_of_alignment(note: str) -> bool:
    """Whether a session's note tells of a track that does not line up with the others now."""
    return f". {CORRECTS}" in note or note.endswith(LEFT)


def _polarity_notes(session: Session, m: Measurements, *, known: set[str]) -> tuple[str, ...]:
    """Sentences on tracks that are upside down, but those that have one already; from what is measured anyway."""
    heights = heights_of(m.arrivals, m.levels.shape[1])
    beds = [i for i, track in enumerate(session.tracks) if track.role == "bed"]
    heights[beds], heights[:, beds] = 0, 0
    if not (heights < 0).any():
        return ()
    reference = reference_of(session, [i for i in range(len(session.tracks)) if i not in beds])
    signs = signs_of(heights, reference=reference)
    notes = []
    for i, track in enumerate(session.tracks):
        if signs[i] != -1 or track.name in known or agreement(heights, signs, i) < SURE_OF_SIGN:
            continue
        other = session.tracks[int(heights[i].argmin())].name
        notes.append(f"{track.name}: upside down against {other} (correlation {heights[i].min():.2f}), so their sum "
                     f"partly cancels. {CORRECTS}, or polarity = {-track.polarity} for it in session.toml")
    return tuple(notes)


def _suspects(session: Session, m: Measurements) -> list[int]:
    """Tracks that no chain of well-behaved pairs, or of files, joins to the reference."""
    tracks = [i for i, track in enumerate(session.tracks) if track.role != "bed"]
    if len(tracks) < 2:
        return []
    joined, grown = {reference_of(session, tracks)}, True
    edges = [pair for p, pair in enumerate(m.arrivals.pairs) if _behaves(m, p)]
    files = {i: parts_of(session.tracks[i]) for i in tracks}
    edges += [(i, k) for i in tracks for k in tracks if i < k and files[i] == files[k]]
    while grown:
        more = {j for pair in edges if joined & set(pair) for j in pair}
        grown = not more <= joined
        joined |= more
    return [i for i in tracks if i not in joined]


def _behaves(m: Measurements, pair: int) -> bool:
    """Whether the voice of either track comes first there, by like ways, early and late in the session."""
    arrivals = m.arrivals
    hop = np.minimum(arrivals.hop, m.hops - 1)
    first_db, second_db = (_over_loud_speech_db(m, track)[hop] for track in arrivals.pairs[pair])
    loud, ahead_db = np.maximum(first_db, second_db) > -LOUD_DB, first_db - second_db
    of_first, of_second = (_steady_lag(arrivals.lag[loud & own, pair])
                           for own in (ahead_db > AHEAD_DB, ahead_db < -AHEAD_DB))
    if of_first is None or of_second is None:
        return False
    return abs(of_first + of_second) / 2 * LAG_S < LEAST_S and of_first < of_second


def _over_loud_speech_db(m: Measurements, track: int) -> Floats:
    """A track's levels over its own loud speech, shape=(hops,)."""
    level_db = level_to_db(m.voice_levels[:, track])
    thinned = level_db[:: max(1, len(level_db) // PERCENTILE_HOPS)]
    return np.asarray(level_db - np.percentile(thinned, LOUD_PERCENTILE))


def _steady_lag(lag: Lags) -> int | None:
    """The lag round which the most lie; None of few arrivals, where they lie anywhere, or where it moves."""
    if len(lag) < LEAST_ARRIVALS:
        return None
    whole, early, late = (_commonest(part) for part in (lag, *np.array_split(lag, 2)))
    return whole if early is not None and late is not None and abs(early - late) * LAG_S <= STEADY_S else None


def _commonest(lag: Lags) -> int | None:
    """The lag round which the most lie; None where they lie anywhere."""
    low = int(lag.min(initial=0))
    counts = np.convolve(np.bincount(lag - low), np.ones(2 * STEADY_LAGS + 1), "same")
    at = int(counts.argmax())
    return at + low if counts[at] >= STEADY_SHARE * len(lag) else None
