"""leveller.plan.corrections and leveller.edits: the editor overrules a stretch, and nothing else changes."""

from __future__ import annotations

import shutil
from pathlib import Path

import again
import numpy as np
import pytest

from leveller import pipeline
from leveller.errors import AutomationError, SettingsError
from leveller.plan.corrections import expander_again_db, reopened, spliced
from leveller.plan.expander import expander_nodes_db
from leveller.plan.thinning import kept_rows
from leveller.render.gain import hop_gains_db
from leveller.report.figures import figures_of
from leveller.settings import Expander

SETTINGS = Expander(attack_s=0.08, hold_s=0.24, release_s=0.16, lookahead_s=0.18)
RANGE_DB = 12.0
HOPS = 1000
ROUNDED_DB = 0.1  # rows follow the curve within 0.1 dB (thinned to 0.1 dB)


def flags(*spans: tuple[int, int]) -> np.ndarray:
    """True in these hops, shape=(HOPS,)."""
    out = np.zeros(HOPS, np.bool_)
    for first, after in spans:
        out[first:after] = True
    return out


def closed(open_: np.ndarray, depth_db: float) -> np.ndarray:
    """The expander's gain where what is closed deserves that depth."""
    doubt = np.full(HOPS, SETTINGS.threshold_db + depth_db / (SETTINGS.ratio - 1), np.float32)
    return expander_nodes_db(open_, doubt, range_db=RANGE_DB, settings=SETTINGS)


def overruled(own: np.ndarray, corrected: np.ndarray, by_hand: np.ndarray, depth_db: float) -> tuple[np.ndarray, ...]:
    """Gain of the first of two microphones without and with a correction; the second speaks from hop 0 to the end."""
    both = np.stack([own, flags((0, HOPS))], axis=1)
    open_ = np.stack([reopened(both, both, corrected_own=own, by_hand=flags((0, 1)), voices=(0, 1), track=0,
                               settings=SETTINGS), flags((0, HOPS))], axis=1)
    open_[0, 0] = own[0]
    before = closed(open_[:, 0], depth_db)
    now = reopened(both, open_, corrected_own=corrected, by_hand=by_hand, voices=(0, 1), track=0, settings=SETTINGS)
    after = expander_again_db(before, open_[:, 0], corrected_open=now, by_hand=by_hand, range_db=RANGE_DB,
                              settings=SETTINGS)
    return before, after


def test_own_opens_with_look_ahead_hold_and_ramps() -> None:
    """A stretch decided to be own is open from 0.18 s before to 0.24 s after, with ramps of 80 and 160 ms outside."""
    before, after = overruled(flags((0, 100)), flags((0, 100), (500, 600)), flags(), -7.0)
    depth = before[300]
    assert -7.5 < depth < -6.5
    opening, closing = 500 - 18, 600 + 24
    assert np.all(after[opening : closing + 1] == 0)
    assert after[opening - 8 : opening + 1] == pytest.approx(np.linspace(depth, 0, 9), abs=1e-5)
    assert after[closing : closing + 17] == pytest.approx(np.linspace(0, depth, 17), abs=1e-5)
    same = np.r_[0 : opening - 7, closing + 16 : HOPS + 1]
    assert np.allclose(after[same], before[same], atol=1e-5)
    assert np.array_equal(after[:400], before[:400])
    assert np.array_equal(after[700:], before[700:])


@pytest.mark.parametrize("word", ["bleed", "silence"])
def test_what_is_not_own_closes_by_the_whole_range(word: str) -> None:
    """A whole utterance decided to be bleed or silence is closed, with what was opened round it."""
    before, after = overruled(flags((0, 100), (500, 600)), flags((0, 100)), flags((500, 600)), -7.0)
    assert np.all(before[490:620] == 0)
    assert np.all(after[520:600] == -RANGE_DB)
    assert np.all(after[300:900] <= before[300] + 1e-5)
    assert np.array_equal(after[:400], before[:400])
    assert np.array_equal(after[700:], before[700:])


