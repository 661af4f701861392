"""leveller.pipeline.render_again and leveller.kept: rendered again from edited automation, nothing measured twice."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from pathlib import Path

import again
import numpy as np
import pyebur128
import pytest
import soundfile as sf

from leveller import kept, pipeline
from leveller.errors import AutomationError
from leveller.report.figures import figures_of
from leveller.session import open_session

LUFS_BAND = 0.1  # of the target; EBU R 128 allows 0.2 LU
TEXTS = ("automation.csv", "speech.csv", "mix.csv", "report.json")
PCM24_STEP = 2.0**-23


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A session in `in`, processed into `out`."""
    folder = tmp_path_factory.mktemp("rerender")
    again.recorded(folder / "in")
    pipeline.process(folder / "in", out=folder / "out")
    return folder


@pytest.fixture
def no_measuring(monkeypatch: pytest.MonkeyPatch) -> None:
    """A second measurement fails the test."""
    def fail(*_: object, **__: object) -> None:
        raise AssertionError("measured again")
    monkeypatch.setattr(pipeline, "measure", fail)


def test_unedited_automation_gives_the_same_bytes(place: Path, tmp_path: Path, no_measuring: None) -> None:
    """Stems, mix and tables of an unedited file are those of process, byte for byte, without a second measurement."""
    result = pipeline.render_again(place / "in", place / "out" / "automation.csv", out=tmp_path / "b")
    assert again.wavs(tmp_path / "b") == again.wavs(place / "out")
    for name in TEXTS:
        assert (tmp_path / "b" / name).read_bytes() == (place / "out" / name).read_bytes(), name
    assert result.session.notes == ()


def test_unedited_automation_gives_the_same_limited_stems(place: Path, tmp_path: Path) -> None:
    """The same with stems after the limiter and another delivery."""
    pipeline.process(place / "in", out=tmp_path / "a", stems="limited", delivery="r128")
    pipeline.render_again(
        place / "in", tmp_path / "a" / "automation.csv", out=tmp_path / "b", stems="limited", delivery="r128")
    assert again.wavs(tmp_path / "b") == again.wavs(tmp_path / "a")


def test_an_edited_row_is_exactly_what_is_heard(place: Path, tmp_path: Path) -> None:
    """Between two edited rows the stem is the source times the edited gain and the make-up; elsewhere as before."""
    rows = again.rows_of(place / "out" / "automation.csv")
    track, from_s, to_s, gain_db = "seat 2", 8.0, 9.5, -6.5
    kept_rows = [row for row in rows
                 if row["track"] != track or not from_s - 0.01 <= float(row["time_s"]) <= to_s + 0.01]
    curve = [(float(row["time_s"]), float(row["gain_db"])) for row in rows if row["track"] == track]
    for time_s, gain in ((from_s - 0.01, None), (from_s, gain_db), (to_s, gain_db), (to_s + 0.01, None)):
        level = np.interp(time_s, *zip(*curve, strict=True)) if gain is None else gain
        kept_rows.append({"time_s": f"{time_s:.2f}", "track": track, "gain_db": f"{level:.2f}"})
    names = [row["track"] for row in rows[:3]]
    kept_rows.sort(key=lambda row: (float(row["time_s"]), names.index(row["track"])))
    full = [{key: row.get(key, "") for key in rows[0]} for row in kept_rows]
    edited = again.write_rows(tmp_path / "edited.csv", full)
    result = pipeline.render_again(place / "in", edited, out=tmp_path / "b")
    source, rate_hz = sf.read(place / "in" / f"{track}.wav", dtype="float64")
    stem, _ = sf.read(tmp_path / "b" / "stems" / f"{track}.wav", dtype="float64")
    part = slice(round((from_s + 0.01) * rate_hz), round((to_s - 0.01) * rate_hz))
    heard_db = 20 * np.log10(np.dot(stem[part], source[part]) / np.dot(source[part], source[part]))
    assert heard_db - result.mix.make_up_db == pytest.approx(gain_db, abs=0.001)
    error = stem[part] - source[part] * 10 ** (heard_db / 20)
    assert np.abs(error).max() < 4 * np.finfo(np.float32).eps * np.abs(stem[part]).max()
    before = sf.read(place / "out" / "stems" / f"{track}.wav", dtype="float64")[0]
    away = slice(0, round((from_s - 0.5) * rate_hz))
    make_up_db = result.mix.make_up_db - json.loads((place / "out" / "report.json").read_text())["mix"]["make_up_db"]
    assert np.allclose(stem[away], before[away] * 10 ** (make_up_db / 20), rtol=2e-3, atol=1e-7)
    kinds = [fault.kind for fault in figures_of(result).faults]
    assert "knob" not in kinds, "an edited gain is no turned recording gain"


