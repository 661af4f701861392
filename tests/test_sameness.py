"""The same in, the same out: no block size and no number of threads changes a byte; the report says what made it."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator
from importlib import metadata
from pathlib import Path
from typing import Any

import pytest
import runs

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
