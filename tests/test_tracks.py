"""leveller.tracks: a track comes in session time, the same however it is read; what changed meanwhile is told."""

from __future__ import annotations

import threading
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import soundfile
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from sources import RATE_HZ, Sources, noise, read_all, reader_of, source

from leveller import audio
from leveller.decoder import CHUNK_FRAMES
from leveller.errors import InputError


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(cuts=st.lists(st.integers(0, 2 * CHUNK_FRAMES + 9000), max_size=8),
       rate_hz=st.sampled_from([44100, 48000, 96000]), width=st.sampled_from([1, 2]))
def test_any_split_of_reads_gives_the_same_bytes(tmp_path: Path, cuts: list[int], rate_hz: int, width: int) -> None:
    """However a track is cut into reads, offset, resampling, high-pass and end come out bit for bit the same."""
    path = tmp_path / f"{rate_hz}.wav"
    if not path.exists():
        soundfile.write(path, noise(CHUNK_FRAMES + 5000, 2), rate_hz, "FLOAT")
    track = source(path, channels=(0, 1), width=width, offset_frames=1234, polarity=-1, high_pass_hz=80.0)
    total = 2 * CHUNK_FRAMES + 9000
    edges = [0, *sorted(cuts), total]
    split = read_all(track, list(np.diff(edges)))
    assert split.tobytes() == read_all(track, [total]).tobytes()


def test_offset_end_and_polarity(tmp_path: Path) -> None:
    """Zeros before the offset and behind the end, the samples upside down between them, exactly."""
    x = noise(1000)
    soundfile.write(tmp_path / "x.wav", x, RATE_HZ, "FLOAT")
    y = read_all(source(tmp_path / "x.wav", offset_frames=300, polarity=-1), [100, 150, 700, 550, 10])
    assert np.array_equal(y, np.concatenate([np.zeros(300), -x, np.zeros(210)]).astype(np.float32))


def test_reading_into_a_given_buffer(tmp_path: Path) -> None:
    """`out` is filled whole and returned."""
    soundfile.write(tmp_path / "x.wav", noise(100), RATE_HZ, "FLOAT")
    out = np.full(150, 7, np.float32)
    with reader_of(source(tmp_path / "x.wav")) as reader:
        assert reader.read(150, out=out) is out
    assert np.array_equal(out, np.append(noise(100), np.zeros(50, np.float32)))


def test_high_pass_takes_rumble_and_leaves_the_voice(tmp_path: Path) -> None:
    """A second-order Butterworth high-pass at 80 Hz is 3 dB down there, 12 dB an octave lower, and flat at 1 kHz."""
    t = np.arange(2 * RATE_HZ) / RATE_HZ
    for tone_hz, expected_db in ((80, -3.01), (40, -12.3), (1000, 0.0)):  # 10 log10(1 / (1 + (fc/f)^4))
        soundfile.write(tmp_path / "x.wav", 0.5 * np.sin(2 * np.pi * tone_hz * t), RATE_HZ, "FLOAT")
        y = read_all(source(tmp_path / "x.wav", high_pass_hz=80.0), [2 * RATE_HZ])[RATE_HZ:]
        assert 20 * np.log10(np.std(y) / (0.5 / np.sqrt(2))) == pytest.approx(expected_db, abs=0.05)


def test_two_channels_are_averaged_or_kept(tmp_path: Path) -> None:
    """A voice on two channels is their mean; a stereo bed keeps both, resampled too."""
    x = noise(5000, 2)
    soundfile.write(tmp_path / "x.wav", x, RATE_HZ, "FLOAT")
    track = source(tmp_path / "x.wav", channels=(0, 1))
    assert np.array_equal(read_all(track, [5000]), (x[:, 0] + x[:, 1]) * np.float32(0.5))
    assert np.array_equal(read_all(replace(track, width=2), [5000]), x)
    wide = read_all(source(tmp_path / "x.wav", rate_hz=24000, channels=(0, 1), width=2), [2500], 24000)
    for n in (0, 1):
        assert np.array_equal(
            wide[:, n], read_all(source(tmp_path / "x.wav", rate_hz=24000, channels=(n,)), [2500], 24000))