def test_a_part_of_an_utterance_closes_between_hold_and_look_ahead() -> None:
    """Voice left on both sides keeps its hold and its look-ahead; the ramps lie inside what is closed."""
    before, after = overruled(flags((300, 700)), flags((300, 400), (600, 700)), flags((400, 600)), -7.0)
    assert np.all(before[300:701] == 0)
    assert np.all(after[300:425] == 0)
    assert after[424:441] == pytest.approx(np.linspace(0, -RANGE_DB, 17), abs=1e-5)
    assert np.all(after[440:575] == -RANGE_DB)
    assert after[574:583] == pytest.approx(np.linspace(-RANGE_DB, 0, 9), abs=1e-5)
    assert np.all(after[582:701] == 0)
    assert np.array_equal(after[701:], before[701:])


def test_a_doubtful_closed_stretch_that_is_confirmed_closes_wholly() -> None:
    """bleed said of what was closed by a part only closes it by the whole range, ramps within."""
    before, after = overruled(flags((0, 100)), flags((0, 100)), flags((500, 600)), -7.0)
    assert np.all(after[516:593] == -RANGE_DB)
    assert after[500:517] == pytest.approx(np.linspace(before[400], -RANGE_DB, 17), abs=1e-5)
    assert after[592:601] == pytest.approx(np.linspace(-RANGE_DB, before[400], 9), abs=1e-5)
    assert np.allclose(after[np.r_[0:500, 601:1001]], before[np.r_[0:500, 601:1001]], atol=1e-5)


def test_rows_outside_a_change_are_kept_one_for_one() -> None:
    """A change in the middle leaves every row and the line between rows before and after it, and is itself followed."""
    draw = np.random.default_rng(3)
    before = np.cumsum(draw.normal(0, 0.3, (HOPS + 1, 4)), axis=0)
    after = before.copy()
    after[450:520, 1] -= np.hanning(70) * 9
    curves, rows, touched = spliced(before, after, 0.08)
    old = kept_rows(np.column_stack([before, before.sum(axis=1)]), 0.08)
    first, last = rows[touched][0], rows[np.flatnonzero(touched)[-1] + 1]
    assert (first, last) == (450, 519)  # a Hann window is 0 at its ends
    assert np.array_equal(rows[(rows < first) | (rows > last)], old[(old < first) | (old > last)])
    edge = np.arange(HOPS + 1)
    heard, was = np.interp(edge, rows, curves.sum(axis=1)[rows]), np.interp(edge, old, before.sum(axis=1)[old])
    away = (edge <= first) | (edge >= last)
    assert np.allclose(heard[away], was[away], atol=1e-9)
    assert np.abs(heard - after.sum(axis=1))[~away].max() <= 0.08 + 1e-9


