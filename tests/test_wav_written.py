"""What leveller.wav writes: the same bytes whatever the blocks and the time; rounded, clipped, dithered as it says."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile
from sources import RATE_HZ, noise

from leveller import audio, riff
from leveller.errors import OutputError


def write(path: Path, x: np.ndarray, kind: Any, size: int) -> bytes:
    """The bytes of a file written in blocks of `size`."""
    with audio.WavWriter(path, RATE_HZ, 1 if x.ndim == 1 else x.shape[1], kind, expected_frames=len(x)) as writer:
        for i in range(0, len(x), size):
            writer.write(x[i : i + size])
    return path.read_bytes()


@pytest.mark.parametrize("channels", [1, 2])
@pytest.mark.parametrize("kind", ["float32", "pcm24", "pcm16"])
def test_written_bytes_do_not_depend_on_block_size_or_time(
    tmp_path: Path, kind: str, channels: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Two runs, in different blocks, write the same bytes: dither is seeded, no clock time comes into the file."""
    x = noise(10_000, channels)
    first = write(tmp_path / "a.wav", x, kind, 10_000)
    assert all(write(tmp_path / "b.wav", x, kind, size) == first for size in (1, 777, 4096))


def test_pcm24_rounds_to_nearest_and_clips(tmp_path: Path) -> None:
    """Values between steps go to the nearest one; values beyond full scale stay at it and do not wrap."""
    full = 2.0**23
    x = np.array([0.4, 0.6, -0.4, -0.6, 1000.5, full, -full, 2 * full, -2 * full], np.float32) / np.float32(full)
    write(tmp_path / "x.wav", x, "pcm24", 9)
    steps = soundfile.read(tmp_path / "x.wav", dtype="int32")[0] >> 8
    assert steps.tolist() == [0, 1, 0, -1, 1000, 2**23 - 1, -(2**23), 2**23 - 1, -(2**23)]


def test_pcm16_dither_is_triangular(tmp_path: Path) -> None:
    """The error has no mean and a power of 1/12 + 1/6 step, whatever the signal (Lipshitz et al. 1992)."""
    n = 200_000
    for level in (0.0, 0.25, 0.5):  # steps; rounding alone would leave a mean error of the same size
        write(tmp_path / "x.wav", np.full(n, level / 2**15, np.float32), "pcm16", 5000)
        error = soundfile.read(tmp_path / "x.wav", dtype="int16")[0] - level
        assert np.mean(error) == pytest.approx(0, abs=5 * np.sqrt(0.25 / n))
        assert np.var(error) == pytest.approx(0.25, rel=0.02)


def test_float_file_keeps_what_is_over_full_scale(tmp_path: Path) -> None:
    """Samples over 0 dBFS are written as they are."""
    x = noise(100) * 50
    write(tmp_path / "x.wav", x, "float32", 100)
    assert np.array_equal(soundfile.read(tmp_path / "x.wav", dtype="float32")[0], x)


def test_rf64_where_wav_cannot_hold_it(tmp_path: Path) -> None:
    """More than 4 GiB expected gives RF64, and a plain WAV refuses to grow past it."""
    with audio.WavWriter(tmp_path / "x.wav", RATE_HZ, 1, "float32", expected_frames=2**30) as writer:
        writer.write(noise(100))
    assert (tmp_path / "x.wav").read_bytes()[:4] == b"RF64"
    assert np.array_equal(soundfile.read(tmp_path / "x.wav", dtype="float32")[0], noise(100))
    with audio.WavWriter(tmp_path / "y.wav", RATE_HZ, 1, "pcm24", expected_frames=100) as writer:
        writer.frames = 2**32 // 3
        with pytest.raises(OutputError, match="would pass 4 GiB"):
            writer.write(noise(100))
        writer.frames = 0


def test_file_that_cannot_be_written_is_an_output_error(tmp_path: Path) -> None:
    """A missing folder gives one line that names the file."""
    with pytest.raises(OutputError, match=r"x\.wav: cannot be written"):
        audio.WavWriter(tmp_path / "none" / "x.wav", RATE_HZ, 1, "pcm24")


@pytest.mark.parametrize("kind", ["float32", "pcm24", "spill"])
def test_full_disk_is_an_output_error(tmp_path: Path, kind: Any) -> None:
    """When the system takes no more bytes, the file is named; here a limit on file sizes stands for a full disk."""
    resource = pytest.importorskip("resource")
    before = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (100_000, before[1]))
    try:
        with pytest.raises(OutputError, match=r"x\.wav: cannot be written \((System error; is|File too large)"):
            fill(tmp_path / "x.wav", kind)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, before)


def fill(path: Path, kind: Any) -> None:
    """Write 400 kB."""
    if kind == "spill":
        with audio.FloatSpill(path) as spill:
            spill.append(noise(100_000))
    else:
        with audio.WavWriter(path, RATE_HZ, 1, kind) as writer:
            writer.write(noise(100_000))


@pytest.mark.parametrize("expected_frames", [0, 2**30])
@pytest.mark.parametrize("channels", [1, 2])
def test_blocks_put_back_change_the_samples_alone(tmp_path: Path, expected_frames: int, channels: int) -> None:
    """A float file walked twice and put back changed holds the changed samples; its chunks stay."""
    x = noise(10_000, channels)
    with audio.WavWriter(tmp_path / "x.wav", RATE_HZ, channels, "float32", expected_frames=expected_frames) as writer:
        writer.write(x)
    audio.append_chunks(tmp_path / "x.wav", [(b"memo", b"kept")])
    with audio.FloatWav(tmp_path / "x.wav", channels) as file:
        assert file.frames == len(x)
        for factor in (np.float32(0.7), np.float32(-0.5)):
            file.rewind()
            while len(block := file.read(777)):
                file.put_back(block * factor)
    read = soundfile.read(tmp_path / "x.wav", dtype="float32")[0]
    assert np.array_equal(read, x * np.float32(0.7) * np.float32(-0.5))
    assert riff.read_chunk(tmp_path / "x.wav", b"memo", most_bytes=100) == b"kept"


@pytest.mark.parametrize("channels", [1, 2])
def test_spill_gives_back_what_was_appended(tmp_path: Path, channels: int) -> None:
    """Blocks of any size come back in blocks of any size, twice if asked, and the file is gone at the end."""
    x = noise(10_000, channels)
    with audio.FloatSpill(tmp_path / "sum.tmp", channels) as spill:
        for i in range(0, 10_000, 777):
            spill.append(x[i : i + 777])
        for size in (100, 10_000, 3333):
            blocks = list(spill.blocks(size))
            assert np.array_equal(np.concatenate(blocks), x)
            assert [len(block) for block in blocks[:-1]] == [size] * (len(blocks) - 1)
        assert spill.frames == 10_000
    assert not (tmp_path / "sum.tmp").exists()
