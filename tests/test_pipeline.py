"""leveller.pipeline: what holds for every session as a whole, read back from the files that were written."""

from __future__ import annotations

import csv
import dataclasses
import itertools
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile as sf
import sounds
from conversations import ConversationSpec, simulate
from hypothesis import given, settings
from hypothesis import strategies as st
from loudness_reference import libebur128, speech

import leveller.lanes
import leveller.measure
import leveller.render.mix
from leveller import pipeline
from leveller.attribute import attribute
from leveller.measure import measure
from leveller.pipeline import Result, process
from leveller.plan import GAIN_LIMITS_DB, PARTS
from leveller.render.mix import LEVELS
from leveller.session import open_session
from leveller.settings import DELIVERIES

TARGET_BAND_LU = 0.1  # our promise: a delivery is met within 0.1 LU, read by libebur128
OVER_DB = 0.005  # half of the last digit in which the ceiling is given
HALF_STEP_24 = 2.0**-24  # rounding to 24 bit
FLOAT32 = float(np.finfo(np.float32).eps)
CSV_BAND_DB = 0.05  # gains of the CSV against stem over source, outside ramps
RATE_HZ = 16_000
FEW = settings(max_examples=4, deadline=None, derandomize=True)


@lru_cache(maxsize=8)
def recorded(seed: int, people: int = 3, seconds: float = 9.0, rate_hz: int = RATE_HZ) -> np.ndarray:
    """What the microphones of a short conversation record, shape=(frames, microphones), peak at most 0.5."""
    spec = ConversationSpec(rate_hz=rate_hz, seconds=seconds, people=people, seed=seed, gain_error_db=6.0,
                            room=("round table", "lapels", "desk")[seed % 3], voices=sounds.HELD_OUT)
    mics = simulate(spec).mics.copy()
    mics *= np.float32(min(1.0, 2.0 ** np.floor(np.log2(0.5 / np.abs(mics).max()))))
    mics.setflags(write=False)
    return mics


def written(mics: np.ndarray, folder: Path, *, rate_hz: int = RATE_HZ) -> list[Path]:
    """Each microphone as a float file, so that any gain is exact."""
    folder.mkdir(parents=True, exist_ok=True)
    paths = [folder / f"{chr(97 + i)}.wav" for i in range(mics.shape[1])]
    for path, column in zip(paths, mics.T, strict=True):
        sf.write(path, column, rate_hz, subtype="FLOAT")
    return paths


@dataclasses.dataclass(frozen=True)
class Run:
    """A session processed, and its files as read back."""

    result: Result
    sources: np.ndarray  # (frames, tracks)
    stems: np.ndarray  # (frames, tracks)
    mix: np.ndarray
    rows: list[dict[str, str]]

    @property
    def names(self) -> list[str]:
        return [track.name for track in self.result.session.tracks]

    def of_track(self, name: str) -> tuple[np.ndarray, np.ndarray]:
        """Hops and gains in dB of one track in automation.csv."""
        rows = [row for row in self.rows if row["track"] == name]
        return (np.array([round(float(row["time_s"]) * 100) for row in rows]),
                np.array([float(row["gain_db"]) for row in rows]))


@contextmanager
def processed(mics: np.ndarray, **how: Any) -> Iterator[Run]:
    """A run in a folder of its own, gone afterwards."""
    with tempfile.TemporaryDirectory() as folder:
        paths = written(mics, Path(folder) / "in")
        result = process(paths, out=Path(folder) / "out", **how)
        stems = [sf.read(result.out / "stems" / f"{track.name}.wav", dtype="float32")[0]
                 for track in result.session.tracks]
        mix, _ = sf.read(result.out / "mix.wav", dtype="float32")
        with open(result.out / "automation.csv", encoding="utf-8", newline="") as file:
            rows = list(csv.DictReader(file))
        yield Run(result, mics, np.stack(stems, axis=-1), mix, rows)


