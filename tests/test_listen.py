"""leveller.listen: the doubtful places, within the time that may be asked for, in words, until the editor decides."""

from __future__ import annotations

import dataclasses
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest
from test_doubt import LOUD_DB, SOFT_DB, activity_of, measured

from leveller.attribute import Activity
from leveller.listen import MOST_SHARE, Place, places_to_hear
from leveller.measure import Measurements
from leveller.measure.levels import SILENT, STEP_DB
from leveller.plan import GainPlan, TrackGain
from leveller.plan.corrections import overruled
from leveller.sessionfile import Correction

HOPS = 3000
RANGE_CDB = -1800
NAMES = ("Ann", "Ben", "Cem")
LEAD_IN_S = 0.5


def decision(track: str, from_s: float, to_s: float, decide: str | None, gain_db: float | None = None) -> Correction:
    """An editor's word."""
    return Correction(track, from_s, to_s, decide, gain_db)


def session_of(*corrections: Correction, tracks: int = 2, room: str = "") -> Any:
    """What of a session is looked at."""
    named = (SimpleNamespace(name=name, role="room" if name == room else "voice") for name in NAMES[:tracks])
    return SimpleNamespace(tracks=tuple(named), corrections=corrections)


def plan_of(open_: np.ndarray) -> GainPlan:
    """A plan that closes by 18 dB where it says so, without ramps."""
    hops, tracks = open_.shape
    rows = np.repeat(np.arange(hops), 2) + np.tile([0, 1], hops)
    gains = []
    for track in range(tracks):
        parts = np.zeros((2 * hops, 4), np.int32)
        parts[:, 1] = np.repeat(np.where(open_[:, track], 0, RANGE_CDB), 2)
        nothing = np.zeros(2 * hops, np.int8)
        gains.append(TrackGain(rows, parts, parts.sum(axis=1, dtype=np.int32), nothing, nothing))
    return GainPlan(hops, tuple(gains), (18.0,) * tracks)


def heard(
    activity: Activity, *corrections: Correction, m: Measurements | None = None, room: str = ""
) -> tuple[Place, ...]:
    """The places of an activity whose microphones are open where it says own."""
    tracks = activity.own.shape[1]
    session = session_of(*corrections, tracks=tracks, room=room)
    m = measured(np.full(activity.own.shape, LOUD_DB)) if m is None else m
    return places_to_hear(overruled(activity, session), plan_of(activity.own), session, m)


def with_words(*at: tuple[int, int], hops: int = HOPS, tracks: int = 2) -> Activity:
    """Somebody speaks throughout; at (hop, track), a quarter of a second stands out of the bleed."""
    own = np.zeros((hops, tracks), bool)
    own[:, -1] = True
    standing_out = np.where(own, 16.0, -2.0)
    for hop, track in at:
        standing_out[hop - 13 : hop + 14, track] = 4.0
    return activity_of(own, standing_out_db=standing_out)


def test_what_may_be_a_lost_word_comes_first_with_its_lead_in() -> None:
    """One row: its track, what was decided and could be, half a second before, a second or more, and a reason."""
    first, *_ = heard(with_words((600, 0)))
    assert (first.track, first.decided, first.could_be) == ("Ann", "bleed", "own")
    assert first.from_s == pytest.approx(6.0 - 0.13 - LEAD_IN_S, abs=0.03)
    assert 1.0 <= first.to_s - first.from_s < 1.5
    assert first.reason == (
        "a short answer may be under Ben's voice: for 0.3 s the strongest bands are at +4 dB against bleed, "
        "all at -4 dB")
    assert 0.01 < first.doubt <= 1


def test_no_reason_names_a_nought_below_nought() -> None:
    """What rounds to nought is +0 dB from either side."""
    activity = with_words((600, 0))
    under = dataclasses.replace(
        activity, standing_out_db=np.where(activity.standing_out_db == 4, -0.3, activity.standing_out_db),
        own_to_bleed_db=np.where(activity.standing_out_db == 4, -9.0, activity.own_to_bleed_db))
    assert "the strongest bands are at +0 dB against bleed, all at -9 dB" in heard(under)[0].reason


def test_nothing_in_doubt_asks_for_nothing() -> None:
    """Plain bleed beside plain own voice gives no place, nor does a track that is no voice."""
    assert heard(with_words()) == ()
    assert heard(with_words((600, 0)), room="Ann") == ()


def test_never_more_than_the_share_and_the_most_doubtful_first() -> None:
    """Where everything is in doubt, eight per cent of the time is asked for, by falling doubt."""
    places = heard(with_words(*((hop, 0) for hop in range(60, 5900, 60)), hops=6000))
    asked = np.zeros(6000, bool)
    for place in places:
        assert 0 <= place.from_s < place.to_s <= 60
        assert place.to_s - place.from_s >= 1
        asked[round(place.from_s * 100) : round(place.to_s * 100)] = True
    assert 0.06 < asked.mean() <= MOST_SHARE
    assert [p.doubt for p in places] == sorted((p.doubt for p in places), reverse=True)


