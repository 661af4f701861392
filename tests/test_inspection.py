"""The inspection tells what is there: bleed by the inverse-distance law, delays, faults, hum, room tone."""

from __future__ import annotations

import dataclasses
import json
import re
import xml.etree.ElementTree as ET
from pathlib import Path

import numpy as np
import pytest
import rooms
import scoring
import soundfile as sf
from conversations import Conversation, ConversationSpec, simulate
from rooms import Microphone, Room
from scipy.signal import sosfilt

from leveller.advice import BLEED_DB, KINDS, share_of_distance
from leveller.attribute import attribute
from leveller.findings import Inspection
from leveller.inspection import inspect, inspect_session
from leveller.measure import measure
from leveller.measure.alignment import BAND_HZ, peak_of
from leveller.measure.hum import HIGHEST_HZ, hum_in
from leveller.measure.loudness import k_weighting, power_to_lufs
from leveller.report.inspection import format_inspection, inspection_json, inspection_svg
from leveller.session import open_session

SPEED_M_S = 343.0
INVERSE_DISTANCE_BAND_DB = 1.0  # level falls by 20 log10 of the distance ratio (handbooks)
DELAY_BAND_S = 0.0001
THREE_TO_ONE_DB = 9.54  # 20 log10 3 (handbooks)
RATE_HZ = 16_000
SVG = "{http://www.w3.org/2000/svg}"
QUIET = ConversationSpec(
    seed=4, seconds=45.0, rate_hz=RATE_HZ, overlap_share=0.0, gain_error_db=0.0, noise_db=-60.0, common_noise_db=-60.0,
    laughs_per_min=0.0, coughs_per_min=0.0)
FREE_FIELD = Room(  # no walls, microphones that hear all round, each 0.25 to 0.5 m from its own mouth
    size=(8.0, 8.0, 4.0), rt60_s=0.0, mouths=((3.0, 4.0, 1.5), (4.1, 4.4, 1.5), (4.6, 3.2, 1.5)),
    microphones=(Microphone((3.3, 4.0, 1.5)), Microphone((4.1, 4.0, 1.3)), Microphone((4.4, 3.35, 1.5))),
    sits_at=(0, 1, 2))


def written(folder: Path, columns: np.ndarray, names: tuple[str, ...], rate_hz: int = RATE_HZ) -> Path:
    """A folder with one 24 bit file a column."""
    folder.mkdir(parents=True, exist_ok=True)
    for name, samples in zip(names, columns.T, strict=True):
        sf.write(folder / f"{name}.wav", samples, rate_hz, subtype="PCM_24")
    return folder


def inspected(folder: Path, spec: ConversationSpec) -> tuple[Inspection, Conversation]:
    """What the inspection says of a simulated session."""
    spoken = simulate(spec)
    return inspect([written(folder, spoken.mics, spoken.names)]), spoken


def kinds(found: Inspection, track: str | None = None) -> set[str]:
    """What was advised, for one track or all."""
    return {line.kind for line in found.advice if track in (None, line.track)}


@pytest.fixture(scope="module")
def free_field(tmp_path_factory: pytest.TempPathFactory) -> tuple[Inspection, Conversation]:
    """Three people in a field without walls."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(rooms, "furnish", lambda *_, **__: FREE_FIELD)
        return inspected(tmp_path_factory.mktemp("free"), dataclasses.replace(QUIET, rt60_s=0.0))


@pytest.fixture(scope="module")
def spoken() -> Conversation:
    """An ordinary room."""
    return simulate(QUIET)


@pytest.fixture(scope="module")
def plain(spoken: Conversation, tmp_path_factory: pytest.TempPathFactory) -> Inspection:
    """What is said of the ordinary room."""
    return inspect([written(tmp_path_factory.mktemp("plain"), spoken.mics, spoken.names)])


def distances_m(conversation: Conversation) -> np.ndarray:
    """From every mouth to every microphone, shape (people, microphones)."""
    mouths = np.array(conversation.placed.mouths)
    mics = np.array([mic.at for mic in conversation.placed.microphones])
    return np.linalg.norm(mouths[:, None] - mics[None], axis=2)


def off_diagonal(matrix: np.ndarray) -> np.ndarray:
    return np.asarray(matrix)[~np.eye(len(matrix), dtype=bool)]


def test_coupling_follows_the_inverse_distance_law(free_field):
    """Without walls the coupling is 20 log10 of own distance over the other's, within 1 dB, for every pair."""
    found, conversation = free_field
    way = distances_m(conversation)
    expected = 20 * np.log10(np.diag(way)[None, :] / way)  # each microphone is set to its own voice
    assert off_diagonal(found.coupling_db) == pytest.approx(off_diagonal(expected), abs=INVERSE_DISTANCE_BAND_DB)
    assert np.ptp(off_diagonal(expected)) > 1  # the geometry tells the pairs apart


