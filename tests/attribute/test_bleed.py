"""leveller.attribute.bleed: what the others' voices explain at a microphone, and what is left as evidence."""

from __future__ import annotations

import numpy as np
import pytest

from leveller.attribute.bleed import CLIP, LEANING, SAFETY_DB, Evidence, _held, evidence_of
from leveller.attribute.coupling import Coupling
from leveller.measure.levels import STEP_DB

BANDS, HOPS = 14, 600
FLOOR_DB, VOICE_DB = -80.0, -30.0
TALK = slice(200, 400)


def coupling_of(matrix_db: list[list[float]]) -> Coupling:
    """The same coupling in every band and block."""
    matrix = np.array(matrix_db, np.float32)
    return Coupling(np.repeat(matrix[None, :, :, None], BANDS, axis=3), np.full(len(matrix), 500))


def recorded(matrix_db: list[list[float]], voices_db: list[float], scatter_db: float = 0.0) -> np.ndarray:
    """Levels at each microphone of voices that speak in `TALK`; -inf for one that is silent."""
    coupling = 10 ** (np.array(matrix_db) / 10)
    power = np.full((HOPS, len(coupling), BANDS), 10 ** (FLOOR_DB / 10))
    speaking = (10 ** (np.array(voices_db) / 10))[:, None] * coupling  # (voice, microphone)
    power[TALK] += speaking.sum(axis=0)[None, :, None]
    level_db = 10 * np.log10(power) + np.random.default_rng(1).normal(0, scatter_db, power.shape)
    return np.rint(level_db / STEP_DB).astype(np.int16)


def evidence(matrix_db: list[list[float]], voices_db: list[float], *, scatter_db: float = 0.0) -> Evidence:
    levels = recorded(matrix_db, voices_db, scatter_db)
    floor = np.full((HOPS // 100, levels.shape[1], BANDS), FLOOR_DB, np.float32)
    return evidence_of(levels, floor, coupling_of(matrix_db), tail_db_per_hop=0.8)


MATRIX = [[0.0, -12.0, -15.0], [-10.0, 0.0, -12.0], [-14.0, -11.0, 0.0]]
INSIDE = slice(TALK.start + 2, TALK.stop - 2)


def test_one_voice_is_own_at_its_microphone_and_bleed_at_the_others() -> None:
    """Whoever speaks alone has evidence for own voice at one microphone and against it at all others."""
    for person in range(3):
        voices = [VOICE_DB if k == person else -np.inf for k in range(3)]
        found = evidence(MATRIX, voices, scatter_db=2.0).own[INSIDE]
        assert (found[:, person] > 1).all()
        assert (np.delete(found, person, axis=1) < 0).mean() > 0.97


def test_two_who_speak_at_once_do_not_explain_each_other() -> None:
    """Both have own voice, the third has not."""
    found = evidence(MATRIX, [VOICE_DB, VOICE_DB - 3, -np.inf], scatter_db=2.0).own[INSIDE]
    assert (found[:, :2] > 0).mean() > 0.97
    assert (found[:, 2] < 0).mean() > 0.97


@pytest.mark.parametrize("lead_db", [6.0, 4.0, 2.0])
def test_close_microphones_still_tell_voices_apart(lead_db: float) -> None:
    """One voice that leads at its own microphone by so little is more own there than anywhere else."""
    matrix = [[0.0 if k == m else -lead_db for m in range(3)] for k in range(3)]
    score = evidence(matrix, [VOICE_DB, -np.inf, -np.inf]).score[INSIDE]
    ratio_db = evidence(matrix, [VOICE_DB, -np.inf, -np.inf]).own_to_bleed_db[INSIDE]
    assert (score[:, 0] > score[:, 1:].max(axis=1)).all()
    assert (ratio_db[:, 0] > 5).all()  # nobody else speaks: the voice stands far over what others explain


def test_noise_is_no_evidence() -> None:
    """Hops at the floor say next to nothing either way; they never say own voice."""
    found = evidence(MATRIX, [-np.inf] * 3, scatter_db=1.0)
    assert np.abs(found.own).max() < 0.3
    assert found.audible_db.max() < 5


def test_evidence_is_clipped() -> None:
    """A hop can say no more than CLIP nats; the leaning towards open is smaller than that."""
    found = evidence(MATRIX, [0.0, -np.inf, -np.inf]).own
    assert np.abs(found).max() <= CLIP
    assert 0 < LEANING < CLIP


def test_predicted_bleed_is_coupling_times_voice() -> None:
    """One voice alone: the bleed at the others is its power times the coupling, within a tenth of a decibel."""
    found = evidence(MATRIX, [VOICE_DB, -np.inf, -np.inf]).own_to_bleed_db[INSIDE]
    assert found[:, 1:] == pytest.approx(-SAFETY_DB, abs=0.1)


def test_the_tail_decays_as_asked_for() -> None:
    """After its end bleed falls by 0.8 dB a hop; a rise is followed at once; blocks may be cut anywhere."""
    bleed = np.full((300, 2, 3), 1e-12, np.float32)
    bleed[50:60] = 1.0
    found, _ = _held(bleed, np.zeros((2, 3), np.float32), 0.8)
    assert (found[50:60] == 1).all()
    assert 10 * np.log10(found[60:120, 0, 0]) == pytest.approx(-0.8 * np.arange(1, 61), abs=0.01)
    first, state = _held(bleed[:75], np.zeros((2, 3), np.float32), 0.8)
    second, _ = _held(bleed[75:], state, 0.8)
    assert np.concatenate([first, second]) == pytest.approx(found, rel=1e-4)


def test_a_voice_heard_too_little_explains_nothing() -> None:
    """A person with fewer than 15 labelled hops has no coupling, so nothing is taken for that voice's bleed."""
    levels = recorded(MATRIX, [VOICE_DB, -np.inf, -np.inf])
    floor = np.full((HOPS // 100, 3, BANDS), FLOOR_DB, np.float32)
    known = coupling_of(MATRIX)
    found = evidence_of(levels, floor, Coupling(known.local_db, np.array([14, 500, 500])), tail_db_per_hop=0.8)
    assert (found.own[INSIDE] > 1).all()


def test_details_tell_which_bands_stand_out() -> None:
    """Three low bands with own voice stand out, high ones do not; nothing is told unasked, or changed by it."""
    levels = recorded(MATRIX, [-np.inf, VOICE_DB, -np.inf])
    levels[INSIDE, 0, :3] += round(9 / STEP_DB)
    floor = np.full((HOPS // 100, 3, BANDS), FLOOR_DB, np.float32)
    without, found = (evidence_of(levels, floor, coupling_of(MATRIX), tail_db_per_hop=0.8, details=details)
                      for details in (False, True))
    assert not without.standing_out_db.any()
    assert not without.bright_db.any()
    assert np.array_equal(without.own, found.own)
    beside = found.own_to_bleed_db[INSIDE, 0]
    assert np.median(found.standing_out_db[INSIDE, 0] - beside) == pytest.approx(9 * 11 / 14, abs=0.3)
    assert np.median(found.bright_db[INSIDE, 0]) == pytest.approx(-9, abs=0.3)