def test_nan_and_inf_are_silenced_and_counted(tmp_path: Path) -> None:
    """NaN, Inf and what no sound can be become zero, each frame counts once; loud samples are left alone."""
    x = noise(2 * CHUNK_FRAMES)
    x[[5, 70_000]], x[[9, 100_000]], x[20], x[21], x[22] = np.nan, np.inf, -np.inf, 3e38, -(2.0**31)
    repaired = np.where(np.abs(x) < 2.0**32, x, 0)
    soundfile.write(tmp_path / "x.wav", x, RATE_HZ, "FLOAT")
    with reader_of(source(tmp_path / "x.wav")) as reader:
        assert np.array_equal(reader.read(len(x)), repaired)
        assert reader.repaired_frames == 6
    both = np.stack([x, x], 1)
    both[30, 1] = np.nan
    soundfile.write(tmp_path / "x.wav", both, RATE_HZ, "FLOAT")
    with reader_of(source(tmp_path / "x.wav", channels=(0, 1))) as reader:
        y = reader.read(len(x))
        assert reader.repaired_frames == 7  # frame 30 on one channel, the others on both
    assert y[30] == x[30] / 2
    assert np.isfinite(y).all()


def test_polyphonic_file_is_decoded_once_a_pass(tmp_path: Path) -> None:
    """Readers on one file share its decode, from several threads and in any order."""
    frames = 3 * CHUNK_FRAMES + 17
    x = noise(frames, 4)
    soundfile.write(tmp_path / "x.wav", x, RATE_HZ, "FLOAT")
    tracks = tuple(source(tmp_path / "x.wav", name=f"x ch{n + 1}", channels=(n,)) for n in range(4))
    got: dict[int, np.ndarray] = {}
    with audio.open_readers(Sources(RATE_HZ, tracks)) as readers:

        def walk(n: int) -> None:
            got[n] = np.concatenate([readers[n].read(10_007) for _ in range(frames // 10_007 + 1)])

        threads = [threading.Thread(target=walk, args=(n,)) for n in (2, 0, 3, 1)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        assert [reader.blocks_read for reader in readers] == [4, 4, 4, 4]  # of the one file together
    for n in range(4):
        assert np.array_equal(got[n][:frames], x[:, n])


def test_readers_of_one_file_at_two_offsets_do_not_hold_chunks_for_each_other(tmp_path: Path) -> None:
    """The same file twice, an hour apart, is decoded by each on its own."""
    soundfile.write(tmp_path / "x.wav", noise(100), RATE_HZ, "FLOAT")
    one = source(tmp_path / "x.wav")
    with audio.open_readers(Sources(RATE_HZ, (one, replace(one, name="x 2", offset_frames=50)))) as readers:
        first, second = (reader.read(150) for reader in readers)
    assert np.array_equal(first[:100], second[50:])


def test_file_that_changed_since_the_check_is_an_input_error(tmp_path: Path) -> None:
    """A file that vanished or shrank is named, on opening and while reading."""
    path = tmp_path / "x.wav"
    soundfile.write(path, noise(3 * CHUNK_FRAMES), RATE_HZ, "FLOAT")
    track = source(path)
    with reader_of(track) as reader:
        reader.read(100)
        with open(path, "r+b") as file:
            file.truncate(4 * CHUNK_FRAMES)
        with pytest.raises(InputError, match=r"x\.wav: ended at frame .* but had 196608"):
            reader.read(3 * CHUNK_FRAMES)
    with pytest.raises(InputError, match=r"x\.wav: .* frames, but 196608 when it was checked"):
        read_all(track, [1])
    path.unlink()
    with pytest.raises(InputError, match=r"x\.wav: no such file"):
        read_all(track, [1])
