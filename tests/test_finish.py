"""leveller.cut: a finished cut, or its stems, to the delivery by make-up gain and limiter alone."""

from __future__ import annotations

import csv
import json
import re
import shutil
import subprocess
import sys
from pathlib import Path

import again
import numpy as np
import pyebur128
import pytest
import soundfile as sf

from leveller import audio, pipeline
from leveller.errors import InputError, LevellerError, OutputError, SettingsError
from leveller.report.finished import finished_figures
from leveller.settings import DELIVERIES
from leveller.spots import spots_to_hear

LUFS_BAND = 0.1  # of the target; EBU R 128 allows 0.2 LU
PEAK_BAND_DB = 0.01
RATE_HZ = 16_000
PCM24_STEP = 2.0**-23
OUTLINE_BAND = 0.02  # linear, of ours: of each peak cell of 1 ms the highest gain counts; measured 0.0096


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A processed session in `out`, its edited cut in `cut.wav`: the mix without its middle, 3 dB down."""
    folder = tmp_path_factory.mktemp("finish")
    again.recorded(folder / "in")
    pipeline.process(folder / "in", out=folder / "out")
    mix, rate_hz = sf.read(folder / "out" / "mix.wav")
    cut = np.concatenate([mix[: 9 * rate_hz], mix[12 * rate_hz :]]) * 10 ** (-3 / 20)
    sf.write(folder / "cut.wav", cut, rate_hz, subtype="PCM_24")
    return folder


def reading(path: Path) -> tuple[float, float]:
    """Integrated loudness and true peak of a file, by libebur128."""
    samples, rate_hz = sf.read(path, always_2d=True)
    mode = pyebur128.MeasurementMode
    meter = pyebur128.R128State(samples.shape[1], rate_hz, mode.MODE_I | mode.MODE_TRUE_PEAK)
    meter.add_frames(samples.ravel(), len(samples))
    peak = max(pyebur128.get_true_peak(meter, channel) for channel in range(samples.shape[1]))
    return pyebur128.get_loudness_global(meter), 20 * np.log10(peak)


def tone(
    path: Path, *, seconds: float = 5.0, rate_hz: int = RATE_HZ, left: float = 0.1, right: float | None = None
) -> Path:
    """A sine of 500 Hz in a float file; two channels where `right` is given."""
    wave = np.sin(2 * np.pi * 500 * np.arange(round(seconds * rate_hz)) / rate_hz)
    sf.write(path, wave * left if right is None else wave[:, None] * [left, right], rate_hz, subtype="FLOAT")
    return path


@pytest.mark.parametrize("name", sorted(DELIVERIES))
def test_every_delivery_is_met(place: Path, tmp_path: Path, name: str) -> None:
    """A cut reads the target under the ceiling, by libebur128, and its report says so."""
    finished = pipeline.finish(place / "cut.wav", out=tmp_path / "f", delivery=name)
    lufs, peak_dbtp = reading(tmp_path / "f" / "mix.wav")
    asked = DELIVERIES[name]
    assert lufs == pytest.approx(asked.target_lufs, abs=LUFS_BAND)
    assert peak_dbtp <= asked.ceiling_dbtp + PEAK_BAND_DB
    assert sf.info(tmp_path / "f" / "mix.wav").channels == (asked.channels or 1)
    assert finished.mix.met
    report = json.loads((tmp_path / "f" / "report.json").read_text(encoding="utf-8"))
    assert report["delivery"]["met"] is True
    assert report["mix"]["integrated_lufs"] == pytest.approx(lufs, abs=LUFS_BAND)
    assert sorted(report["settings"]) == ["limiter.lookahead_s", "limiter.release_s"]


def test_the_folder_holds_mix_and_reports_only(place: Path, tmp_path: Path) -> None:
    """mix.wav, mix.csv, report.json, report.html; mix.csv has a row every 0.1 s."""
    pipeline.finish(place / "cut.wav", out=tmp_path / "f")
    assert sorted(path.name for path in (tmp_path / "f").iterdir()) == [
        "mix.csv", "mix.wav", "report.html", "report.json"]
    with open(tmp_path / "f" / "mix.csv", encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == 210
    assert list(rows[0]) == ["time_s", "make_up_db", "limiter_db", "short_term_lufs"]


def test_nothing_but_gain_is_done_where_nothing_is_limited(place: Path, tmp_path: Path) -> None:
    """At a low target the cut comes out as one gain times itself, sample for sample: no gate, no ride."""
    finished = pipeline.finish(place / "cut.wav", out=tmp_path / "f", delivery="r128")
    source, _ = sf.read(place / "cut.wav")
    out, _ = sf.read(tmp_path / "f" / "mix.wav")
    assert finished.mix.limiting.most_db == 0
    expected = source * 10 ** (finished.mix.make_up_db / 20)
    assert np.abs(out[:, 0] - expected).max() <= PCM24_STEP
    assert np.array_equal(out[:, 0], out[:, 1])


@pytest.mark.parametrize(("delivery", "least_db"), [("r128", 0.0), ("podcast-stereo", 3.0)])
def test_the_drawn_outlines_are_those_of_the_files(
    place: Path, tmp_path: Path, delivery: str, least_db: float
) -> None:
    """Per 10 ms the outlines have the peak of the given file, and of mix.wav as written, limited or not."""
    cut, rate_hz = sf.read(place / "cut.wav")
    if least_db:
        for at in range(rate_hz, len(cut), 3 * rate_hz):
            cut[at : at + rate_hz // 50] *= 1 / np.abs(cut[at : at + rate_hz // 50]).max()  # a knock of 20 ms
    sf.write(tmp_path / "knocks.wav", cut, rate_hz, subtype="PCM_24")
    finished = pipeline.finish(tmp_path / "knocks.wav", out=tmp_path / "f", delivery=delivery)
    assert finished.mix.limiting.most_db >= least_db
    assert -finished.limiter_db.min() == pytest.approx(finished.mix.limiting.most_db, abs=1e-3)
    drawn = {tmp_path / "knocks.wav": finished.file_peaks[0], tmp_path / "f" / "mix.wav": finished.mix_peaks}
    for path, outline in drawn.items():
        samples, rate_hz = sf.read(path, always_2d=True)
        peaks = np.abs(samples).max(axis=1)
        hop = rate_hz // 100
        expected = np.array([peaks[at : at + hop].max() for at in range(0, len(peaks), hop)])
        assert outline.shape == expected.shape
        assert (outline - expected).min() > -1e-6  # never lower than what is heard, but for the rounding of 24 bit
        assert (outline - expected).max() < OUTLINE_BAND


def test_the_files_are_read_once(place: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Each file of a cut is decoded once, whole, for sum, outline and page; the sum is read back once for the mix."""
    decoded, spilled = [], []
    close, blocks = audio.TrackReader.close, audio.FloatSpill.blocks
    monkeypatch.setattr(audio.TrackReader, "close", lambda own: (decoded.append(own.blocks_read), close(own)))
    monkeypatch.setattr(audio.FloatSpill, "blocks", lambda own, n: (spilled.append(n), blocks(own, n))[1])
    finished = pipeline.finish(place / "cut.wav", out=tmp_path / "f", delivery="r128")
    assert decoded == [-(-finished.session.frames // audio.CHUNK_FRAMES)]
    assert len(spilled) == 1


def test_stems_of_process_finish_to_its_mix(place: Path, tmp_path: Path) -> None:
    """The stems, summed and limited again, give the mix that process wrote, but for the last bits."""
    pipeline.finish(place / "out" / "stems", out=tmp_path / "f")
    mine, theirs = (sf.read(folder / "mix.wav")[0] for folder in (tmp_path / "f", place / "out"))
    assert np.abs(mine - theirs).max() < 64 * PCM24_STEP


def test_files_are_summed_as_they_are(tmp_path: Path) -> None:
    """One channel goes unchanged to both, two stay apart, the shorter ends in silence; all of it is said."""
    voice = tone(tmp_path / "voice.wav", left=0.1)
    music = tone(tmp_path / "music.wav", seconds=6, left=0.02, right=0.04)
    finished = pipeline.finish([voice, music], out=tmp_path / "f", delivery="podcast-stereo")
    out, _ = sf.read(tmp_path / "f" / "mix.wav")
    assert len(out) == 6 * RATE_HZ
    gain = 10 ** (finished.mix.make_up_db / 20)
    both = slice(RATE_HZ, 4 * RATE_HZ)
    assert np.abs(out[both]).max(axis=0) == pytest.approx(np.array([0.12, 0.14]) * gain, rel=1e-4)
    assert np.abs(out[5 * RATE_HZ + 100 :]).max(axis=0) == pytest.approx(np.array([0.02, 0.04]) * gain, rel=1e-3)
    assert finished.session.notes == (
        "voice: ends 1.000 s before the end, padded with silence", "voice: one channel, heard unchanged on both")


def test_two_channels_are_averaged_for_one(tmp_path: Path) -> None:
    """A delivery of one channel takes the mean of two, and says so."""
    finished = pipeline.finish(tone(tmp_path / "cut.wav", left=0.02, right=0.04), out=tmp_path / "f",
                               delivery="podcast-mono")
    out, _ = sf.read(tmp_path / "f" / "mix.wav")
    assert out.ndim == 1
    gain = 10 ** (finished.mix.make_up_db / 20)
    assert np.abs(out[RATE_HZ : 4 * RATE_HZ]).max() == pytest.approx(0.03 * gain, rel=1e-4)
    assert finished.session.notes == ("cut: its two channels are averaged, since the delivery has one",)


@pytest.mark.parametrize(("right", "name"), [(None, "podcast-mono"), (0.1, "podcast-stereo")])
def test_without_a_delivery_the_files_decide(tmp_path: Path, right: float | None, name: str) -> None:
    """One channel is delivered as podcast-mono, two as podcast-stereo."""
    finished = pipeline.finish(tone(tmp_path / "cut.wav", right=right), out=tmp_path / "f")
    assert finished.mix.delivery == DELIVERIES[name]
    assert finished.session.notes == ()


def test_rates_that_differ_come_to_the_most_common(tmp_path: Path) -> None:
    """A file of another rate is resampled and said; its tone keeps level and length."""
    files = [tone(tmp_path / "a.wav"), tone(tmp_path / "b.wav"), tone(tmp_path / "c.wav", rate_hz=48_000, left=0.2)]
    finished = pipeline.finish(files, out=tmp_path / "f")
    out, rate_hz = sf.read(tmp_path / "f" / "mix.wav")
    assert (rate_hz, len(out)) == (RATE_HZ, 5 * RATE_HZ)
    part = out[RATE_HZ : 4 * RATE_HZ] / 10 ** (finished.mix.make_up_db / 20)
    assert np.abs(part).max() == pytest.approx(0.4, rel=1e-3)
    assert finished.session.notes == ("c: resampled from 48000 to 16000 Hz",)


def test_a_silent_cut_is_said_not_to_be_met(tmp_path: Path) -> None:
    """Silence is written as it is, with the reason why no target is met."""
    finished = pipeline.finish(tone(tmp_path / "cut.wav", left=0.0), out=tmp_path / "f")
    report = json.loads((tmp_path / "f" / "report.json").read_text(encoding="utf-8"))
    assert not finished.mix.met
    assert report["delivery"]["why_not"].startswith("no sound over the -70 LUFS gate")
    assert report["left_open"] == [report["delivery"]["why_not"]]


def test_broken_samples_are_silenced_and_said(tmp_path: Path) -> None:
    """NaN in a float file is silenced, counted, and stands in the report."""
    path = tone(tmp_path / "cut.wav")
    samples, rate_hz = sf.read(path)
    samples[100:103] = np.nan
    sf.write(path, samples, rate_hz, subtype="FLOAT")
    finished = pipeline.finish(path, out=tmp_path / "f")
    assert finished.repaired_frames == (3,)
    report = json.loads((tmp_path / "f" / "report.json").read_text(encoding="utf-8"))
    sentences = [fault["sentence"] for fault in report["faults"]]
    assert sentences == ["cut: 3 samples that held no number (NaN or Inf) silenced"]


def test_two_runs_give_the_same_bytes(place: Path, tmp_path: Path) -> None:
    """Same in, same out, in every file."""
    for name in ("a", "b"):
        pipeline.finish(place / "cut.wav", out=tmp_path / name, delivery="podcast-stereo")
    for path in sorted((tmp_path / "a").iterdir()):
        assert path.read_bytes() == (tmp_path / "b" / path.name).read_bytes()


def six_channels(folder: Path) -> list[Path]:
    """A file of six channels."""
    sf.write(folder / "wide.wav", np.zeros((RATE_HZ, 6)), RATE_HZ)
    return [folder / "wide.wav"]


def named_twice(folder: Path) -> list[Path]:
    """A file named twice."""
    path = tone(folder / "cut.wav")
    return [path, folder / "." / "cut.wav"]


def empty_folder(folder: Path) -> list[Path]:
    """A folder without audio."""
    (folder / "none").mkdir()
    return [folder / "none"]


@pytest.mark.parametrize(("make", "kind", "message"), [
    (six_channels, InputError, "{}/wide.wav: 6 channels, expected 1 or 2. Mix it down first"),
    (named_twice, InputError, "{}/cut.wav: named twice, and would be heard twice as loud. Name each file once"),
    (empty_folder, InputError, "{}/none: no audio files directly in this folder"),
    (lambda folder: [folder / "no.wav"], InputError, "{}/no.wav: no such file"),
    (lambda folder: [], InputError, "no file given: expected the finished cut, or its stems"),
])
def test_what_cannot_be_finished_is_refused(
    tmp_path: Path, make: object, kind: type[LevellerError], message: str
) -> None:
    """A refusal says what and where, word for word, and nothing is written."""
    with pytest.raises(kind, match=f"^{re.escape(message.format(tmp_path))}$"):
        pipeline.finish(make(tmp_path), out=tmp_path / "f")  # type: ignore[operator]
    assert not (tmp_path / "f").exists()


def test_settings_of_other_stages_are_refused(place: Path, tmp_path: Path) -> None:
    """A setting that would do nothing is refused; the limiter's count."""
    message = "--set expander.range_db: nothing but the limiter works on a finished cut; expected limiter.NAME"
    with pytest.raises(SettingsError, match=f"^{re.escape(message)}$"):
        pipeline.finish(place / "cut.wav", out=tmp_path / "f", settings={"expander.range_db": 3})
    finished = pipeline.finish(place / "cut.wav", out=tmp_path / "f", settings={"limiter.release_s": 0.3})
    assert finished.session.settings.limiter.release_s == 0.3


def test_sources_are_never_replaced(place: Path, tmp_path: Path) -> None:
    """The folder that holds a file of the cut is not replaced."""
    shutil.copytree(place / "out", tmp_path / "out")
    with pytest.raises(OutputError, match=r"holds the source mix\.wav and will not be replaced"):
        pipeline.finish(tmp_path / "out" / "mix.wav", out=tmp_path / "out", replace=True)


def test_the_command_says_what_the_mix_reads(place: Path, tmp_path: Path) -> None:
    """`leveller finish` writes beside, prints the delivery, and ends with 0."""
    ran = subprocess.run(
        [sys.executable, "-m", "leveller", "finish", str(place / "cut.wav"), "--delivery", "r128"],
        capture_output=True, text=True, check=False, cwd=tmp_path)
    assert (ran.returncode, ran.stderr) == (0, "")
    assert ran.stdout.startswith("Delivery met: -23.0")
    assert (tmp_path / "levelled" / "cut finished" / "mix.wav").is_file()


def test_the_command_says_where_to_listen(tmp_path: Path) -> None:
    """What stands out is printed as a session's places are, the strongest first; no figure of speech is left blank."""
    wave = np.random.default_rng(5).uniform(-0.1, 0.1, 30 * RATE_HZ)
    wave[10 * RATE_HZ : 16 * RATE_HZ] = 0
    wave[20 * RATE_HZ : 20 * RATE_HZ + 320] = 1.0
    sf.write(tmp_path / "cut.wav", wave, RATE_HZ, subtype="PCM_24")
    ran = subprocess.run([sys.executable, "-m", "leveller", "finish", "cut.wav", "--delivery", "r128"],
                         capture_output=True, text=True, check=False, cwd=tmp_path)
    lines = ran.stdout.splitlines()
    at = lines.index("Listen here first")
    assert lines[at + 1 : at + 3] == [
        "  0:00:10 mix: silence, under -63 LUFS for 6.0 s",
        "  0:00:20 cut: full scale, maybe clipped, for 0.02 s in all"]
    assert not [line for line in lines if line.startswith("  speech")]


def test_floats_over_full_scale_are_no_place_to_hear(tmp_path: Path) -> None:
    """Stems as leveller writes them may pass full scale: said with peak and time, and nothing to listen for."""
    wave = np.random.default_rng(6).uniform(-0.1, 0.1, 10 * RATE_HZ).astype(np.float32)
    wave[4 * RATE_HZ + 8] = 2.0
    sf.write(tmp_path / "stem.wav", wave, RATE_HZ, subtype="FLOAT")
    finished = pipeline.finish(tmp_path / "stem.wav", out=tmp_path / "out", delivery="r128")
    assert [(fault.kind, fault.sentence, fault.places) for fault in finished_figures(finished).faults][-1] == (
        "over full scale", "stem: peaks reach +6.0 dBFS; the file holds floats, so nothing is lost", ((4.0, 4.0),))
    assert not [spot for spot in spots_to_hear(finished) if spot.kind == "full scale"]
