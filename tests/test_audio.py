"""leveller.audio: tracks come as aligned blocks whatever the file; files are written to the bit."""

from __future__ import annotations

import struct
import threading
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from leveller import audio, riff
from leveller.decoder import CHUNK_FRAMES
from leveller.errors import InputError, OutputError

RATE_HZ = 48000
EXACT = {  # lossless formats: one step of the coarser of float32 and the file's own
    ("WAV", "PCM_16"): 2.0**-15, ("WAV", "PCM_24"): 2.0**-23, ("WAV", "PCM_32"): 2.0**-23, ("WAV", "FLOAT"): 0.0,
    ("WAV", "DOUBLE"): 0.0, ("WAVEX", "PCM_24"): 2.0**-23, ("RF64", "PCM_24"): 2.0**-23, ("AIFF", "PCM_16"): 2.0**-15,
    ("AIFF", "PCM_24"): 2.0**-23, ("FLAC", "PCM_16"): 2.0**-15, ("FLAC", "PCM_24"): 2.0**-23,
}
FLAC_BLOCK_FRAMES = 4096  # of libsndfile's encoder; what one block of a file by it holds
SUFFIX = {
    "WAV": ".wav", "WAVEX": ".wav", "RF64": ".wav", "AIFF": ".aiff", "FLAC": ".flac", "OGG": ".ogg", "MP3": ".mp3"}


@dataclass(frozen=True)
class Source:
    """A track as `session` would hand it over."""

    name: str
    path: Path
    channels: tuple[int, ...] = (0,)
    width: int = 1
    offset_frames: int = 0
    frames: int = 0
    source_rate_hz: int = RATE_HZ
    source_frames: int = 0
    is_float: bool = True
    polarity: int = 1
    high_pass_hz: float | None = None


@dataclass(frozen=True)
class Sources:
    """A session as far as `open_readers` asks."""

    rate_hz: int
    tracks: tuple[Source, ...]


def noise(frames: int, channels: int = 1, seed: int = 1) -> np.ndarray:
    """Seeded noise at -20 dBFS, (frames,) or (frames, channels)."""
    shape = (frames,) if channels == 1 else (frames, channels)
    return np.random.default_rng(seed).normal(0, 0.1, shape).astype(np.float32)


def source(path: Path, *, rate_hz: int = RATE_HZ, **changes: Any) -> Source:
    """A track of a file that exists."""
    facts = audio.probe(path)
    frames = (2 * facts.frames * rate_hz + facts.rate_hz) // (2 * facts.rate_hz)
    made = Source(path.stem, path, frames=frames, source_rate_hz=facts.rate_hz, source_frames=facts.frames,
                  is_float=facts.is_float)
    return replace(made, **changes)


def read_all(track: Source, sizes: list[int], rate_hz: int = RATE_HZ) -> np.ndarray:
    """A track in blocks of the given sizes."""
    with audio.TrackReader(track, rate_hz) as reader:
        return np.concatenate([reader.read(size) for size in sizes])


@pytest.mark.parametrize(("form", "subtype"), EXACT)
def test_lossless_formats_read_to_the_last_step(tmp_path: Path, form: str, subtype: str) -> None:
    """WAV of all widths, extensible, RF64, AIFF and FLAC give the samples that were written, within one step."""
    x = noise(10_000)
    path = tmp_path / f"x{SUFFIX[form]}"
    soundfile.write(path, x, RATE_HZ, subtype, format=form)
    facts = audio.probe(path)
    assert (facts.rate_hz, facts.frames, facts.channels, facts.subtype) == (RATE_HZ, 10_000, 1, subtype)
    assert facts.is_float == (subtype in ("FLOAT", "DOUBLE"))
    assert np.max(np.abs(read_all(source(path), [10_000]) - x)) <= EXACT[form, subtype]


@pytest.mark.parametrize(("form", "subtype"), [("OGG", "VORBIS"), ("OGG", "OPUS"), ("MP3", "MPEG_LAYER_III")])
def test_lossy_formats_come_aligned(tmp_path: Path, form: str, subtype: str) -> None:
    """OGG and MP3 have the length that was written, and no delay against it."""
    t = np.arange(96_000) / RATE_HZ
    x = (0.3 * np.sin(2 * np.pi * (300 + 200 * t) * t)).astype(np.float32)
    path = tmp_path / f"x{SUFFIX[form]}"
    soundfile.write(path, x, RATE_HZ, subtype, format=form)
    y = read_all(source(path), [96_000])
    products = np.fft.irfft(np.fft.rfft(y) * np.conj(np.fft.rfft(x)))
    assert audio.probe(path).frames == 96_000
    assert np.argmax(products) == 0