def test_without_a_change_the_rows_are_those_of_the_thinning() -> None:
    """No correction, no difference."""
    curves = np.cumsum(np.random.default_rng(4).normal(0, 0.3, (HOPS + 1, 4)), axis=0)
    same, rows, touched = spliced(curves, curves, 0.08)
    assert same is curves
    assert np.array_equal(rows, kept_rows(np.column_stack([curves, curves.sum(axis=1)]), 0.08))
    assert not touched.any()


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A session in `in`, processed into `out`."""
    folder = tmp_path_factory.mktemp("corrections")
    again.recorded(folder / "in")
    pipeline.process(folder / "in", out=folder / "out")
    return folder


def corrected(place: Path, tmp_path: Path, text: str, name: str = "corrections.csv") -> pipeline.Result:
    """The session processed into a copy of `out` with that file of corrections."""
    if not (tmp_path / "out").exists():
        shutil.copytree(place / "out", tmp_path / "out")
    (tmp_path / name).write_text(text, encoding="utf-8")
    return pipeline.process(place / "in", out=tmp_path / "out", replace=True, corrections=tmp_path / name)


def longest(place: Path, state: str, *, voice: str | None = None) -> tuple[str, float, float]:
    """Track, start and end of the longest stretch of that state."""
    rows = [row for row in again.rows_of(place / "out" / "speech.csv") if row["state"] == state
            and voice in (None, row["track"])]
    row = max(rows, key=lambda row: float(row["to_s"]) - float(row["from_s"]))
    return row["track"], float(row["from_s"]), float(row["to_s"])


def gains(folder: Path, track: str) -> np.ndarray:
    """Gain and parts of a track at every hop edge, shape=(hops + 1, 5), from the file."""
    rows = [row for row in again.rows_of(folder / "automation.csv") if row["track"] == track]
    at = [round(float(row["time_s"]) * 100) for row in rows]
    columns = ("gain_db", "auto_trim_db", "expander_db", "ride_db", "compressor_db")
    return np.stack([np.interp(np.arange(at[-1] + 1), at, [float(row[c]) for row in rows]) for c in columns], axis=1)


def outside(folder: Path, track: str, from_s: float, to_s: float) -> list[dict[str, str]]:
    """All rows but those of one track in a stretch."""
    return [row for row in again.rows_of(folder / "automation.csv")
            if row["track"] != track or not from_s <= float(row["time_s"]) <= to_s]


def test_a_stretch_decided_to_be_own_opens_and_nothing_else_changes(
    place: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Bleed overruled as own: open in the stretch, all other rows of the automation letter for letter, no measuring."""
    monkeypatch.setattr(pipeline, "measure", None)
    track, start, end = longest(place, "bleed")
    from_s, to_s = round(start + 0.3 * (end - start), 2), round(start + 0.6 * (end - start), 2)
    corrected(place, tmp_path, f"track,from_s,to_s,decide\n{track},{from_s},{to_s},own\n")
    before, after = gains(place / "out", track), gains(tmp_path / "out", track)
    inside = slice(round(from_s * 100) - 18, round(to_s * 100) + 25)
    assert before[inside, 2].min() < -6
    assert np.abs(after[inside, 2]).max() <= ROUNDED_DB
    reach = from_s - 1.0, to_s + 1.0
    assert outside(tmp_path / "out", track, *reach) == outside(place / "out", track, *reach)
    assert np.allclose(after[:, [1, 3, 4]], before[:, [1, 3, 4]], atol=ROUNDED_DB)
    moved = [row for row in again.rows_of(tmp_path / "out" / "automation.csv") if row["cause"] == "edit"]
    assert {row["track"] for row in moved} == {track}
    states = {row["state"] for row in again.rows_of(tmp_path / "out" / "speech.csv")
              if row["track"] == track and float(row["from_s"]) <= from_s and float(row["to_s"]) >= to_s}
    assert states == {"own"}


def test_a_stretch_decided_to_be_bleed_closes_and_nothing_else_changes(place: Path, tmp_path: Path) -> None:
    """Own voice overruled as bleed: closed by the microphone's whole range, all else as before."""
    track, from_s, to_s = longest(place, "own")
    result = corrected(place, tmp_path, f"track,from_s,to_s,decide\n{track},{from_s},{to_s},bleed\n")
    after = gains(tmp_path / "out", track)
    inside = slice(round(from_s * 100) + 45, round(to_s * 100) - 45)
    index = [t.name for t in result.session.tracks].index(track)
    assert after[inside, 2] == pytest.approx(-result.plan.range_db[index], abs=ROUNDED_DB)
    reach = from_s - 2.0, to_s + 3.0
    assert outside(tmp_path / "out", track, *reach) == outside(place / "out", track, *reach)
    assert np.allclose(after[:, [1, 3, 4]], gains(place / "out", track)[:, [1, 3, 4]], atol=ROUNDED_DB)


