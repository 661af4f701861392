"""Times of skips, corrections and tables of a session whose tracks were lined up: placed as meant, or refused."""

from __future__ import annotations

import csv
import dataclasses
import json
import re
import shutil
from pathlib import Path

import numpy as np
import pytest
import soundfile as sf
from conversations import ConversationSpec, simulate

from leveller import cli
from leveller.session import open_session
from leveller.sessionfile import Correction, Skip
from leveller.timeline import retimed

RATE_HZ = 16_000
EARLY_S = 5.0  # guest's recorder was started so much before host's
ALIGNED = r"aligned\+(4\.99[89]\d|5\.00[01]\d)"
BY_DB = -30.0


@pytest.fixture(scope="module")
def talk(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two recorders, the second started earlier; beside it the run with --align and the one without."""
    folder = tmp_path_factory.mktemp("talk")
    mics = simulate(ConversationSpec(seed=5, seconds=60, rate_hz=RATE_HZ, room="desk", people=2)).mics
    early = np.concatenate([np.zeros(round(EARLY_S * RATE_HZ), np.float32), mics[:, 1]])
    (folder / "in").mkdir()
    for name, samples in (("guest", early), ("host", mics[:, 0])):
        sf.write(folder / "in" / f"{name}.wav", samples, RATE_HZ, subtype="PCM_24")
    (folder / "in" / "session.toml").write_text('[[track]]\nfile = "host.wav"\n[[track]]\nfile = "guest.wav"\n',
                                                encoding="utf-8")
    assert run("process", folder / "in", "--align", "--out", folder / "aligned", "--quiet") == 0
    assert run("process", folder / "in", "--out", folder / "plain", "--quiet") == 0
    return folder


def run(*words: object) -> int:
    """The exit code of a command."""
    with pytest.raises(SystemExit) as left:
        cli.main([str(word) for word in words])
    return int(left.value.code or 0)


def refused(capsys: pytest.CaptureFixture[str], out: Path, *words: object) -> str:
    """The one line of a command that refuses a table, and leaves nothing."""
    capsys.readouterr()
    assert run(*words, "--out", out) == 6
    said = capsys.readouterr()
    assert said.out == ""
    assert not out.exists()
    assert said.err.count("\n") == 1
    return said.err


def corrections(path: Path, *rows: str, column: str = ",timeline") -> Path:
    """A corrections.csv."""
    path.write_text("\n".join([f"track,from_s,to_s,decide,gain_db{column}", *rows]) + "\n", encoding="utf-8")
    return path


def gains(folder: Path, track: str) -> tuple[np.ndarray, np.ndarray]:
    """Times and auto_trim_db of a track's breakpoints."""
    with open(folder / "automation.csv", encoding="utf-8", newline="") as file:
        rows = [row for row in csv.DictReader(file) if row["track"] == track]
    return np.array([float(r["time_s"]) for r in rows]), np.array([float(r["auto_trim_db"]) for r in rows])


def turned_down(before: Path, after: Path, track: str) -> tuple[float, float]:
    """From and to when the trim of a track is lower by all of `BY_DB`."""
    grid = np.arange(0, 65, 0.01)
    one, two = (np.interp(grid, *gains(folder, track)) for folder in (before, after))
    there = grid[two - one < BY_DB + 0.2]
    assert len(there)
    return float(there[0]), float(there[-1])


def test_times_of_session_toml_move_along(talk: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """What session.toml says of the session as opened lands on the same sound of the same track, and that is said."""
    shutil.copytree(talk / "in", tmp_path / "in")
    with open(tmp_path / "in" / "session.toml", "a", encoding="utf-8") as file:
        file.write('[[skip]]\nfrom_s = 1\nto_s = 3\nwhy = "slate"\n')
        for track, at_s in (("host", 20), ("guest", 30)):
            file.write(f'[[correction]]\ntrack = "{track}"\nfrom_s = {at_s}\nto_s = {at_s + 1}\ngain_db = {BY_DB}\n')
    assert run("process", tmp_path / "in", "--align", "--out", tmp_path / "out") == 0
    said = capsys.readouterr().out
    assert "1 skip and 2 corrections: given in times of the session as opened, moved along with the tracks" in said
    assert "the session begins 5.000 s earlier, with the earliest track" in said
    assert turned_down(talk / "aligned", tmp_path / "out", "host") == pytest.approx((25, 26), abs=0.02)
    assert turned_down(talk / "aligned", tmp_path / "out", "guest") == pytest.approx((30, 31), abs=0.02)
    skip = next(f for f in json.loads((tmp_path / "out" / "report.json").read_text())["faults"] if f["kind"] == "skip")
    assert skip["places"] == [pytest.approx([6, 8], abs=0.01)]


def test_corrections_of_an_aligned_run_stay_where_they_were_made(talk: Path, tmp_path: Path) -> None:
    """A corrections.csv that says `aligned`, with its zero or without, counts from the aligned timeline."""
    for name, said in (("one", timeline(talk)), ("two", "aligned")):
        file = corrections(tmp_path / f"{name}.csv", f"host,25,26,,{BY_DB},{said}")
        assert run("process", talk / "in", "--align", "--corrections", file, "--out", tmp_path / name, "--quiet") == 0
        assert turned_down(talk / "aligned", tmp_path / name, "host") == pytest.approx((25, 26), abs=0.02)


def timeline(talk: Path) -> str:
    """What the aligned run calls its times."""
    said = json.loads((talk / "aligned" / "report.json").read_text())["timeline"]
    assert re.fullmatch(ALIGNED, said)
    return str(said)


def test_a_correction_behind_the_end_as_opened_is_taken(talk: Path, tmp_path: Path) -> None:
    """The aligned session may be longer than the one as opened, and its end may be corrected."""
    shutil.copytree(talk / "in", tmp_path / "in")
    samples, _ = sf.read(tmp_path / "in" / "guest.wav", dtype="float32")
    sf.write(tmp_path / "in" / "guest.wav", samples[: 60 * RATE_HZ], RATE_HZ, subtype="PCM_24")
    file = corrections(tmp_path / "c.csv", f"host,63,64,,{BY_DB},aligned")
    assert run("process", tmp_path / "in", "--align", "--corrections", file, "--out", tmp_path / "out", "--quiet") == 0
    assert run("process", tmp_path / "in", "--align", "--out", tmp_path / "bare", "--quiet") == 0
    assert turned_down(tmp_path / "bare", tmp_path / "out", "host") == pytest.approx((63, 64), abs=0.02)


def test_corrections_as_opened_go_with_their_track(talk: Path, tmp_path: Path) -> None:
    """A corrections.csv that says `opened` is moved along under --align, and stands as it is without."""
    file = corrections(tmp_path / "c.csv", f"host,20,21,,{BY_DB},opened")
    for name, words, expected in (("aligned", ["--align"], (25, 26)), ("plain", [], (20, 21))):
        assert run("process", talk / "in", *words, "--corrections", file, "--out", tmp_path / name, "--quiet") == 0
        assert turned_down(talk / name, tmp_path / name, "host") == pytest.approx(expected, abs=0.02)


def test_a_correction_that_may_mean_two_places_is_refused(
    talk: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Without the column a correction of a moved track is refused; of one that lies the same either way it is taken."""
    unsure = corrections(tmp_path / "unsure.csv", f"host,20,21,,{BY_DB}", column="")
    line = refused(capsys, tmp_path / "out", "process", talk / "in", "--align", "--corrections", unsure)
    assert re.fullmatch(
        r"leveller: unsure\.csv, line 2: "
        r"correction of host, from_s = 20: --align moves this by \+(4\.99|5\.00)\d s, and nothing says which "
        r"times are meant\. Add a column timeline: opened \(as the files lie\) or aligned \(as in the tables of a run "
        r"with --align\)\n", line)
    same = corrections(tmp_path / "same.csv", f"guest,30,31,,{BY_DB}", column="")
    assert run("process", talk / "in", "--align", "--corrections", same, "--out", tmp_path / "out", "--quiet") == 0
    assert turned_down(talk / "aligned", tmp_path / "out", "guest") == pytest.approx((30, 31), abs=0.02)


def test_aligned_tables_need_align(talk: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Corrections, speech.csv and automation.csv of an aligned run are refused where --align is not given."""
    file = corrections(tmp_path / "c.csv", f"host,25,26,,{BY_DB},{timeline(talk)}")
    speech, automation = talk / "aligned" / "speech.csv", talk / "aligned" / "automation.csv"
    for words in (["process", talk / "in", "--corrections", file], ["process", talk / "in", "--corrections", speech],
                  ["render", talk / "in", "--automation", automation]):
        line = refused(capsys, tmp_path / "out", *words)
        assert line.endswith(f"its times ({timeline(talk)}) are of a session whose tracks --align had lined up; they "
                             "are not now. Give --align here too\n")


def test_tables_as_opened_are_refused_by_align(
    talk: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """A speech.csv or automation.csv of a run without --align describes other times than the aligned session has."""
    for words in (["process", talk / "in", "--corrections", talk / "plain" / "speech.csv"],
                  ["render", talk / "in", "--automation", talk / "plain" / "automation.csv"]):
        line = refused(capsys, tmp_path / "out", *words, "--align")
        assert re.fullmatch(r"leveller: (speech|automation)\.csv: was written before the tracks were lined up, so its "
                            r"times are others\. Take that of a run with --align, or leave --align out\n", line)


def test_tables_of_another_alignment_are_refused(
    talk: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Where the session is lined up otherwise than when a table was written, the table is refused."""
    file = corrections(tmp_path / "c.csv", f"host,25,26,,{BY_DB},aligned+4.2000")
    line = refused(capsys, tmp_path / "out", "process", talk / "in", "--align", "--corrections", file)
    assert re.fullmatch(r"leveller: c\.csv, line 2: "
                        r"correction of host, from_s = 25: its times \(aligned\+4\.2000\) are of a "
                        rf"session lined up otherwise, now it is {ALIGNED}\. Make it again from this "
                        r"session's own report\n", line)
    file = corrections(tmp_path / "c.csv", f"host,25,26,,{BY_DB},moved")
    line = refused(capsys, tmp_path / "out", "process", talk / "in", "--align", "--corrections", file)
    assert line == ("leveller: c.csv, line 2: timeline = 'moved': expected opened (as the files lie), or aligned (as "
                    "in the tables of a run with --align)\n")


def test_tables_name_their_timeline(talk: Path, tmp_path: Path) -> None:
    """All tables with times of one track say `aligned`; those of a run without --align have no such column."""
    for name in ("automation.csv", "speech.csv", "listen.csv"):
        with open(talk / "aligned" / name, encoding="utf-8", newline="") as file:
            rows = list(csv.DictReader(file))
        assert {row["timeline"] for row in rows} <= {timeline(talk)}, name
        assert rows or name == "listen.csv"
        assert "timeline" not in (talk / "plain" / name).read_text(encoding="utf-8"), name
    assert f'"timeline":"{timeline(talk)}"' in (talk / "aligned" / "report.html").read_text(encoding="utf-8")
    assert '"timeline":"opened"' in (talk / "plain" / "report.html").read_text(encoding="utf-8")
    assert json.loads((talk / "plain" / "report.json").read_text())["timeline"] == "opened"


def test_an_aligned_speech_table_is_taken_as_it_is(talk: Path, tmp_path: Path) -> None:
    """The speech.csv of an aligned run, not edited, changes nothing of the next one, also with a cell left empty."""
    text = (talk / "aligned" / "speech.csv").read_text(encoding="utf-8").splitlines()
    text[1] = text[1].removesuffix(timeline(talk))
    (tmp_path / "speech.csv").write_text("\n".join(text) + "\n", encoding="utf-8")
    assert run("process", talk / "in", "--align", "--corrections", tmp_path / "speech.csv", "--out", tmp_path / "out",
               "--quiet") == 0
    assert (tmp_path / "out" / "mix.wav").read_bytes() == (talk / "aligned" / "mix.wav").read_bytes()


def test_a_correction_follows_the_clock_of_its_track(tmp_path: Path) -> None:
    """Late in a long session a track whose clock is fast takes its correction along; a skip follows the reference."""
    for name in ("first", "second"):
        sf.write(tmp_path / f"{name}.wav", np.zeros(RATE_HZ, np.float32), RATE_HZ)
    opened = open_session([tmp_path])
    opened = dataclasses.replace(
        opened, frames=4000 * RATE_HZ, skips=(Skip(3000.0, 3001.0, ""),),
        corrections=tuple(Correction(name, 3000.0, 3001.0, "own", None, "opened") for name in ("first", "second")))
    second = dataclasses.replace(opened.tracks[1], offset_frames=2 * RATE_HZ, clock_ppm=300.0)
    lined_up = dataclasses.replace(opened, tracks=(opened.tracks[0], second), zero_s=0.0)
    placed = retimed(opened, lined_up)
    assert placed.skips[0].from_s == placed.corrections[0].from_s == 3000.0
    assert placed.corrections[1].from_s == pytest.approx(2 + 3000 / 1.0003)
    assert placed.corrections[1].to_s == pytest.approx(2 + 3001 / 1.0003)
    early = dataclasses.replace(opened.tracks[1], offset_frames=0, clock_ppm=0.0)
    late = dataclasses.replace(early, offset_frames=4 * RATE_HZ)
    later = dataclasses.replace(opened, tracks=(opened.tracks[0], late))
    before = dataclasses.replace(later, corrections=(Correction("second", 0.5, 1.5, "own", None, "opened"),))
    gone = dataclasses.replace(before, tracks=opened.tracks, zero_s=0.0)
    placed = retimed(before, gone)
    assert placed.corrections == ()
    assert "correction of second, from_s = 0.5: lies before anything sounds once lined up, left out" in placed.notes
