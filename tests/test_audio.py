"""leveller.audio: whatever the file, its samples come true and in place; what cannot be used is refused, with why."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import soundfile
from sources import RATE_HZ, Source, noise, read_all, source

from leveller import audio, riff
from leveller.errors import InputError

EXACT = {  # lossless formats: one step of the coarser of float32 and the file's own
    ("WAV", "PCM_16"): 2.0**-15, ("WAV", "PCM_24"): 2.0**-23, ("WAV", "PCM_32"): 2.0**-23, ("WAV", "FLOAT"): 0.0,
    ("WAV", "DOUBLE"): 0.0, ("WAVEX", "PCM_24"): 2.0**-23, ("RF64", "PCM_24"): 2.0**-23, ("AIFF", "PCM_16"): 2.0**-15,
    ("AIFF", "PCM_24"): 2.0**-23, ("FLAC", "PCM_16"): 2.0**-15, ("FLAC", "PCM_24"): 2.0**-23,
}
FLAC_BLOCK_FRAMES = 4096  # of libsndfile's encoder; what one block of a file by it holds
SUFFIX = {
    "WAV": ".wav", "WAVEX": ".wav", "RF64": ".wav", "AIFF": ".aiff", "FLAC": ".flac", "OGG": ".ogg", "MP3": ".mp3"}


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