@pytest.mark.parametrize("rate_hz", [8000, 11025, 22050, 44100, 48000, 96000, 192_000])
def test_every_rate_comes_at_the_sessions_rate_and_length(tmp_path: Path, rate_hz: int) -> None:
    """A tone of any rate from 8 to 192 kHz keeps pitch, level and place; the total length is exact."""
    x = (0.5 * np.sin(2 * np.pi * 1000 * np.arange(rate_hz) / rate_hz)).astype(np.float32)
    soundfile.write(tmp_path / "x.wav", x, rate_hz, "FLOAT")
    track = source(tmp_path / "x.wav")
    assert track.frames == RATE_HZ
    y = read_all(track, [RATE_HZ, 1000])
    expected = 0.5 * np.sin(2 * np.pi * 1000 * np.arange(RATE_HZ) / RATE_HZ)
    assert np.max(np.abs(y[2000:-3000] - expected[2000:-2000])) < 1e-4  # soxr HQ is good for 20 bit
    assert not y[RATE_HZ:].any()


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
    with audio.TrackReader(source(tmp_path / "x.wav"), RATE_HZ) as reader:
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
    with audio.TrackReader(source(tmp_path / "x.wav"), RATE_HZ) as reader:
        assert np.array_equal(reader.read(len(x)), repaired)
        assert reader.repaired_frames == 6
    both = np.stack([x, x], 1)
    both[30, 1] = np.nan
    soundfile.write(tmp_path / "x.wav", both, RATE_HZ, "FLOAT")
    with audio.TrackReader(source(tmp_path / "x.wav", channels=(0, 1)), RATE_HZ) as reader:
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
    with audio.TrackReader(track, RATE_HZ) as reader:
        reader.read(100)
        with open(path, "r+b") as file:
            file.truncate(4 * CHUNK_FRAMES)
        with pytest.raises(InputError, match=r"x\.wav: ended at frame .* but had 196608"):
            reader.read(3 * CHUNK_FRAMES)
    with pytest.raises(InputError, match=r"x\.wav: .* frames, but 196608 when it was checked"):
        audio.TrackReader(track, RATE_HZ)
    path.unlink()
    with pytest.raises(InputError, match=r"x\.wav: no such file"):
        audio.TrackReader(track, RATE_HZ)


@pytest.mark.parametrize(("form", "subtype"), [
    ("WAV", "PCM_16"), ("WAV", "PCM_24"), ("WAV", "FLOAT"), ("RF64", "PCM_24"), ("AIFF", "PCM_24"), ("FLAC", "PCM_24"),
    ("MP3", "MPEG_LAYER_III")])
def test_truncated_file_is_refused_or_taken_short(tmp_path: Path, form: str, subtype: str) -> None:
    """A file shorter than its header says is refused with both lengths; accept_short takes what can be decoded."""
    path = tmp_path / f"x{SUFFIX[form]}"
    soundfile.write(path, noise(96_000), RATE_HZ, subtype, format=form)
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    with pytest.raises(InputError, match=r"ends after (0\.[89]|1\.0).* its header says 2\.000 s\. .*--accept-short$"):
        audio.probe(path)
    facts = audio.probe(path, accept_short=True)
    assert facts.header_frames == 96_000
    assert 40_000 < facts.frames < 50_000
    track = Source("x", path, frames=facts.frames, source_frames=facts.frames, is_float=facts.is_float)
    y = read_all(track, [facts.frames])
    if form != "MP3":
        assert np.max(np.abs(y - noise(96_000)[: facts.frames])) <= 2.0**-15


