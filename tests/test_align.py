"""Tracks that do not line up: found to a millisecond and a part per million, said, put right; the others untouched."""

from __future__ import annotations

import dataclasses
import json
from functools import lru_cache
from pathlib import Path

import numpy as np
import pytest
import soundfile as sf
from conversations import simulate
from recorders import RATE_HZ, TALK, alone, clocked, opened, talk, written

from leveller import cli
from leveller.align import LONGEST_WAY_S, Alignment, aligned, find_alignment, misaligned
from leveller.audio import open_readers
from leveller.kept import keep_measurements, kept_measurements
from leveller.measure import Measurements, measure
from leveller.measure.clocks import spread_places
from leveller.measure.levels import SILENT
from leveller.measure.onsets import ENOUGH_SCORE, common_line, onsets
from leveller.pipeline import process
from leveller.session import Session, open_session
from leveller.suspects import alignment_notes

OFFSET_BAND_S = 0.001  # what we promise (docs/alignment.md): within 1 ms
DRIFT_BAND_PPM = 1.0  # what we promise (docs/alignment.md): within 1 ppm over an hour
HOUR_PIECES_S = (20, 1200, 2400, 3520)  # where half a minute of talk each lies in the hour


@lru_cache(maxsize=1)
def minutes() -> list[np.ndarray]:
    """Four stretches of one conversation between two."""
    return np.split(simulate(dataclasses.replace(TALK, seconds=120)).mics, 4)


def hour(offset_s: float, ppm: float) -> list[np.ndarray]:
    """Two microphones for an hour, silent but for four stretches of one conversation; the second on its own clock.

    Each stretch is put at the nearest frame: 0.03 ms, or 0.01 ppm over an hour.
    """
    out = [np.zeros(3600 * RATE_HZ, np.float32) for _ in range(2)]
    for piece, at_s in zip(minutes(), HOUR_PIECES_S, strict=True):
        there = round((at_s * (1 + ppm * 1e-6) + offset_s) * RATE_HZ)
        for track, at, samples in zip(out, (at_s * RATE_HZ, there), (piece[:, 0], clocked(piece[:, 1], ppm=ppm)),
                                      strict=True):
            track[at : at + len(samples)] = samples
    return out


def of(found: tuple[Alignment, ...], name: str) -> Alignment:
    """One track's record."""
    return next(a for a in found if a.track == name)


@pytest.mark.parametrize(("offset_s", "ppm"), [(0.2, 0.0), (-5.0, 100.0), (12.0, -300.0)])
def test_offset_and_drift_of_a_minute_are_found(tmp_path: Path, offset_s: float, ppm: float) -> None:
    """A track that starts and runs differently is found to the millisecond; a minute shows the drift to a few ppm."""
    mics = talk()
    session, m = opened(written(tmp_path, mics[:, 0], clocked(mics[:, 1], offset_s=offset_s, ppm=ppm)))
    guest = of(find_alignment(session, m), "second")
    assert guest.offset_s == pytest.approx(offset_s, abs=OFFSET_BAND_S)
    assert guest.drift_ppm == pytest.approx(ppm, abs=5.0)
    assert guest.confidence > 0.5
    assert guest.against == "first"


@pytest.mark.parametrize(("offset_s", "ppm"), [(40.0, 3.0), (-5.0, 30.0), (0.2, -300.0)])
def test_drift_within_one_ppm_over_an_hour(tmp_path: Path, offset_s: float, ppm: float) -> None:
    """Over an hour the offset is found within 1 ms and the drift within 1 ppm."""
    session, m = _measured_where_it_sounds(tmp_path, *hour(offset_s, ppm))
    guest = of(find_alignment(session, m), "second")
    assert guest.drift_ppm == pytest.approx(ppm, abs=DRIFT_BAND_PPM)
    assert guest.offset_s == pytest.approx(offset_s, abs=OFFSET_BAND_S)


