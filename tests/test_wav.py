"""leveller.wav: plain WAV files between bytes and float32, held against libsndfile to the last bit."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile

from leveller import audio, wav
from leveller.samples import Part

RATE_HZ = 44_100
FRAMES = 40_000  # more than are decoded at once
SUBTYPES = ("PCM_16", "PCM_24", "FLOAT")


def noise(channels: int, frames: int = FRAMES) -> np.ndarray:
    """Seeded noise that reaches full scale now and then."""
    return np.random.default_rng(3).normal(0, 0.3, (frames, channels)).clip(-1, 1).astype(np.float32)


def opened(path: Path) -> Any:
    """What a track's samples are read with."""
    return audio._open_samples(path)


@pytest.mark.parametrize("subtype", SUBTYPES)
@pytest.mark.parametrize("channels", [1, 2, 5])
@pytest.mark.parametrize("form", ["WAV", "WAVEX", "RF64"])
def test_samples_are_those_of_libsndfile(tmp_path: Path, subtype: str, channels: int, form: str) -> None:
    """Every sample, in blocks of any size and from any place, is the one that libsndfile reads."""
    path = tmp_path / "x.wav"
    soundfile.write(path, noise(channels), RATE_HZ, subtype, format=form)
    audio.append_chunks(path, [(b"memo", b"behind the audio")])
    expected = soundfile.read(path, dtype="float32", always_2d=True)[0]
    with opened(path) as file:
        assert isinstance(file, wav.SampleFile)
        assert (file.frames, file.channels, file.samplerate) == (FRAMES, channels, RATE_HZ)
        for start, size in ((0, FRAMES), (17, 16_385), (FRAMES - 5, 100), (FRAMES, 10)):
            file.seek(start)
            block = np.full((size, channels), 9, np.float32)
            got = file.read(out=block)
            assert got.tobytes() == expected[start : start + size].tobytes()
            assert (block[len(got) :] == 9).all()


@pytest.mark.parametrize(("name", "how"), [
    ("x.flac", {"subtype": "PCM_24"}), ("x.aiff", {"subtype": "PCM_24"}), ("x.wav", {"subtype": "PCM_32"}),
    ("x.wav", {"subtype": "PCM_24", "endian": "BIG"}), ("x.wav", {"subtype": "ULAW"}),
    ("x.w64", {"subtype": "PCM_24"})])
def test_other_files_are_left_to_libsndfile(tmp_path: Path, name: str, how: dict[str, str]) -> None:
    """What is not plain little-endian WAV of three kinds is decoded by libsndfile; the samples are its own."""
    soundfile.write(tmp_path / name, noise(2), RATE_HZ, **how)
    with opened(tmp_path / name) as file:
        assert isinstance(file, soundfile.SoundFile)
    part = next(audio.pieces(tmp_path / name, [100], frames=1000))
    assert np.array_equal(part, soundfile.read(tmp_path / name, frames=1000, start=100, dtype="float32")[0])


@pytest.mark.parametrize("subtype", SUBTYPES)
def test_a_file_that_shrinks_reads_short(tmp_path: Path, subtype: str) -> None:
    """Frames that have vanished since the file was opened are missing, not zeros; half a frame is none."""
    path = tmp_path / "x.wav"
    soundfile.write(path, noise(2), RATE_HZ, subtype)
    with opened(path) as file:
        offset, size = audio.read_chunks(path)[b"data"]
        with open(path, "r+b") as damaged:
            damaged.truncate(offset + size // 2 + 3)
        assert len(file.read(out=np.zeros((FRAMES, 2), np.float32))) == FRAMES // 2


def test_a_split_take_is_read_as_one(tmp_path: Path) -> None:
    """Files that follow each other are one row of samples, whatever their kind."""
    parts = []
    for i, subtype in enumerate(SUBTYPES):
        soundfile.write(tmp_path / f"{i}.wav", noise(1), RATE_HZ, subtype)
        parts.append(Part(tmp_path / f"{i}.wav", FRAMES))
    read = next(audio.pieces(parts, [0], frames=3 * FRAMES))
    expected = [soundfile.read(part.path, dtype="float32", always_2d=True)[0] for part in parts]
    assert np.array_equal(read, np.concatenate(expected))


@pytest.mark.parametrize("kind", ["float32", "pcm24", "pcm16"])
@pytest.mark.parametrize("frames", [0, 1, 999])
@pytest.mark.parametrize("expected_frames", [0, 2**31])
def test_headers_say_what_is_there(tmp_path: Path, kind: Any, frames: int, expected_frames: int) -> None:
    """libsndfile finds format, frames and rate of what was written, whole and even, as WAV or RF64."""
    path = tmp_path / "x.wav"
    with wav.WavWriter(path, RATE_HZ, 1, kind, expected_frames=expected_frames) as writer:
        writer.write(noise(1, frames)[:, 0])
    found = soundfile.info(path)
    assert (found.frames, found.samplerate, found.channels) == (frames, RATE_HZ, 1)
    assert found.subtype == {"float32": "FLOAT", "pcm24": "PCM_24", "pcm16": "PCM_16"}[kind]
    assert found.format == ("RF64" if expected_frames else "WAV")
    assert path.stat().st_size % 2 == 0