def test_a_gain_offset_is_heard_with_ramps_of_50_ms(place: Path, tmp_path: Path) -> None:
    """gain_db lies on auto_trim_db: whole in the stretch, gone 50 ms outside it."""
    track, from_s, to_s = longest(place, "own")
    result = corrected(place, tmp_path, f"track;from_s;to_s;gain_db\n{track};{from_s};{to_s};-4,5\n".replace(".", ","))
    before, after = gains(place / "out", track), gains(tmp_path / "out", track)
    first, last = round(from_s * 100), round(to_s * 100)
    assert after[first : last + 1, 1] - before[first : last + 1, 1] == pytest.approx(-4.5, abs=ROUNDED_DB)
    assert after[: first - 4, 1] == pytest.approx(before[: first - 4, 1], abs=ROUNDED_DB)
    assert after[last + 5 :, 1] == pytest.approx(before[last + 5 :, 1], abs=ROUNDED_DB)
    assert after[:, 2:] == pytest.approx(before[:, 2:], abs=ROUNDED_DB)
    said = [(fault.kind, fault.track, fault.sentence, fault.places) for fault in figures_of(result).faults]
    assert ("corrected", track, f"{track}: 1 correction of yours", ((from_s, to_s),)) in said
    assert "knob" not in [kind for kind, *_ in said], "what the editor set is no turned recording gain"
    plan = result.plan.tracks[[t.name for t in result.session.tracks].index(track)]
    assert np.allclose(hop_gains_db(plan, result.plan.hops)[0], after[:-1, 0], atol=0.006)


def test_a_gain_of_the_editor_is_no_lack_of_trim(place: Path, tmp_path: Path) -> None:
    """30 dB more by the editor's wish do not make levelling say that it needs more than its 30 dB."""
    track, from_s, to_s = longest(place, "own")
    result = corrected(place, tmp_path, f"track,from_s,to_s,gain_db\n{track},{from_s},{to_s},30\n")
    assert max(voice.trim_high_db for voice in figures_of(result).voices) > 30
    assert not [text for text in figures_of(result).left_open if "needs more than" in text]


def test_of_two_corrections_the_later_counts(place: Path, tmp_path: Path) -> None:
    """A stretch corrected twice is as the last row says."""
    track, from_s, to_s = longest(place, "own")
    row = f"{track},{from_s},{to_s}"
    corrected(place, tmp_path, f"track,from_s,to_s,decide,gain_db\n{row},bleed,3\n{row},own,0\n")
    before, after = gains(place / "out", track), gains(tmp_path / "out", track)
    assert np.allclose(after, before, atol=ROUNDED_DB)


def test_corrections_of_the_session_file_do_the_same(place: Path, tmp_path: Path) -> None:
    """[[correction]] in session.toml gives the automation that corrections.csv gives."""
    track, from_s, to_s = longest(place, "bleed")
    corrected(place, tmp_path, f"track,from_s,to_s,decide\n{track},{from_s},{to_s},own\n")
    shutil.copytree(place / "in", tmp_path / "in")
    (tmp_path / "in" / "session.toml").write_text(
        f'[[correction]]\ntrack = "{track}"\nfrom_s = {from_s}\nto_s = {to_s}\ndecide = "own"\n')
    pipeline.process(tmp_path / "in", out=tmp_path / "b")
    assert (tmp_path / "b" / "automation.csv").read_bytes() == (tmp_path / "out" / "automation.csv").read_bytes()


def test_an_unedited_speech_table_changes_nothing(place: Path, tmp_path: Path) -> None:
    """speech.csv as written comes to no correction at all, and that is said."""
    text = (place / "out" / "speech.csv").read_text(encoding="utf-8")
    result = corrected(place, tmp_path, text, "speech.csv")
    assert result.session.corrections == ()
    assert result.session.notes == ("speech.csv: says nothing else than was decided, so it changes nothing",)
    assert again.wavs(tmp_path / "out") == again.wavs(place / "out")


@pytest.mark.parametrize("delimiter", [",", ";"])
def test_an_edited_speech_table_is_a_set_of_corrections(place: Path, tmp_path: Path, delimiter: str) -> None:
    """A state changed in speech.csv does what the same row of corrections.csv does."""
    track, from_s, to_s = longest(place, "own")
    rows = again.rows_of(place / "out" / "speech.csv")
    for row in rows:
        if row["track"] == track and float(row["from_s"]) == from_s:
            row["state"] = "bleed"
    text = again.write_rows(tmp_path / "edit.csv", rows, delimiter=delimiter).read_text(encoding="utf-8")
    result = corrected(place, tmp_path, text, "speech.csv")
    found = [(c.track, c.from_s, c.to_s, c.decide) for c in result.session.corrections]
    assert found == [(track, from_s, to_s, "bleed")]
    table = (tmp_path / "out" / "automation.csv").read_bytes()
    corrected(place, tmp_path, f"track,from_s,to_s,decide\n{track},{from_s},{to_s},bleed\n")
    assert (tmp_path / "out" / "automation.csv").read_bytes() == table


