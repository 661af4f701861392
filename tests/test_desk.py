"""leveller.desk: one batch at a time in a folder, and a desk that goes whole, whoever is writing into it."""

from __future__ import annotations

import json
import os
import platform
import subprocess
import sys
import threading
import time
from pathlib import Path

import pytest

from leveller import desk as desk_module
from leveller.desk import DEAD_S, ENDED, Desk, Seat
from leveller.errors import LevellerError, OutputError
from leveller.folder import clean_up


def left_in(folder: Path) -> list[str]:
    """Everything in a folder."""
    return sorted(path.name for path in folder.iterdir())


def foreign(out: Path, pid: int, **said: object) -> Path:
    """A desk of another batch."""
    path = out / f".season.json.part-{pid}"
    path.mkdir(parents=True)
    if said:
        (path / "batch").write_text(json.dumps({"host": platform.node(), "started": None, **said}))
    return path


def test_a_desk_comes_and_goes_with_its_folders(tmp_path: Path) -> None:
    """What was made for it is gone again, parents too; a folder that something has come into stays."""
    with Desk(tmp_path / "a" / "b") as desk:
        assert desk.path.is_dir()
    assert left_in(tmp_path) == []
    with Desk(tmp_path / "a" / "b") as desk:
        (desk.out / "season.csv").write_text("")
    assert left_in(tmp_path / "a" / "b") == ["season.csv"]


@pytest.mark.parametrize("step", ["mkdir", "write_text", "iterdir"])
@pytest.mark.parametrize("error", [KeyboardInterrupt, OSError(28, "No space left on device")])
def test_a_beginning_cut_off_leaves_nothing(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, step: str, error: BaseException | type[BaseException]
) -> None:
    """An interruption or a full disk right after any step of making the desk takes everything back."""
    done = getattr(Path, step)

    def then_stop(self: Path, *words: object, **named: object) -> None:
        done(self, *words, **named)
        if ".season" in str(self) or step != "mkdir":
            monkeypatch.setattr(Path, step, done)
            raise error

    monkeypatch.setattr(Path, step, then_stop)
    with pytest.raises(KeyboardInterrupt if error is KeyboardInterrupt else OutputError):
        Desk(tmp_path / "a" / "out").__enter__()
    assert left_in(tmp_path) == []


def test_a_desk_goes_while_workers_write(tmp_path: Path) -> None:
    """Workers that write without pause neither keep the desk alive nor miss its end."""
    told: list[str] = []

    def write(name: str) -> None:
        seat = Seat(desk.path, name)
        try:
            while True:
                seat._said_s = -1.0
                seat.say("measure", 1.0, 2.0)
        except LevellerError as error:
            told.append(str(error))

    with Desk(tmp_path / "out") as desk:
        threads = [threading.Thread(target=write, args=(f"ep {n}",)) for n in range(4)]
        for thread in threads:
            thread.start()
        deadline = time.monotonic() + 10
        while not all(desk.standing(f"ep {n}")[0] for n in range(4)):
            assert time.monotonic() < deadline
    for thread in threads:
        thread.join(10)
    assert told == [ENDED] * 4
    assert left_in(tmp_path) == []


def test_another_batch_of_this_computer_is_refused(tmp_path: Path) -> None:
    """While its process lives, said with its number; nothing of the second one stays. Afterwards it is cleaned up."""
    code = ("import sys; from pathlib import Path; from leveller.desk import Desk\n"
            "with Desk(Path(sys.argv[1])): print(flush=True); input()")
    other = subprocess.Popen([sys.executable, "-c", code, str(tmp_path)], stdin=subprocess.PIPE, stdout=subprocess.PIPE)
    try:
        assert other.stdout is not None
        other.stdout.readline()
        with pytest.raises(OutputError, match=rf"another batch \(process {other.pid}\) is at work here\. Wait for it"):
            Desk(tmp_path).__enter__()
        assert left_in(tmp_path) == [f".season.json.part-{other.pid}"]
    finally:
        other.kill()
        other.communicate()
    with Desk(tmp_path) as desk:
        assert left_in(tmp_path) == [desk.path.name]
    assert left_in(tmp_path) == []


@pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="only where the system says when a process began")
def test_a_number_that_came_again_is_not_the_batch(tmp_path: Path) -> None:
    """After a restart another program may have a dead batch's number: its start tells, and nothing is refused."""
    foreign(tmp_path, os.getppid(), started="another start of the system 4711")
    with Desk(tmp_path) as desk:
        assert left_in(tmp_path) == [desk.path.name]
    mine = foreign(tmp_path, os.getpid(), started="another start of the system 4711")
    (mine / "rest").write_text("of a process of the same number")
    with Desk(tmp_path) as desk:
        assert left_in(desk.path) == ["batch"]
    foreign(tmp_path, os.getppid(), started=desk_module._started(os.getppid()))
    with pytest.raises(OutputError, match="at work here"):
        Desk(tmp_path).__enter__()


def test_a_batch_on_another_computer_is_told_by_its_signs_of_life(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A number of another computer says nothing here: its desk stays while it is renewed, and goes when it is old."""
    other = foreign(tmp_path, 2**22 + 5, host="far-away")  # beyond the kernel's highest number: dead here
    with pytest.raises(OutputError, match=r"another batch \(process 4194309 on far-away\) is at work here"):
        Desk(tmp_path).__enter__()
    assert left_in(tmp_path) == [other.name]
    old_s = time.time() - DEAD_S - 1
    os.utime(other / "batch", (old_s, old_s))
    with Desk(tmp_path) as desk:
        assert left_in(tmp_path) == [desk.path.name]
        os.utime(desk.path / "batch", (old_s, old_s))
        desk.beat()
        assert (desk.path / "batch").stat().st_mtime == pytest.approx(old_s)
        monkeypatch.setattr(desk_module, "BEAT_S", 0.0)
        desk.beat()
        assert (desk.path / "batch").stat().st_mtime > old_s + DEAD_S


def test_an_episode_called_season_is_no_desk(tmp_path: Path) -> None:
    """Cleaning up behind an episode's lost worker never takes the desk, whatever the episode is called."""
    with Desk(tmp_path) as desk:
        for name in ("season", "season.json 2", ".season.json", "."):
            clean_up(tmp_path / name)
        assert desk.path.is_dir()


def test_what_a_killed_end_leaves_is_cleaned_up(tmp_path: Path) -> None:
    """A desk that was being removed when its batch was killed goes with the next one."""
    (tmp_path / ".season.json.part-77.gone").mkdir()
    (tmp_path / ".season.json.part-77.gone" / "rest").write_text("")
    with Desk(tmp_path) as desk:
        assert left_in(tmp_path) == [desk.path.name]
