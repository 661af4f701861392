"""What must not grow, without a clock: passes over the sources, blocks decoded, memory per minute."""

from __future__ import annotations

import math
import subprocess
import sys
from pathlib import Path

import pytest
from conversations import ConversationSpec, simulate

from leveller import audio, pipeline
from leveller.render import mix

MEASURE = """
import resource, sys
from leveller import pipeline
pipeline.process(sys.argv[2:], out=sys.argv[1], replace=True)
print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)
"""
GRID_BYTES_PER_HOP = 220  # of a track, two tracks and a mix: measured 190 from 10 to 60 minutes
SLACK_BYTES = 24 << 20  # allocator, tables


@pytest.fixture(scope="module")
def spoken(tmp_path_factory: pytest.TempPathFactory) -> list[Path]:
    """A short conversation at two microphones."""
    folder = tmp_path_factory.mktemp("spoken")
    return simulate(ConversationSpec(people=2, seconds=20.0, seed=3, rate_hz=16_000)).write(folder)


def test_two_passes_over_the_sources(
    spoken: list[Path], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Each source is decoded once to measure and once to render, whole, and never again."""
    decoded: list[int] = []
    close = audio.TrackReader.close

    def counted(reader: audio.TrackReader) -> None:
        decoded.append(reader.blocks_read)
        close(reader)

    monkeypatch.setattr(audio.TrackReader, "close", counted)
    pipeline.process(spoken, out=tmp_path / "out")
    chunks = -(-20 * 16_000 // audio.CHUNK_FRAMES)
    assert sorted(decoded) == [chunks] * (2 * len(spoken))


def test_one_pass_over_the_stems(spoken: list[Path], tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Stems are written once, and read back and put in place once, to be scaled and summed; nothing else is spilled."""
    blocks = {"read": 0, "put_back": 0}
    for name in blocks:
        def counted(file: audio.FloatWav, *args: object, name: str = name, own: object = getattr(audio.FloatWav, name)
                    ) -> object:
            blocks[name] += 1
            return own(file, *args)

        monkeypatch.setattr(audio.FloatWav, name, counted)
    monkeypatch.setattr(audio.FloatSpill, "append", lambda *_: pytest.fail("the sum was spilled"))
    pipeline.process(spoken, out=tmp_path / "out")
    of_a_stem = math.ceil(20 / mix.BLOCK_S)
    assert blocks == {"read": of_a_stem * len(spoken), "put_back": of_a_stem * len(spoken)}


def test_memory_grows_by_the_hop_grid_alone(spoken: list[Path], tmp_path: Path) -> None:
    """From 10 to 60 minutes the peak grows by no more than the grids of the hops between."""
    import numpy as np
    import soundfile

    def peak_bytes(minutes: int) -> int:
        paths = []
        for path in spoken:
            sound, rate_hz = soundfile.read(path, dtype="int16")
            paths.append(tmp_path / f"{path.stem} {minutes}.wav")
            soundfile.write(paths[-1], np.tile(sound, minutes * 3), rate_hz, subtype="PCM_16")
        done = subprocess.run([sys.executable, "-c", MEASURE, str(tmp_path / "out"), *map(str, paths)],
                              capture_output=True, text=True, check=True)
        return int(done.stdout) * 1024

    short, long = peak_bytes(10), peak_bytes(60)
    hops = 50 * 60 * 100
    assert long - short < hops * len(spoken) * GRID_BYTES_PER_HOP + SLACK_BYTES
