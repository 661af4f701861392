"""leveller.session: what makes a track, what is refused, what is said."""

from __future__ import annotations

import math
import re
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile

from leveller import audio
from leveller.errors import AutomationError, InputError, LevellerError, SettingsError
from leveller.names import safe_name, unique_names, why_unsafe
from leveller.session import Correction, Session, Skip, open_session
from leveller.sessionfile import read_corrections

RATE_HZ = 16000


def voice(seed: int, *, seconds: float = 3.0, rate_hz: int = RATE_HZ, level: float = 0.1) -> np.ndarray:
    """Seeded noise that comes in phrases, (frames,)."""
    rng = np.random.default_rng(seed)
    frames = round(seconds * rate_hz)
    phrases = np.repeat(rng.random(math.ceil(frames / (rate_hz // 4))) > 0.4, rate_hz // 4)[:frames]
    return (level * phrases * rng.standard_normal(frames)).astype(np.float32)


def save(path: Path, x: np.ndarray, *, rate_hz: int = RATE_HZ, subtype: str = "PCM_24") -> Path:
    """Write a file, with its folder."""
    path.parent.mkdir(parents=True, exist_ok=True)
    soundfile.write(path, x, rate_hz, subtype)
    return path


def names(session: Session) -> list[str]:
    """The tracks' names."""
    return [track.name for track in session.tracks]


def with_toml(folder: Path, text: str, **options: Any) -> Session:
    """A session of two voices, A and B, and a session.toml."""
    save(folder / "A.wav", voice(1))
    save(folder / "B.wav", voice(2))
    (folder / "session.toml").write_text(text, encoding="utf-8")
    return open_session([folder], **options)


TWO = '[[track]]\nfile = "A.wav"\n[[track]]\nfile = "B.wav"\n'


# Sources


def test_folder_counts_its_own_audio_files_only(tmp_path: Path) -> None:
    """Hidden names, other kinds of files and folders below are ignored; the folder is the title."""
    folder = tmp_path / "Episode 7"
    for n, name in enumerate(["host.wav", "Guest.WAV", "caller.flac"]):
        save(folder / name, voice(n))
    for name in (".host.wav", "levelled/Episode 7/mix.wav"):
        save(folder / name, voice(9))
    (folder / "notes.txt").write_text("chat")
    session = open_session([folder])
    assert names(session) == ["caller", "Guest", "host"]
    assert (session.title, session.rate_hz, session.frames) == ("Episode 7", RATE_HZ, 3 * RATE_HZ)
    assert session.mix_channels == 1
    assert session.set_aside == ()
    assert session.notes == ()


def test_list_of_files_is_a_session(tmp_path: Path) -> None:
    """Several files make a session in the order given; one alone gives its name as title."""
    a, b = save(tmp_path / "x" / "A.wav", voice(1)), save(tmp_path / "x" / "B.wav", voice(2))
    assert names(open_session([b, str(a)])) == ["B", "A"]
    assert open_session([b, a]).title == "x"
    assert open_session([a]).title == "A"


@pytest.mark.parametrize(("make", "match"), [
    (lambda d: [d], "no audio files directly in this folder"),
    (lambda d: [d / "none.wav"], r"none\.wav: no such file"),
    (lambda d: [d / "none.toml"], r"none\.toml: cannot be read \(No such file or directory\)"),
    (lambda d: [], "no source given"),
    (lambda d: [save(d / "sub" / "a.wav", voice(1)), d / "sub"], "give one folder, one session.toml, or audio files"),
])
def test_sources_that_cannot_be_are_refused(tmp_path: Path, make: Any, match: str) -> None:
    """Nothing there, nothing given, a mixture: one line each."""
    with pytest.raises(InputError, match=match):
        open_session(make(tmp_path))


@pytest.mark.parametrize("name", ["b.wav", "b.m4a"])
def test_unreadable_audio_file_in_a_folder_is_refused(tmp_path: Path, name: str) -> None:
    """A file that should be audio but cannot be read is not left out silently."""
    save(tmp_path / "a.wav", voice(1))
    (tmp_path / name).write_bytes(b"\0\1\2\3" * 100)
    with pytest.raises(InputError, match=rf"{name}: not readable as audio"):
        open_session([tmp_path])


def test_short_file_is_refused_or_taken_and_said(tmp_path: Path) -> None:
    """A truncated file ends the session's opening; with accept_short its length is what is there, and that is said."""
    path = save(tmp_path / "a.wav", voice(1, seconds=2))
    save(tmp_path / "b.wav", voice(2, seconds=2))
    path.write_bytes(path.read_bytes()[: -3 * RATE_HZ])
    with pytest.raises(InputError, match=r"a\.wav: ends after 1\.000 s, but its header says 2\.000 s"):
        open_session([tmp_path])
    session = open_session([tmp_path], accept_short=True)
    assert session.tracks[0].frames == RATE_HZ
    assert session.notes == ("a.wav: 1.000 s of 2.000 s are there and taken",
                             "a: ends 1.000 s before the session, padded with silence")


# Tracks


def test_two_channels_that_agree_are_one_track(tmp_path: Path) -> None:
    """Channels that correlate over 0.98 are averaged to one voice, whatever DC they have, and that is said."""
    x = voice(1)
    save(tmp_path / "a.wav", np.stack([x, 0.5 * x + 0.01 * voice(1) + 0.2], 1))
    session = open_session([tmp_path])
    assert [(track.name, track.channels, track.width) for track in session.tracks] == [("a", (0, 1), 1)]
    assert session.notes == ("a.wav: its two channels agree (correlation 1.000), taken as one track",)


@pytest.mark.parametrize("second", [lambda x: voice(2), lambda x: x + 0.3 * voice(2), lambda x: -x, lambda x: 0 * x])
def test_two_channels_that_differ_are_two_tracks(tmp_path: Path, second: Any) -> None:
    """Another voice, bleed of another voice, the same upside down, or silence: one track a channel."""
    x = voice(1)
    save(tmp_path / "a.wav", np.stack([x, second(x)], 1))
    session = open_session([tmp_path])
    made = [(track.name, track.channels) for track in session.tracks]
    made += [(aside.name, (1,)) for aside in session.set_aside]
    assert made == [("a ch1", (0,)), ("a ch2", (1,))]
    assert re.search(r"its two channels differ \(correlation -?\d\.\d{3}\), taken as two tracks", session.notes[0])


def test_quiet_noise_does_not_hide_that_channels_agree(tmp_path: Path) -> None:
    """Only loud hops count: a tenth of speech over 22 dB softer hiss, another in each channel, is one voice."""
    x = np.where(np.arange(5 * RATE_HZ) % RATE_HZ < RATE_HZ / 10, 0.3, 0) * np.random.default_rng(4).standard_normal(
        5 * RATE_HZ)
    hiss = 0.024 * np.random.default_rng(5).standard_normal((len(x), 2))
    both = np.clip(0.5 * (x[:, None] + hiss), -1, 1)
    assert np.corrcoef(both.T)[0, 1] < 0.97  # over all hops they would not agree
    save(tmp_path / "a.wav", both)
    assert names(open_session([tmp_path])) == ["a"]


def test_channels_key_overrides_what_was_heard(tmp_path: Path) -> None:
    """`split` and `together` are obeyed without a note."""
    x = voice(1)
    save(tmp_path / "same.wav", np.stack([x, x + 0.001 * voice(7)], 1))
    save(tmp_path / "other.wav", np.stack([voice(2), voice(3)], 1))
    (tmp_path / "session.toml").write_text(
        '[[track]]\nfile = "same.wav"\nchannels = "split"\nrole = "room"\n'
        '[[track]]\nfile = "other.wav"\nchannels = "together"')
    session = open_session([tmp_path])
    assert names(session) == ["same ch1", "same ch2", "other"]
    assert session.tracks[2].channels == (0, 1)
    assert session.notes == ()


def test_polyphonic_file_is_a_track_a_channel(tmp_path: Path) -> None:
    """Each channel of a file with more than two is a track `<file> ch1` and so on."""
    save(tmp_path / "Field.wav", np.stack([voice(n) for n in range(4)], 1))
    session = open_session([tmp_path])
    assert names(session) == ["Field ch1", "Field ch2", "Field ch3", "Field ch4"]
    assert [track.channels for track in session.tracks] == [(0,), (1,), (2,), (3,)]


def test_stereo_bed_keeps_its_channels_and_widens_the_mix(tmp_path: Path) -> None:
    """A bed of two channels is one track of width 2; the mix gets two channels, which is said of a mono delivery."""
    save(tmp_path / "music.wav", np.stack([voice(3), voice(4)], 1))
    session = with_toml(tmp_path, TWO + '[[track]]\nfile = "music.wav"\nrole = "bed"\ntrim_db = -12')
    bed = session.tracks[2]
    assert (bed.name, bed.channels, bed.width, bed.trim_db) == ("music", (0, 1), 2, -12.0)
    assert session.mix_channels == 2
    assert session.notes == ("the mix has two channels, since music is panned or stereo; podcast-mono is for one",)


def test_equal_names_get_a_number(tmp_path: Path) -> None:
    """Equal names, in any case and any encoding of accents, are told apart in order."""
    files = [save(tmp_path / name, voice(n)) for n, name in enumerate(["1/Zoé.wav", "2/Zoe\u0301.wav", "3/ZOÉ.flac"])]
    assert names(open_session(files)) == ["Zoé", "Zoe\u0301 2", "ZOÉ 3"]
    assert unique_names(["a", "a 2", "a", "a"]) == ["a", "a 2", "a 3", "a 4"]


def test_names_with_spaces_quotes_and_other_scripts_stay(tmp_path: Path) -> None:
    """What a file system can hold stays letter for letter."""
    kept = ["Ада \"Лав\" 'x'", "=SUM(A1)", "<b>日本", "dot.in.it", "  "]
    for n, name in enumerate(kept[:4]):
        save(tmp_path / f"{name}.wav", voice(n))
    assert sorted(names(open_session([tmp_path]))) == sorted(kept[:4])


@pytest.mark.parametrize(("name", "why"), [
    ("../x", "path separator"), ("a\\b", "path separator"), ("a\nb", "control character"), ("..", "leave the output"),
    ("CON", "device"), ("com1.take", "device"), ("é" * 101, "longer than 200 bytes"), (" ", "empty"),
])
def test_name_that_cannot_be_a_file_is_refused_where_it_was_asked_for(tmp_path: Path, name: str, why: str) -> None:
    """In session.toml it is refused with the reason; a file's own name is made safe."""
    escaped = name.encode("unicode_escape").decode().replace("\\x", "\\u00").replace("\\u00e9", "é")
    with pytest.raises(SettingsError, match=rf"session\.toml: \[\[track\]\] 1 \(A\.wav\): name = .*{why}"):
        with_toml(tmp_path, f'[[track]]\nfile = "A.wav"\nname = "{escaped}"')
    assert why_unsafe(name)
    assert not why_unsafe(safe_name(name))


def test_file_names_that_cannot_be_stems_are_made_safe(tmp_path: Path) -> None:
    """Device names, control characters, long names and undecodable bytes give a usable stem name."""
    for n, name in enumerate(["CON.wav", "a\tb.wav", "x" * 240 + ".wav", "bad\udcff.wav"]):
        save(tmp_path / f"{n}" / "t.wav", voice(n)).rename(tmp_path / name)
    assert names(open_session([tmp_path])) == ["a_b", "bad_", "_CON", "x" * 200]


def test_silent_track_is_a_track(tmp_path: Path) -> None:
    """Digital silence has a level of -inf and is neither a copy of other silence nor refused."""
    for name in "abc":
        save(tmp_path / f"{name}.wav", np.zeros(RATE_HZ))
    save(tmp_path / "both.wav", np.zeros((RATE_HZ, 2)))
    session = open_session([tmp_path])
    assert names(session) == ["a", "b", "both", "c"]
    assert {track.loud_dbfs for track in session.tracks} == {-math.inf}
    assert session.notes == ("both.wav: two silent channels, taken as one track",)


def test_loud_level_of_a_known_tone(tmp_path: Path) -> None:
    """A sine of amplitude 0.5 is at -9.03 dBFS RMS, averaged over two equal channels as well."""
    tone = 0.5 * np.sin(2 * np.pi * 1000 * np.arange(RATE_HZ) / RATE_HZ)
    save(tmp_path / "a.wav", tone)
    assert open_session([tmp_path / "a.wav"]).tracks[0].loud_dbfs == pytest.approx(-9.031, abs=0.001)
    save(tmp_path / "b.wav", np.stack([tone, tone], 1))
    assert open_session([tmp_path / "b.wav"]).tracks[0].loud_dbfs == pytest.approx(-9.031, abs=0.001)


# Rate, length, channels


@pytest.mark.parametrize(("rates", "expected"), [
    ((48000, 44100, 44100), 44100), ((44100, 48000), 48000), ((8000,), 8000)])
def test_session_rate_is_the_most_common(tmp_path: Path, rates: tuple[int, ...], expected: int) -> None:
    """The rate of most tracks; a tie takes the higher; the others are resampled, and that is said."""
    for n, rate in enumerate(rates):
        save(tmp_path / f"{n}.wav", voice(n, seconds=1, rate_hz=rate), rate_hz=rate)
    session = open_session([tmp_path])
    assert session.rate_hz == expected
    assert {track.frames for track in session.tracks} == {expected}
    assert list(session.notes) == [
        f"{n}: resampled from {rate} to {expected} Hz" for n, rate in enumerate(rates) if rate != expected]


def test_offsets_and_lengths_make_the_session(tmp_path: Path) -> None:
    """The session lasts to the latest end; what ends earlier is padded, and that is said."""
    session = with_toml(tmp_path, TWO + "offset_s = 1.5\nsample_rate = 1"[:14])
    assert [(t.offset_frames, t.frames) for t in session.tracks] == [(0, 48000), (24000, 48000)]
    assert session.frames == 72000
    assert session.notes == ("A: ends 1.500 s before the session, padded with silence",)


def test_sample_rate_key_sets_the_session_rate(tmp_path: Path) -> None:
    """`sample_rate` is stronger than what the files have."""
    session = with_toml(tmp_path, "sample_rate = 48000\n" + TWO)
    assert (session.rate_hz, session.frames) == (48000, 3 * 48000)


@pytest.mark.parametrize(("text", "channels"), [
    ("", 1), ('delivery = "r128"\n', 2), ('delivery = "aes-speech"\n', 1), ("mix_channels = 2\n", 2)])
def test_mix_channels(tmp_path: Path, text: str, channels: int) -> None:
    """1 unless the delivery, the key, or a pan asks for 2."""
    assert with_toml(tmp_path, text + TWO).mix_channels == channels
    assert with_toml(tmp_path, text + TWO + "pan = -0.3").mix_channels == 2


def test_mono_mix_that_hides_pans_is_said(tmp_path: Path) -> None:
    """`mix_channels = 1` is obeyed, and what is lost is said."""
    session = with_toml(tmp_path, "mix_channels = 1\n" + TWO + "pan = 1")
    assert session.mix_channels == 1
    assert session.notes == ("mix_channels = 1 in session.toml: pans and stereo are not heard in the mix",)


# session.toml


def test_every_key_arrives(tmp_path: Path) -> None:
    """All keys of session.toml reach the session."""
    session = with_toml(tmp_path, """
        title = "Kettle talk"
        delivery = "aes-speech"
        target_lufs = -20
        ceiling_dbtp = -2.5
        [[track]]
        file = "B.wav"
        name = "Guest"
        role = "voice"
        offset_s = 0.5
        polarity = -1
        pan = 0.25
        trim_db = -1.5
        high_pass_hz = 80
        [[track]]
        file = "A.wav"
        role = "room"
        [[skip]]
        from_s = 0
        to_s = 1.5
        why = "slate"
        timeline = "opened"
        [[correction]]
        track = "Guest"
        from_s = 1
        to_s = 2
        decide = "own"
        timeline = "aligned"
        [expander]
        range_db = 12
        """)
    guest, room = session.tracks
    assert (guest.name, guest.path.name, guest.offset_frames, guest.polarity, guest.pan, guest.trim_db,
            guest.high_pass_hz) == ("Guest", "B.wav", 8000, -1, 0.25, -1.5, 80.0)
    assert (room.name, room.role, room.polarity, room.high_pass_hz) == ("A", "room", 1, None)
    assert session.title == "Kettle talk"
    assert (session.delivery.name, session.delivery.target_lufs, session.delivery.ceiling_dbtp) == (
        "aes-speech", -20.0, -2.5)
    assert session.skips == (Skip(0.0, 1.5, "slate", "opened"),)
    assert session.corrections == (Correction("Guest", 1.0, 2.0, "own", None, "aligned"),)
    assert session.settings.expander.range_db == 12.0


def test_options_are_stronger_than_the_file(tmp_path: Path) -> None:
    """--delivery replaces delivery, target and ceiling; --set replaces a stage's key."""
    session = with_toml(tmp_path, "target_lufs = -20\n" + TWO + "[ride]\nrange_db = 3\nwindow_s = 4",
                        delivery="r128", assignments={"ride.range_db": "5"})
    assert (session.delivery.name, session.delivery.target_lufs) == ("r128", -23.0)
    assert (session.settings.ride.range_db, session.settings.ride.window_s) == (5.0, 4.0)


def test_channel_picks_one_of_a_file(tmp_path: Path) -> None:
    """`channel` counts from 1, as the names do."""
    save(tmp_path / "poly.wav", np.stack([voice(n) for n in (3, 4, 5)], 1))
    session = with_toml(tmp_path, '[[track]]\nfile = "poly.wav"\nchannel = 3\n[[track]]\nfile = "poly.wav"\n'
                                  'channel = 1\nname = "Host"')
    assert [(track.name, track.channels) for track in session.tracks] == [("poly ch3", (2,)), ("Host", (0,))]
    assert session.notes == ("A.wav: not named in session.toml, left out", "B.wav: not named in session.toml, left out")


def test_session_file_without_tracks_takes_the_folder(tmp_path: Path) -> None:
    """A session.toml that only sets a title leaves the choice of files to the folder; a byte-order mark is fine."""
    session = with_toml(tmp_path, '\ufefftitle = "T"')
    assert (session.title, names(session)) == ("T", ["A", "B"])
    assert open_session([tmp_path / "session.toml"]) == session


@pytest.mark.parametrize(("text", "message"), [
    ("titel = 'x'", "session.toml: unknown key 'titel' (did you mean \"title\"?); known: "),
    ("[[track]]\nfile='A.wav'\nofset_s=1",
     "session.toml: [[track]] 1: unknown key 'ofset_s' (did you mean \"offset_s\"?)"),
    ("[[skip]]\nfrom=1", "session.toml: [[skip]] 1: unknown key 'from' (did you mean \"from_s\"?)"),
    ("[[correction]]\ndecision='own'",
     "session.toml: [[correction]] 1: unknown key 'decision' (did you mean \"decide\"?)"),
    ("[expander]\nrange=3", "session.toml: unknown setting 'expander.range' (did you mean \"expander.range_db\"?)"),
    ("[expander]\nratio=0.5", "session.toml: expander.ratio = 0.5: expected a number from 1 to 100 (:1)"),
    ("expander=3", "session.toml: [expander]: expected a table of keys, found 3"),
    ("[track]\nfile='A.wav'", "session.toml: track must be written as [[track]]"),
    ("[[track]]\nname='x'", 'session.toml: [[track]] 1: needs file = "..."'),
    ("target_lufs=-50", "session.toml: target_lufs = -50: expected a number from -40 to -5 (LUFS)"),
    ("ceiling_dbtp=0.1", "session.toml: ceiling_dbtp = 0.1: expected a number from -20 to 0 (dBTP)"),
    ("target_lufs=nan", "session.toml: target_lufs = nan: expected a number from -40 to -5 (LUFS)"),
    ("mix_channels=true", "session.toml: mix_channels = True: expected a number from 1 to 2 (channels)"),
    ("sample_rate=44100.5", "session.toml: sample_rate = 44100.5: expected a whole number"),
    ("delivery='podcst-mono'", "session.toml: unknown delivery 'podcst-mono' (did you mean \"podcast-mono\"?)"),
    ("title=3", "session.toml: title = 3: expected a text in quotes"),
    ("title", "session.toml: not valid TOML: "),
    (TWO + "offset_s=-1", "session.toml: [[track]] 2 (B.wav): offset_s = -1: expected a number from 0 to 604800 (s)"),
    (TWO + "role='vioce'", "session.toml: [[track]] 2 (B.wav): role = 'vioce': expected voice, room, bed"),
    (TWO + "polarity=0", "session.toml: [[track]] 2 (B.wav): polarity = 0: expected 1 or -1"),
    (TWO + "pan=2", "session.toml: [[track]] 2 (B.wav): pan = 2: expected a number from -1 to 1 (left to right)"),
    (TWO + "channel=2", "B.wav: channel = 2, but the file has 1"),
    (TWO + "channel=1\nchannels='split'", "session.toml: [[track]] 2 (B.wav): channel and channels exclude each other"),
    (TWO + "[[skip]]\nfrom_s=2\nto_s=1", "session.toml: [[skip]] 1: to_s = 1 does not lie behind from_s = 2"),
    (TWO + "[[skip]]\nfrom_s=3\nto_s=9", "session.toml: [[skip]] from_s = 3 lies behind the session's end at 3.000 s"),
    (TWO + "[[correction]]\ntrack='A'\nfrom_s=0\nto_s=1",
     "session.toml: [[correction]] 1: needs decide (own, bleed, silence)"),
    (TWO + "[[correction]]\ntrack='a'\nfrom_s=0\nto_s=1\ngain_db=0", "session.toml: unknown track 'a'"),
])
def test_what_session_toml_cannot_say_is_refused_in_words(tmp_path: Path, text: str, message: str) -> None:
    """Unknown keys at every level, wrong kinds and values out of bounds say where, what and what was expected."""
    with pytest.raises(SettingsError, match=re.escape(message)) as caught:
        with_toml(tmp_path, text)
    assert "\n" not in str(caught.value)


def test_missing_file_gets_a_hint(tmp_path: Path) -> None:
    """A file that session.toml names and that is not there is an input error with the nearest name."""
    save(tmp_path / "Hosts.wav", voice(1))
    with pytest.raises(InputError, match=r'Host\.wav: no such file, but session.toml names it \(did you mean "Hosts'):
        with_toml(tmp_path, '[[track]]\nfile = "Host.wav"')


# Copies and mixes


def room(voices: list[np.ndarray], seed: int, *, bleed_db: float = -12.0, noise: float = 3e-4) -> list[np.ndarray]:
    """Each voice at its own microphone, and late, coloured and softer at the others, with a noise of its own."""
    rng = np.random.default_rng(seed)
    out = []
    for m in range(len(voices)):
        heard = voices[m] + noise * rng.standard_normal(len(voices[m]))
        for k in range(len(voices)):
            if k != m:
                tail = rng.standard_normal(1200) * np.exp(-np.arange(1200) / 300)
                tail[0] = 3 * abs(tail[0])
                path = np.concatenate([np.zeros(20 + 30 * abs(k - m)), tail / np.linalg.norm(tail)])
                heard = heard + 10 ** (bleed_db / 20) * np.convolve(voices[k], path)[: len(heard)]
        out.append(heard.astype(np.float32))
    return out


def aside(session: Session) -> dict[str, str]:
    """What was set aside, and why."""
    return {item.name: item.why for item in session.set_aside}


@pytest.mark.parametrize("bleed_db", [-20.0, -6.0, -1.0])
def test_bleed_is_no_copy_and_no_mix(tmp_path: Path, bleed_db: float) -> None:
    """Microphones that hear each other, almost alike or hardly, with one that nobody speaks into, are all kept."""
    voices = [voice(1), voice(2), np.zeros_like(voice(3)), voice(4, level=0.02)]
    for n, x in enumerate(room(voices, 11, bleed_db=bleed_db)):
        save(tmp_path / f"{n}.wav", x)
    session = open_session([tmp_path])
    assert names(session) == ["0", "1", "2", "3"]
    assert session.set_aside == ()


@pytest.mark.parametrize("gain", [0.25, -0.25, 0.999])
def test_softer_copy_is_set_aside(tmp_path: Path, gain: float) -> None:
    """A safety track, softer or upside down, goes; the louder, or of equals the first, stays; so does the bleed."""
    a, b = room([voice(1), voice(2)], 12)
    for name, x in (("A", a), ("B", b), ("A safety", gain * a)):
        save(tmp_path / f"{name}.wav", x)
    session = open_session([tmp_path / f"{name}.wav" for name in ("A", "A safety", "B")])
    assert names(session) == ["A", "B"]
    assert aside(session) == {"A safety": "a copy of A"}
    assert open_session([tmp_path / f"{name}.wav" for name in ("A safety", "B", "A")]).tracks[-1].name == (
        "A" if abs(gain) < 0.9 else "B")


def test_copy_at_another_rate_and_offset_is_found(tmp_path: Path) -> None:
    """Copies are compared in session time, whatever their rates and offsets."""
    x = voice(1, seconds=4, rate_hz=32000)
    x = np.fft.irfft(np.fft.rfft(x) * (np.arange(len(x) // 2 + 1) < 4 * 7000)).astype(np.float32)  # fits in 16 kHz
    x[:32000] = 0
    save(tmp_path / "A.wav", x, rate_hz=32000)
    save(tmp_path / "late.wav", 0.5 * x[32000::2])
    save(tmp_path / "B.wav", voice(2, seconds=4))
    text = '[[track]]\nfile="A.wav"\n[[track]]\nfile="B.wav"\n[[track]]\nfile="late.wav"\n'
    (tmp_path / "session.toml").write_text(text + "offset_s=1")
    assert aside(open_session([tmp_path])) == {"late": "a copy of A"}
    (tmp_path / "session.toml").write_text(text + "offset_s=0.5")
    assert aside(open_session([tmp_path])) == {}


def test_recorders_mix_is_set_aside(tmp_path: Path) -> None:
    """The sum of the others goes, at any gains, mono or as a stereo pair; the microphones in it stay."""
    mics = room([voice(1), voice(2), voice(3)], 13)
    for n, x in enumerate(mics):
        save(tmp_path / f"mic{n}.wav", x)
    save(tmp_path / "A mix.wav", 0.5 * mics[0] + 0.4 * mics[1] + 0.3 * mics[2])
    session = open_session([tmp_path])
    assert names(session) == ["mic0", "mic1", "mic2"]
    assert aside(session) == {"A mix": "the sum of other tracks (a recorder's mix)"}
    wide = np.stack([0.6 * mics[0] + 0.1 * mics[1] + 0.3 * mics[2], 0.1 * mics[0] + 0.6 * mics[1] + 0.3 * mics[2]], 1)
    save(tmp_path / "A mix.wav", wide)
    session = open_session([tmp_path])
    assert names(session) == ["mic0", "mic1", "mic2"]
    assert sorted(aside(session)) == ["A mix ch1", "A mix ch2"]


def test_microphone_is_not_taken_for_the_mix_less_the_others(tmp_path: Path) -> None:
    """With a mix that must stay, each microphone is a difference of the rest, not a sum, and stays too."""
    mics = room([voice(1), voice(2), voice(3)], 15)
    text = '[[track]]\nfile="mix.wav"\nrole="room"\n'
    save(tmp_path / "mix.wav", 0.5 * (mics[0] + mics[1] + mics[2]))
    for n, x in enumerate(mics):
        save(tmp_path / f"mic{n}.wav", x)
        text += f'[[track]]\nfile="mic{n}.wav"\n'
    (tmp_path / "session.toml").write_text(text)
    assert aside(open_session([tmp_path])) == {}


def test_mix_with_something_of_its_own_is_kept(tmp_path: Path) -> None:
    """A sum with a fourth voice 20 dB down is not only the others' sum, and two tracks cannot hold a mix."""
    mics = room([voice(1), voice(2)], 14)
    for n, x in enumerate(mics):
        save(tmp_path / f"mic{n}.wav", x)
    save(tmp_path / "sum.wav", 0.5 * (mics[0] + mics[1]) + 0.1 * voice(3))
    assert open_session([tmp_path]).set_aside == ()
    assert open_session([tmp_path / "mic0.wav", tmp_path / "sum.wav"]).set_aside == ()


def test_room_and_bed_are_never_set_aside(tmp_path: Path) -> None:
    """A role that was given is obeyed: a bed or a room microphone that is a copy stays."""
    save(tmp_path / "copy.wav", 0.5 * voice(1))
    for role in ("bed", "room"):
        session = with_toml(tmp_path, TWO + f'[[track]]\nfile="copy.wav"\nrole="{role}"')
        assert names(session) == ["A", "B", "copy"]
    assert aside(with_toml(tmp_path, TWO + '[[track]]\nfile="copy.wav"')) == {"copy": "a copy of A"}


def test_correction_of_a_track_set_aside_says_so(tmp_path: Path) -> None:
    """A correction for what is not processed is refused."""
    save(tmp_path / "copy.wav", 0.5 * voice(1))
    text = TWO + '[[track]]\nfile="copy.wav"\n[[correction]]\ntrack="copy"\nfrom_s=0\nto_s=1\ngain_db=0'
    with pytest.raises(SettingsError, match="track 'copy' was set aside and is not processed"):
        with_toml(tmp_path, text)


# corrections.csv


WANTED = (Correction("A", 0.5, 1.25, "own", None), Correction("B", 1.0, 2.0, None, -6.5))


@pytest.mark.parametrize("content", [
    "track,from_s,to_s,decide,gain_db\nA,0.5,1.25,own,\nB,1,2,,-6.5\n",
    "\ufefftrack;from_s;to_s;decide;gain_db\r\nA;0,5;1,25;own;\r\n;;;;\r\nB;1;2;;-6,5\r\n",
    "track\tfrom_s\tto_s\tgain_db\tdecide\r\nA\t0,5\t1,25\t\town\r\nB\t1\t2\t-6,5\t\r\n",
    'track,from_s,to_s,decide,gain_db\r"A",0.5,1.25,own,\r"B",1,2,,-6.5',
    'sep=,\nTrack,from_s,to_s,decide,gain_db,\nA,"0,5","1,25",Own,,\nB,1,2,,\u22126.5,\n,,,,,\n',
    'track,from_s,to_s,decide,gain_db\nA,="0.5",1.25,own,\nB,1,2,,="-6.5"\n',
])
def test_corrections_of_any_spreadsheet_are_read(tmp_path: Path, content: str) -> None:
    """Commas, semicolons with decimal commas, tabs, a byte-order mark and any line ends mean the same."""
    path = tmp_path / "corrections.csv"
    path.write_bytes(content.encode())
    assert read_corrections(path) == WANTED
    path.write_bytes(content.removeprefix("\ufeff").encode("utf-16"))
    assert read_corrections(path) == WANTED
    assert with_toml(tmp_path, TWO, corrections=path).corrections == WANTED


def test_names_quoted_against_spreadsheets_are_understood(tmp_path: Path) -> None:
    """A name that our tables quote with an apostrophe finds its track."""
    save(tmp_path / "=host.wav", voice(1))
    path = tmp_path / "c.csv"
    path.write_text("track,from_s,to_s,decide\n'=host,0,1,own\n")
    assert open_session([tmp_path], corrections=path).corrections[0].track == "=host"


@pytest.mark.parametrize(("content", "message"), [
    ("track,from_s,to_s,decision\n", "c.csv, line 1: unknown column 'decision' (did you mean \"decide\"?)"),
    ("track,from_s\n", "c.csv, line 1: column 'to_s' is missing"),
    ("", "c.csv, line 1: column 'track' is missing"),
    ("track,from_s,to_s,to_s\n", "c.csv, line 1: column 'to_s' stands there twice"),
    ("track,from_s,to_s,decide\nA,0,1,own\nA,x,1,own\n", "c.csv, line 3: from_s = 'x': expected a number"),
    ("track,from_s,to_s,decide\nA,0,1\n", "c.csv, line 2: 3 cells, but the header has 4"),
    ("track,from_s,to_s,gain_db\nA,0,1,-3,5\n", "c.csv, line 2: 5 cells, but the header has 4"),
    ("track,from_s,to_s,decide\nA,2,1,own\n", "c.csv, line 2: to_s = 1 does not lie behind from_s = 2"),
    ("track,from_s,to_s,decide\nA,0,1,mine\n", "c.csv, line 2: decide = 'mine': expected own, bleed, silence"),
    ("track,from_s,to_s,gain_db\nA,0,1,41\n", "c.csv, line 2: gain_db = 41.0: expected a number from -120 to 40 (dB)"),
    ("track,from_s,to_s,gain_db\nA,0,nan,1\n", "c.csv, line 2: to_s = 'nan': expected a number"),
    ("track,from_s,to_s,decide\n,0,1,own\n", 'c.csv, line 2: needs track = "..."'),
    ("track,from_s,to_s,decide\nC,0,1,own\n", "c.csv, line 2: unknown track 'C'; known: A, B"),
    ("track,from_s,to_s,decide\nA,3,4,own\n", "c.csv, line 2: A, from_s = 3 lies behind the session's end at 3.000 s"),
    ("track,from_s,to_s,decide\nA\udce9,3,4,own\n", "c.csv: not UTF-8 text (byte 26). Save it as UTF-8"),
])
def test_corrections_that_cannot_be_understood_name_file_and_line(tmp_path: Path, content: str, message: str) -> None:
    """Each fault of a corrections.csv says where it stands."""
    (tmp_path / "c.csv").write_bytes(content.encode(errors="surrogateescape"))
    with pytest.raises(AutomationError, match=re.escape(message)):
        with_toml(tmp_path, TWO, corrections=tmp_path / "c.csv")


def test_missing_corrections_file_is_an_input_error(tmp_path: Path) -> None:
    """A corrections.csv that is not there is named."""
    with pytest.raises(InputError, match=r"none\.csv: cannot be read"):
        with_toml(tmp_path, TWO, corrections=tmp_path / "none.csv")


# With the readers


def test_readers_of_an_opened_session_are_aligned(tmp_path: Path) -> None:
    """Every track of a session reads as long as the session, at its place."""
    session = with_toml(tmp_path, TWO + "offset_s = 1")
    with audio.open_readers(session) as readers:
        a, b = (reader.read(session.frames) for reader in readers)
    step = 2.0**-23
    assert np.max(np.abs(a[:48000] - voice(1))) <= step
    assert np.max(np.abs(b[16000:] - voice(2))) <= step
    assert not a[48000:].any()
    assert not b[:16000].any()


def test_sources_are_never_touched(tmp_path: Path) -> None:
    """Opening a session leaves every byte, time and name of its folder as it was."""
    save(tmp_path / "A.wav", voice(1))
    before = [(p.name, p.read_bytes(), p.stat().st_mtime_ns) for p in sorted(tmp_path.iterdir())]
    with audio.open_readers(open_session([tmp_path])) as readers:
        readers[0].read(100)
    assert [(p.name, p.read_bytes(), p.stat().st_mtime_ns) for p in sorted(tmp_path.iterdir())] == before


def test_all_refusals_share_one_root() -> None:
    """`cli` and `batch` catch LevellerError alone."""
    assert all(issubclass(kind, LevellerError) for kind in (InputError, SettingsError, AutomationError))