@pytest.mark.parametrize("channels", [1, 2])
def test_damaged_flac_is_taken_up_to_the_damaged_block(tmp_path: Path, channels: int) -> None:
    """Of what lies before a block that cannot be decoded at most a frame is lost, and the rest reads as it was."""
    path, x = tmp_path / "x.flac", noise(400_000, channels)
    soundfile.write(path, x, RATE_HZ, "PCM_24")
    whole = path.read_bytes()
    lost = []
    for at in np.random.default_rng(7).integers(len(whole) // 10, len(whole) - 100, 12):
        path.write_bytes(whole[:at] + bytes(50) + whole[at + 50 :])
        facts = audio.probe(path, accept_short=True)
        begins = facts.frames + 1
        assert begins % FLAC_BLOCK_FRAMES == 0  # the frame that is missing is the last of its block
        assert abs(at / len(whole) - begins / len(x)) < 2 * FLAC_BLOCK_FRAMES / len(x)
        track = Source("x", path, frames=facts.frames, source_frames=facts.frames, channels=tuple(range(channels)),
                       width=channels)
        lost.append(float(np.max(np.abs(read_all(track, [facts.frames]) - x[: facts.frames]))))
        assert len(list(audio.pieces(audio.parts_of(track), [facts.frames - 100], frames=RATE_HZ))) == 1
        with pytest.raises(InputError, match=r"cannot be read .*--accept-short$"):
            list(audio.file_blocks(path, RATE_HZ))
        assert sum(map(len, audio.file_blocks(path, RATE_HZ, length=facts.frames))) == facts.frames
    assert max(lost) <= 2.0**-23


def test_files_that_cannot_be_used_are_refused_with_the_reason(tmp_path: Path) -> None:
    """Missing, empty, no audio, no frames, odd rates: each gets its own line."""
    (tmp_path / "empty.wav").touch()
    (tmp_path / "text.wav").write_text("not audio at all, but long enough to look at")
    soundfile.write(tmp_path / "none.wav", np.zeros(0), RATE_HZ)
    soundfile.write(tmp_path / "slow.wav", np.zeros(100), 4000)
    for name, match in (("missing.wav", "no such file"), ("empty.wav", r"empty file \(0 bytes\)"),
                        ("text.wav", "not readable as audio"), ("none.wav", r"holds no audio \(0 frames .* 44 bytes"),
                        ("slow.wav", "4000 Hz, expected 8000 to 192000 Hz")):
        with pytest.raises(InputError, match=rf"{name}: {match}"):
            audio.probe(tmp_path / name)


def test_stream_of_unknown_length_is_not_called_truncated(tmp_path: Path) -> None:
    """A WAV that was piped has no true size in its header; all that is there is taken."""
    path = tmp_path / "x.wav"
    soundfile.write(path, noise(1000), RATE_HZ, "PCM_16")
    with open(path, "r+b") as file:
        file.seek(riff.read_chunks(path)[b"data"][0] - 4)
        file.write(b"\xff\xff\xff\xff")
    assert audio.probe(path).frames == 1000


def test_pieces_are_zero_outside_the_file(tmp_path: Path) -> None:
    """A piece before, across or behind the file holds zeros there, and the file's samples elsewhere."""
    x = noise(1000)
    soundfile.write(tmp_path / "x.wav", x, RATE_HZ, "FLOAT")
    got = [block[:, 0].copy() for block in audio.pieces(tmp_path / "x.wav", [-150, -50, 400, 950, 2000], frames=100)]
    padded = np.concatenate([np.zeros(200), x, np.zeros(1500)]).astype(np.float32)
    assert all(np.array_equal(block, padded[s + 200 : s + 300])
               for s, block in zip([-150, -50, 400, 950, 2000], got, strict=True))


def test_preview_levels_ignore_dc_and_cover_the_whole_file() -> None:
    """Pieces reach from the first to the last second; a short file is taken whole."""
    assert audio.spread_starts(3600 * RATE_HZ, RATE_HZ)[::59] == [0, 3599 * RATE_HZ]
    assert len(audio.spread_starts(3600 * RATE_HZ, RATE_HZ)) == audio.PREVIEW_PIECES
    assert audio.spread_starts(100_000, RATE_HZ) == [0, 48_000, 96_000]


def test_preview_level_of_a_known_tone_with_dc(tmp_path: Path) -> None:
    """A sine of amplitude 0.5 has a mean square of 0.125, whatever DC it rides on."""
    t = np.arange(RATE_HZ // 2) / RATE_HZ
    soundfile.write(tmp_path / "x.wav", 0.2 + 0.5 * np.sin(2 * np.pi * 1000 * t), RATE_HZ, "FLOAT")
    heard = audio.preview(tmp_path / "x.wav", audio.probe(tmp_path / "x.wav"))
    assert heard.power.shape == (50, 1)
    assert heard.power == pytest.approx(0.125, rel=1e-5)


@pytest.mark.parametrize("to_hz", [16000, 48000])
def test_resampler_is_exact_at_any_block_size(to_hz: int) -> None:
    """Pushed in one block or in many, the same samples come out; equal rates hand them through."""
    x = noise(50_000)
    whole = audio.Resampler(48000, to_hz).push(x, last=True)
    for size in (1000, 4801, 33_333):
        stream = audio.Resampler(48000, to_hz)
        parts = [stream.push(x[i : i + size], last=i + size >= len(x)) for i in range(0, len(x), size)]
        assert np.concatenate(parts).tobytes() == whole.tobytes()
    assert len(whole) == round(50_000 * to_hz / 48000)


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