def lag_of(stem: np.ndarray, source: np.ndarray) -> int:
    """Lag in frames at which a stem agrees best with its source, within 100 ms."""
    reach = RATE_HZ // 10
    size = 2 * len(source)
    cross = np.fft.irfft(np.fft.rfft(stem, size) * np.fft.rfft(source, size).conj(), size)
    around = np.concatenate([cross[-reach:], cross[: reach + 1]])
    assert around.max() > 0, "the polarity was turned"
    return int(around.argmax()) - reach


@given(seed=st.integers(1, 60), people=st.integers(2, 4))
@FEW
def test_stems_are_their_sources_in_place(seed: int, people: int) -> None:
    """Best lag between source and stem is 0 and positive; all are as long as the session; stems add up to the mix."""
    with processed(recorded(seed, people)) as run:
        assert run.names == ["a", "b", "c", "d"][:people]
        assert run.stems.shape == run.sources.shape
        assert len(run.mix) == run.result.session.frames == len(run.sources)
        assert [lag_of(stem, source) for stem, source in zip(run.stems.T, run.sources.T, strict=True)] == [0] * people
        cell = round(run.result.mix.cell_s * RATE_HZ)
        resting = np.repeat((run.result.mix.limiter_db[:-1] == 0) & (run.result.mix.limiter_db[1:] == 0), cell)
        at = np.flatnonzero(resting[: len(run.mix)])
        assert len(at) > len(run.mix) / 2
        off = np.abs(run.stems.sum(axis=1, dtype=np.float64) - run.mix)[at]
        assert off.max() <= HALF_STEP_24 + 16 * FLOAT32


@given(seed=st.integers(1, 60))
@FEW
def test_limited_stems_add_up_to_the_mix(seed: int) -> None:
    """24-bit stems with the limiter's gain add up to mix.wav within the rounding of them all."""
    with processed(recorded(seed), stems=LEVELS[1], delivery="podcast-mono") as run:
        off = np.abs(run.stems.sum(axis=1, dtype=np.float64) - run.mix)
        assert off.max() <= 4 * HALF_STEP_24 + 16 * FLOAT32


@given(seed=st.integers(1, 60), people=st.integers(1, 4))
@FEW
def test_the_automation_is_in_order_and_within_limits(seed: int, people: int) -> None:
    """Rows by time, then session order; each track's first at 0 and last at the end; gains within -120 to +40 dB."""
    with processed(recorded(seed, people)) as run:
        keys = [(float(row["time_s"]), run.names.index(row["track"])) for row in run.rows]
        assert keys == sorted(keys)
        end_s = len(run.sources) / RATE_HZ
        for name in run.names:
            hops, gains = run.of_track(name)
            assert (hops[0], hops[-1]) == (0, np.ceil(100 * end_s))
            assert GAIN_LIMITS_DB[0] <= gains.min() <= gains.max() <= GAIN_LIMITS_DB[1]
            assert max(np.unique(hops, return_counts=True)[1]) <= 2
        for row in run.rows:
            parts = sum(round(100 * float(row[f"{part}_db"])) for part in PARTS)
            assert parts == round(100 * float(row["gain_db"]))
            assert int(row["sample"]) == round(float(row["time_s"]) * RATE_HZ)


@given(seed=st.integers(1, 60))
@FEW
def test_the_automation_is_what_was_applied(seed: int) -> None:
    """Stem over source, hop by hop, is the CSV's gain and one make-up gain, within 0.05 dB outside steep ramps."""
    with processed(recorded(seed)) as run:
        hops = len(run.sources) // 160
        for i, name in enumerate(run.names):
            at, gains = run.of_track(name)
            edges = np.interp(np.arange(hops + 1), at, gains)
            wet, dry = (x[: hops * 160, i].astype(np.float64).reshape(hops, 160) for x in (run.stems, run.sources))
            power = np.sum(dry**2, axis=1)
            found_db = 20 * np.log10(np.sum(wet * dry, axis=1) / power)
            calm = (np.abs(np.diff(edges)) < 0.05) & (power > 1e-10)
            assert calm.mean() > 0.5
            off = found_db - (edges[:-1] + edges[1:]) / 2 - run.result.mix.make_up_db
            assert np.abs(off[calm]).max() <= CSV_BAND_DB


