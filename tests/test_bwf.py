"""leveller.bwf, leveller.ixml and riff's appending: what recorders wrote is read, what we write others can read."""

from __future__ import annotations

import math
import os
import struct
import tempfile
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile
from hypothesis import given, settings
from hypothesis import strategies as st
from wavreader import Cue, bext_fields, chunks_of, cues_of, payload

from leveller import audio, riff
from leveller.bwf import Bext, Loudness, ascii_text, bext_chunk, cue_chunks, read_bext
from leveller.errors import OutputError
from leveller.ixml import MOST_BYTES, NamedChannel, TrackList, parse_track_list, read_track_list

RATE_HZ = 48000
UNUSED = 0x7FFF  # EBU Tech 3285, version 2
BEXT_BYTES = 602  # EBU Tech 3285: up to the coding history
GIB = 1 << 30


def wav(path: Path, frames: int = 480, *, channels: int = 1, kind: Any = "pcm24", expected_frames: int = 0) -> Path:
    """A short file as leveller writes it."""
    with audio.WavWriter(path, RATE_HZ, channels, kind, expected_frames=expected_frames) as writer:
        writer.write(np.full((frames, channels), 0.25, np.float32)[:, 0 if channels == 1 else slice(None)])
    return path


def ixml(*tracks: str, before: str = "") -> bytes:
    """An iXML document of some TRACK bodies."""
    body = "".join(f"<TRACK>{track}</TRACK>" for track in tracks)
    return f'<?xml version="1.0" encoding="UTF-8"?>{before}<BWFXML><TRACK_LIST>{body}</TRACK_LIST></BWFXML>'.encode()


def named(name: str, interleave: int | None = None, channel: int | None = None) -> str:
    """A TRACK's body."""
    numbers = {"CHANNEL_INDEX": channel, "INTERLEAVE_INDEX": interleave}
    return "".join(f"<{k}>{v}</{k}>" for k, v in numbers.items() if v is not None) + f"<NAME>{name}</NAME>"


# bext, written


def test_bext_fields_stand_where_the_standard_says() -> None:
    """Each field is read back from its fixed offset; what is not used is zero."""
    raw = bext_chunk(
        description="Harbour talk, Ada", time_reference=(3 << 32) + 7, date="2031-05-06", time="10:20:30",
        loudness=Loudness(-19.004, 5.126, -1.0, -14.55, -16.21))
    assert bext_fields(raw) == {
        "description": "Harbour talk, Ada", "originator": "leveller", "reference": "", "date": "2031-05-06",
        "time": "10:20:30", "time_reference": (3 << 32) + 7, "version": 2, "umid": bytes(64), "reserved": bytes(180),
        "history": "",
        "integrated": -1900, "range": 513, "true_peak": -100, "momentary": -1455, "short_term": -1621}


@pytest.mark.parametrize("level", [None, -math.inf, math.nan, 99.996, -100.0])
def test_loudness_that_cannot_be_said_is_marked_unused(level: float | None) -> None:
    """Not measured, silent, or beyond 99.99: 0x7FFF, and no other field suffers."""
    fields = bext_fields(bext_chunk(description="", time_reference=None, loudness=Loudness(level, 4.0)))
    assert (fields["integrated"], fields["range"], fields["true_peak"]) == (UNUSED, 400, UNUSED)


def test_bext_without_anything_holds_our_name_alone() -> None:
    """No date, no time, no reference: nothing of the run leaks in, so two runs are equal."""
    raw = bext_chunk(description="", time_reference=None)
    assert len(raw) == BEXT_BYTES
    assert raw == bytes(256) + b"leveller" + bytes(82) + b"\2\0" + bytes(64) + b"\xff\x7f" * 5 + bytes(180)


def test_a_long_text_is_cut_to_its_field() -> None:
    """256 characters of description, without running into the next field."""
    fields = bext_fields(bext_chunk(description="d" * 300, time_reference=1))
    assert (fields["description"], fields["originator"], fields["reference"]) == ("d" * 256, "leveller", "")


@pytest.mark.parametrize(("text", "expected"), [
    ("Zoë Müller", "Zoe Muller"), ("Анна", "????"), ("a\nb\0c\x7f", "a b c "), ("~ok!", "~ok!"), ("ﬁne", "fine")])
def test_texts_become_ascii(text: str, expected: str) -> None:
    """Accents fall off, other scripts are '?', controls are blanks."""
    assert ascii_text(text) == expected


@settings(max_examples=60, deadline=None)
@given(st.text(max_size=300), st.integers(0, 2**64 - 1), st.booleans(),
       st.lists(st.one_of(st.none(), st.floats(-99.99, 99.99)), min_size=5, max_size=5))
