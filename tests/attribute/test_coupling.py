"""leveller.attribute.coupling: how much of every voice each microphone hears."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import rooms
import soundfile as sf
import sounds
from scipy.signal import oaconvolve

from leveller.attribute import Activity, attribute
from leveller.attribute.coupling import NONE_DB, STEP_HOPS, estimate_coupling
from leveller.attribute.seeds import NOBODY
from leveller.measure import measure
from leveller.measure.levels import STEP_DB, level_to_db
from leveller.session import open_session

INVERSE_DISTANCE_BAND_DB = 1.0  # 20 log10 of the ratio of distances, free field (acoustics textbooks)
RATE_HZ = sounds.RATE_HZ
VOICES = ("woman_en", "man_it", "man_commands")


def anechoic(
    folder: Path, mouths: tuple[rooms.Point, ...], mics: tuple[rooms.Point, ...], gains_db: tuple[float, ...]
) -> Activity:
    """People who speak in turn in a room without walls, recorded, opened, measured and attributed."""
    room = rooms.Room((8.0, 8.0, 3.0), 0.0, mouths, tuple(rooms.Microphone(at) for at in mics), tuple(range(len(mics))))
    voices = [sf.read(sounds.VOICES / f"{name}.flac", dtype="float32")[0] for name in VOICES]
    heard = np.zeros((30 * RATE_HZ, len(mics)))
    for turn in range(10):
        person = turn % len(mouths)
        phrase = voices[person][turn * RATE_HZ : (turn + 2) * RATE_HZ] * 0.02
        wet = oaconvolve(phrase[:, None], rooms.responses(room, mouths[person]), axes=0)
        at = int((0.5 + 2.9 * turn) * RATE_HZ)
        heard[at : at + len(wet)] += wet[: len(heard) - at]
    heard += np.random.default_rng(1).normal(0, 1e-7, heard.shape)  # more would count as coupling
    heard *= 10 ** (np.array(gains_db) / 20)
    paths = [folder / f"{mic}.wav" for mic in range(len(mics))]
    for path, column in zip(paths, heard.T, strict=True):
        sf.write(path, column, RATE_HZ, subtype="FLOAT")
    session = open_session(paths)
    assert len(session.tracks) == len(mics)
    return attribute(measure(session), session)


@pytest.mark.parametrize("gains_db", [(0.0, 0.0, 0.0), (6.0, -8.0, 3.0)])
def test_coupling_follows_the_inverse_distance_law(tmp_path: Path, gains_db: tuple[float, ...]) -> None:
    """Every voice at every microphone: 20 log10 of the ratio of distances, plus gains."""
    mouths = ((2.0, 2.0, 1.5), (5.0, 2.0, 1.5), (3.0, 5.0, 1.5))
    mics = ((2.3, 2.1, 1.5), (4.7, 2.3, 1.5), (3.1, 4.6, 1.5))
    found = anechoic(tmp_path, mouths, mics, gains_db).coupling
    distance = np.linalg.norm(np.array(mouths)[:, None] - np.array(mics)[None], axis=2)
    own = np.diag(distance)
    expected_db = 20 * np.log10(own[:, None] / distance) + np.array(gains_db)[None] - np.array(gains_db)[:, None]
    assert (found.heard_hops > 100).all()
    assert found.overall_db == pytest.approx(expected_db, abs=INVERSE_DISTANCE_BAND_DB)


def levels_of(ratio_db: np.ndarray, labels: np.ndarray) -> np.ndarray:
    """Levels of labelled hops: -30 dB at the person's own microphone and `ratio_db` (hops, tracks, bands) beside it."""
    level_db = np.full(ratio_db.shape, -90.0)
    spoken = labels != NOBODY
    level_db[spoken] = -30.0 + ratio_db[spoken]
    return np.rint(level_db / STEP_DB).astype(np.int16)