def test_the_delivery_is_met_again(place: Path, tmp_path: Path) -> None:
    """However the gains are edited, the mix reads the target, by libebur128."""
    rows = again.rows_of(place / "out" / "automation.csv")
    for row in rows:
        row["gain_db"] = f"{float(row['gain_db']) - 9:.2f}"
    result = pipeline.render_again(
        place / "in", again.write_rows(tmp_path / "edited.csv", rows), out=tmp_path / "b", delivery="podcast-stereo")
    samples, rate_hz = sf.read(tmp_path / "b" / "mix.wav", always_2d=True)
    meter = pyebur128.R128State(samples.shape[1], rate_hz, pyebur128.MeasurementMode.MODE_I)
    meter.add_frames(samples.ravel(), len(samples))
    assert samples.shape[1] == 2
    assert pyebur128.get_loudness_global(meter) == pytest.approx(-16.0, abs=LUFS_BAND)
    assert result.mix.met


def test_a_changed_delivery_is_said(place: Path, tmp_path: Path) -> None:
    """Where the report beside the file was made for another delivery, that is a note."""
    result = pipeline.render_again(
        place / "in", place / "out" / "automation.csv", out=tmp_path / "b", delivery="r128")
    assert result.session.notes == (
        "delivery: podcast-mono (-19.0 LUFS, -1.0 dBTP) in the report.json beside the automation, "
        "r128 (-23.0 LUFS, -1.0 dBTP) by session and options now",
        "channels: 1 in the report.json beside the automation, 2 by session and options now")


def test_options_without_effect_are_said(place: Path, tmp_path: Path) -> None:
    """Settings of other stages than the limiter, and corrections, change no gain of a file: said, and so it is."""
    file = tmp_path / "corrections.csv"
    file.write_text("track,from_s,to_s,decide\nseat 1,1,2,own\n")
    result = pipeline.render_again(
        place / "in", place / "out" / "automation.csv", out=tmp_path / "b", corrections=file,
        settings={"expander.range_db": 3, "limiter.release_s": 0.1})
    assert result.session.notes == (
        "--set expander.range_db: no effect, the gains come from the automation file",
        "corrections.csv: changes the states in the tables only, the gains come from the automation file")
    assert again.wavs(tmp_path / "b") == again.wavs(place / "out")


def test_rendered_files_can_be_edited_again(place: Path, tmp_path: Path) -> None:
    """The automation written by a render holds the edit, its parts add up, and it renders to the same bytes."""
    rows = again.rows_of(place / "out" / "automation.csv")
    rows[7]["gain_db"] = f"{float(rows[7]['gain_db']) + 2.5:.2f}"
    edited = again.write_rows(tmp_path / "edited.csv", rows)
    pipeline.render_again(place / "in", edited, out=tmp_path / "b")
    pipeline.render_again(place / "in", tmp_path / "b" / "automation.csv", out=tmp_path / "c")
    assert again.wavs(tmp_path / "c") == again.wavs(tmp_path / "b")
    assert (tmp_path / "c" / "automation.csv").read_bytes() == (tmp_path / "b" / "automation.csv").read_bytes()
    assert again.rows_of(tmp_path / "b" / "automation.csv")[7]["cause"] == "edit"


@pytest.mark.parametrize("where", ["beside", "elsewhere"])
def test_an_edited_part_is_refused_wherever_the_file_lies(place: Path, tmp_path: Path, where: str) -> None:
    """A part edited without its gain is found by the rows kept in the folder, or else by planning once more."""
    home = tmp_path / "home"
    if where == "beside":
        shutil.copytree(place / "out", home)
    else:
        home.mkdir()
    rows = again.rows_of(place / "out" / "automation.csv")
    rows[9]["expander_db"] = f"{float(rows[9]['expander_db']) - 3:.2f}"
    edited = again.write_rows(home / "automation.csv", rows)
    message = r"^automation\.csv, line 11: .* Only gain_db is rendered: change that instead$"
    with pytest.raises(AutomationError, match=message):
        pipeline.render_again(place / "in", edited, out=tmp_path / "b")
    assert not (tmp_path / "b").exists()


