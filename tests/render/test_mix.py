"""leveller.render.mix: stems and their sum, nothing but what the plan says."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest
import soundfile as sf

from leveller.plan import GainPlan, TrackGain
from leveller.render.mix import LEVELS, Mix, pan_gains, render
from leveller.session import Session, open_session
from leveller.units import frames_to_hops

RATE_HZ = 16_000
SECONDS = 4
OPEN_MICS_BAND_DB = 0.1  # 10 log10 n for n open microphones (textbooks on sound reinforcement); scatter of 4 s of noise
PAN_CENTRE_DB = -3.01  # sine / cosine law, 10 log10 of a half
FLOAT32 = float(np.finfo(np.float32).eps)
HALF_STEP_24 = 2.0**-24  # rounding to 24 bit


def flat(gains_db: list[float], hops: int) -> GainPlan:
    """One gain a track from start to end."""
    tracks = []
    for gain_db in gains_db:
        parts = np.zeros((2, 4), np.int32)
        parts[:, 0] = round(100 * gain_db)
        tracks.append(TrackGain(np.array([0, hops]), parts, parts.sum(axis=1, dtype=np.int32), np.zeros(2, np.int8),
                                np.zeros(2, np.int8)))
    return GainPlan(hops, tuple(tracks), (0.0,) * len(gains_db))


def noise(tracks: int, sigma: float = 0.02) -> np.ndarray:
    """Noise of equal power that no two microphones share, shape=(frames, tracks)."""
    return np.random.default_rng(1).normal(0, sigma, (SECONDS * RATE_HZ, tracks)).astype(np.float32)


def session_of(signals: np.ndarray, folder: Path, **changes: object) -> Session:
    folder.mkdir()
    paths = [folder / f"{chr(97 + i)}.wav" for i in range(signals.shape[1])]
    for path, signal in zip(paths, signals.T, strict=True):
        sf.write(path, signal, RATE_HZ, subtype="FLOAT")
    return dataclasses.replace(open_session(paths), **changes)


def rendered(
    session: Session, work: Path, gains_db: list[float] | None = None, **how: object
) -> tuple[Mix, np.ndarray, list[np.ndarray]]:
    """The mix's record, mix.wav and the stems as read back."""
    work.mkdir()
    plan = flat(gains_db or [0.0] * len(session.tracks), frames_to_hops(session.frames, session.rate_hz))
    mix = render(session, plan, work, on_progress=lambda *_: None, **how)
    stems = [sf.read(work / "stems" / f"{track.name}.wav", dtype="float32")[0] for track in session.tracks]
    return mix, sf.read(work / "mix.wav", dtype="float32")[0], stems


def power_db(signal: np.ndarray) -> float:
    return float(10 * np.log10(np.mean(np.square(signal, dtype=np.float64))))


@pytest.mark.parametrize("n", [1, 2, 4, 8])
def test_n_open_microphones_are_10_log_n_noisier(n: int, tmp_path: Path) -> None:
    """Equal noise of n microphones adds up to 10 log10 n over that of one."""
    mix, mixed, stems = rendered(session_of(noise(n), tmp_path / "in"), tmp_path / "out")
    assert mix.limiting.most_db < 0.5
    assert power_db(mixed) - power_db(stems[0]) == pytest.approx(10 * np.log10(n), abs=OPEN_MICS_BAND_DB)


def test_stems_are_sources_times_their_gains(tmp_path: Path) -> None:
    """Each stem is its source times plan gain and make-up, to float32; polarity as the session says."""
    sources = noise(3)
    session = session_of(sources, tmp_path / "in")
    tracks = tuple(dataclasses.replace(t, polarity=-1 if i == 1 else 1) for i, t in enumerate(session.tracks))
    mix, _, stems = rendered(dataclasses.replace(session, tracks=tracks), tmp_path / "out", [0.0, -6.0, 3.25])
    for source, stem, gain_db, sign in zip(sources.T, stems, (0.0, -6.0, 3.25), (1, -1, 1), strict=True):
        gain = sign * 10 ** ((gain_db + mix.make_up_db) / 20)
        np.testing.assert_allclose(stem, source * gain, rtol=16 * FLOAT32, atol=1e-9)


def test_stems_add_up_to_the_mix_before_the_limiter(tmp_path: Path) -> None:
    """Where the limiter rests, the float stems add up to mix.wav within its rounding."""
    session = session_of(noise(3, 0.005), tmp_path / "in")
    mix, mixed, stems = rendered(dataclasses.replace(session, delivery=dataclasses.replace(
        session.delivery, target_lufs=-35.0)), tmp_path / "out")
    assert not mix.limiter_db.any()
    assert np.abs(np.sum(stems, axis=0) - mixed).max() <= HALF_STEP_24 + 8 * FLOAT32