@given(seed=st.integers(1, 60), doublings=st.lists(st.integers(-6, 1), min_size=3, max_size=3))
@FEW
def test_gains_of_powers_of_two_change_no_decision(seed: int, doublings: list[int]) -> None:
    """Each microphone scaled by its own power of two: every hop is decided exactly as before."""
    with tempfile.TemporaryDirectory() as folder:
        mics = recorded(seed)
        found = []
        for name, gains in (("once", [0, 0, 0]), ("again", doublings)):
            session = open_session(written(mics * np.float32(2.0) ** np.array(gains, np.float32), Path(folder) / name))
            found.append(attribute(measure(session), session))
        assert np.array_equal(found[0].own, found[1].own)
        assert np.array_equal(found[0].bleed, found[1].bleed)
        assert np.array_equal(found[0].programme, found[1].programme)


@given(seed=st.integers(1, 60), gains_db=st.lists(st.floats(-24, 5), min_size=3, max_size=3))
@FEW
def test_other_gains_move_boundaries_by_a_hop_at_most(seed: int, gains_db: list[float]) -> None:
    """Scaled by any constant, decisions differ only beside a boundary: levels are rounded to 0.006 dB."""
    with tempfile.TemporaryDirectory() as folder:
        mics = recorded(seed)
        own = []
        for name, gains in (("once", [0.0, 0.0, 0.0]), ("again", gains_db)):
            scaled = mics * np.float32(10 ** (np.array(gains) / 20))
            session = open_session(written(scaled, Path(folder) / name))
            own.append(attribute(measure(session), session).own)
        differ = own[0] != own[1]
        edge = np.diff(own[0].astype(np.int8), axis=0, prepend=0, append=0) != 0
        beside = edge[:-1] | edge[1:]
        assert not (differ & ~beside).any()


@pytest.mark.parametrize("delivery", sorted(DELIVERIES))
@pytest.mark.parametrize("rate_hz", [16_000, 48_000])
def test_every_delivery_is_met_as_libebur128_reads_it(delivery: str, rate_hz: int, tmp_path: Path) -> None:
    """Loudness within 0.1 LU and true peak not over the ceiling, both read from the written file; channels as asked."""
    mics = recorded(3, 2, 10.0, rate_hz)
    result = process(written(mics, tmp_path / "in", rate_hz=rate_hz), out=tmp_path / "out", delivery=delivery)
    mix, read_hz = sf.read(result.out / "mix.wav", dtype="float32")
    wanted = DELIVERIES[delivery]
    heard = libebur128(mix, read_hz)
    assert sf.info(result.out / "mix.wav").subtype == "PCM_24"
    assert read_hz == rate_hz
    assert (1 if mix.ndim == 1 else mix.shape[1]) == (wanted.channels or 1)
    assert heard.integrated_lufs == pytest.approx(wanted.target_lufs, abs=TARGET_BAND_LU)
    assert heard.true_peak_dbtp <= wanted.ceiling_dbtp + OVER_DB
    assert result.mix.met
    assert result.mix.reason == ""


def test_near_silent_input_says_why_it_misses(tmp_path: Path) -> None:
    """Noise at -120 dBFS cannot be brought to target: a reason stands in the result, and everything is finite."""
    noise = np.random.default_rng(1).normal(0, 1e-6, (5 * RATE_HZ, 2)).astype(np.float32)
    result = process(written(noise, tmp_path / "in"), out=tmp_path / "out")
    assert result.mix.reason
    assert not result.mix.met
    assert np.isfinite(sf.read(result.out / "mix.wav")[0]).all()


def files_of(folder: Path) -> dict[str, bytes]:
    """Bytes of all files by relative path."""
    found = {str(path.relative_to(folder)): path.read_bytes() for path in sorted(folder.rglob("*")) if path.is_file()}
    assert {"mix.wav", "automation.csv", "report.json"} <= set(found)
    return found


