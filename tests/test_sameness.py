"""The same in, the same out: no block size and no number of threads changes a byte; the report says what made it.

Other kernels and other machines may round otherwise: gains agree hop by hop, and the sound but for rounding.
"""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import subprocess
import sys
from collections.abc import Iterator
from importlib import metadata
from pathlib import Path
from typing import Any

import likeness
import numpy as np
import pytest
import runs
import soundfile

import leveller
from leveller import cut, lanes, pipeline
from leveller.pipeline import finish, process, render_again
from leveller.settings import Settings

WAYS = ((2.0, 1), (2.0, 2), (0.5, 4), (3.33, 2))  # block in s, threads
SHAPES_BYTES = ("numpy", "scipy", "soundfile", "soxr", "webrtcvad-wheels")


@pytest.fixture(scope="module")
def results(tmp_path_factory: pytest.TempPathFactory) -> list[Path]:
    """A folder each way, with what process, render and finish write."""
    home = tmp_path_factory.mktemp("same")
    runs.written(home / "talk", names=("Ana", "Odo"))
    folders = [home / f"way {n}" for n in range(len(WAYS))]
    for folder, way in zip(folders, WAYS, strict=True):
        run_all(home / "talk", folder, *way)
    return folders


def run_all(talk: Path, folder: Path, block_s: float, threads: int) -> None:
    """Everything in blocks of so many seconds on so many threads."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(lanes, "thread_count", lambda: threads)
        patch.setattr(pipeline, "measure", in_blocks(pipeline.measure, block_s))
        patch.setattr(pipeline, "render", in_blocks(pipeline.render, block_s))
        patch.setattr(cut, "BLOCK_S", block_s)
        process(talk, out=folder / "process")
        (folder / "process" / ".measurements.npz").rename(folder / "measurements")  # so that render measures too
        render_again(talk, folder / "process" / "automation.csv", out=folder / "render", stems="limited")
        finish(folder / "process" / "mix.wav", out=folder / "finish")


def in_blocks(stage: Any, block_s: float) -> Any:
    """A stage that works in such blocks."""
    return lambda *args, **options: stage(*args, **{**options, "block_s": block_s})


def files(folder: Path) -> Iterator[tuple[str, bytes]]:
    """All files below a folder."""
    for path in sorted(folder.rglob("*")):
        if path.is_file():
            yield str(path.relative_to(folder)), path.read_bytes()


def test_no_way_of_working_changes_a_byte(results: list[Path]) -> None:
    """Every file of process, render and finish is the same, hidden ones too."""
    first = dict(files(results[0]))
    assert {"process/mix.wav", "process/stems/Ana.wav", "render/report.html", "finish/report.json",
            "measurements"} <= set(first)
    for other in results[1:]:
        found = dict(files(other))
        assert found.keys() == first.keys()
        assert [name for name in found if found[name] != first[name]] == []


def test_the_report_says_what_made_it(results: list[Path]) -> None:
    """report.json holds the versions, every setting, and each source with its size and SHA-256."""
    report = json.loads((results[0] / "process" / "report.json").read_text(encoding="utf-8"))
    versions = {"leveller": leveller.__version__, **{name: metadata.version(name) for name in SHAPES_BYTES}}
    assert report["made_by"] == versions
    assert report["settings"] == {key: value for key, value, _, _ in Settings().rows()}
    sources = [results[0].parent / "talk" / f"{name}.wav" for name in ("Ana", "Odo")]
    assert report["sources"] == [
        {"file": path.name, "bytes": path.stat().st_size, "sha256": hashlib.sha256(path.read_bytes()).hexdigest()}
        for path in sources]


# Another machine: the same decisions, and sound that differs by rounding alone

ONE_RUN = """
import sys
from numpy.{core} import _multiarray_umath as kernels
from leveller.pipeline import process

print(*(name for name in kernels.__cpu_dispatch__ if kernels.__cpu_features__.get(name)))
process(sys.argv[1], out=sys.argv[2])
"""
ROUNDING_DBFS = -100.0  # a last bit of float32 at full scale is at -138 dBFS; 76 dB of gains and sums lie above it


def run_apart(source: Path, out: Path, without: str = "") -> list[str]:
    """Process in a process of its own whose numpy does without some kernels; those that were in use."""
    core = "_core" if int(np.__version__.split(".")[0]) > 1 else "core"
    done = subprocess.run([sys.executable, "-c", ONE_RUN.format(core=core), str(source), str(out)], check=True,
                          capture_output=True, text=True, env={**os.environ, "NPY_DISABLE_CPU_FEATURES": without})
    return done.stdout.split()


def test_the_kernels_of_another_processor_decide_alike(tmp_path: Path) -> None:
    """With numpy's plainest kernels 99.9 % of the gains agree within 0.05 dB, and the sound but for rounding.

    docs/accuracy.md says how a machine of another kind was compared.
    """
    demo = Path(__file__).parent.parent / "demo_session"
    used = run_apart(demo, tmp_path / "here")
    assert used, "this processor has none but the plainest kernels, so nothing is compared"
    assert run_apart(demo, tmp_path / "there", " ".join(used)) == []
    found = likeness.compare(tmp_path / "here", tmp_path / "there")
    assert found.hops == 3 * 7850
    assert found.near_share >= likeness.NEAR_SHARE, str(found)
    assert max(found.samples_dbfs.values()) < ROUNDING_DBFS, str(found)


def test_likeness_tells_a_difference(results: list[Path], tmp_path: Path) -> None:
    """A gain moved by 0.06 dB for a second, and a sample moved by a thousandth, are both found."""
    one, other = results[0] / "process", tmp_path / "moved"
    shutil.copytree(one, other)
    assert likeness.compare(one, other).worst_db == 0
    lines = (other / "automation.csv").read_text(encoding="utf-8").splitlines()
    first = lines[1].split(",")
    name, level = first[3], float(first[4])
    moved = [f"{time_s},,,{name},{level + 0.06 * (time_s < 1)}" for time_s in (0, 0.999999, 1.0, 20.0)]
    flat = [f"{time_s},,,{name},{level}" for time_s in (0, 20.0)]
    rest = [line for line in lines[1:] if line.split(",")[3] != name]
    for folder, rows in ((one, flat), (other, moved)):
        copy = tmp_path / f"{folder.name} alone"
        shutil.copytree(other, copy)
        (copy / "automation.csv").write_text("\n".join([lines[0], *rows, *rest]) + "\n", encoding="utf-8")
    x, rate_hz = soundfile.read(other / "mix.wav")
    x[1000] += 1e-3
    soundfile.write(tmp_path / "moved alone" / "mix.wav", x, rate_hz, "FLOAT")
    found = likeness.compare(tmp_path / "process alone", tmp_path / "moved alone")
    assert (found.hops - found.near, found.hops - found.equal) == (100, 100)
    assert not found.kept
    assert found.worst_db == pytest.approx(0.06)
    assert found.samples_dbfs["mix.wav"] == pytest.approx(-60, abs=0.01)
