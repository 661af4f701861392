"""Files beyond 4 GiB, really written and really read (EBU Tech 3306: RF64); the long tier, since they cost minutes.

Each file is removed when its test ends; up to 13 GiB are needed for a while. What the headers of short and sparse files
hold is tested in `test_audio` and `test_bwf`.
"""

from __future__ import annotations

import shutil
import struct
from collections.abc import Iterator
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
import soundfile
import wavinfo
from wavreader import bext_fields, chunks_of, cues_of, payload

from leveller import audio
from leveller.listen import Place
from leveller.marks import mark_files
from leveller.pipeline import finish
from leveller.reading import measure_files
from leveller.session import open_session

pytestmark = pytest.mark.long

GIB = 2**30
SIZE_BYTES = int(4.1 * GIB)
TONE_HZ, TONE_PEAK = 1000, 0.25
TIME_REFERENCE = 2**33 + 7


@pytest.fixture
def large(tmp_path: Path) -> Iterator[Path]:
    """The place of a file of 4.1 GiB, which is removed again."""
    assert shutil.disk_usage(tmp_path).free > SIZE_BYTES + GIB, "the long tier needs 5.1 GiB free for temporary files"
    path = tmp_path / "mix.wav"
    yield path
    path.unlink(missing_ok=True)


def tone(rate_hz: int) -> np.ndarray:
    """A second of a sine."""
    return (TONE_PEAK * np.sin(2 * np.pi * TONE_HZ * np.arange(rate_hz) / rate_hz)).astype(np.float32)


def test_a_file_over_4_gib_is_written_whole(large: Path) -> None:
    """A writer, its chunks behind the audio, and readers by others agree on every size and on the last samples."""
    rate_hz, channels = 96_000, 8
    frames = SIZE_BYTES // (4 * channels)
    silence, end = np.zeros((rate_hz, channels), np.float32), np.outer(tone(rate_hz), np.arange(1, channels + 1) / 8)
    with audio.WavWriter(large, rate_hz, channels, "float32", expected_frames=frames) as writer:
        while writer.frames + 2 * rate_hz <= frames:
            writer.write(silence)
        writer.write(silence[: frames - writer.frames - rate_hz])
        writer.write(end.astype(np.float32))
    last_s = frames / rate_hz - 1
    session = SimpleNamespace(title="Large", tracks=(), rate_hz=rate_hz, origination=("2031-05-06", "10:00:00"),
                              time_reference=TIME_REFERENCE)
    reading = SimpleNamespace(integrated_lufs=-19.0, range_lu=3.0, max_momentary_lufs=-12.0, max_short_term_lufs=-15.0)
    places = [Place(from_s=last_s, to_s=last_s + 0.5, track="Ana", decided="own", could_be="bleed", reason="late",
                    doubt=0.5)]
    mark_files(large.parent, session, SimpleNamespace(loudness=reading, true_peak_dbtp=-1.0), places)  # type: ignore[arg-type]

    sizes = {kind: size for kind, _, size in chunks_of(large)}  # raises where any size is wrong
    assert sizes[b"data"] == 4 * channels * frames > 4 * GIB
    with open(large, "rb") as raw:
        header = raw.read(44)
    assert (header[:4], header[8:16]) == (b"RF64", b"WAVEds64")
    assert struct.unpack_from("<QQQ", header, 20) == (large.stat().st_size - 8, sizes[b"data"], frames)
    bext = bext_fields(payload(large, b"bext"))
    assert (bext["time_reference"], bext["integrated"]) == (TIME_REFERENCE, -1900)
    ((at, label, length),) = [(cue.frame, cue.label, cue.length)
                              for cue in cues_of(payload(large, b"cue "), payload(large, b"LIST"))]
    assert (at, label, length) == (frames - rate_hz, "Ana: own or bleed? late", rate_hz // 2)
    found = wavinfo.WavInfoReader(str(large))
    assert (found.data.frame_count, found.bext.time_reference) == (frames, TIME_REFERENCE)
    with soundfile.SoundFile(large) as file:
        assert (file.format, file.frames, file.channels) == ("RF64", frames, channels)
        file.seek(frames - rate_hz - 10)
        assert np.array_equal(file.read(dtype="float32"), np.concatenate([silence[:10], end.astype(np.float32)]))
    facts = audio.probe(large)
    assert (facts.frames, facts.header_frames, facts.format) == (frames, frames, "RF64")


def write_sparse(large: Path, frames: int, rate_hz: int) -> None:
    """A 24-bit file of nothing but a tone in its last second; what lies before is a hole and costs no room."""
    with audio.WavWriter(large, rate_hz, 1, "pcm24", expected_frames=frames) as writer:
        writer.write(tone(rate_hz))
    content = large.read_bytes()
    ((_, offset, size),) = [chunk for chunk in chunks_of(large) if chunk[0] == b"data"]
    with open(large, "r+b") as file:
        file.truncate(offset)
        file.truncate(offset + 3 * frames - size)
        file.seek(0, 2)
        file.write(content[offset:] + b"\0" * (frames % 2))
        file.seek(20)
        file.write(struct.pack("<QQQ", offset + 3 * frames + frames % 2 - 8, 3 * frames, frames))
    assert large.stat().st_size > 4 * GIB


def test_a_file_over_4_gib_is_measured_to_its_end(large: Path) -> None:
    """The only sound of a sparse file of 4.1 GiB, a tone in its last second, is found there and at its level."""
    rate_hz, frames = 48_000, SIZE_BYTES // 3
    write_sparse(large, frames, rate_hz)
    session = open_session([large])
    assert (session.frames, session.rate_hz, session.tracks[0].frames) == (frames, rate_hz, frames)
    (last,) = audio.pieces(audio.parts_of(session.tracks[0]), [frames - rate_hz], frames=rate_hz)
    assert np.max(np.abs(last[:, 0] - tone(rate_hz))) <= 2.0**-24
    (reading,) = measure_files([large])
    length_s = frames / rate_hz
    assert reading.length_s == pytest.approx(length_s)
    assert reading.true_peak_dbtp == pytest.approx(20 * np.log10(TONE_PEAK), abs=0.1)
    assert length_s - 1.01 <= reading.true_peak_s <= length_s
    assert length_s - 1 <= reading.max_momentary_s <= length_s


def test_a_cut_over_4_gib_is_finished(large: Path) -> None:
    """A cut of 8.5 h becomes a mix of the same frames in RF64, its tone where it was and under the ceiling."""
    rate_hz, frames = 48_000, SIZE_BYTES // 3
    write_sparse(large, frames, rate_hz)
    out = large.parent / "done"
    assert shutil.disk_usage(large.parent).free > 3 * SIZE_BYTES, "this test needs 13 GiB free for temporary files"
    try:
        result = finish([large], out=out)
        sizes = {kind: size for kind, _, size in chunks_of(out / "mix.wav")}
        assert sizes[b"data"] == 3 * frames > 4 * GIB
        with soundfile.SoundFile(out / "mix.wav") as file:
            assert (file.format, file.frames) == ("RF64", frames)
            file.seek(frames - 2 * rate_hz)
            silence, last = file.read(rate_hz), file.read(rate_hz)
    finally:
        shutil.rmtree(out, ignore_errors=True)
    assert not silence.any()
    gain = last[: rate_hz // 2] @ tone(rate_hz)[: rate_hz // 2] / np.sum(tone(rate_hz)[: rate_hz // 2] ** 2)
    assert 20 * np.log10(gain) == pytest.approx(result.mix.make_up_db, abs=0.1)
    assert np.max(np.abs(last)) <= 10 ** (-1 / 20)
