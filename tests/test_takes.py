"""leveller.takes, leveller.drafts and the chain of files: split takes are one, clocks place the others."""

from __future__ import annotations

import dataclasses
import itertools
import struct
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from sources import read_all, source

from leveller import audio
from leveller.decoder import CHUNK_FRAMES
from leveller.errors import InputError
from leveller.session import Session, open_session

RATE_HZ = 16000
NOON = 12 * 3600  # s since midnight
SUBTYPES = {"PCM_16": 2.0**-15, "PCM_24": 2.0**-23}


def sound(seed: int, seconds: float = 1.0, *, rate_hz: int = RATE_HZ, channels: int = 1) -> np.ndarray:
    """Seeded noise that comes in phrases, (frames,) or (frames, channels)."""
    frames = round(seconds * rate_hz)
    rng = np.random.default_rng(seed)
    x = 0.1 * rng.standard_normal((frames, channels)) * (np.arange(frames) // (rate_hz // 8) % 3 > 0)[:, None]
    return (x[:, 0] if channels == 1 else x).astype(np.float32)


def bext(time_reference: int, date: str = "", time: str = "") -> tuple[bytes, bytes]:
    """A bext chunk of version 1 as a recorder writes it, by the offsets of EBU Tech 3285."""
    raw = bytearray(602)
    raw[320:330], raw[330:338] = date.encode().ljust(10, b"\0"), time.encode().ljust(8, b"\0")
    struct.pack_into("<IIH", raw, 338, time_reference & 0xFFFFFFFF, time_reference >> 32, 1)
    return b"bext", bytes(raw)


def ixml(names: list[str]) -> tuple[bytes, bytes]:
    """An iXML chunk that names the channels in order."""
    tracks = "".join(f"<TRACK><CHANNEL_INDEX>{n + 4}</CHANNEL_INDEX><INTERLEAVE_INDEX>{n}</INTERLEAVE_INDEX>"
                     f"<NAME>{name}</NAME></TRACK>" for n, name in enumerate(names, 1))
    return b"iXML", f"<BWFXML><TRACK_LIST>{tracks}</TRACK_LIST></BWFXML>".encode()


def record(
    path: Path, x: np.ndarray, start_s: float | None = None, *, rate_hz: int = RATE_HZ, subtype: str = "PCM_24",
    names: list[str] | None = None, late_frames: int = 0, date: str = "", time: str = "",
) -> Path:
    """A file as a recorder leaves it: chunks *before* the audio, as most do."""
    chunks = [] if start_s is None else [bext(round(start_s * rate_hz) + late_frames, date, time)]
    chunks += [] if names is None else [ixml(names)]
    path.parent.mkdir(parents=True, exist_ok=True)
    soundfile.write(path, x, rate_hz, subtype, format="WAV")
    plain = path.read_bytes()
    extra = b"".join(struct.pack("<4sI", kind, len(raw)) + raw + bytes(len(raw) % 2) for kind, raw in chunks)
    path.write_bytes(b"RIFF" + struct.pack("<I", len(plain) + len(extra) - 8) + b"WAVE" + extra + plain[12:])
    return path


def series(folder: Path, lengths: list[float], *, stem: str = "rec_", start_s: float = NOON, **more: Any) -> np.ndarray:
    """Files that follow each other; what they hold together."""
    at, whole = start_s, []
    for number, seconds in enumerate(lengths, 1):
        whole.append(sound(100 + number, seconds, channels=len(more.get("names") or [0])))
        record(folder / f"{stem}{number}.wav", whole[-1], at, **more)
        at += seconds
    return np.concatenate(whole)


def heard(session: Session, block: int = 5000) -> dict[str, np.ndarray]:
    """All tracks of a session as the readers give them."""
    sizes = [block] * (session.frames // block) + [session.frames % block]
    with audio.open_readers(session) as readers:
        blocks = [[reader.read(size) for reader in readers] for size in sizes]
    return {track.name: np.concatenate([row[i] for row in blocks]) for i, track in enumerate(session.tracks)}


def toml(folder: Path, *tracks: str) -> Path:
    """A session.toml of `[[track]]` tables."""
    path = folder / "session.toml"
    path.write_text("\n".join(f"[[track]]\n{track}" for track in tracks), encoding="utf-8")
    return path


def places(session: Session) -> dict[str, float]:
    """Where each track starts, in seconds."""
    return {track.name: track.offset_frames / session.rate_hz for track in session.tracks}


# Names


def test_polyphonic_file_gives_named_tracks(tmp_path: Path) -> None:
    """The recorder's names become the tracks', made safe and unique; a channel without one keeps its number."""
    record(tmp_path / "take.wav", sound(1, channels=5), names=["Ada", "Ben/Cy", "", "Ada", "Приём"])
    session = open_session([tmp_path])
    assert [(t.name, t.channels) for t in session.tracks] == [
        ("Ada", (0,)), ("Ben_Cy", (1,)), ("take ch3", (2,)), ("Ada 2", (3,)), ("Приём", (4,))]
    assert session.notes == ("take.wav: tracks named by the recorder: Ada, Ben/Cy, take ch3, Ada, Приём",)


def test_names_of_session_toml_are_stronger(tmp_path: Path) -> None:
    """A name given by hand wins; a channel picked without one has the recorder's."""
    record(tmp_path / "take.wav", sound(1, channels=3), names=["Ada", "Ben", "Cy"])
    toml(tmp_path, 'file = "take.wav"\nchannel = 1\nname = "Host"', 'file = "take.wav"\nchannel = 3')
    assert [(t.name, t.channels) for t in open_session([tmp_path]).tracks] == [("Host", (0,)), ("Cy", (2,))]
    toml(tmp_path, 'file = "take.wav"\nname = "Table"')
    assert [t.name for t in open_session([tmp_path]).tracks] == ["Table ch1", "Table ch2", "Table ch3"]


def test_unreadable_names_are_said_and_left_out(tmp_path: Path) -> None:
    """A broken iXML chunk costs the names, not the audio."""
    path = record(tmp_path / "take.wav", sound(1, channels=3))
    audio.append_chunks(path, [(b"iXML", b"<BWFXML><TRACK_LIST>")])
    session = open_session([path])
    assert [t.name for t in session.tracks] == ["take ch1", "take ch2", "take ch3"]
    assert len(session.notes) == 1
    assert session.notes[0].startswith("take.wav: the recorder's track names (iXML) are left out: not understood: ")


# Places


def test_clocks_place_different_tracks(tmp_path: Path) -> None:
    """Files of two rates are delayed by what their time references differ, and that is said."""
    a, b = sound(1, 3), sound(2, 2, rate_hz=24000)
    record(tmp_path / "ada.wav", a, NOON + 0.25, date="2031-05-06", time="12:00:00")
    record(tmp_path / "abe.wav", b, NOON + 0.75, rate_hz=24000, date="2031-05-06", time="12:00:01")
    record(tmp_path / "cy.wav", sound(3, 3), NOON + 0.25)
    session = open_session([tmp_path])
    assert places(session) == {"abe": 0.5, "ada": 0, "cy": 0}
    assert session.notes[0] == "abe.wav: starts 0.500 s after ada.wav by their time references, delayed by that"
    assert [t.time_reference for t in session.tracks] == [
        NOON * 24000 + 18000, NOON * RATE_HZ + 4000, NOON * RATE_HZ + 4000]
    assert (session.rate_hz, session.time_reference) == (RATE_HZ, NOON * RATE_HZ + 4000)
    assert session.origination == ("2031-05-06", "12:00:00")
    assert np.abs(heard(session)["ada"] - a).max() <= SUBTYPES["PCM_24"]


def test_equal_or_absent_clocks_change_nothing(tmp_path: Path) -> None:
    """Files that started together start together; without references there is none for the session."""
    for name in ("ada", "ben"):
        record(tmp_path / "same" / f"{name}.wav", sound(ord(name[0]), 1 + (name == "ben")), 0)
        record(tmp_path / "none" / f"{name}.wav", sound(ord(name[0]), 2))
    session = open_session([tmp_path / "same"])
    assert (places(session), session.time_reference) == ({"ada": 0, "ben": 0}, 0)
    session = open_session([tmp_path / "none"])
    assert (places(session), session.time_reference, session.notes) == ({"ada": 0, "ben": 0}, None, ())
    assert {t.time_reference for t in session.tracks} == {None}


def test_clocks_count_only_where_all_have_one(tmp_path: Path) -> None:
    """One file without a reference: all start together, that is said, and session zero has no time of day."""
    record(tmp_path / "ada.wav", sound(1, 3), NOON)
    record(tmp_path / "ben.wav", sound(2, 3), NOON + 1)
    record(tmp_path / "call.wav", sound(3, 3))
    session = open_session([tmp_path])
    assert places(session) == {"ada": 0, "ben": 0, "call": 0}
    assert session.notes == ("time references differ, but are not used, since call.wav has none; files without an "
                             "offset_s start together",)
    assert session.time_reference is None


def test_offset_by_hand_is_stronger_than_a_clock(tmp_path: Path) -> None:
    """A given offset_s, 0 too, places its file; the others keep to their clocks."""
    record(tmp_path / "ada.wav", sound(1, 3), NOON)
    record(tmp_path / "ben.wav", sound(2, 3), NOON + 1)
    record(tmp_path / "cy.wav", sound(3, 3), 5 * 3600)
    record(tmp_path / "call.wav", sound(4, 3))
    toml(tmp_path, 'file = "ada.wav"', 'file = "ben.wav"', 'file = "cy.wav"\noffset_s = 0',
         'file = "call.wav"\noffset_s = 2.5')
    session = open_session([tmp_path])
    assert places(session) == {"ada": 0, "ben": 1, "cy": 0, "call": 2.5}
    assert session.time_reference == NOON * RATE_HZ
    toml(tmp_path, 'file = "ada.wav"\noffset_s = 2', 'file = "call.wav"')
    assert open_session([tmp_path]).time_reference == (NOON - 2) * RATE_HZ


def test_session_over_midnight_stays_in_order(tmp_path: Path) -> None:
    """What started after midnight comes behind what started before it; takes are joined across it."""
    day = 24 * 3600
    x, y = sound(1, 1), sound(2, 2)
    record(tmp_path / "ada_1.wav", x, day - 1)
    record(tmp_path / "ada_2.wav", y, 0)
    record(tmp_path / "ben.wav", sound(3, 2), 0.5)
    session = open_session([tmp_path])
    assert places(session) == {"ada_1": 0, "ben": 1.5}
    assert session.time_reference == (day - 1) * RATE_HZ
    assert np.abs(heard(session)["ada_1"][: 3 * RATE_HZ] - np.concatenate([x, y])).max() <= SUBTYPES["PCM_24"]


def test_reference_that_is_no_time_of_day_is_not_used(tmp_path: Path) -> None:
    """A reference of weeks is noise of the recorder, said and set aside."""
    record(tmp_path / "ada.wav", sound(1), 500 * 3600)
    session = open_session([tmp_path / "ada.wav"])
    assert session.notes == ("ada.wav: its time reference is 500.0 h behind midnight, not used",)
    assert (session.time_reference, session.tracks[0].time_reference) == (None, None)


@pytest.mark.parametrize(("start_s", "offset_s", "zero_s"), [(25 * 3600, 0, 3600), (1, 2, 24 * 3600 - 1)])
def test_session_zero_is_a_time_of_day(tmp_path: Path, start_s: float, offset_s: float, zero_s: int) -> None:
    """A recorder that counts past midnight, and silence before a file from before midnight: still within the day."""
    record(tmp_path / "ada.wav", sound(1), start_s)
    toml(tmp_path, f'file = "ada.wav"\noffset_s = {offset_s}')
    assert open_session([tmp_path]).time_reference == zero_s * RATE_HZ


# Split takes


@pytest.mark.parametrize("subtype", SUBTYPES)
def test_split_take_is_one_track(tmp_path: Path, subtype: str) -> None:
    """Three files whose times meet are read as one stream, to the last step and without a gap."""
    whole = series(tmp_path, [0.5, 6.0, 0.7], subtype=subtype)
    session = open_session([tmp_path])
    (track,) = session.tracks
    assert (track.name, track.path.name, track.frames, track.source_frames) == ("rec_1", "rec_1.wav", 115200, 115200)
    assert [(part.path.name, part.frames) for part in track.parts] == [
        ("rec_1.wav", 8000), ("rec_2.wav", 96000), ("rec_3.wav", 11200)]
    assert session.notes == ("rec_1.wav: read as one take with rec_2.wav, rec_3.wav (7.200 s), since their time "
                             "references meet",)
    assert session.time_reference == track.time_reference == NOON * RATE_HZ
    assert len(whole) > CHUNK_FRAMES  # chunks end elsewhere than files
    assert np.abs(heard(session)["rec_1"] - whole).max() <= SUBTYPES[subtype]


@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(st.integers(1, 3000), min_size=1, max_size=5), st.lists(st.integers(1, 4000), max_size=9),
       st.sampled_from([RATE_HZ, 22050]))
def test_split_take_equals_the_whole_file(
    tmp_path: Path, lengths: list[int], cuts: list[int], rate_hz: int
) -> None:
    """However a take was split and however it is read, resampled or not, the bytes are those of one file."""
    x = sound(5, sum(lengths) / RATE_HZ)
    edges = np.cumsum([0, *lengths])
    files = []
    for number, (start, end) in enumerate(itertools.pairwise(edges), 1):
        files.append(audio.Part(tmp_path / f"p{number}.wav", int(end - start)))
        soundfile.write(files[-1].path, x[start:end], RATE_HZ, "PCM_24")
    soundfile.write(tmp_path / "whole.wav", x, RATE_HZ, "PCM_24")
    one = source(tmp_path / "whole.wav", rate_hz=rate_hz)
    frames = one.frames
    many = dataclasses.replace(one, path=files[0].path, parts=tuple(files))
    expected = read_all(one, [frames + 100], rate_hz)
    got = read_all(many, [*cuts, frames + 100], rate_hz)[: frames + 100]
    assert got.tobytes() == expected.tobytes()
    starts = [-50, 0, *(int(edge) - 20 for edge in edges), 5, len(x)]
    for a, b in zip(audio.pieces(one.path, starts, frames=64), audio.pieces(files, starts, frames=64), strict=True):
        assert a.tobytes() == b.tobytes()


def test_split_polyphonic_take_is_decoded_once(tmp_path: Path) -> None:
    """All channels of a split file are tracks of the whole take, named, and share one decode."""
    whole = series(tmp_path, [2.0, 5.0], names=["Ada", "Ben", "Cy"])
    session = open_session([tmp_path])
    assert [track.name for track in session.tracks] == ["Ada", "Ben", "Cy"]
    for n, x in enumerate(heard(session).values()):
        assert np.abs(x - whole[:, n]).max() <= SUBTYPES["PCM_24"]
    with audio.open_readers(session) as readers:
        for reader in readers:
            reader.read(session.frames)
        assert [reader.blocks_read for reader in readers] == [-(-len(whole) // CHUNK_FRAMES)] * 3


def test_several_split_tracks_keep_to_their_own_files(tmp_path: Path) -> None:
    """Two microphones of two files each and a third recorder: three tracks, each with its own sound."""
    ada = series(tmp_path, [1, 2], stem="T01_ada_")
    ben = series(tmp_path, [1, 2], stem="T01_ben_") * 0
    for number, seconds in ((1, 1.0), (2, 2.0)):
        ben[(number - 1) * RATE_HZ :][: round(seconds * RATE_HZ)] = sound(50 + number, seconds)
        record(tmp_path / f"T01_ben_{number}.wav", sound(50 + number, seconds), NOON + number - 1)
    record(tmp_path / "cy.wav", sound(9, 2.5), NOON + 0.5)
    session = open_session([tmp_path])
    got = heard(session)
    assert places(session) == {"cy": 0.5, "T01_ada_1": 0, "T01_ben_1": 0}
    assert np.abs(got["T01_ada_1"] - ada).max() <= SUBTYPES["PCM_24"]
    assert np.abs(got["T01_ben_1"] - ben).max() <= SUBTYPES["PCM_24"]


@pytest.mark.parametrize(("first", "second", "names", "count"), [
    ("rec_1.wav", "rec_2.wav", None, 1),
    ("Take9 Table.wav", "TAKE10 table.wav", None, 1),
    ("310506_120000.wav", "310506_120001.wav", None, 1),
    ("morning.wav", "noon.wav", ["Ada", "Ben", "Cy"], 1),
    ("rec_1.wav", "rec_2b.wav", None, 2),
    ("rec_2.wav", "rec_1.wav", None, 2),
    ("T1_mic1.wav", "T2_mic2.wav", None, 2),
])
def test_what_makes_a_series(tmp_path: Path, first: str, second: str, names: list[str] | None, count: int) -> None:
    """One number that grows, or the same track list, make files a series; others are tracks of their own."""
    channels = len(names or [0])
    record(tmp_path / first, sound(1, 1, channels=channels), NOON, names=names)
    record(tmp_path / second, sound(2, 1, channels=channels), NOON + 1, names=names)
    record(tmp_path / "other.wav", sound(3, 2), NOON)
    session = open_session([tmp_path])
    assert len({track.path for track in session.tracks}) == count + 1
    assert any("read as one take" in note for note in session.notes) == (count == 1)


def test_file_names_are_surer_than_track_lists(tmp_path: Path) -> None:
    """Two recorders of one make that split at the same times keep apart, though their track lists are equal."""
    names = ["Left", "Middle", "Right"]
    for number, stem in enumerate("AB"):
        series(tmp_path, [1, 1], stem=f"{stem}_", names=names)
        record(tmp_path / f"{stem}_1.wav", sound(number, channels=3), NOON, names=names)
    session = open_session([tmp_path])
    assert {tuple(part.path.name for part in track.parts) for track in session.tracks} == {
        ("A_1.wav", "A_2.wav"), ("B_1.wav", "B_2.wav")}


def test_files_without_reference_are_never_joined(tmp_path: Path) -> None:
    """Numbered files of no known time are tracks that start together, as ever."""
    for number in (1, 2):
        record(tmp_path / f"rec_{number}.wav", sound(number))
    session = open_session([tmp_path])
    assert [(t.name, t.offset_frames, t.parts) for t in session.tracks] == [("rec_1", 0, ()), ("rec_2", 0, ())]


@pytest.mark.parametrize(("late", "joins", "said"), [
    (0, True, None), (1, True, None), (-1, True, None),
    (320, True, "rec_2.wav: starts 20.0 ms after the end of rec_1.wav, joined without a gap"),
    (-320, True, "rec_2.wav: starts 20.0 ms before the end of rec_1.wav, joined without a gap"),
    (321, False, None),
])
def test_times_meet_within_20_ms(tmp_path: Path, late: int, joins: bool, said: str | None) -> None:
    """A frame is nothing, up to 20 ms are joined and said, more is a gap."""
    record(tmp_path / "rec_1.wav", sound(1), NOON)
    record(tmp_path / "rec_2.wav", sound(2), NOON + 1, late_frames=late)
    if not joins:
        with pytest.raises(InputError, match=r"rec_2\.wav: starts 0\.020 s after the end of rec_1\.wav"):
            open_session([tmp_path])
        return
    session = open_session([tmp_path])
    assert [track.frames for track in session.tracks] == [2 * RATE_HZ]
    assert [note for note in session.notes if "without a gap" in note] == ([said] if said else [])


def test_files_that_overlap_are_tracks(tmp_path: Path) -> None:
    """Numbered files of the same time are microphones, not takes."""
    for number in (1, 2, 3):
        record(tmp_path / f"mic{number}.wav", sound(number, 2), NOON + 0.5 * (number == 3))
    assert places(open_session([tmp_path])) == {"mic1": 0, "mic2": 0, "mic3": 0.5}


# Refusals


def test_gap_is_refused_with_the_way_out(tmp_path: Path) -> None:
    """A hole in a series is refused with the offset that keeps the recorder's time; with it the session opens."""
    record(tmp_path / "rec_1.wav", sound(1, 1), NOON)
    record(tmp_path / "rec_2.wav", sound(2, 1), NOON + 3.5)
    with pytest.raises(InputError) as refused:
        open_session([tmp_path])
    assert str(refused.value) == (
        f"{tmp_path / 'rec_2.wav'}: starts 2.500 s after the end of rec_1.wav by their time references, so they are no "
        "take without a gap. Give rec_2.wav an offset_s in session.toml (3.500 keeps the recorder's time), or put it "
        "in a folder of its own")
    toml(tmp_path, 'file = "rec_1.wav"', 'file = "rec_2.wav"\noffset_s = 3.5')
    assert places(open_session([tmp_path])) == {"rec_1": 0, "rec_2": 3.5}


@pytest.mark.parametrize(("more", "found"), [
    ({"rate_hz": 32000}, "32000 Hz PCM_24 with 1 channel(s)"),
    ({"subtype": "PCM_16"}, "16000 Hz PCM_16 with 1 channel(s)"),
    ({"channels": 2}, "16000 Hz PCM_24 with 2 channel(s)")])
def test_takes_of_two_formats_are_refused(tmp_path: Path, more: dict[str, Any], found: str) -> None:
    """Files that meet but cannot be one stream: found against expected, and the way out."""
    channels, rate_hz = more.pop("channels", 1), more.get("rate_hz", RATE_HZ)
    record(tmp_path / "rec_1.wav", sound(1), NOON)
    record(tmp_path / "rec_2.wav", sound(2, rate_hz=rate_hz, channels=channels), NOON + 1, **more)
    with pytest.raises(InputError) as refused:
        open_session([tmp_path])
    assert str(refused.value) == (
        f"{tmp_path / 'rec_2.wav'}: follows rec_1.wav without a gap, but is {found}, expected 16000 Hz PCM_24 with 1 "
        "channel(s) as that file. Convert it, or: Give rec_2.wav an offset_s in session.toml (1.000 keeps the "
        "recorder's time), or put it in a folder of its own")


def test_file_behind_all_others_is_refused_or_joined_by_name(tmp_path: Path) -> None:
    """A clock that was never set makes no session of hours; the same name in session.toml makes it one take."""
    x, y = sound(1), sound(2)
    record(tmp_path / "morning.wav", x, NOON)
    record(tmp_path / "noon.wav", y, NOON + 1)
    with pytest.raises(InputError) as refused:
        open_session([tmp_path])
    assert str(refused.value) == (
        f"{tmp_path / 'noon.wav'}: starts when all others have ended (by its time reference 0.000 s after "
        "morning.wav). If it continues that file, give both the same name in session.toml; else: Give noon.wav an "
        "offset_s in session.toml (1.000 keeps the recorder's time), or put it in a folder of its own")
    toml(tmp_path, 'file = "morning.wav"\nname = "Ada"\npan = 0.5', 'file = "noon.wav"\nname = "Ada"')
    session = open_session([tmp_path])
    assert [(track.name, track.pan) for track in session.tracks] == [("Ada", 0.5)]
    assert np.abs(heard(session)["Ada"] - np.concatenate([x, y])).max() <= SUBTYPES["PCM_24"]


def test_two_files_that_could_continue_one_are_refused(tmp_path: Path) -> None:
    """Numbered microphones of two takes: names in session.toml say what belongs together."""
    for number in (1, 2, 3, 4):
        record(tmp_path / f"mic{number}.wav", sound(number), NOON + (number > 2))
    hint = "by their time references. Give the files that belong together the same name in session.toml"
    for numbers, message in (((1, 2, 3, 4), "mic3.wav: could continue mic1.wav or mic2.wav"),
                             ((1, 3, 4), "mic1.wav: could be continued by mic3.wav or mic4.wav")):
        with pytest.raises(InputError) as refused:
            open_session([tmp_path / f"mic{number}.wav" for number in numbers])
        assert str(refused.value) == f"{tmp_path}/{message} {hint}"
    toml(tmp_path, *(f'file = "mic{n}.wav"\nname = "{"Ada" if n % 2 else "Ben"}"' for n in (1, 2, 3, 4)))
    got = heard(open_session([tmp_path]))
    for name, numbers in (("Ada", (1, 3)), ("Ben", (2, 4))):
        assert np.abs(got[name] - np.concatenate([sound(n) for n in numbers])).max() <= SUBTYPES["PCM_24"]


def test_settings_that_differ_within_a_take_are_refused(tmp_path: Path) -> None:
    """One take has one pan, one role; the second file may leave them out."""
    series(tmp_path, [1, 1])
    toml(tmp_path, 'file = "rec_1.wav"\npan = 0.5', 'file = "rec_2.wav"\npan = -0.5')
    with pytest.raises(InputError, match=r"rec_2\.wav: follows rec_1\.wav without a gap, but its \[\[track\]\] says "
                                         r"pan = -0\.5, expected 0\.5 as for that file\. Say the same for both, or: "):
        open_session([tmp_path])


def test_offset_of_the_first_file_moves_the_take(tmp_path: Path) -> None:
    """offset_s of the first file delays all; of a later file it parts it from the take."""
    series(tmp_path, [1, 1])
    toml(tmp_path, 'file = "rec_1.wav"\noffset_s = 2', 'file = "rec_2.wav"')
    session = open_session([tmp_path])
    assert (places(session), session.frames) == ({"rec_1": 2}, 4 * RATE_HZ)
    record(tmp_path / "rec_2.wav", sound(3), NOON + 1.75)
    with pytest.raises(InputError, match=r"Give rec_2\.wav an offset_s in session\.toml \(3\.750 keeps"):
        open_session([tmp_path])
    toml(tmp_path, 'file = "rec_1.wav"', 'file = "rec_2.wav"\noffset_s = 1.5')
    assert places(open_session([tmp_path])) == {"rec_1": 0, "rec_2": 1.5}


def test_channels_of_a_split_file_are_joined_one_by_one(tmp_path: Path) -> None:
    """A [[track]] a channel and file: channel joins channel, and each note is said once."""
    whole = series(tmp_path, [1, 1], names=["a", "b", "c"])
    toml(tmp_path, *(f'file = "rec_{n}.wav"\nchannel = {c}' for c in (1, 3) for n in (1, 2)))
    session = open_session([tmp_path])
    got = heard(session)
    assert list(got) == ["a", "c"]
    assert np.abs(got["c"] - whole[:, 2]).max() <= SUBTYPES["PCM_24"]
    assert len(session.notes) == 1


def test_short_file_within_a_take_leaves_a_gap(tmp_path: Path) -> None:
    """A truncated first file no longer meets the second, also where it is taken as it is."""
    series(tmp_path, [1, 1])
    path = tmp_path / "rec_1.wav"
    path.write_bytes(path.read_bytes()[:-24000])
    with pytest.raises(InputError, match=r"rec_2\.wav: starts 0\.500 s after the end of rec_1\.wav"):
        open_session([tmp_path], accept_short=True)


@pytest.mark.parametrize("number", [1, 2])
def test_file_of_a_take_that_changed_is_an_input_error(tmp_path: Path, number: int) -> None:
    """A file that shrinks after the check is named, whichever of the take it is."""
    series(tmp_path, [1, 1])
    session = open_session([tmp_path])
    soundfile.write(tmp_path / f"rec_{number}.wav", sound(1, 0.5), RATE_HZ, "PCM_24")
    with pytest.raises(InputError, match=rf"rec_{number}\.wav: 8000 frames of 1 channels, but 16000 of 1 when it was "):
        heard(session)


def test_copy_of_a_split_take_is_found(tmp_path: Path) -> None:
    """A safety track in one piece is a copy of the take that another recorder split, behind its first file too."""
    whole = series(tmp_path, [1, 5])
    record(tmp_path / "safety.wav", 0.5 * whole, NOON)
    session = open_session([tmp_path])
    assert [track.name for track in session.tracks] == ["rec_1"]
    assert [(aside.name, aside.why) for aside in session.set_aside] == [("safety", "a copy of rec_1")]
