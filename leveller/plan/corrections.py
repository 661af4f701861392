"""The editor's word: stretches in which the decision or the gain is overruled, and nothing else changes.

`decide = own` opens the microphone with the look-ahead, hold and ramps of the expander's settings, as if the voice had
been found there. `bleed` and `silence` close it, by the whole range; voice of the same microphone that is left beside
the stretch keeps its look-ahead and hold. (Both close, since whoever overrules a voice wants it gone; they differ in
what the tables say.) `gain_db` is added to the automatic trim, with ramps of 50 ms outside the stretch. Of two
corrections of one stretch the later counts.

Levels, trims, ride, compressor and all other microphones stay as they were decided without the corrections, and so do
the rows of the automation outside the reach of a correction: `spliced` keeps them one for one.
"""

from __future__ import annotations

import dataclasses
import itertools
from collections.abc import Iterator, Sequence

import numpy as np
import numpy.typing as npt

from leveller import settings as settings_
from leveller.attribute import Activity
from leveller.errors import SettingsError
from leveller.plan.expander import opened
from leveller.plan.stretches import flagged, stretches
from leveller.plan.thinning import kept_rows
from leveller.session import Correction, Session
from leveller.units import HOPS_PER_S, Bools, seconds_to_hops

TRIM, EXPANDER = 0, 1  # places in `plan.PARTS`
OFFSET_RAMP_HOPS = 5
CERTAIN_NATS = 40.0  # the margin of a decision that the editor has made; its exponential still fits float32

Nodes = npt.NDArray[np.float32]


def check_corrections(session: Session) -> None:
    """Refuse a decision about a track that nobody speaks into by its role; raises SettingsError."""
    roles = {track.name: track.role for track in session.tracks}
    for correction in session.corrections:
        if correction.decide is not None and roles[correction.track] != "voice":
            where = f"{correction.where}: " if correction.where else ""
            raise SettingsError(f"{where}correction of {correction.track} at {correction.from_s:g} s: decide = "
                                f"{correction.decide}, but its role is {roles[correction.track]}. Use gain_db there")


def overruled(activity: Activity, session: Session) -> Activity:
    """The activity with the editor's decisions in it, as certain; the same object where there are none."""
    decided = [c for c in session.corrections if c.decide is not None]
    if not decided:
        return activity
    own, bleed, margin = activity.own.copy(), activity.bleed.copy(), activity.margin.copy()
    for correction in decided:
        place = _hops_of(correction), _index(correction, session)
        own[place] = correction.decide == "own"
        bleed[place] = correction.decide == "bleed"
        margin[place] = CERTAIN_NATS if correction.decide == "own" else -CERTAIN_NATS
    return dataclasses.replace(activity, own=own, bleed=bleed, margin=margin)


def closed_by_hand(session: Session, track: int, hops: int) -> Bools:
    """Hops that the editor has decided to be bleed or silence, shape=(hops,)."""
    out = np.zeros(hops, np.bool_)
    for place, word in _decisions(session, track):
        out[place] = word != "own"
    return out


def decided_by_hand(session: Session, track: int, hops: int) -> Bools:
    """Hops that the editor has decided, whichever way, shape=(hops,)."""
    out = np.zeros(hops, np.bool_)
    for place, _ in _decisions(session, track):
        out[place] = True
    return out


def corrected_curve(
    parts_db: Nodes, track: int, own: Bools, open_: Bools, session: Session, *, range_db: float
) -> Nodes:
    """The curves of one track with the corrections in them; the same object where none is of this track.

    Parameters
    ----------
    parts_db : shape=(hops + 1, parts)
        Trim, expander and what follows, in the order of `plan.PARTS`.
    own, open_ : shape=(hops, tracks)
        Decided without corrections.
    range_db : float
        Of the track's expander.
    """
    if all(_index(correction, session) != track for correction in session.corrections):
        return parts_db
    voices = [i for i, one in enumerate(session.tracks) if one.role == "voice"]
    settings = session.settings.expander
    out = parts_db.copy()
    out[:, TRIM] += offset_nodes_db(session, track, len(own))
    if track in voices:
        by_hand = closed_by_hand(session, track, len(own))
        corrected_open = reopened(own, open_, corrected_own=_own_of(session, track, own[:, track]), by_hand=by_hand,
                                  voices=voices, track=track, settings=settings)
        out[:, EXPANDER] = expander_again_db(out[:, EXPANDER], open_[:, track], corrected_open=corrected_open,
                                             by_hand=by_hand, range_db=range_db, settings=settings)
    return out