def test_a_row_that_grew_counts_where_it_differs(place: Path, tmp_path: Path) -> None:
    """An own row drawn out over its neighbour is own there, whichever row stands first; what no row has is said."""
    track, from_s, to_s = longest(place, "bleed")
    text = f"from_s,to_s,track,state\n{from_s},{from_s + 0.5:.2f},{track},own\n{from_s},{to_s},{track},bleed\n"
    result = corrected(place, tmp_path, text, "speech.csv")
    assert [(c.track, c.decide) for c in result.session.corrections] == [(track, "own")]
    assert result.session.corrections[0].to_s == pytest.approx(from_s + 0.5)
    assert len(result.session.notes) == 3  # every track has stretches without a row
    assert all("left as decided" in note for note in result.session.notes)


@pytest.mark.parametrize(("row", "message"), [
    ("0,1,seat 1,own voice", "speech.csv, line 2: state = 'own voice': expected silence, bleed, own"),
    ("0,1,seat 9,own", "speech.csv, line 2: unknown track 'seat 9' (did you mean \"seat 3\"?); known: "
                       "seat 1, seat 2, seat 3"),
    ("1,1,seat 1,own", "speech.csv, line 2: from 1 to 1 s: expected a stretch within 0 and 24.00 s"),
    ("0,99,seat 1,own", "speech.csv, line 2: from 0 to 99 s: expected a stretch within 0 and 24.00 s"),
    ("a,1,seat 1,own", "speech.csv, line 2: from_s = 'a': expected a number"),
])
def test_a_speech_row_that_is_not_understood_is_refused(place: Path, tmp_path: Path, row: str, message: str) -> None:
    """A refusal names file and line, word for word, and the old folder stays."""
    with pytest.raises(AutomationError) as caught:
        corrected(place, tmp_path, f"from_s,to_s,track,state\n{row}\n", "speech.csv")
    assert str(caught.value) == message
    assert again.wavs(tmp_path / "out") == again.wavs(place / "out")


def test_a_decision_about_a_room_microphone_is_refused(place: Path, tmp_path: Path) -> None:
    """decide says nothing about a track that has no voice; gain_db does."""
    shutil.copytree(place / "in", tmp_path / "in")
    entries = "".join(f'[[track]]\nfile = "seat {n}.wav"\n' for n in (1, 2)) + (
        '[[track]]\nfile = "seat 3.wav"\nrole = "room"\n')
    (tmp_path / "in" / "session.toml").write_text(entries)
    file = tmp_path / "corrections.csv"
    file.write_text("track,from_s,to_s,decide,gain_db\nseat 3,1,2,own,\n")
    with pytest.raises(SettingsError) as caught:
        pipeline.process(tmp_path / "in", out=tmp_path / "b", corrections=file)
    assert str(caught.value) == ("corrections.csv, line 2: correction of seat 3 at 1 s: decide = own, but its role "
                                 "is room. Use gain_db there")
    file.write_text("track,from_s,to_s,decide,gain_db\nseat 3,1,2,,-6\n")
    pipeline.process(tmp_path / "in", out=tmp_path / "b", corrections=file)
    assert gains(tmp_path / "b", "seat 3")[[50, 150, 250], 0].tolist() == [0, -6, 0]


def test_corrections_in_the_replaced_folder_stay(place: Path, tmp_path: Path) -> None:
    """A corrections.csv that lies in the folder to be replaced is still there afterwards."""
    shutil.copytree(place / "out", tmp_path / "out")
    file = tmp_path / "out" / "corrections.csv"
    file.write_text("track,from_s,to_s,gain_db\nseat 1,1,2,-3\n")
    pipeline.process(place / "in", out=tmp_path / "out", replace=True, corrections=file)
    assert file.read_text() == "track,from_s,to_s,gain_db\nseat 1,1,2,-3\n"