def test_bext_round_trip(text: str, reference: int, large: bool, levels: list[float | None]) -> None:
    """Whatever is written comes back: by our lenient reader and by a strict one, in WAV and RF64."""
    with tempfile.TemporaryDirectory() as folder:
        path = wav(Path(folder) / "x.wav", 3, expected_frames=2**31 if large else 0)
        raw = bext_chunk(description=text, time_reference=reference, loudness=Loudness(*levels), date="2031-05-06",
                         time="00:00:01")
        audio.append_chunks(path, [(b"bext", raw)])
        fields, read = bext_fields(payload(path, b"bext")), read_bext(path)
    assert fields["description"] == ascii_text(text)[:256]
    assert fields["originator"] == "leveller"
    assert [fields[k] for k in ("integrated", "range", "true_peak", "momentary", "short_term")] == [
        UNUSED if level is None else round(100 * level) for level in levels]
    assert read is not None
    assert (read.time_reference, read.date, read.time) == (reference, "2031-05-06", "00:00:01")
    assert read.description == " ".join(ascii_text(text)[:256].split())


# bext, read


@pytest.mark.parametrize(("raw", "expected"), [
    (b"", Bext("", "", "", "", None)),
    (b"Take 1\0junk behind it", Bext("Take 1", "", "", "", None)),
    ("Café".encode() + bytes(300), Bext("Café", "", "", "", None)),
    (b"Caf\xe9\r\n two" + bytes(300), Bext("Café two", "", "", "", None)),
    (bytes(256) + b"m" * 32 + bytes(32) + b"2031-05-0623:59:59" + struct.pack("<II", 5, 1),
     Bext("", "m" * 32, "2031-05-06", "23:59:59", (1 << 32) + 5)),
    (bytes(338) + struct.pack("<I", 5), Bext("", "", "", "", None)),
])
def test_bext_is_read_leniently(tmp_path: Path, raw: bytes, expected: Bext) -> None:
    """A short chunk, texts without NUL, other encodings: what is there counts; half a time reference does not."""
    path = wav(tmp_path / "x.wav")
    audio.append_chunks(path, [(b"bext", raw)])
    assert read_bext(path) == expected


def test_no_chunk_is_no_answer(tmp_path: Path) -> None:
    """A plain file, and one that is no WAV file, have no bext and no track list."""
    soundfile.write(tmp_path / "x.flac", np.zeros(100), RATE_HZ)
    for path in (wav(tmp_path / "x.wav"), tmp_path / "x.flac"):
        assert read_bext(path) is None
        assert read_track_list(path) == TrackList()


# iXML


@pytest.mark.parametrize(("tracks", "expected"), [
    ([named("Ada", 2, 5), named("Ben", 1, 6)], ("Ben", "Ada", None)),
    ([named("Ada", channel=1), named("Ben", channel=3)], ("Ada", None, "Ben")),
    ([named("Ada", 1), named("Ben", 1), named("Cy", 3)], (None, None, "Cy")),
    ([named("Ada", 0), named("Ben", 4), named("  ", 2)], (None, None, None)),
    ([named(" A &amp;\n B ", 1), named("Zo&#235;", 2)], ("A & B", "Zoë", None)),
    (["<NAME>no number</NAME>", "<INTERLEAVE_INDEX>one</INTERLEAVE_INDEX><NAME>x</NAME>"], (None, None, None)),
    ([], (None, None, None)),
])
def test_names_find_their_channels(tracks: list[str], expected: tuple[str | None, ...]) -> None:
    """The interleave index decides, else the channel index; a place claimed twice or out of range has no name."""
    found = parse_track_list(ixml(*tracks))
    assert found.problem == ""
    assert found.names(3) == expected


def test_names_elsewhere_in_the_document_do_not_count() -> None:
    """Only TRACK_LIST / TRACK / NAME is a track's name."""
    text = (b"<BWFXML><NAME>a</NAME><SPEED><NAME>b</NAME></SPEED><TRACK_LIST><TRACK_COUNT>1</TRACK_COUNT><TRACK>"
            b"<INTERLEAVE_INDEX>1</INTERLEAVE_INDEX><NAME>Ada<NAME>no</NAME></NAME></TRACK></TRACK_LIST></BWFXML>")
    assert parse_track_list(text).tracks == (NamedChannel(None, 1, "Ada"),)


BOMB = '<!DOCTYPE x [<!ENTITY a "ha"><!ENTITY b "&a;&a;&a;">]>'
OUTSIDE = '<!DOCTYPE x [<!ENTITY a SYSTEM "file:///etc/hostname">]>'


@pytest.mark.parametrize(("text", "problem"), [
    (ixml(named("&b;", 1), before=BOMB), "it has a document type"),
    (ixml(named("&a;", 1), before=OUTSIDE), "it has a document type"),
    (ixml(named("A & B", 1)), "not well-formed"),
    (b"", "no element found"),
    (b'<?xml version="1.0" encoding="none-such"?><a/>', "unknown encoding"),
])
def test_documents_that_are_not_to_be_trusted_give_no_names(text: bytes, problem: str) -> None:
    """Entities are never expanded, no file is opened; what is broken is named."""
    found = parse_track_list(text)
    assert found.tracks == ()
    assert problem in found.problem