def _own_of(session: Session, track: int, own: Bools) -> Bools:
    """The own voice of one track with the editor's decisions, shape=(hops,)."""
    out = own.copy()
    for place, word in _decisions(session, track):
        out[place] = word == "own"
    return out


def offset_nodes_db(session: Session, track: int, hops: int) -> Nodes:
    """What the corrections add to the gain of one track at hop edges, shape=(hops + 1,)."""
    wanted, said = np.zeros(hops, np.float32), np.zeros(hops, np.bool_)
    for correction in session.corrections:
        if correction.gain_db is not None and _index(correction, session) == track:
            wanted[_hops_of(correction)], said[_hops_of(correction)] = correction.gain_db, True
    drawn_out = wanted.copy()
    before, after = OFFSET_RAMP_HOPS // 2, OFFSET_RAMP_HOPS - OFFSET_RAMP_HOPS // 2
    for first, end in stretches(said):  # so that the mean over a ramp's length reaches the whole offset at either end
        drawn_out[max(first - before, 0) : first] = wanted[first]
        drawn_out[end : end + after] = wanted[end - 1]
    drawn_out[said] = wanted[said]
    padded = np.pad(drawn_out, (before, after), "edge")
    return np.convolve(padded, np.full(OFFSET_RAMP_HOPS, 1 / OFFSET_RAMP_HOPS), "valid").astype(np.float32)


def reopened(
    own: Bools, open_: Bools, *, corrected_own: Bools, by_hand: Bools, voices: Sequence[int], track: int,
    settings: settings_.Expander,
) -> Bools:
    """When one microphone is open by its corrected decisions, shape=(hops,).

    Parameters
    ----------
    own, open_ : shape=(hops, tracks)
        Decided without corrections.
    corrected_own, by_hand : shape=(hops,)
        Of this track: with corrections; decided to be bleed or silence.
    voices : the tracks that have a voice
    """
    if (corrected_own == own[:, track]).all() and not by_hand.any():
        return np.asarray(open_[:, track])
    all_own = own.copy()
    all_own[:, track] = corrected_own
    found = opened(all_own[:, list(voices)], settings=settings, lone=len(voices) == 1)
    out = found[:, list(voices).index(track)]
    before, after = round(settings.lookahead_s * HOPS_PER_S), round(settings.hold_s * HOPS_PER_S)
    near = flagged(stretches(corrected_own) + np.array([-before, after]), len(out))
    return np.asarray(out & ~(by_hand & ~near))


def expander_again_db(
    nodes_db: Nodes, open_: Bools, *, corrected_open: Bools, by_hand: Bools, range_db: float,
    settings: settings_.Expander,
) -> Nodes:
    """The expander's gain with the corrections, shape=(hops + 1,); outside their reach as given, to the bit.

    Parameters
    ----------
    nodes_db : shape=(hops + 1,)
        Without corrections.
    open_, corrected_open, by_hand : shape=(hops,)
        When the microphone is open without and with them; what was closed by the editor.
    """
    if not settings.enabled or range_db <= 0:
        return nodes_db
    depth = _depths(nodes_db, open_, range_db)
    wanted = np.where(corrected_open, 0, np.where(open_ | by_hand, -np.float32(range_db), depth))
    changed = wanted != depth
    if not changed.any():
        return nodes_db
    attack, release = (max(1, round(time_s * HOPS_PER_S)) for time_s in (settings.attack_s, settings.release_s))
    reach = flagged(stretches(changed) + np.array([-attack - release, attack + release]), len(changed))
    near = np.concatenate([reach, [False]]) | np.concatenate([[False], reach])
    return np.where(near, _ramped(wanted, attack, release), nodes_db).astype(np.float32)


