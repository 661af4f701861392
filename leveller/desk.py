"""Where a batch and its workers tell each other how things stand: a hidden folder in the season's output folder.

Workers are processes here or on other computers, and any of them may vanish at any time; so they share no lock and no
queue, only small files. `.season.part-PID` holds, for each episode that has begun, how often it was begun and how far
it is. That it is there means that the batch goes on: a worker that no longer finds it stops and leaves nothing behind.
It also keeps a second batch out of the same folder.
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import os
import shutil
import time
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType

from leveller.errors import InputError, LevellerError, OutputError
from leveller.folder import clean_up, running_beside

NAME = "season"
EVERY_S = 0.5  # between two words of a worker
ENDED = "the batch has ended"


class Desk:
    """The batch's own side; a context manager."""

    def __init__(self, out: Path) -> None:
        self.out = Path(os.path.abspath(out))
        self.path = self.out / f".{NAME}.part-{os.getpid()}"
        self._made = not self.out.exists()

    def __enter__(self) -> Desk:
        try:
            self.out.mkdir(parents=True, exist_ok=True)
            others = running_beside(self.out / NAME)
            if others:
                raise OutputError(f"{self.out}: another batch (process {others[0]}) is at work here. Wait for it, or "
                                  "choose another --out")
            clean_up(self.out / NAME)
            self.path.mkdir()
        except OSError as error:
            raise OutputError(f"{self.out}: cannot be written here ({error.strerror})") from error
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
                 ) -> None:
        shutil.rmtree(self.path, ignore_errors=True)
        if self._made:
            with contextlib.suppress(OSError):
                self.out.rmdir()  # stays where something has come into it

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


def _place(desk: Path, name: str, kind: str) -> Path:
    """The file of an episode; names may be long, their digest is not."""
    return desk / f"{hashlib.sha256(name.encode()).hexdigest()[:24]}.{kind}"
