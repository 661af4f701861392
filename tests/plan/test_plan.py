"""leveller.plan: all decisions of a session, as few rows as can be, within their limits."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest
import scoring
import sounds
from conversations import Conversation, ConversationSpec, simulate

import leveller.plan
from leveller.attribute import Activity, attribute
from leveller.measure import Measurements, measure
from leveller.plan import CAUSES, GAIN_LIMITS_DB, PARTS, STATES, GainPlan, make_plan
from leveller.render.gain import hop_gains_db
from leveller.session import Session, open_session

TOLERANCE_DB = 0.1  # the promise of automation.csv: thinned to 0.1 dB
SPREAD_DB = 2.0  # between voices after levelling, the worst session allowed
SPEC = ConversationSpec(rate_hz=16_000, seconds=30.0, seed=51, voices=sounds.HELD_OUT, gains_db=(6.0, -4.0, 2.0))


@dataclasses.dataclass(frozen=True)
class Case:
    """A session, what was found, and its plan with the curves it was made from."""

    spoken: Conversation
    session: Session
    measurements: Measurements
    activity: Activity
    plan: GainPlan
    curves: tuple[np.ndarray, ...]  # per track, (hops + 1, parts)


@pytest.fixture(scope="module")
def case(tmp_path_factory: pytest.TempPathFactory) -> Case:
    spoken = simulate(SPEC)
    session = open_session(spoken.write(tmp_path_factory.mktemp("plan")))
    measurements = measure(session)
    activity = attribute(measurements, session)
    with pytest.MonkeyPatch.context() as patch:
        kept: list[np.ndarray] = []
        spliced = leveller.plan.spliced

        def spy(before: np.ndarray, after: np.ndarray, tolerance_db: float) -> object:
            kept.append(after.copy())
            return spliced(before, after, tolerance_db)

        patch.setattr(leveller.plan, "spliced", spy)
        plan = make_plan(measurements, activity, session)
    assert len(kept) == 3
    return Case(spoken, session, measurements, activity, plan, tuple(kept))


def planned(case: Case, changes: dict[str, object]) -> GainPlan:
    """The plan with other settings."""
    settings = case.session.settings.changed(changes)
    return make_plan(case.measurements, case.activity, dataclasses.replace(case.session, settings=settings))


def test_rows_stay_within_the_tolerance_of_the_curves(case: Case) -> None:
    """Each part, and the gain, is at most 0.1 dB from its dense curve at every hop edge."""
    for gain, curves in zip(case.plan.tracks, case.curves, strict=True):
        edges = np.arange(case.plan.hops + 1)
        dense = [*curves.T, curves.sum(axis=1)]
        rows = [*gain.parts_cdb.T, gain.gain_cdb]
        for curve, row in zip(dense, rows, strict=True):
            assert np.abs(np.interp(edges, gain.hop, row / 100) - curve).max() <= TOLERANCE_DB
        assert len(gain.hop) < len(edges) / 5


def test_the_gain_is_the_sum_of_its_parts(case: Case) -> None:
    """To the hundredth of a decibel, in every row; gains, states and causes are within their lists."""
    for gain in case.plan.tracks:
        assert np.array_equal(gain.parts_cdb.sum(axis=1), gain.gain_cdb)
        assert gain.gain_cdb.min() >= 100 * GAIN_LIMITS_DB[0]
        assert gain.gain_cdb.max() <= 100 * GAIN_LIMITS_DB[1]
        assert set(np.unique(gain.state)) <= set(range(len(STATES)))
        assert set(np.unique(gain.cause)) <= set(range(len(CAUSES)))
        assert (gain.hop[0], gain.hop[-1]) == (0, case.plan.hops)
        assert (np.diff(gain.hop) >= 0).all()


def test_a_row_names_what_moves_most(case: Case) -> None:
    """`hold` where nothing moves to the next row, else the part that moves most, the expander by its direction."""
    named = {"auto_trim": "trim", "ride": "ride", "compressor": "compressor"}
    seen = set()
    for gain in case.plan.tracks:
        moves = np.diff(gain.parts_cdb, axis=0)
        for row, move in enumerate(moves):
            part = PARTS[int(np.abs(move).argmax())]
            expected = named.get(part, "opening" if move.max() > 0 else "closing") if move.any() else "hold"
            if part == "expander" and move.any():
                expected = "opening" if move[1] > 0 else "closing"
            assert CAUSES[gain.cause[row]] == expected
            seen.add(expected)
    assert {"hold", "opening", "closing"} <= seen


def test_voices_end_up_equally_loud(case: Case) -> None:
    """Voices recorded 10 dB apart differ by less than 2 dB, K-weighted, after their gains."""
    gains = np.stack([np.mean(hop_gains_db(gain, case.plan.hops), axis=0) for gain in case.plan.tracks], axis=1)
    before = scoring.spread_db(np.zeros_like(gains), case.spoken)
    assert before > 6
    assert scoring.spread_db(gains, case.spoken) < SPREAD_DB


def test_parts_keep_their_limits(case: Case) -> None:
    """Expander within its range, ride within 6 dB, compressor within 6 dB and never above 0."""
    for gain, range_db in zip(case.plan.tracks, case.plan.range_db, strict=True):
        trim, expander, ride, compressor = gain.parts_cdb.T / 100
        assert 6 <= range_db <= 18
        assert expander.max() <= 0
        assert expander.min() >= -range_db - 0.005
        assert np.abs(ride).max() <= 6
        assert compressor.max() <= 0
        assert compressor.min() >= -6
        assert np.abs(trim).max() <= 40


def test_each_stage_has_a_switch(case: Case) -> None:
    """Switched off, a stage's part is 0 throughout; with all off the gain is 0 dB and two rows a track."""
    stages = ("trim", "expander", "ride", "compressor")
    for part, stage in enumerate(stages):
        plan = planned(case, {f"{stage}.enabled": False})
        assert not any(gain.parts_cdb[:, part].any() for gain in plan.tracks)
    off = planned(case, {f"{stage}.enabled": False for stage in stages})
    assert [gain.gain_cdb.tolist() for gain in off.tracks] == [[0, 0]] * 3