@settings(max_examples=100, deadline=None)
@given(st.one_of(st.binary(max_size=80), st.text(max_size=80).map(lambda t: f"<B><TRACK_LIST>{t}".encode())))
def test_any_bytes_are_a_track_list_or_a_problem(text: bytes) -> None:
    """Whatever a recorder writes, opening the session does not fail over it."""
    found = parse_track_list(text)
    assert found.names(2) == (None, None)
    assert found.problem or found.tracks == ()


@pytest.mark.parametrize("text", [
    b"<a>" * (MOST_BYTES // 3),
    ixml(named("Ada", 2), *[named("", 1)] * (MOST_BYTES // 70)),
    ixml("<NAME>" + "a<b/>" * (MOST_BYTES // 6) + "</NAME><INTERLEAVE_INDEX>2</INTERLEAVE_INDEX>"),
])
def test_hostile_documents_cost_no_time(text: bytes) -> None:
    """Depth, numbers and lengths within 1 MiB are walked once."""
    assert len(text) <= MOST_BYTES
    started_s = time.process_time()
    names = parse_track_list(text).names(2)
    # own measurement: at most 0.2 s; a copy of all open elements at each element took over 20 s
    assert time.process_time() - started_s < 3.0
    assert names in {(None, None), (None, "Ada"), (None, "a" * 1000)}


def test_track_list_of_a_file_is_bounded(tmp_path: Path) -> None:
    """Padding behind the text does no harm; more than 1 MiB is not read."""
    small, big = wav(tmp_path / "a.wav"), wav(tmp_path / "b.wav")
    audio.append_chunks(small, [(b"iXML", ixml(named("Ada", 1)) + bytes(99))])
    audio.append_chunks(big, [(b"iXML", ixml(named("Ada", 1)).ljust(MOST_BYTES + 1))])
    assert read_track_list(small).names(1) == ("Ada",)
    assert read_track_list(big) == TrackList(problem="longer than 1 MiB")


# Cue points

PLACES = st.lists(st.tuples(st.integers(0, 2**32 - 1), st.integers(0, 2**32 - 1), st.text(max_size=40)), max_size=12)


@settings(max_examples=80, deadline=None)
@given(PLACES, st.integers(1, 4), st.booleans())
def test_cue_points_round_trip(places: list[tuple[int, int, str]], frames: int, large: bool) -> None:
    """Frames, lengths and labels come back by a strict reader, and the file stays whole, in WAV and RF64."""
    with tempfile.TemporaryDirectory() as folder:
        path = wav(Path(folder) / "x.wav", frames, expected_frames=2**31 if large else 0)
        audio.append_chunks(path, cue_chunks(places))
        kinds = [kind for kind, _, _ in chunks_of(path)]
        assert (b"cue " in kinds) == bool(places)
        assert soundfile.info(path).frames == frames
        if places:
            assert cues_of(payload(path, b"cue "), payload(path, b"LIST")) == [
                Cue(frame, ascii_text(label), length or None) for frame, length, label in places]


def test_labels_stand_before_lengths() -> None:
    """Some readers stop at the first length, so all labels come before it."""
    (_, _), (_, adtl) = cue_chunks([(1, 5, "a"), (2, 5, "b")])
    assert [adtl[at : at + 4] for at in (4, 18, 32)] == [b"labl", b"labl", b"ltxt"]


def test_cue_point_that_the_format_cannot_hold_is_left_out() -> None:
    """Behind 2^32 - 1 frames there is no number for it; the others keep theirs."""
    (_, cue), (_, adtl) = cue_chunks([(2**32, 0, "late"), (5, 2**33, "long")])
    assert cues_of(cue, adtl) == [Cue(5, "long", 2**32 - 1)]
    assert cue_chunks([(2**32, 0, "late")]) == []


# Readers of others


def test_other_readers_agree(tmp_path: Path) -> None:
    """A metadata reader by somebody else and libsndfile find what was written, in WAV and RF64."""
    wavinfo = pytest.importorskip("wavinfo")
    chunks = [(b"bext", bext_chunk(description="Harbour talk", time_reference=RATE_HZ * 36000, date="2031-05-06",
                                   time="10:00:00", loudness=Loudness(-19.0, 5.5, -1.2, -14.0, -16.0))),
              *cue_chunks([(100, 50, "Ada or Ben?"), (200, 0, "noise")]), (b"iXML", ixml(named("Ada", 1, 1)))]
    for name, expected_frames in (("a.wav", 0), ("b.wav", 2**31)):
        path = wav(tmp_path / name, 481, expected_frames=expected_frames)
        audio.append_chunks(path, chunks)
        found = wavinfo.WavInfoReader(str(path))
        assert (found.bext.description, found.bext.originator) == ("Harbour talk", "leveller")
        assert (found.bext.originator_date, found.bext.originator_time) == ("2031-05-06", "10:00:00")
        assert (found.bext.time_reference, found.bext.version) == (RATE_HZ * 36000, 2)
        assert (found.bext.loudness_value, found.bext.loudness_range, found.bext.max_true_peak) == (-19.0, 5.5, -1.2)
        assert (found.bext.max_momentary_loudness, found.bext.max_shortterm_loudness) == (-14.0, -16.0)
        assert list(found.cues.each_cue()) == [(1, 100), (2, 200)]
        assert [found.cues.label_and_note(n)[0] for n in (1, 2)] == ["Ada or Ben?", "noise"]
        assert [found.cues.range(n) for n in (1, 2)] == [50, None]
        assert [track.name for track in found.ixml.track_list] == ["Ada"]
        assert found.data.frame_count == 481
        x, rate_hz = soundfile.read(path)
        assert (rate_hz, len(x), float(x.min()), float(x.max())) == (RATE_HZ, 481, 0.25, 0.25)


# Beyond 4 GiB


def grown(path: Path, frames: int) -> Path:
    """A sparse RF64 file of silent 24-bit frames with a second of 0.25 at the end, sizes corrected by hand."""
    wav(path, RATE_HZ, expected_frames=frames)
    head = path.read_bytes()
    ((_, offset, size),) = [chunk for chunk in chunks_of(path) if chunk[0] == b"data"]
    with open(path, "r+b") as file:
        os.truncate(path, offset + 3 * frames)
        file.seek(offset)
        file.write(bytes(size))
        file.seek(offset + 3 * frames - size)
        file.write(head[offset:])
        file.seek(20)  # ds64: size of all, of the audio, and the frames
        file.write(struct.pack("<QQQ", offset + 3 * frames - 8, 3 * frames, frames))
    return path


def test_file_over_4_gib_is_read_and_extended(tmp_path: Path) -> None:
    """The last second of a 4.1 GiB file is found, and chunks behind it leave all sizes right."""
    frames = int(4.1 * GIB) // 6 * 2
    path = grown(tmp_path / "long.wav", frames)
    assert path.stat().st_size > 4 * GIB
    facts = audio.probe(path)
    assert (facts.format, facts.frames, facts.header_frames) == ("RF64", frames, frames)
    audio.append_chunks(path, [(b"bext", bext_chunk(description="x", time_reference=9)), *cue_chunks([(7, 0, "a")])])
    kinds = {kind: size for kind, _, size in chunks_of(path)}  # raises where any size is wrong
    assert kinds[b"data"] == 3 * frames
    assert bext_fields(payload(path, b"bext"))["time_reference"] == 9
    assert read_bext(path) == Bext("x", "leveller", "", "", 9)
    assert audio.probe(path).frames == frames
    ends = audio.pieces(path, [frames - 2 * RATE_HZ, frames - RATE_HZ], frames=RATE_HZ)
    assert [(float(block.min()), float(block.max())) for block in ends] == [(0.0, 0.0), (0.25, 0.25)]


def test_plain_wav_does_not_grow_over_4_gib(tmp_path: Path) -> None:
    """A chunk that would push a RIFF file over its limit is refused and the file stays as it was."""
    path = wav(tmp_path / "x.wav")
    os.truncate(path, riff.RIFF_LIMIT - 100)
    before = path.stat().st_size
    with pytest.raises(OutputError, match=r"x\.wav: would pass 4 GiB, which a plain WAV file cannot hold"):
        audio.append_chunks(path, [(b"bext", bext_chunk(description="", time_reference=None))])
    assert path.stat().st_size == before


def test_room_for_cue_points_is_kept_below_4_gib(tmp_path: Path) -> None:
    """Audio that leaves less than a mebibyte below 4 GiB is written as RF64, so that chunks still fit behind it."""
    for frames, form in (((2**32 - 2**20) // 3 + 1, b"RF64"), ((2**32 - 2**20) // 3 - 1, b"RIFF")):
        assert wav(tmp_path / "x.wav", expected_frames=frames).read_bytes()[:4] == form


def test_header_that_lost_its_sizes_is_not_searched_through(tmp_path: Path) -> None:
    """Where the recorder lost power (audio of size 0) the hours of zeros behind it are no chunks."""
    path = wav(tmp_path / "x.wav", 0)
    os.truncate(path, 2 * GIB)  # 268 million chunks of size 0 if they counted
    assert riff.read_chunks(path)[b"data"][1] == 0
    assert riff.missing_bytes(path) == 0
