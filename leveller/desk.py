"""Where a batch and its workers tell each other how things stand: a hidden folder in the season's output folder.

Workers are processes here or on other computers, and any of them may vanish at any time; so they share no lock and no
queue, only small files. `.season.json.part-PID` (no episode can have that name) holds, for each episode that has begun,
how often it was begun and how far it is. That it is there means that the batch goes on: a worker that no longer finds
it stops and leaves nothing behind. So it goes in one step, by another name, whatever a worker may be writing into it.

It also keeps a second batch out of the same folder, from this computer or another one. `batch` in it says whose it is:
here the process tells whether that one is alive, by its start too, since numbers come again after a restart; of another
computer's it is the file's age, which its batch renews every few seconds.
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import os
import platform
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType

from leveller.errors import InputError, LevellerError, OutputError
from leveller.folder import remove, running_beside

NAME = "season.json"
OWNER = "batch"  # the file that says whose a desk is
EVERY_S = 0.5  # between two words of a worker
BEAT_S = 5.0  # between two signs of life of the batch
DEAD_S = 120.0  # without one; shared storage may show changes a minute late
ENDED = "the batch has ended"


class Desk:
    """The batch's own side; a context manager."""

    def __init__(self, out: Path) -> None:
        self.out = Path(os.path.abspath(out))
        self.path = self.out / f".{NAME}.part-{os.getpid()}"
        self._parents: list[Path] = []  # that were made for it, deepest first
        self._beat_s = time.monotonic()

    def __enter__(self) -> Desk:
        try:
            self._make()
        except OSError as error:
            self._end()
            raise OutputError(f"{self.out}: cannot be written here ({error.strerror})") from error
        except BaseException:
            self._end()
            raise
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
                 ) -> None:
        self._end()

    def beat(self) -> None:
        """A sign of life, every few seconds at most."""
        now = time.monotonic()
        if now - self._beat_s >= BEAT_S:
            self._beat_s = now
            with contextlib.suppress(OSError):
                os.utime(self.path / OWNER)

    def tries(self, name: str) -> int:
        """How often an episode was begun."""
        try:
            return len(_place(self.path, name, "tries").read_bytes().splitlines())
        except OSError:
            return 0

    def standing(self, name: str) -> tuple[str, float, float]:
        """Stage, done and total of an episode; nothing done where no word has come."""
        try:
            stage, done, total = json.loads(_place(self.path, name, "standing").read_bytes())
            return str(stage), float(done), float(total)
        except (OSError, ValueError, TypeError):
            return "", 0.0, 1.0

    def _make(self) -> None:
        """Make the folder and the desk in it; of two that begin at once neither takes the other for dead."""
        for parent in [place for place in (self.out, *self.out.parents) if not place.exists()][::-1]:
            self._parents.insert(0, parent)
            parent.mkdir(exist_ok=True)
        remove(self.path)  # of a process of the same number, before a restart
        self.path.mkdir()
        sign = {"host": platform.node(), "started": _started(os.getpid())}
        (self.path / OWNER).write_text(json.dumps(sign), encoding="utf-8")
        now_s = (self.path / OWNER).stat().st_mtime  # by the storage's own clock
        for other in _desks(self.out):
            if other != self.path:
                _refuse_or_remove(other, now_s)

    def _end(self) -> None:
        """Take the desk away, and the folders that were made for it where nothing has come into them."""
        gone = self.path.with_name(f"{self.path.name}.gone")
        try:
            self.path.rename(gone)
        except OSError:  # there is none, or it cannot be moved
            remove(self.path)
        remove(gone)
        for parent in self._parents:
            with contextlib.suppress(OSError):
                parent.rmdir()
        self._parents = []


@dataclass
class Seat:
    """A worker's side, for one episode."""

    desk: Path
    name: str
    _said_s: float = 0.0

    def begin(self) -> int:
        """Write down that the episode is begun; returns how often it was by now.

        Raises
        ------
        InputError
            where the desk is not seen from here
        """
        try:
            with open(_place(self.desk, self.name, "tries"), "ab") as file:
                file.write(b"begun\n")
            return len(_place(self.desk, self.name, "tries").read_bytes().splitlines())
        except OSError:
            raise InputError(f"{self.desk.parent}: not seen by the worker. Season and --out must lie on storage that "
                             "all workers share, under the same path") from None

    def say(self, stage: str, done: float, total: float) -> None:
        """Pass on how far the episode is, twice a second at most; raises LevellerError where the batch has ended."""
        now = time.monotonic()
        if now - self._said_s < EVERY_S:
            return
        self._said_s = now
        place = _place(self.desk, self.name, "standing")
        fresh = place.with_suffix(".new")
        try:
            fresh.write_text(json.dumps([stage, done, total]))
            fresh.replace(place)
        except OSError:
            if not self.desk.is_dir():
                raise LevellerError(ENDED) from None


def _desks(out: Path) -> Iterator[Path]:
    """All desks in a folder, those that are going too."""
    start = f".{NAME}.part-"
    return (place for place in sorted(out.iterdir()) if place.name.startswith(start))


def _refuse_or_remove(desk: Path, now_s: float) -> None:
    """Remove what a dead batch has left; raises OutputError where it is alive."""
    number = desk.name.removeprefix(f".{NAME}.part-")
    if number.isdecimal():
        host, started = _owner(desk)
        here = host in (None, platform.node())
        if _runs(desk, int(number), started) if here else _age_s(desk, now_s) < DEAD_S:
            where = "" if here else f" on {host}"
            raise OutputError(f"{desk.parent}: another batch (process {number}{where}) is at work here. Wait for it, "
                              "or choose another --out")
    remove(desk)


def _owner(desk: Path) -> tuple[str | None, str | None]:
    """Computer and start of the process whose a desk is; None where it does not say so (yet)."""
    try:
        said = json.loads((desk / OWNER).read_bytes())
        return str(said["host"]), None if said["started"] is None else str(said["started"])
    except (OSError, ValueError, KeyError, TypeError):
        return None, None


def _age_s(desk: Path, now_s: float) -> float:
    """How long ago a desk's batch gave a sign of life."""
    try:
        return now_s - (desk / OWNER).stat().st_mtime
    except OSError:
        return DEAD_S


def _runs(desk: Path, pid: int, started: str | None) -> bool:
    """Whether a desk's process runs on this computer; in doubt it does."""
    found = _started(pid)
    if started is not None and found is not None:
        return started == found
    return pid in running_beside(desk.parent / NAME)


def _started(pid: int) -> str | None:
    """Which start of the system, and how long after it a process began (Linux, proc(5)); None where nobody says."""
    try:
        boot = Path("/proc/sys/kernel/random/boot_id").read_text(encoding="ascii").strip()
        facts = Path(f"/proc/{pid}/stat").read_text(encoding="utf-8", errors="replace").rpartition(")")[2].split()
        return f"{boot} {facts[19]}"  # field 22, starttime; the third one comes first here
    except (OSError, IndexError):
        return None


def _place(desk: Path, name: str, kind: str) -> Path:
    """The file of an episode; names may be long, their digest is not."""
    return desk / f"{hashlib.sha256(name.encode()).hexdigest()[:24]}.{kind}"