def test_delay_is_the_way_over_the_speed_of_sound(free_field):
    """Without walls the delay is the difference of the ways over 343 m/s, within 0.1 ms, for every pair."""
    found, conversation = free_field
    way = distances_m(conversation)
    expected_s = (way - np.diag(way)[:, None]) / SPEED_M_S
    assert off_diagonal(found.delay_s) == pytest.approx(off_diagonal(expected_s), abs=DELAY_BAND_S)


def test_arrivals_alone_give_the_same_delays(free_field, tmp_path):
    """Without reading waveforms again the delays come from the arrivals, within 0.1 ms, and the polarity."""
    found, conversation = free_field
    session = open_session([written(tmp_path, conversation.mics, conversation.names)])
    m = measure(session)
    bare = inspect_session(session, m, attribute(m, session))
    way = distances_m(conversation)
    expected_s = (way - np.diag(way)[:, None]) / SPEED_M_S
    assert off_diagonal(bare.delay_s) == pytest.approx(off_diagonal(expected_s), abs=DELAY_BAND_S)
    assert bare.polarity == (1, 1, 1)
    assert np.array_equal(bare.bleed_db, found.bleed_db)


def test_delay_is_right_in_a_live_room(spoken, plain):
    """Cardioids that look away hear walls louder than the voice; the direct sound is found all the same."""
    way = distances_m(spoken)
    expected_s = (way - np.diag(way)[:, None]) / SPEED_M_S
    assert off_diagonal(plain.delay_s) == pytest.approx(off_diagonal(expected_s), abs=0.0003)


@pytest.mark.parametrize(("share", "found_ms"), [(0.6, 2.8), (0.3, 7.0)])
def test_a_soft_direct_sound_comes_before_a_loud_wall(share, found_ms):
    """A direct sound 4 dB under the wall's is the delay; one 10 dB under it may be ripple."""
    lines = np.arange(*BAND_HZ)
    near = np.random.default_rng(3).normal(size=(12, len(lines), 2)) @ [1, 1j]
    way = share * np.exp(-2j * np.pi * lines * 0.0028) + np.exp(-2j * np.pi * lines * 0.0070)
    height, lag_s = peak_of(near, near * way)
    assert height > 0
    assert lag_s == pytest.approx(found_ms / 1000, abs=DELAY_BAND_S)


def test_recording_gains_cancel_out_of_the_bleed(spoken, plain, tmp_path):
    """Turning two knobs by 12 and -6 dB moves the coupling by just that, and the bleed by nothing."""
    gains_db = np.array([0.0, 12.0, -6.0])
    found = inspect([written(tmp_path, spoken.mics * 10 ** (gains_db / 20), spoken.names)])
    assert off_diagonal(found.bleed_db - plain.bleed_db) == pytest.approx(0, abs=0.2)
    shift = gains_db[None, :] - gains_db[:, None]
    assert off_diagonal(found.coupling_db - plain.coupling_db - shift) == pytest.approx(0, abs=0.2)