def spliced(before: Nodes, after: Nodes, tolerance_db: float) -> tuple[Nodes, npt.NDArray[np.int64], Bools]:
    """Changed curves of a track and their rows; what is heard stays the same wherever nothing changes.

    The rows of the unchanged curves are kept outside the change. Where it begins and ends a row is set, on the line
    that was heard without the change.

    Parameters
    ----------
    before, after : shape=(hops + 1, curves)
        Without and with corrections.

    Returns
    -------
    curves : shape=(hops + 1, curves)
    rows : shape=(rows,)
    touched : shape=(rows,)
        What follows the row, up to the next, is changed.
    """
    rows = kept_rows(_with_sum(before), tolerance_db)
    changed = (before != after).any(axis=1)
    if not changed.any():
        return after, rows, np.zeros(len(rows), np.bool_)
    reach = flagged(stretches(changed) + np.array([-1, 1]), len(before))
    out = after.copy()
    border = np.flatnonzero(reach & ~changed)
    for curve in range(before.shape[1]):
        out[border, curve] = np.interp(border, rows, before[rows, curve])
    pieces = [rows[~reach[rows]], *(first + kept_rows(_with_sum(out[first:end]), tolerance_db)
                                    for first, end in stretches(reach))]
    merged = np.sort(np.concatenate(pieces))
    return out, merged, np.asarray(reach[merged] & np.append(reach[1:], False)[merged])


def _with_sum(curves_db: Nodes) -> Nodes:
    """The curves and their sum."""
    return np.column_stack([curves_db, curves_db.sum(axis=1)])


def _depths(nodes_db: Nodes, open_: Bools, range_db: float) -> Nodes:
    """How deep each hop is closed once the ramps are over; 0 where the microphone is open."""
    out = np.zeros(len(open_), np.float32)
    for first, after in stretches(~open_):
        out[first:after] = max(-range_db, float(nodes_db[first : after + 1].min()))
    return out


def _ramped(depth_db: Nodes, attack: int, release: int) -> Nodes:
    """Depth of every hop as gain at hop edges: ramps lie in the deeper of two stretches that meet."""
    edges = [0, *(np.flatnonzero(np.diff(depth_db)) + 1).tolist(), len(depth_db)]
    level = [float(depth_db[first]) for first in edges[:-1]]
    out = np.full(len(depth_db) + 1, -np.inf, np.float32)
    for i, (first, after) in enumerate(itertools.pairwise(edges)):
        here = level[i]
        left = max(here, level[i - 1]) if i else here
        right = max(here, level[i + 1]) if i + 1 < len(level) else here
        edge = np.arange(after - first + 1)
        closing = (left - here) * np.maximum(0, 1 - edge / release)
        opening = (right - here) * np.maximum(0, 1 - edge[::-1] / attack)
        np.maximum(out[first : after + 1], here + np.maximum(closing, opening), out=out[first : after + 1])
    return out


def _decisions(session: Session, track: int) -> Iterator[tuple[slice, str]]:
    """Hops and word of each decision about a track, in order: the later counts."""
    for correction in session.corrections:
        if correction.decide is not None and _index(correction, session) == track:
            yield _hops_of(correction), correction.decide


def _hops_of(correction: Correction) -> slice:
    """The hops of its stretch, at least one."""
    first = seconds_to_hops(correction.from_s)
    return slice(first, max(first + 1, seconds_to_hops(correction.to_s)))


def _index(correction: Correction, session: Session) -> int:
    """Which track it is about."""
    return next(i for i, track in enumerate(session.tracks) if track.name == correction.track)
