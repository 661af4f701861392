"""Runs that are cut off, starved or disturbed: sources stay as they are, nothing half-done bears a final name.

After each fault the next run succeeds without a hand's help and writes what an undisturbed run writes. Moments of a
kill are drawn from a seed: most of them after the work has begun, which is when the hidden work folder appears. A full
disk is a real one (a small tmpfs), which takes a superuser; elsewhere these tests are skipped.
"""

from __future__ import annotations

import os
import random
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
import runs

import leveller.folder
from leveller.errors import InputError, OutputError
from leveller.pipeline import finish, process, render_again

JOBS = ("process", "render", "finish")
SIGNALS = (signal.SIGKILL, signal.SIGINT)
LONG_KILLS = 18  # of each job and signal: 108 in all
INTERRUPTED = (130, -signal.SIGINT)  # Python leaves by the signal where it came during an import; a shell says 130 too
PAGE = "report.html"  # holds the way from it to the sources, so it is not the same elsewhere
KEPT = (".measurements.npz", ".automation.npz")  # where there is no room for them the next run measures again

pytestmark = pytest.mark.skipif(os.name != "posix", reason="signals and file systems of a posix system")


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A session, and what undisturbed runs write: `reference/<job>/out`."""
    folder = tmp_path_factory.mktemp("faults")
    runs.written(folder / "talk", names=("Ana", "Odo"))
    for job in JOBS:
        run(job, folder, folder / "reference" / job / "out")
    return folder


def run(job: str, place: Path, out: Path, **options: Any) -> Any:
    """A job in this process."""
    made = place / "reference" / "process" / "out"
    if job == "process":
        return process(place / "talk", out=out, **options)
    if job == "render":
        return render_again(place / "talk", made / "automation.csv", out=out, **options)
    return finish(made / "mix.wav", out=out, **options)


def started(job: str, place: Path, out: Path, *more: str) -> subprocess.Popen[str]:
    """A job in a process of its own."""
    made = place / "reference" / "process" / "out"
    words = {"process": [place / "talk"], "render": [place / "talk", "--automation", made / "automation.csv"],
             "finish": [made / "mix.wav"]}[job]
    return subprocess.Popen([sys.executable, "-m", "leveller", job, *map(str, words), "--out", str(out), *more],
                            stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True)


def contents(folder: Path, *, but: tuple[str, ...] = ()) -> dict[str, bytes]:
    """The bytes of all files below a folder."""
    found = {str(path.relative_to(folder)): path.read_bytes() for path in sorted(folder.rglob("*"))
             if path.is_file() and path.name not in but}
    assert found, f"{folder}: no files"
    return found


def same_as_undisturbed(job: str, place: Path, out: Path, *, but: tuple[str, ...] = ()) -> bool:
    """Whether a folder holds what an undisturbed run writes."""
    found, expected = contents(out, but=but), contents(place / "reference" / job / "out", but=but)
    page = found.pop(PAGE, b"</html>\n")
    expected.pop(PAGE, None)
    return found == expected and page.endswith(b"</html>\n")


# Killed


def wait_for_work(running: subprocess.Popen[str], work: Path) -> bool:
    """Wait until the work folder appears; False where the run ended first."""
    while running.poll() is None:
        if (work / f".out.part-{running.pid}").exists():
            return True
        time.sleep(0.002)
    return False


def work_seconds(job: str, place: Path, work: Path) -> float:
    """From the moment its work folder appears until the folder is there, the shortest of three runs."""
    found = []
    for _ in range(3):
        work.mkdir(parents=True)
        running = started(job, place, work / "out")
        assert wait_for_work(running, work)
        begun = time.monotonic()
        while running.poll() is None and not (work / "out").exists():
            time.sleep(0.002)
        found.append(time.monotonic() - begun)
        assert running.wait(timeout=120) == 0
        assert running.stderr is not None
        running.stderr.close()
        shutil.rmtree(work)
    return min(found)


def killed(job: str, place: Path, work: Path, kind: signal.Signals, moment: random.Random, length_s: float) -> bool:
    """One run, cut off and looked at, and the run after it; whether the signal came before its end."""
    work.mkdir(parents=True)
    replacing = moment.random() < 0.5
    if replacing:
        shutil.copytree(place / "reference" / job / "out", work / "out")
    before = contents(place)
    running = started(job, place, work / "out", *(["--replace"] if replacing else []))
    begun = moment.random() < 0.8 and wait_for_work(running, work)
    time.sleep(moment.uniform(0, length_s))
    running.send_signal(kind)
    _, said = running.communicate(timeout=120)
    assert contents(place) == before, "a source was changed"
    names = {path.name for path in work.iterdir()}
    if "out" in names:
        assert same_as_undisturbed(job, place, work / "out")
    elif replacing:
        assert names & {f".out.old-{running.pid}"}, "the folder to be replaced is gone"
    if kind == signal.SIGINT and begun:
        assert running.returncode in (0, *INTERRUPTED)
        assert said == "leveller: interrupted; nothing was left half-written\n" or (said == "" and "out" in names), (
            "neither interrupted nor at its end")
        assert names <= {"out"}, "an interruption left something behind"
    run(job, place, work / "out", replace=replacing or "out" in names)
    assert same_as_undisturbed(job, place, work / "out")
    assert [path.name for path in work.iterdir()] == ["out"]
    shutil.rmtree(work)
    return running.returncode != 0


@pytest.mark.parametrize("kind", SIGNALS, ids=lambda kind: kind.name)
@pytest.mark.parametrize("job", JOBS)
def test_killed_at_a_random_moment(job: str, kind: signal.Signals, place: Path, tmp_path: Path) -> None:
    """A run that is killed or interrupted harms nothing, and the next one succeeds."""
    killed(job, place, tmp_path / "work", kind, random.Random(f"{job} {kind.name}"), 0.3)


@pytest.mark.long
@pytest.mark.parametrize("kind", SIGNALS, ids=lambda kind: kind.name)
@pytest.mark.parametrize("job", JOBS)
def test_killed_at_many_random_moments(job: str, kind: signal.Signals, place: Path, tmp_path: Path) -> None:
    """The same many times, and enough of the signals come before the end of the run."""
    length_s = work_seconds(job, place, tmp_path / "first")
    moment = random.Random(f"many {job} {kind.name}")
    hit = sum(killed(job, place, tmp_path / "work", kind, moment, length_s) for _ in range(LONG_KILLS))
    print(f"{job}, {kind.name}: {hit} of {LONG_KILLS} before the end")  # seen with -rP; docs/errors.md has the sum
    assert hit > LONG_KILLS // 3


# A full disk


@pytest.fixture(scope="module")
def small_disk(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    """A tmpfs of 16 MiB."""
    folder = tmp_path_factory.mktemp("disk")
    mount = ["mount", "-t", "tmpfs", "-o", "size=16m", "tmpfs", str(folder)]
    if os.geteuid() or not shutil.which("mount") or subprocess.run(mount, capture_output=True, check=False).returncode:
        pytest.skip("no small disk can be mounted here")
    yield folder
    subprocess.run(["umount", str(folder)], check=True)


def fill(disk: Path, free: int) -> None:
    """Leave so many bytes."""
    (disk / "ballast").unlink(missing_ok=True)
    size = shutil.disk_usage(disk).free - free
    with open(disk / "ballast", "wb") as file:
        os.posix_fallocate(file.fileno(), 0, size)


def starved(job: str, place: Path, disk: Path, free: int, monkeypatch: pytest.MonkeyPatch, **options: Any) -> bool:
    """A run with so much room that was not foreseen; whether it failed, as it should then."""
    before = contents(place)
    fill(disk, free)
    failed = False
    with monkeypatch.context() as patch:
        patch.setattr(leveller.folder.shutil, "disk_usage", lambda _: shutil._ntuple_diskusage(1 << 50, 0, 1 << 50))
        try:
            run(job, place, disk / "out", **options)
        except OutputError:  # and no other
            failed = True
    assert contents(place) == before
    assert sorted(path.name for path in disk.iterdir()) == (["ballast"] if failed else ["ballast", "out"])
    if not failed:
        assert options or same_as_undisturbed(job, place, disk / "out", but=KEPT)
        shutil.rmtree(disk / "out")
    return failed


def steps(job: str, place: Path, count: int) -> list[int]:
    """Amounts of room, from none to more than enough for everything and the sum that is spilled."""
    total = sum(map(len, contents(place / "reference" / job / "out").values())) + 2 * 4 * 20 * runs.RATE_HZ
    return [round(total * n / (count - 1)) for n in range(count)]


@pytest.mark.parametrize("job", JOBS)
def test_full_disk(job: str, place: Path, small_disk: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Wherever the room ends, it is an OutputError and nothing is left; with enough of it the run succeeds."""
    found = [starved(job, place, small_disk, free, monkeypatch) for free in steps(job, place, 9)]
    assert found[:2] == [True, True]
    assert not found[-1]