def _measured_where_it_sounds(folder: Path, *tracks: np.ndarray) -> tuple[Session, Measurements]:
    """An hour's levels without the time of a whole measurement: only stretches that sound are measured."""
    from leveller.measure.bands import BANDS, BandMeter

    session = open_session([written(folder, *tracks)])
    hops = session.frames // (RATE_HZ // 100)
    short = measure(open_session([written(folder / "short", *(x[: 2 * RATE_HZ] for x in tracks))]))
    levels = np.full((hops, len(tracks), BANDS), SILENT, np.int16)
    voice = np.full((hops, len(tracks)), SILENT, np.int16)
    for i, x in enumerate(tracks):
        for at_s in HOUR_PIECES_S:
            first = max(at_s - 8, 0)
            meter = BandMeter()
            meter.push(x[first * RATE_HZ : (at_s + 75) * RATE_HZ])
            got = meter.result()[: hops - first * 100]
            levels[first * 100 : first * 100 + len(got), i] = got[:, :BANDS]
            voice[first * 100 : first * 100 + len(got), i] = got[:, BANDS + 1]
    return session, dataclasses.replace(short, levels=levels, voice_levels=voice)


def test_a_clap_alone_is_enough(tmp_path: Path) -> None:
    """Two recordings that share nothing but one clap are lined up by it."""
    rng = np.random.default_rng(3)
    clap = (rng.standard_normal(RATE_HZ // 20) * np.exp(-np.arange(RATE_HZ // 20) / 120)).astype(np.float32) * 0.4
    tracks = [alone(seed, voice) for seed, voice in ((31, "woman_en"), (51, "man_commands"))]
    for track in tracks:
        track[6 * RATE_HZ : 6 * RATE_HZ + len(clap)] += clap
    session, m = opened(written(tmp_path, tracks[0], clocked(tracks[1], offset_s=7.5)))
    guest = of(find_alignment(session, m), "second")
    assert guest.offset_s == pytest.approx(7.5, abs=OFFSET_BAND_S)
    assert guest.drift_ppm == 0.0


def test_tracks_without_common_sound_are_left_alone_and_named(tmp_path: Path) -> None:
    """Where two tracks share no sound nothing is moved, and the track is named; without --align nothing is said."""
    session, m = opened(written(tmp_path, alone(31, "woman_en"), alone(51, "man_commands")))
    found = find_alignment(session, m)
    assert of(found, "second") == Alignment("second", "first", None, None, None, 0.0)
    result = aligned(session, found)
    assert result.tracks == session.tracks
    assert result.notes[-1] == "second: no sound in common with the other tracks, so it was not aligned"
    assert alignment_notes(session, m) == ()


def test_chance_stays_under_the_score_that_counts(tmp_path: Path) -> None:
    """Onsets of two recordings without a common sound reach less than half of what is taken for one."""
    scores = []
    for k in range(3):
        session, m = opened(written(tmp_path / str(k), alone(60 + k, "woman_en"), alone(70 + k, "man_commands")))
        assert len(session.tracks) == 2
        scores.append(common_line(onsets(m.levels[:, 0]), onsets(m.levels[:, 1])).score)
    assert max(scores) < ENOUGH_SCORE / 2


def test_the_correction_lines_the_tracks_up(tmp_path: Path) -> None:
    """What the readers of the aligned session give has no offset and no drift left, and the polarity is right."""
    mics = talk()
    session, m = opened(written(tmp_path, mics[:, 0], -clocked(mics[:, 1], offset_s=0.2, ppm=100.0)))
    lined_up = aligned(session, find_alignment(session, m))
    assert lined_up.tracks[1].clock_ppm == pytest.approx(100.0, abs=5.0)
    again = of(find_alignment(lined_up, measure(lined_up)), "second")
    assert not misaligned(lined_up, again)
    assert again.polarity == 1
    with open_readers(lined_up) as readers:
        host, guest = (reader.read(lined_up.frames) for reader in readers)
    zero = lined_up.tracks[0].offset_frames
    assert zero == pytest.approx(0.2 * RATE_HZ, abs=OFFSET_BAND_S * RATE_HZ)
    assert np.array_equal(host[zero : zero + 4 * RATE_HZ], _as_read(session)[: 4 * RATE_HZ])
    for at in (5 * RATE_HZ, 45 * RATE_HZ):
        true, got = mics[at : at + RATE_HZ, 1], guest[zero + at : zero + at + RATE_HZ]
        best = np.correlate(got[200:-200].astype(float), true.astype(float), "full")
        lag = int(best.argmax()) - (len(true) - 1) + 200
        assert abs(lag) <= OFFSET_BAND_S * RATE_HZ


def _as_read(session: Session) -> np.ndarray:
    """The first track as its session reads it."""
    with open_readers(session) as readers:
        return readers[0].read(session.frames)


def test_nothing_of_a_track_is_cut(tmp_path: Path) -> None:
    """A track that began before the reference keeps its beginning: all move later together, and that is said."""
    mics = talk()
    session, m = opened(written(tmp_path, mics[:, 0], clocked(mics[:, 1], offset_s=5.0)))
    lined_up = aligned(session, find_alignment(session, m))
    assert lined_up.tracks[0].offset_frames == pytest.approx(5 * RATE_HZ, abs=16)
    assert lined_up.tracks[1].offset_frames == 0
    assert lined_up.frames == max(t.offset_frames + t.frames for t in lined_up.tracks)
    assert "the session begins 5.000 s earlier" in lined_up.notes[-1]


def test_a_session_that_lines_up_is_not_touched(tmp_path: Path) -> None:
    """With and without --align every file of an aligned session has the same bytes, but for the fingerprint."""
    folder = written(tmp_path / "in", *talk().T)
    session, m = opened(folder)
    assert aligned(session, find_alignment(session, m)) is session
    assert alignment_notes(session, m) == ()
    process(folder, out=tmp_path / "plain")
    process(folder, out=tmp_path / "aligned", align=True)
    names = sorted(p.relative_to(tmp_path / "plain") for p in (tmp_path / "plain").rglob("*") if p.is_file())
    assert names
    for name in names:
        plain, right = ((tmp_path / out / name).read_bytes() for out in ("plain", "aligned"))
        if name.name == "report.json":
            said = [json.loads(text) for text in (plain, right)]
            assert said[0].pop("fingerprint") != said[1].pop("fingerprint")
            assert said[0] == said[1]
        else:
            assert plain == right, name


def test_process_warns_and_align_corrects(tmp_path: Path) -> None:
    """`process` says that a track is late and leaves it; with `align` it is put right and that is said."""
    mics = talk()
    folder = written(tmp_path / "in", mics[:, 0], clocked(mics[:, 1], offset_s=0.2))
    plain = process(folder, out=tmp_path / "plain")
    assert [note for note in plain.session.notes if note.startswith("second: 0.200 s late against first (confidence ")
            and note.endswith("). --align corrects it")]
    assert plain.session.tracks[1].offset_frames == plain.session.tracks[0].offset_frames == 0
    right = process(folder, out=tmp_path / "right", align=True)
    assert right.session.tracks[0].offset_frames == pytest.approx(0.2 * RATE_HZ, abs=16)
    assert any(note.endswith("), put right") for note in right.session.notes)


def test_an_aligned_session_renders_again(tmp_path: Path) -> None:
    """The automation of an aligned run gives the same mix again, at the command line too."""
    mics = talk()
    folder = written(tmp_path / "in", mics[:, 0], clocked(mics[:, 1], offset_s=-2.0, ppm=300.0))
    process(folder, out=tmp_path / "one", align=True)
    with pytest.raises(SystemExit) as left:
        cli.main(["render", str(folder), "--automation", str(tmp_path / "one" / "automation.csv"), "--align",
                  "--out", str(tmp_path / "two"), "--quiet"])
    assert left.value.code == 0
    assert (tmp_path / "one" / "mix.wav").read_bytes() == (tmp_path / "two" / "mix.wav").read_bytes()


def test_one_way_bleed_leaves_the_way_open(tmp_path: Path) -> None:
    """Where only one hears the other the offset is right within the way of the sound, and that is said."""
    made = simulate(TALK)
    deaf = (made.own + made.noise)[:, 0]
    session, m = opened(written(tmp_path, deaf, clocked(made.mics[:, 1], offset_s=-5.0)))
    found = find_alignment(session, m)
    second = of(found, "second")
    assert second.way_s is None
    assert second.offset_s == pytest.approx(-5.0, abs=LONGEST_WAY_S)
    assert "within 30 ms, since only one of the two hears the other" in aligned(session, found).notes[-1]
    in_time, measured = opened(written(tmp_path / "in time", deaf, made.mics[:, 1]))
    assert aligned(in_time, find_alignment(in_time, measured)).tracks == in_time.tracks


def test_polarity_is_found_and_turned(tmp_path: Path) -> None:
    """A microphone wired the wrong way round is turned, and nothing else of it is changed."""
    mics = talk()
    session, m = opened(written(tmp_path, mics[:, 0], -mics[:, 1]))
    lined_up = aligned(session, find_alignment(session, m))
    assert lined_up.tracks[1] == dataclasses.replace(session.tracks[1], polarity=-1)
    assert lined_up.tracks[0] == session.tracks[0]
    assert lined_up.notes[-1].startswith("second: upside down against first")


def test_inspect_shows_the_tracks_lined_up(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`inspect --align` says how each track lay, and looks at the session as it is lined up."""
    mics = talk()
    folder = written(tmp_path / "in", mics[:, 0], -clocked(mics[:, 1], offset_s=2.0, ppm=100.0))
    with pytest.raises(SystemExit) as left:
        cli.main(["inspect", str(folder), "--align", "--json"])
    assert left.value.code == 0
    found = json.loads(capsys.readouterr().out)
    first, second = found["alignment"]
    assert (first["track"], first["against"], first["offset_s"], first["polarity"]) == ("first", "", 0, 1)
    assert (second["track"], second["against"], second["polarity"]) == ("second", "first", -1)
    assert second["offset_s"] == pytest.approx(2.0, abs=OFFSET_BAND_S)
    assert second["drift_ppm"] == pytest.approx(100.0, abs=5.0)
    assert second["confidence"] > 0.5
    assert found["polarity"] == [1, 1]
    assert [line["kind"] for line in found["advice"] if line["kind"] in ("clock", "polarity")] == []
    assert found["length_s"] == pytest.approx(62.0, abs=0.01)
    with pytest.raises(SystemExit):
        cli.main(["inspect", str(folder), "--align"])
    rows = [line.split() for line in capsys.readouterr().out.splitlines()]
    assert next(r for r in rows if r[:2] == ["second", "first"])[4:5] == ["turned"]
    assert ["first", "reference", "0.0000", "0.0", "+", "1.00"] in rows


def test_kept_measurements_tell_aligned_from_unaligned(tmp_path: Path) -> None:
    """Measurements kept of a session are not taken for those of the same session with another clock, or offset."""
    mics = talk()[: 4 * RATE_HZ]
    session, m = opened(written(tmp_path / "in", *mics.T))
    keep_measurements(tmp_path / ".measurements.npz", m, session)
    assert kept_measurements(tmp_path, session) is not None
    for change in ({"clock_ppm": 30.0}, {"offset_frames": 5}, {"polarity": -1}):
        second = dataclasses.replace(session.tracks[1], **change)
        other = dataclasses.replace(session, tracks=(session.tracks[0], second))
        assert kept_measurements(tmp_path, other) is None


def test_tracks_of_one_file_share_a_clock(tmp_path: Path) -> None:
    """The channels of one recorder stay together; the odd track is the one that moves."""
    mics = talk(dataclasses.replace(TALK, people=3, room="round table"))
    tmp_path.mkdir(exist_ok=True)
    sf.write(tmp_path / "a recorder.wav", mics[:, :2], RATE_HZ, subtype="PCM_24")
    sf.write(tmp_path / "alone.wav", clocked(mics[:, 2], offset_s=-3.0), RATE_HZ, subtype="PCM_24")
    (tmp_path / "session.toml").write_text('[[track]]\nfile = "alone.wav"\n[[track]]\nfile = "a recorder.wav"\n'
                                           'channels = "split"\n', encoding="utf-8")
    session, m = opened(tmp_path)
    found = find_alignment(session, m)
    assert [a.offset_s for a in found if a.track != "alone"] == [0.0, 0.0]
    assert of(found, "alone").offset_s == pytest.approx(-3.0, abs=OFFSET_BAND_S)


def test_a_short_session_has_nothing_to_compare(tmp_path: Path) -> None:
    """Half a second, silence and a single track are left alone."""
    silent = np.zeros(RATE_HZ // 2, np.float32)
    session, m = opened(written(tmp_path, silent, silent))
    assert of(find_alignment(session, m), "second").offset_s is None
    one = dataclasses.replace(session, tracks=session.tracks[:1])
    assert find_alignment(one, m) == ()
    assert alignment_notes(one, m) == ()
    assert spread_places(onsets(m.levels[:, 0]), onsets(m.levels[:, 1]), common_line(
        onsets(m.levels[:, 0]), onsets(m.levels[:, 1]))) == []
