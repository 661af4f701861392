"""leveller.riff: chunks of our own stand behind the audio, aligned and counted, and change no sample."""

from __future__ import annotations

import struct
from pathlib import Path

import numpy as np
import pytest
import soundfile
from sources import RATE_HZ, noise

from leveller import audio
from leveller.errors import InputError, OutputError


@pytest.mark.parametrize(("frames", "expected_frames"), [(999, 0), (1000, 0), (999, 2**31)])
def test_appended_chunks_are_aligned_and_counted(tmp_path: Path, frames: int, expected_frames: int) -> None:
    """Chunks of odd and even size behind odd and even audio are found again, and the header's size is the file's."""
    path = tmp_path / "x.wav"
    with audio.WavWriter(path, RATE_HZ, 1, "pcm24", expected_frames=expected_frames) as writer:
        writer.write(noise(frames))
    before = soundfile.read(path, dtype="int32")[0]
    audio.append_chunks(path, [(b"abcd", b"odd"), (b"cue ", b"even")])
    audio.append_chunks(path, [(b"more", b"later")])
    data, chunks = path.read_bytes(), audio.read_chunks(path)
    for kind, payload in ((b"abcd", b"odd"), (b"cue ", b"even"), (b"more", b"later")):
        offset, size = chunks[kind]
        assert data[offset : offset + size] == payload
        assert offset % 2 == 0
    stated = struct.unpack_from("<Q", data, 20)[0] if expected_frames else struct.unpack_from("<I", data, 4)[0]
    assert stated == len(data) - 8
    assert len(data) % 2 == 0
    assert np.array_equal(soundfile.read(path, dtype="int32")[0], before)


def test_chunk_behind_audio_that_was_not_padded(tmp_path: Path) -> None:
    """Some recorders leave out the padding of an odd data chunk at the end; a chunk still lands on an even place."""
    path = tmp_path / "x.wav"
    soundfile.write(path, noise(999), RATE_HZ, "PCM_24")
    path.write_bytes(path.read_bytes()[:-1])
    audio.append_chunks(path, [(b"abcd", b"odd")])
    offset, size = audio.read_chunks(path)[b"abcd"]
    assert path.read_bytes()[offset : offset + size] == b"odd"


def test_chunks_of_another_format_are_refused(tmp_path: Path) -> None:
    """A file without RIFF chunks says so instead of being damaged."""
    soundfile.write(tmp_path / "x.flac", noise(100), RATE_HZ)
    before = (tmp_path / "x.flac").read_bytes()
    with pytest.raises(InputError, match="not a WAV or AIFF file"):
        audio.read_chunks(tmp_path / "x.flac")
    with pytest.raises(OutputError, match="no chunk can be added"):
        audio.append_chunks(tmp_path / "x.flac", [(b"abcd", b"x")])
    assert (tmp_path / "x.flac").read_bytes() == before