@pytest.mark.long
@pytest.mark.parametrize("stems", ["before-limiter", "limited"])
def test_full_disk_at_every_output(
    stems: str, place: Path, small_disk: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The same in steps finer than any output, for both kinds of stems."""
    found = [starved("process", place, small_disk, free, monkeypatch, stems=stems)
             for free in steps("process", place, 300)]
    assert found[0]
    assert not found[-1]


def test_no_room_is_known_beforehand(place: Path, small_disk: Path) -> None:
    """What the room is asked for is more than the run takes, so that it is refused before any work."""
    fill(small_disk, 6 << 20)
    with pytest.raises(OutputError, match=r"needs 0\.07 GB, but 0\.01 GB are free"):
        run("process", place, small_disk / "out", on_progress=lambda *_: pytest.fail("work was begun"))
    assert [path.name for path in small_disk.iterdir()] == ["ballast"]


# Sources that change while they are read


@pytest.mark.parametrize("harm", ["vanishes", "shrinks"])
@pytest.mark.parametrize(("job", "stage"), [
    ("process", "measure"), ("process", "render"), ("process", "mix"), ("render", "render"), ("finish", "render")])
def test_a_source_that_changes(harm: str, job: str, stage: str, place: Path, tmp_path: Path) -> None:
    """A source that goes while it is read is an InputError or was read to its end; nothing partial appears."""
    shutil.copytree(place, tmp_path / "place")
    own = tmp_path / "place"
    victim = own / "talk" / "Ana.wav" if job != "finish" else own / "reference" / "process" / "out" / "mix.wav"
    before = victim.read_bytes()
    seen = []

    def disturb(now: str, *_: float) -> None:
        if now == stage and not seen:
            seen.append(now)
            if harm == "vanishes":
                victim.unlink()
            else:
                os.truncate(victim, 2000)

    work = tmp_path / "work"
    with pytest.raises(InputError, match=victim.name):
        run(job, own, work / "out", on_progress=disturb)
    assert seen
    assert not work.exists()
    victim.write_bytes(before)
    run(job, own, work / "out")
    assert same_as_undisturbed(job, place, work / "out", but=(*KEPT, "report.json"))


# Two at once


@pytest.mark.parametrize("more", [[], ["--replace"]], ids=["new", "replace"])
def test_two_runs_into_one_folder(more: list[str], place: Path, tmp_path: Path) -> None:
    """One of two runs into one folder wins, the other ends or is refused, and the folder is whole."""
    work = tmp_path / "work"
    work.mkdir()
    both = [started("process", place, work / "out", *more) for _ in range(2)]
    said = [running.communicate(timeout=120)[1] for running in both]
    codes = sorted(running.returncode for running in both)
    assert codes in ([0, 0], [0, 5]) if more else codes == [0, 5], said
    assert all("\n" not in text.rstrip("\n") for text in said)
    assert same_as_undisturbed("process", place, work / "out")
    run("process", place, work / "out", replace=True)
    assert [path.name for path in work.iterdir()] == ["out"]