def two_voices(hops: int = 6000) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Labels in turns of two seconds, true ratios (hops, 2, 14) and a floor at -90 dB."""
    labels = (np.arange(hops) // 200 % 2).astype(np.int16)
    labels[np.arange(hops) % 200 > 150] = NOBODY
    ratio_db = np.zeros((hops, 2, 14))
    ratio_db[labels == 0, 1] = -12.0
    ratio_db[labels == 1, 0] = -7.0
    return labels, ratio_db, np.full((hops // 100, 2, 14), -90.0, np.float32)


def test_steady_ratios_are_found() -> None:
    """-12 and -7 dB in every band and block, 0 on the diagonal."""
    labels, ratio_db, floor_db = two_voices()
    found = estimate_coupling(levels_of(ratio_db, labels), floor_db, labels)
    assert found.local_db.shape == (12, 2, 2, 14)
    for block in range(12):
        assert found.at(block)[:, :, 3] == pytest.approx(np.array([[0.0, -12.0], [-7.0, 0.0]]), abs=STEP_DB)


def test_a_person_who_moves_is_followed() -> None:
    """From hop 3000 on the second voice is 8 dB louder at the first microphone: within 1 dB 20 s before and after."""
    labels, ratio_db, floor_db = two_voices(9000)
    ratio_db[4500:][labels[4500:] == 1, 0] = 1.0
    found = estimate_coupling(levels_of(ratio_db, labels), floor_db, labels)
    assert found.at(2000 // STEP_HOPS)[1, 0] == pytest.approx(np.full(14, -7.0), abs=1)
    assert found.at(7000 // STEP_HOPS)[1, 0] == pytest.approx(np.full(14, 1.0), abs=1)


def test_scatter_is_taken_a_little_over_its_median() -> None:
    """Ratios with a scatter of 4 dB come out 0 to 2 dB over their median: under-prediction opens microphones."""
    labels, ratio_db, floor_db = two_voices()
    ratio_db[labels == 0, 1] += np.random.default_rng(1).normal(0, 4, ratio_db[labels == 0, 1].shape)
    found = estimate_coupling(levels_of(ratio_db, labels), floor_db, labels).overall_db
    assert -12 < found[0, 1] < -10


def test_a_voice_that_is_never_heard_has_no_coupling() -> None:
    """NONE_DB to everybody, 0 to itself, and no hop heard."""
    labels, ratio_db, floor_db = two_voices()
    found = estimate_coupling(levels_of(ratio_db, labels), floor_db, np.where(labels == 1, NOBODY, labels))
    assert found.heard_hops[1] == 0
    assert found.overall_db[1].tolist() == [NONE_DB, 0.0]


def test_hops_under_the_noise_do_not_count() -> None:
    """Where the own microphone is not 10 dB over its noise nothing is learnt: no nan, the rest stays."""
    labels, ratio_db, floor_db = two_voices()
    floor_db[:, 1] = -35.0
    found = estimate_coupling(levels_of(ratio_db, labels), floor_db, labels)
    assert np.isfinite(found.local_db).all()
    assert found.overall_db[0, 1] == pytest.approx(-12, abs=0.1)
    assert found.overall_db[1, 0] == NONE_DB


def test_gains_shift_coupling_and_nothing_else() -> None:
    """A second microphone 20 dB hotter: its row falls and its column rises by 20 dB."""
    labels, ratio_db, floor_db = two_voices()
    levels = levels_of(ratio_db, labels)
    hot = levels.copy()
    hot[:, 1] += 3401  # 20 dB in steps of STEP_DB
    floor = floor_db.copy()
    floor[:, 1] += np.float32(3401 * STEP_DB)
    once, again = (estimate_coupling(v, f, labels).overall_db for v, f in ((levels, floor_db), (hot, floor)))
    assert again - once == pytest.approx(np.array([[0, 20.0], [-20.0, 0]]), abs=0.01)
    assert level_to_db(np.int16([3401]))[0] == pytest.approx(20.0, abs=0.01)