def test_the_command_refuses_with_one_line(place: Path, tmp_path: Path) -> None:
    """`leveller render` ends with exit code 6, one line on stderr, and nothing written."""
    rows = again.rows_of(place / "out" / "automation.csv")
    rows[4]["gain_db"] = "41"
    edited = again.write_rows(tmp_path / "edited.csv", rows)
    ran = subprocess.run(
        [sys.executable, "-m", "leveller", "render", str(place / "in"), "--automation", str(edited), "--out",
         str(tmp_path / "b")], capture_output=True, text=True, check=False)
    assert (ran.returncode, ran.stdout) == (6, "")
    assert ran.stderr == "leveller: edited.csv, line 6: gain_db = 41: expected -120 to +40 dB\n"
    assert not (tmp_path / "b").exists()


def test_a_file_in_the_replaced_folder_stays(place: Path, tmp_path: Path) -> None:
    """An edited copy that lies in the folder to be replaced is still there afterwards."""
    shutil.copytree(place / "out", tmp_path / "out")
    edited = shutil.copy(tmp_path / "out" / "automation.csv", tmp_path / "out" / "mine.csv")
    text = edited.read_bytes()
    pipeline.render_again(place / "in", edited, out=tmp_path / "out", replace=True)
    assert edited.read_bytes() == text


def test_a_second_run_into_the_folder_measures_nothing(place: Path, tmp_path: Path, no_measuring: None) -> None:
    """process into a folder of the same session takes the measurements from it, with the same bytes as before."""
    shutil.copytree(place, tmp_path / "all")  # times of change are copied too
    pipeline.process(tmp_path / "all" / "in", out=tmp_path / "all" / "out", replace=True)
    for path in sorted(path for path in (place / "out").rglob("*") if path.is_file()):
        assert (tmp_path / "all" / path.relative_to(place)).read_bytes() == path.read_bytes(), path.name


def test_changed_sources_are_measured_again(place: Path, tmp_path: Path) -> None:
    """Other samples, or a later time of change, and the kept measurements do not count."""
    shutil.copytree(place / "in", tmp_path / "in")  # times of change are copied too
    path = tmp_path / "in" / "seat 1.wav"
    assert kept.kept_measurements(place / "out", open_session([tmp_path / "in"])) is not None
    later = path.stat().st_mtime_ns + 10**9
    os.utime(path, ns=(later, later))
    assert kept.kept_measurements(place / "out", open_session([tmp_path / "in"])) is None
    os.utime(path, ns=(later - 10**9, later - 10**9))
    assert kept.kept_measurements(place / "out", open_session([tmp_path / "in"])) is not None
    samples, rate_hz = sf.read(path)
    samples[-5] += 4 * PCM24_STEP
    sf.write(path, samples, rate_hz, subtype="PCM_24")
    os.utime(path, ns=(later - 10**9, later - 10**9))
    assert kept.kept_measurements(place / "out", open_session([tmp_path / "in"])) is None


@pytest.mark.parametrize("damage", ["cut", "flipped", "emptied", "text", "gone"])
def test_a_damaged_file_is_measured_again(place: Path, tmp_path: Path, damage: str) -> None:
    """Damage of any kind to what is kept is no error: there is just nothing kept."""
    session = open_session([place / "in"])
    shutil.copytree(place / "out", tmp_path / "out")
    file = tmp_path / "out" / kept.MEASUREMENTS_FILE
    data = bytearray(file.read_bytes())
    if damage == "flipped":
        data[len(data) // 2] ^= 255
    content = {"cut": data[: len(data) // 2], "flipped": data, "emptied": b"", "text": b"no zip at all"}
    file.unlink()
    if damage in content:
        file.write_bytes(content[damage])
    assert kept.kept_measurements(tmp_path / "out", session) is None
    result = pipeline.process(place / "in", out=tmp_path / "out", replace=True)
    assert again.wavs(tmp_path / "out") == again.wavs(place / "out")
    assert kept.kept_measurements(result.out, session) is not None


def test_what_is_kept_is_small(place: Path) -> None:
    """An hour of three tracks is kept in less than 60 MB."""
    size = (place / "out" / kept.MEASUREMENTS_FILE).stat().st_size
    assert size * 3600 / again.SPEC.seconds < 60e6