def test_two_tracks_in_doubt_at_once_are_both_named() -> None:
    """What lies in time that is asked for anyway costs nothing more: one row a track."""
    places = heard(with_words((600, 0), (603, 1), tracks=3))
    assert sorted(place.track for place in places) == ["Ann", "Ben"]
    assert abs(places[0].from_s - places[1].from_s) < 0.1


def test_doubts_next_to_each_other_are_one_place() -> None:
    """Two on one track 0.8 s apart are merged; on both sides of six seconds they are two."""
    assert len(heard(with_words((600, 0), (680, 0), hops=4000))) == 1
    assert len(heard(with_words((600, 0), (1200, 0), hops=4000))) == 2


def opening(**grids: float) -> Activity:
    """Ann's microphone opens for two seconds while Ben speaks, with little evidence."""
    own = np.zeros((HOPS, 3), bool)
    own[:, 2] = own[500:700, 0] = True
    inside = np.zeros(own.shape, bool)
    inside[500:700, 0] = True
    score = np.where(own, 1.5, -0.2)
    made = {"score": np.where(inside, 0.0, score), "standing_out_db": np.full(own.shape, -2.0)}
    made |= {name: np.where(inside, value, 0.0) for name, value in grids.items()}
    return activity_of(own, **made)


def test_an_opening_on_bleed_is_named_with_its_reason() -> None:
    """Little evidence, a muted microphone, and high bands alone each have words of their own."""
    level_db = np.repeat(np.random.default_rng(1).uniform(SOFT_DB, LOUD_DB, (HOPS // 10, 1)), 10, axis=0)
    levels = np.repeat(level_db, 3, axis=1)  # all rise and fall together
    m = measured(levels)
    plain = heard(opening(own_to_bleed_db=2.0), m=m)[0]
    assert (plain.track, plain.decided, plain.could_be) == ("Ann", "own", "bleed")
    assert plain.reason == "open while Cem speaks, at most 2 dB over Cem's bleed: it may be bleed alone"
    under = heard(opening(own_to_bleed_db=-2.0), m=m)[0]
    assert under.reason == "open while Cem speaks, at its loudest 2 dB under Cem's bleed: it may be bleed alone"
    bright = heard(opening(bright_db=6.0), m=m)[0]
    assert bright.reason == "paper or keys? high bands stand out by 6 dB more than low ones while Cem speaks"
    levels[:, 1] = SILENT * STEP_DB
    muted = heard(opening(own_to_bleed_db=2.0), m=measured(levels))[0]
    assert muted.reason == "open while Ben is muted: whose voice this is cannot be told from what Ben records"
    assert muted.doubt > plain.doubt


@pytest.mark.parametrize("decide", ["own", "bleed", "silence"])
def test_a_place_that_the_editor_decided_leaves_the_list(decide: str) -> None:
    """Whatever was decided, of the word alone or of the whole place: it is not asked again; other places stay."""
    activity = with_words((600, 0), (2000, 0), hops=4000)
    before = heard(activity)
    assert len(before) == 2
    for from_s, to_s in ((5.9, 6.1), (before[0].from_s, before[0].to_s), (5.0, 7.0)):
        after = heard(activity, decision("Ann", from_s, to_s, decide))
        assert [place.from_s for place in after] == [max(place.from_s for place in before)]


def test_a_gain_or_another_track_decides_nothing() -> None:
    """A correction that only turns a gain, or decides about another track, leaves the doubt."""
    activity = with_words((600, 0), tracks=3)
    for correction in (decision("Ann", 5.0, 7.0, None, 3.0), decision("Ben", 5.0, 7.0, "silence")):
        assert [place.track for place in heard(activity, correction)] == ["Ann"]


def test_only_decisions_count_as_doubts_of_a_closed_microphone() -> None:
    """A microphone that the plan never closes has lost nothing."""
    activity = with_words((600, 0))
    open_ = np.ones_like(activity.own)
    places = places_to_hear(activity, plan_of(open_), session_of(), measured(np.full(activity.own.shape, LOUD_DB)))
    assert places == ()


def test_half_a_range_counts_like_a_whole_one() -> None:
    """What is closed is told by the share of the range, so that `auto` ranges of 6 dB have their doubts, too."""
    activity = with_words((600, 0))
    whole = plan_of(activity.own)
    third = dataclasses.replace(whole, tracks=tuple(
        dataclasses.replace(t, parts_cdb=t.parts_cdb // 3, gain_cdb=t.gain_cdb // 3) for t in whole.tracks))
    m = measured(np.full(activity.own.shape, LOUD_DB))
    assert places_to_hear(activity, third, session_of(), m) == places_to_hear(activity, whole, session_of(), m) != ()