@pytest.mark.parametrize("stems", LEVELS)
def test_block_size_and_threads_change_no_byte(stems: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Blocks of 2.0 or 0.5 s on 1, 2 or 4 threads write identical files, mix, stems, tables and all."""
    sources = written(recorded(5, 3, 7.77), tmp_path / "in")
    found = []
    for block_s, threads in itertools.chain([(2.0, 1), (2.0, 2)], [(0.5, 1), (0.5, 4)]):
        monkeypatch.setattr(leveller.lanes, "thread_count", lambda count=threads: count)
        monkeypatch.setattr(leveller.render.mix, "thread_count", lambda count=threads: count, raising=False)
        monkeypatch.setattr(pipeline, "measure", _with_blocks(leveller.measure.measure, block_s))
        monkeypatch.setattr(pipeline, "render", _with_blocks(leveller.render.mix.render, block_s))
        result = process(sources, out=tmp_path / f"{stems} {block_s} {threads}" / "out", stems=stems)
        found.append(files_of(result.out))
    for other in found[1:]:
        assert other.keys() == found[0].keys()
        assert [name for name in other if other[name] != found[0][name]] == []


def _with_blocks(stage: Any, block_s: float) -> Any:
    """A stage that works in blocks of so many seconds."""
    return lambda *args, **options: stage(*args, block_s=block_s, **options)


def assert_finite(run: Run) -> None:
    """Everything that was written is a number."""
    assert np.isfinite(run.mix).all()
    assert np.isfinite(run.stems).all()
    assert all(np.isfinite([float(row["gain_db"]) for row in run.rows]))
    assert len(run.rows) >= 2 * len(run.names)
    assert np.isfinite(run.result.activity.margin).all()


def test_a_silent_track_stays_silent() -> None:
    """A track of digital zeros has a silent stem, 0 dB throughout and no speech; the others are levelled."""
    mics = recorded(3).copy()  # two of three people speak within these nine seconds
    mics[:, 2] = 0
    with processed(mics) as run:
        assert_finite(run)
        assert not run.stems[:, 2].any()
        assert not run.result.activity.own[:, 2].any()
        assert run.result.activity.own[:, :2].any(axis=0).all()
        assert not run.result.plan.tracks[2].parts_cdb[:, 0].any()
        assert run.result.mix.met


def test_silence_throughout_stays_silent() -> None:
    """A session of nothing but digital zeros is accepted: silence out, 0 dB, no speech, a reason."""
    with processed(np.zeros((3 * RATE_HZ, 2), np.float32)) as run:
        assert_finite(run)
        assert not run.mix.any()
        assert not run.stems.any()
        assert not run.result.activity.own.any()
        assert all(float(row["gain_db"]) == 0 for row in run.rows)
        assert run.result.mix.reason


def test_silence_at_the_start_and_end_stays_silent() -> None:
    """Where all microphones are digitally silent, so are stems and mix."""
    mics = recorded(6).copy()
    mics[:RATE_HZ] = 0
    mics[-RATE_HZ:] = 0
    with processed(mics) as run:
        for part in (slice(0, RATE_HZ), slice(-RATE_HZ, None)):
            assert not run.stems[part].any()
            assert not run.mix[part].any()
        assert run.mix.any()


def test_no_voice_at_all_is_accepted() -> None:
    """Steady noise on two microphones: every gain is finite, the mix is on target or says why not."""
    noise = np.random.default_rng(1).normal(0, 0.01, (6 * RATE_HZ, 2)).astype(np.float32)
    with processed(noise) as run:
        assert_finite(run)
        assert run.result.mix.met or run.result.mix.reason


def test_a_single_track_is_accepted() -> None:
    """One microphone is levelled and delivered; its own speech is found."""
    with processed(recorded(7, 1)) as run:
        assert_finite(run)
        assert run.result.activity.own.mean() > 0.2
        assert run.result.mix.met
        assert run.result.plan.range_db[0] <= 6


def test_a_copy_of_a_track_is_set_aside(tmp_path: Path) -> None:
    """The same recording twice is processed once: one stem, the gains of the recording alone."""
    voice = recorded(7, 1)
    with processed(voice) as alone:
        twice = process(written(np.tile(voice, 2), tmp_path / "in"), out=tmp_path / "out")
        assert [aside.name for aside in twice.session.set_aside] == ["b"]
        assert np.array_equal(twice.plan.tracks[0].gain_cdb, alone.result.plan.tracks[0].gain_cdb)
        assert len(list((twice.out / "stems").iterdir())) == 1


def test_nan_and_inf_are_silenced() -> None:
    """Broken samples come out as silence and are counted; everything written is finite, decisions stay."""
    mics = recorded(8).copy()
    with processed(mics) as whole:
        mics[20_000:20_016, 0] = np.nan
        mics[30_000, 2] = np.inf
        with processed(mics) as run:
            assert_finite(run)
            assert run.result.measurements.repaired_frames == (16, 0, 1)
            assert not run.stems[20_000:20_016, 0].any()
            assert np.mean(run.result.activity.own != whole.result.activity.own) < 0.01
            assert run.result.mix.met


@pytest.mark.parametrize("frames", [1, 100, 161, 1600])
def test_a_session_of_a_moment_is_accepted(frames: int) -> None:
    """A recording shorter than any window is written as long as it was, with two rows a track at least."""
    with processed(np.ascontiguousarray(recorded(3, 2)[20_000 : 20_000 + frames])) as run:
        assert_finite(run)
        assert len(run.mix) == frames


def test_measurements_are_used_again_and_change_nothing(tmp_path: Path) -> None:
    """A second run into the same folder, with what it kept, writes the same bytes."""
    sources = written(recorded(9), tmp_path / "in")
    first = files_of(process(sources, out=tmp_path / "out").out)
    again = files_of(process(sources, out=tmp_path / "out", replace=True).out)
    assert again == first


def test_progress_goes_through_all_stages(tmp_path: Path) -> None:
    """measure, render and mix report in that order, each up to the session's length, never backwards."""
    seen: list[tuple[str, float, float]] = []
    process(written(recorded(9), tmp_path / "in"), out=tmp_path / "out", on_progress=lambda *step: seen.append(step))
    stages = [name for name, _ in itertools.groupby(stage for stage, _, _ in seen)]
    assert stages[:2] == ["measure", "render"]
    assert set(stages[2:]) == {"mix"}
    for stage in ("measure", "render"):
        done = [d for name, d, _ in seen if name == stage]
        assert done == sorted(done)
        assert done[-1] == pytest.approx(9.0)


def test_tracks_of_other_rates_and_lengths_stay_in_place(tmp_path: Path) -> None:
    """A late 44.1 kHz track among 16 kHz ones lies where session.toml puts it, within a frame, padded to the end."""
    voice = np.array(speech(RATE_HZ)[: 6 * RATE_HZ])
    other = np.array(speech(44_100, ("woman_fr", "man_reader"))[: 4 * 44_100])
    sf.write(tmp_path / "a.wav", voice, RATE_HZ, subtype="FLOAT")
    sf.write(tmp_path / "b.wav", voice[::-1] * 0.5, RATE_HZ, subtype="FLOAT")
    sf.write(tmp_path / "c.wav", other, 44_100, subtype="FLOAT")
    (tmp_path / "session.toml").write_text(
        '[[track]]\nfile = "a.wav"\n[[track]]\nfile = "b.wav"\n[[track]]\nfile = "c.wav"\noffset_s = 1.25\n', "utf-8")
    result = process(tmp_path, out=tmp_path / "out")
    stem, rate_hz = sf.read(result.out / "stems" / "c.wav", dtype="float32")
    assert (rate_hz, len(stem)) == (RATE_HZ, 6 * RATE_HZ)
    assert not stem[: round(1.25 * RATE_HZ)].any()
    assert not stem[round(5.25 * RATE_HZ) + 1 :].any()
    expected = np.zeros(6 * RATE_HZ, np.float32)
    expected[round(1.25 * RATE_HZ) : round(5.25 * RATE_HZ)] = speech(RATE_HZ, ("woman_fr", "man_reader"))[: 4 * RATE_HZ]
    assert abs(lag_of(stem, expected)) <= 1