def test_a_trim_of_the_session_file_is_kept_after_matching(case: Case) -> None:
    """trim_db = 3 on one track puts that voice 3 dB over where it would be, and no other part changes."""
    tracks = tuple(dataclasses.replace(t, trim_db=3.0 if i == 1 else 0.0) for i, t in enumerate(case.session.tracks))
    plan = make_plan(case.measurements, case.activity, dataclasses.replace(case.session, tracks=tracks))
    for i, (gain, before) in enumerate(zip(plan.tracks, case.plan.tracks, strict=True)):
        assert np.array_equal(gain.hop, before.hop)
        assert np.abs(gain.gain_cdb - before.gain_cdb - (300 if i == 1 else 0)).max() <= 1


def test_room_and_bed_keep_their_trim(case: Case) -> None:
    """A track that is no voice has its trim and nothing else, in two rows."""
    tracks = tuple(dataclasses.replace(t, role="room" if i == 2 else "voice", trim_db=-4.5 if i == 2 else 0.0)
                   for i, t in enumerate(case.session.tracks))
    session = dataclasses.replace(case.session, tracks=tracks)
    plan = make_plan(case.measurements, attribute(case.measurements, session), session)
    assert plan.tracks[2].gain_cdb.tolist() == [-450, -450]
    assert plan.range_db[2] == 0
    assert len(plan.tracks[0].hop) > 10


def test_a_very_long_session_keeps_to_the_most_rows(case: Case, monkeypatch: pytest.MonkeyPatch) -> None:
    """Where more rows would be needed than allowed, the tolerance gives way and the rows do not."""
    monkeypatch.setattr(leveller.plan, "MOST_ROWS", 60)
    plan = make_plan(case.measurements, case.activity, case.session)
    assert sum(len(gain.hop) for gain in plan.tracks) <= 60


def test_dc_does_not_move_the_trim(case: Case, tmp_path: Path) -> None:
    """A constant of a tenth of full scale on one track changes its trim by less than half a decibel."""
    mics = case.spoken.mics.copy()
    mics[:, 0] += np.float32(0.1)
    session = open_session(dataclasses.replace(case.spoken, mics=mics).write(tmp_path))
    measurements = measure(session)
    plan = make_plan(measurements, attribute(measurements, session), session)
    trims = [np.median(p.tracks[0].parts_cdb[:, 0]) / 100 for p in (plan, case.plan)]
    assert trims[0] == pytest.approx(trims[1], abs=0.5)