def test_bleed_is_what_the_parts_say(spoken, plain):
    """K-weighted bleed of each voice against the own voice there agrees within 1.5 dB with the parts."""
    weighting = k_weighting(RATE_HZ)
    own, bleed = (sosfilt(weighting, part, axis=0) ** 2 for part in (spoken.own, spoken.bleed))
    talk = [scoring.mask(spans, spoken.hops).repeat(RATE_HZ // 100) for spans in spoken.segments]
    expected = np.array([[10 * np.log10(bleed[talk[k], m].mean() / own[talk[m], m].mean()) if k != m else 0.0
                          for m in range(3)] for k in range(3)])
    assert off_diagonal(plain.bleed_db) == pytest.approx(off_diagonal(expected), abs=1.5)
    assert np.ptp(off_diagonal(expected)) > 5


def test_levels_floor_and_time_are_those_of_the_parts(spoken, plain):
    """Against the parts: K-weighted noise and voice within 1 dB, speaking time within a quarter, peak to 24 bit."""
    weighting = k_weighting(RATE_HZ)
    for mic, track in enumerate(plain.tracks):
        noise = sosfilt(weighting, spoken.noise[:, mic]) ** 2
        assert track.floor_lufs == pytest.approx(power_to_lufs(noise.mean()), abs=1.0)
        talk = scoring.mask(spoken.segments[mic], spoken.hops).repeat(RATE_HZ // 100)
        own = sosfilt(weighting, spoken.own[:, mic])[talk] ** 2
        assert track.voice_lufs == pytest.approx(power_to_lufs(own.mean()), abs=1.0)
        assert track.speaking_s == pytest.approx(talk.mean() * 45.0, rel=0.25)
        assert track.peak_dbfs == pytest.approx(20 * np.log10(np.abs(spoken.mics[:, mic]).max()), abs=0.001)


def test_the_louder_noise_floor_is_that_much_louder(spoken, plain, tmp_path):
    """20 dB of gain on one track raise its floor and its voice by 20 dB."""
    columns = spoken.mics * np.array([1.0, 1.0, 10 ** (10 / 20)])
    third = inspect([written(tmp_path, columns, spoken.names)]).tracks[2]
    assert third.floor_lufs - plain.tracks[2].floor_lufs == pytest.approx(10, abs=0.1)
    assert third.voice_lufs - plain.tracks[2].voice_lufs == pytest.approx(10, abs=0.1)


@pytest.mark.parametrize("rate_hz", [16_000, 44_100])
@pytest.mark.parametrize("mains_hz", [50, 60])
def test_hum_is_found_with_its_frequency_and_level(spoken, tmp_path, mains_hz, rate_hz):
    """Hum under speech is named 50 or 60 Hz with its level within 1 dB, mains off by 0.1 %; clean tracks have none."""
    columns = np.repeat(spoken.mics, 3, axis=0)[:: 3 if rate_hz == RATE_HZ else 1]
    t = np.arange(len(columns)) / rate_hz
    wave = sum(np.sin(2 * np.pi * mains_hz * 1.001 * n * t + n) / n for n in (1, 2, 3, 4, 5, 7))
    level_db = -55.0
    hum = wave / np.sqrt(np.mean(wave**2)) * 10 ** (level_db / 20)
    columns = columns + np.outer(hum, (0.0, 1.0, 0.0))
    found = inspect([written(tmp_path, columns, spoken.names, rate_hz)])
    assert found.tracks[1].hum is not None
    assert found.tracks[1].hum.mains_hz == mains_hz
    assert found.tracks[1].hum.level_dbfs == pytest.approx(level_db, abs=1.0)
    assert found.tracks[0].hum is None
    assert "hum" in kinds(found, spoken.names[1])


def test_noise_alone_never_hums():
    """A hundred medians of twenty noise spectra give no hum; a lone line needs 20 dB, a pair of harmonics less."""
    rng = np.random.default_rng(1)
    for _ in range(100):
        assert hum_in(np.median(rng.exponential(1e-9, (20, HIGHEST_HZ + 24)), axis=0)) is None
    lone, pair = (np.full(HIGHEST_HZ + 24, 1e-9) for _ in range(2))
    lone[50] *= 10**1.5
    pair[[50, 150]] *= 10**1.5
    assert hum_in(lone) is None
    assert hum_in(pair).mains_hz == 50
    pair[552] *= 10**1.5  # the eleventh of mains at 50.2 Hz
    assert [hz for hz, _, _ in hum_in(pair).lines] == [50, 150, 552]
    lone[50] *= 10
    assert hum_in(lone).mains_hz == 50
    with pytest.raises(ValueError, match="spectrum of 100 lines"):
        hum_in(lone[:100])


def test_dropouts_mutes_and_silence_are_told_apart(spoken, tmp_path):
    """Gaps of 40 ms are dropouts, 3 s of zero a mute; zeros before the first and after the last sound are neither."""
    columns = spoken.mics.copy()
    for at_s in (12.0, 20.5):
        columns[int(at_s * RATE_HZ) : int((at_s + 0.04) * RATE_HZ), 0] = 0
    columns[30 * RATE_HZ : 33 * RATE_HZ, 1] = 0
    columns[: 2 * RATE_HZ, 2] = columns[-RATE_HZ:, 2] = 0
    columns = np.column_stack([columns, np.zeros(len(columns))])
    found = inspect([written(tmp_path, columns, (*spoken.names, "unused"))])
    first, second, third, fourth = found.tracks
    assert [a for a, _ in first.dropouts] == pytest.approx([12.0, 20.5], abs=0.02)
    assert (first.muted, second.dropouts, third.dropouts, third.muted) == ((), (), (), ())
    assert second.muted == (pytest.approx((30.0, 33.0), abs=0.03),)
    assert fourth.silent
    assert kinds(found, "unused") == {"silent"}
    assert {"dropout"} <= kinds(found, spoken.names[0])
    assert {"muted"} <= kinds(found, spoken.names[1])


def test_clipping_dc_and_low_level_are_named(spoken, tmp_path):
    """A track driven into full scale, one with DC and one 30 dB too low each get their own advice, with the number."""
    columns = spoken.mics.copy()
    columns[:, 0] = np.clip(columns[:, 0] * 1.5 / np.abs(columns[:, 0]).max(), -1, 1)
    columns[:, 1] += 0.02
    columns[:, 2] *= 0.02 / np.abs(columns[:, 2]).max()
    found = inspect([written(tmp_path, columns, spoken.names)])
    assert len(found.tracks[0].clipped) >= 1
    assert found.tracks[1].dc_offset == pytest.approx(0.02, abs=0.001)
    assert "clipping" in kinds(found, spoken.names[0])
    assert "dc" in kinds(found, spoken.names[1])
    assert "low" in kinds(found, spoken.names[2])
    low = next(line for line in found.advice if line.kind == "low")
    assert (low.unit, low.value) == ("dBFS", pytest.approx(-34.0, abs=0.1))
    assert not kinds(found, spoken.names[1]) & {"clipping", "low"}


@pytest.mark.parametrize("turned", [0, 2])
def test_a_turned_microphone_is_found(spoken, plain, tmp_path, turned):
    """Of three tracks the one with its sign turned is named, whichever it is, and none where all agree."""
    assert plain.polarity == (1, 1, 1)
    signs = np.ones(3)
    signs[turned] = -1
    found = inspect([written(tmp_path, spoken.mics * signs, spoken.names)])
    assert found.polarity == tuple(int(sign) for sign in signs)
    assert [line.track for line in found.advice if line.kind == "polarity"] == [spoken.names[turned]]


def test_what_session_toml_turns_counts_as_turned(spoken, tmp_path):
    """polarity = -1 in session.toml for a turned microphone leaves nothing to advise."""
    folder = written(tmp_path, spoken.mics * (1.0, -1.0, 1.0), spoken.names)
    tables = [f'[[track]]\nfile = "{name}.wav"\n' for name in spoken.names]
    tables[1] += "polarity = -1\n"
    (folder / "session.toml").write_text("".join(tables), encoding="utf-8")
    assert inspect([folder]).polarity == (1, 1, 1)


def test_a_late_track_is_measured_and_the_advice_cures_it(tmp_path):
    """A track 50 ms late is seen within 1 ms; the offsets advised bring all clocks within 1 ms."""
    found, spoken = inspected(tmp_path, dataclasses.replace(QUIET, latency_ms=((1, 50.0),)))
    late = np.array(found.late_s, float)
    assert late - late[0] == pytest.approx([0, 0.05, 0], abs=0.001)
    early = {line.track: line.value for line in found.advice if line.kind == "clock"}
    assert set(early) == {spoken.names[0], spoken.names[2]}
    tables = [f'[[track]]\nfile = "{name}.wav"\noffset_s = {early.get(name, 0.0):.4f}\n' for name in spoken.names]
    (tmp_path / "session.toml").write_text("".join(tables), encoding="utf-8")
    cured = inspect([tmp_path])
    assert max(cured.late_s) < 0.001
    assert "clock" not in kinds(cured)


def test_a_call_that_returns_the_others_late_is_no_late_track(tmp_path):
    """Bleed that comes back after 300 ms is an echo of 300 ms at that track, and not a clock."""
    found, spoken = inspected(tmp_path, dataclasses.replace(QUIET, late_bleed_ms=((2, 300.0),)))
    echo = [line for line in found.advice if line.kind == "echo"]
    assert [line.track for line in echo] == [spoken.names[2]]
    assert echo[0].value == pytest.approx(0.3, abs=0.01)
    assert "clock" not in kinds(found)


def test_room_tone_is_taken_where_it_is_clean(spoken, tmp_path):
    """Of a long pause a hiss and a soft thump at 55 Hz are left out; what is named lies near the floor."""
    rng = np.random.default_rng(2)
    room = np.tile(spoken.noise[: 6 * RATE_HZ], (2, 1))
    half = np.arange(RATE_HZ // 2)
    hiss = np.diff(rng.standard_normal(len(half) + 1)) * room.std() * 3
    thump = np.sin(2 * np.pi * 55 * half / RATE_HZ)[:, None] * room.std(axis=0) * np.sqrt(2) * 10 ** (2 / 20)
    room[4 * RATE_HZ : 4 * RATE_HZ + len(half)] += hiss[:, None]
    room[8 * RATE_HZ : 8 * RATE_HZ + len(half)] += thump
    found = inspect([written(tmp_path, np.concatenate([spoken.mics, room]), spoken.names)])
    pause = len(spoken.mics) / RATE_HZ
    talk = [span for spans in spoken.segments for span in spans]
    for track in found.tracks:
        assert 1 <= len(track.room_tone) <= 3
        for tone in track.room_tone:
            assert tone.to_s - tone.from_s >= 1.5
            assert tone.level_lufs == pytest.approx(track.floor_lufs, abs=2)
            assert not any(a < tone.to_s and tone.from_s < b for a, b in talk)
            assert not tone.from_s < pause + 4.1 < tone.to_s
            assert not tone.from_s < pause + 8.25 < tone.to_s
    assert "room tone" not in kinds(found)


def test_an_empty_microphone_gets_told(tmp_path):
    """A microphone nobody speaks into has no voice level, an unknown bleed, and advice on its role."""
    found, _ = inspected(tmp_path, dataclasses.replace(QUIET, empty=1))
    spare = found.tracks[3]
    assert spare.speaking_s < 1
    assert "no voice" in kinds(found, spare.name)
    assert not {"bleed", "noise", "hum"} & kinds(found, spare.name)
    text = "\n".join(format_inspection(found))
    assert 'role = "room"' in text


def test_beds_and_room_microphones_sit_at_no_table(spoken, tmp_path):
    """Tracks with another role have levels, but no place in the matrices and the ring, and no advice about voices."""
    rng = np.random.default_rng(3)
    folder = written(tmp_path, spoken.mics, spoken.names)
    sf.write(folder / "rain.wav", rng.standard_normal((len(spoken.mics), 2)) * 0.01, RATE_HZ)
    sf.write(folder / "window.wav", rng.standard_normal(len(spoken.mics)) * 0.001, RATE_HZ)
    roles = {**dict.fromkeys(spoken.names, "voice"), "rain": "bed", "window": "room"}
    tables = [f'[[track]]\nfile = "{name}.wav"\nrole = "{role}"\n' for name, role in roles.items()]
    (folder / "session.toml").write_text("".join(tables), encoding="utf-8")
    found = inspect([folder])
    assert [t.role for t in found.tracks] == list(roles.values())
    assert not kinds(found, "rain") | kinds(found, "window")
    lines = format_inspection(found)
    matrix = lines[next(i for i, line in enumerate(lines) if line.startswith("Bleed")) :][1:5]
    assert not any("rain" in line or "window" in line for line in matrix)
    shown = [node.text for node in ET.fromstring(inspection_svg(found)).iter(f"{SVG}text")]
    assert shown.count("rain") == 1  # its bar
    assert shown.count(spoken.names[0]) == 4  # bar, ring, row and column


def test_of_two_turned_against_each_other_the_second_is_named(spoken, tmp_path):
    """With two tracks nobody can know which is wrong, and the advice says so."""
    found = inspect([written(tmp_path, spoken.mics[:, :2] * (-1.0, 1.0), spoken.names[:2])])
    assert found.polarity == (1, -1)
    assert "one of the two is wrong" in next(line.text for line in found.advice if line.kind == "polarity")


def test_copies_are_reported_as_set_aside(spoken, tmp_path):
    """A softer copy of a track is named as set aside and is no row of the tables."""
    columns = np.column_stack([spoken.mics, spoken.mics[:, 0] * 0.25])
    found = inspect([written(tmp_path, columns, (*spoken.names, "safety"))])
    assert [name for name, _ in found.set_aside] == ["safety"]
    assert len(found.tracks) == 3
    assert "set aside" in kinds(found, "safety")


def test_a_close_voice_gives_advice_by_the_inverse_distance_law(free_field):
    """Far microphones break the 3:1 rule: each advice names the loudest voice and its number."""
    found, _ = free_field
    assert pytest.approx(THREE_TO_ONE_DB, abs=0.01) == -BLEED_DB
    assert share_of_distance(6.0206) == pytest.approx(0.5, abs=1e-4)
    for m, track in enumerate(found.tracks):
        worst = np.nanmax(np.delete(found.bleed_db[:, m], m))
        lines = [line for line in found.advice if (line.kind, line.track) == ("bleed", track.name)]
        assert [line.value for line in lines] == ([pytest.approx(worst)] if worst > BLEED_DB else [])
        assert all(f"{worst:.1f} dB" in line.text for line in lines)
    assert "bleed" in kinds(found)


def test_every_advice_has_a_known_kind_a_number_and_one_line(free_field, plain):
    """Kinds come from the closed list, in its order; texts are single lines of plain words."""
    for found in (free_field[0], plain):
        order = [KINDS.index(line.kind) for line in found.advice]
        assert order == sorted(order)
        for line in found.advice:
            assert np.isfinite(line.value)
            assert line.unit
            assert "\n" not in line.text
            assert not line.text.endswith(".")


def test_the_text_is_plain(plain):
    """No colour, no markup, no boxes, no trailing blanks; every track and table stands in it."""
    lines = format_inspection(plain)
    text = "\n".join(lines)
    assert re.fullmatch(r"[ -~\n]*", text)
    assert all(line == line.rstrip() for line in lines)
    for word in (*(t.name for t in plain.tracks), "Bleed", "Coupling", "Delay", "Room tone", "LUFS"):
        assert word in text


def test_json_holds_every_field_and_no_infinities(plain, tmp_path):
    """The dict survives strict JSON and has each field of the record; unknown numbers are null."""
    plain_dict = json.loads(json.dumps(inspection_json(plain), allow_nan=False))
    assert set(plain_dict) == {field.name for field in dataclasses.fields(plain)}
    assert plain_dict["tracks"][0]["name"] == plain.tracks[0].name
    assert plain_dict["bleed_db"][0][1] == pytest.approx(plain.bleed_db[0, 1], abs=1e-4)
    silent = inspect([written(tmp_path, np.zeros((3 * RATE_HZ, 1)), ("nothing",))])
    nothing = json.loads(json.dumps(inspection_json(silent), allow_nan=False))["tracks"][0]
    assert (nothing["peak_dbfs"], nothing["voice_lufs"], nothing["silent"]) == (None, None, True)


@pytest.mark.parametrize("count", [1, 2, 3, 8])
def test_the_picture_is_well_formed_with_any_number_of_tracks(plain, count):
    """The SVG parses, stands by itself, and shows each name, also where a name looks like markup."""
    hostile = tuple(dataclasses.replace(plain.tracks[i % 3], name=f"<b>&\"{i}'") for i in range(count))
    bleed = np.full((count, count), -7.0)
    odd = dataclasses.replace(
        plain, title="</style><script>alert(1)</script>\x07", tracks=hostile, bleed_db=bleed, coupling_db=bleed,
        delay_s=bleed, correlation=bleed, late_s=(0.0,) * count, polarity=(1,) * count)
    text = inspection_svg(odd)
    root = ET.fromstring(text)
    assert root.tag == f"{SVG}svg"
    assert not root.findall(f".//{SVG}script")
    assert not re.search(r"(?:href|src|url\()", text)
    shown = [node.text for node in root.iter(f"{SVG}text")]
    assert all(track.name in shown for track in hostile)
    assert (shown.count("\u22127") > 0) == (count > 1)


def test_one_track_is_enough(spoken, tmp_path):
    """A single track has levels and no matrices."""
    found = inspect([written(tmp_path, spoken.own[:, :1] + spoken.noise[:, :1], spoken.names[:1])])
    assert found.tracks[0].voice_lufs is not None
    assert "Bleed" not in "\n".join(format_inspection(found))


def test_the_same_session_gives_the_same_words(spoken, plain, tmp_path):
    """Two inspections agree in every line and in the picture."""
    again = inspect([written(tmp_path / plain.title, spoken.mics, spoken.names)])
    assert format_inspection(again) == format_inspection(plain)
    assert inspection_svg(again) == inspection_svg(plain)