def test_limited_stems_add_up_to_the_mix(tmp_path: Path) -> None:
    """With the limiter at work, 24-bit stems add up to mix.wav within the rounding of them all."""
    sources = noise(3)
    sources[::4000] = 0.4  # clicks to limit; of one sign, since stems of 24 bit cannot pass full scale one by one
    mix, mixed, stems = rendered(session_of(sources, tmp_path / "in"), tmp_path / "out", stems=LEVELS[1])
    assert mix.limiting.most_db > 3
    assert np.abs(np.sum(stems, axis=0, dtype=np.float64) - mixed).max() <= 4 * HALF_STEP_24 + 8 * FLOAT32


def test_pan_keeps_the_power() -> None:
    """-3.01 dB each in the middle, all of it at the sides, left plus right power 1 everywhere."""
    assert 20 * np.log10(pan_gains(0.0)) == pytest.approx([PAN_CENTRE_DB] * 2, abs=0.001)
    assert pan_gains(-1.0) == pytest.approx([1, 0], abs=1e-7)
    assert pan_gains(1.0) == pytest.approx([0, 1], abs=1e-7)
    for pan in np.linspace(-1, 1, 21):
        assert np.sum(pan_gains(float(pan)).astype(np.float64) ** 2) == pytest.approx(1, abs=1e-6)


def test_pans_are_heard_on_their_side(tmp_path: Path) -> None:
    """A track panned hard left has an empty right channel in its stem, one panned right an empty left one."""
    session = session_of(noise(2), tmp_path / "in")
    tracks = tuple(dataclasses.replace(t, pan=p) for t, p in zip(session.tracks, (-1.0, 1.0), strict=True))
    _, mixed, stems = rendered(dataclasses.replace(session, tracks=tracks, mix_channels=2), tmp_path / "out")
    assert mixed.shape == (session.frames, 2)
    assert power_db(stems[0][:, 0]) > -60
    assert power_db(stems[1][:, 1]) > -60
    assert max(np.abs(stems[0][:, 1]).max(), np.abs(stems[1][:, 0]).max()) < 1e-7


@pytest.mark.parametrize("channels", [1, 2])
def test_a_stereo_bed_keeps_its_channels(channels: int, tmp_path: Path) -> None:
    """On two channels a bed's left stays left; on one its channels are averaged."""
    bed = noise(2)
    (tmp_path / "in").mkdir()
    sf.write(tmp_path / "in" / "bed.wav", bed, RATE_HZ, subtype="FLOAT")
    (tmp_path / "in" / "session.toml").write_text(
        '[[track]]\nfile = "bed.wav"\nrole = "bed"\nchannels = "together"\n', encoding="utf-8")
    session = dataclasses.replace(open_session([tmp_path / "in"]), mix_channels=channels)
    mix, _, stems = rendered(session, tmp_path / "out")
    expected = bed if channels == 2 else bed.mean(axis=1)
    np.testing.assert_allclose(stems[0], expected * 10 ** (mix.make_up_db / 20), rtol=16 * FLOAT32, atol=1e-8)


def test_silence_stays_silent_and_says_why(tmp_path: Path) -> None:
    """Digital silence gives digital silence, no make-up and a reason."""
    mix, mixed, stems = rendered(session_of(np.zeros((RATE_HZ, 2), np.float32), tmp_path / "in"), tmp_path / "out")
    assert not mixed.any()
    assert not any(stem.any() for stem in stems)
    assert mix.reason
    assert not mix.met
    assert np.isfinite(mix.make_up_db)


@pytest.mark.parametrize("rate_hz", [16_000, 44_100])
def test_block_size_changes_no_byte(rate_hz: int, tmp_path: Path) -> None:
    """Blocks of 2, 0.5 and 0.01 s write the same files."""
    session = dataclasses.replace(session_of(noise(2), tmp_path / "in"))
    if rate_hz != RATE_HZ:
        for path in sorted((tmp_path / "in").glob("*.wav")):
            sf.write(path, sf.read(path)[0], rate_hz, subtype="FLOAT")
        session = open_session(sorted((tmp_path / "in").glob("*.wav")))
    found = []
    for block_s in (2.0, 0.5, 0.01):
        work = tmp_path / str(block_s)
        rendered(session, work, [0.0, -3.0], block_s=block_s)
        found.append({path.name: path.read_bytes() for path in sorted(work.rglob("*.wav"))})
    assert len(found[0]) == 3
    assert found[1] == found[0]
    assert found[2] == found[0]
