"""The output folder: whole or not at all.

Everything is written to a hidden folder beside the wanted one (`.NAME.part-PID`, on the same file system) and renamed
when all is done. A folder that is replaced is moved aside first (`.NAME.old-PID`), put back where the rename fails,
and deleted only after it. What processes that died have left of either kind is cleaned up on the next start. Place,
room and what lies in the folder to be replaced are checked before any work starts.

An interruption may come between any two steps, also between making a folder and noting that it is made. So whatever
is made is noted before, and a process that ends takes back what is noted still (`take_back_all`).
"""

from __future__ import annotations

import atexit
import contextlib
import os
import shutil
import sys
import time
from collections.abc import Iterable, Iterator
from pathlib import Path
from types import TracebackType

from leveller.errors import InputError, LevellerError, OutputError

TRIES, BETWEEN_S = 20, 0.02  # to delete a folder into which another thread or process may still write

_active: dict[Path, OutputFolder] = {}  # by work folder: those of this very process


class OutputFolder:
    """A folder that appears when the work is done; a context manager.

    Leaving it publishes the folder; leaving it by an exception (an interruption too) discards all that was written.

    Parameters
    ----------
    path : Path
        the wanted folder; its parents are made
    replace : bool
        allow a folder that exists already to be replaced
    needed_bytes : int
        room that the work will take
    sources : iterable of Path
        files that must not lie in the folder to be replaced

    Attributes
    ----------
    work : Path
        where to write until it is published

    Raises
    ------
    OutputError
        on entry: exists without `replace`, no folder, holds a source, read-only, no room
    """

    def __init__(
        self, path: Path, replace: bool, *, needed_bytes: int = 0, sources: Iterable[Path] = ()
    ) -> None:
        self.path = Path(os.path.abspath(path))
        self.work = self.path.with_name(f".{self.path.name}.part-{os.getpid()}")
        self._old = self.path.with_name(f".{self.path.name}.old-{os.getpid()}")
        self._replace, self._needed_bytes, self._sources = replace, needed_bytes, tuple(sources)
        self._marks: list[tuple[int, int]] = []  # of the sources, when the work began
        self._begun = False  # to make the work folder, by this very object
        self._parents: list[Path] = []  # that were made for it, deepest first

    def __enter__(self) -> OutputFolder:
        self._check_place()
        self._marks = [_mark(source) for source in self._sources]
        try:
            self._make()
            self._check_room()
        except BaseException:
            self.discard()
            raise
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        try:
            if kind is None:
                self._check_sources()
                self.publish()
        finally:
            self.discard()
        if isinstance(error, OSError):
            raise self._told(error) from error

    def file(self, name: str) -> Path:
        """Where to write the file of that name, such as 'stems/Host.wav'; its folder is made.

        Raises
        ------
        OutputError
            where the name leads out of the folder
        """
        place = Path(os.path.normpath(self.work / name))
        if place == self.work or not place.is_relative_to(self.work):
            raise OutputError(f"{name!r}: leads out of the output folder {self.path}")
        try:
            place.parent.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise OutputError(f"{place.parent}: cannot be made ({error.strerror})") from error
        return place

    def publish(self) -> None:
        """Give the work its real name; an older folder of that name is deleted after it.

        Raises
        ------
        OutputError
            where the rename fails; the older folder is in its place again, the work is discarded
        """
        try:
            if self._replace and self.path.exists():
                self.path.rename(self._old)
            elif self.path.exists():  # made by someone else meanwhile; a rename would take an empty one over
                raise FileExistsError(17, "exists by now; choose another --out or add --replace")
            self.work.rename(self.path)
        except OSError as error:
            raise OutputError(f"{self.path}: the finished folder cannot be put here ({error.strerror})") from error
        finally:
            self.discard()

    def discard(self) -> None:
        """Remove what is not published, put an older folder back where it is missing; doing so twice does no harm."""
        if not self._begun:
            return
        if os.path.lexists(self._old):
            if self.path.exists():
                remove(self._old)
            else:
                self._old.rename(self.path)
        remove(self.work)
        for parent in self._parents:
            with contextlib.suppress(OSError):
                parent.rmdir()  # stays where something has come into it
        _active.pop(self.work, None)
        self._begun, self._parents = False, []

    def _check_sources(self) -> None:
        """Refuse what was made of a source that has changed meanwhile: it would be of neither state."""
        for source, before in zip(self._sources, self._marks, strict=True):
            if _mark(source) != before:
                raise InputError(f"{source}: changed while it was read. Run again when nothing else writes to it")

    def _told(self, error: OSError) -> LevellerError:
        """What the system refused in the middle of the work, in one line: to read a file, or to write this folder."""
        file = None if error.filename is None else Path(os.fsdecode(error.filename))
        if file is not None and not file.is_relative_to(self.work):
            return InputError(f"{file}: cannot be read ({error.strerror})")
        name = "" if file is None else f"{file.relative_to(self.work)}: "
        return OutputError(
            f"{self.path}: {name}cannot be written ({error.strerror}). Make room or choose another --out")

    def _check_place(self) -> None:
        """Refuse a folder that must not be touched."""
        if not os.path.lexists(self.path):
            return
        if not self.path.is_dir() or self.path.is_symlink():
            raise OutputError(f"{self.path}: exists and is no folder. Choose another --out")
        if not self._replace:
            raise OutputError(f"{self.path}: exists already. Choose another --out, or add --replace to replace it")
        real = self.path.resolve()
        for keep, what in ((Path.cwd(), "the current folder"), (Path.home(), "your home folder")):
            if keep.resolve().is_relative_to(real):
                raise OutputError(f"{self.path}: is or holds {what} and will not be replaced. Choose another --out")
        for source in self._sources:
            if source.resolve().is_relative_to(real) or Path(os.path.abspath(source)).is_relative_to(self.path):
                raise OutputError(f"{self.path}: holds the source {source.name} and will not be replaced. "
                                  "Choose another --out")

    def _make(self) -> None:
        """Make parents and the work folder, after cleaning up behind processes that died."""
        self._begun = _active.setdefault(self.work, self) is self
        if not self._begun:
            raise OutputError(f"{self.path}: this very process is writing it already. Choose another --out")
        try:
            missing = [parent for parent in self.path.parents if not parent.exists()]
            for parent in reversed(missing):
                self._parents.insert(0, parent)
                parent.mkdir(exist_ok=True)
            self._clean_up()
            self.work.mkdir()
        except OSError as error:
            raise OutputError(f"{self.path}: cannot be written here ({error.strerror})") from error

    def _check_room(self) -> None:
        """Refuse where the file system has less room than the work takes."""
        free = shutil.disk_usage(self.work).free
        if free < self._needed_bytes:
            raise OutputError(f"{self.path}: needs {self._needed_bytes / 1e9:.2f} GB, but {free / 1e9:.2f} GB are "
                              "free. Make room or choose another --out")

    def _clean_up(self) -> None:
        """Remove what dead processes left; put an older folder back that died between two renames."""
        for rest in self._rests(".old-"):
            if self.path.exists():
                shutil.rmtree(rest, ignore_errors=True)
            else:
                rest.rename(self.path)
                if not self._replace:
                    raise OutputError(f"{self.path}: exists already (put back after an interruption). "
                                      "Choose another --out, or add --replace to replace it")
        for rest in self._rests(".part-"):
            shutil.rmtree(rest, ignore_errors=True)

    def _rests(self, mark: str) -> Iterator[Path]:
        """Siblings of that kind whose process is gone."""
        for rest, pid in _siblings(self.path, mark):
            if _active.get(rest, self) is self and not _alive(pid):
                yield rest


def clean_up(path: Path) -> None:
    """Remove what processes that died have left of work on a folder of that name."""
    for rest, pid in _siblings(path, ".part-"):
        if rest not in _active and not _alive(pid):
            shutil.rmtree(rest, ignore_errors=True)


def running_beside(path: Path) -> list[int]:
    """Other processes of this computer that work on a folder of that name."""
    return [pid for _, pid in _siblings(path, ".part-") if _alive(pid)]


def take_back_all() -> None:
    """Discard the work that this process has not ended: for its end, when nothing of it goes on."""
    for folder in list(_active.values()):
        with contextlib.suppress(OSError):
            folder.discard()


atexit.register(take_back_all)  # its threads are through by then


def remove(folder: Path) -> None:
    """Delete a folder to its end, also where a thread still writes into it or an interruption comes in between."""
    interrupted = False
    for left in range(TRIES, 0, -1):
        try:
            shutil.rmtree(folder, ignore_errors=True)
            if not os.path.lexists(folder):
                break
            if left > 1:
                time.sleep(BETWEEN_S)
        except KeyboardInterrupt:
            interrupted = True
    if interrupted:
        raise KeyboardInterrupt


def _mark(source: Path) -> tuple[int, int]:
    """Size and time of change of a source; zeros where there is none."""
    try:
        facts = source.stat()
    except OSError:
        return 0, 0
    return facts.st_size, facts.st_mtime_ns


def _siblings(path: Path, mark: str) -> Iterator[tuple[Path, int]]:
    """Work folders of that kind beside a path, each with its process's number."""
    start = f".{path.name}{mark}"
    for rest in sorted(path.parent.iterdir()):
        pid = rest.name.removeprefix(start)
        if rest.name.startswith(start) and pid.isdecimal():
            yield rest, int(pid)


def _alive(pid: int) -> bool:
    """Whether another process of that number runs; in doubt it does."""
    if pid == os.getpid():
        return False  # numbers come again: what this process works on stands in _active
    if sys.platform == "win32":
        return True  # signal 0 is no question there
    try:
        os.kill(pid, 0)
    except (ProcessLookupError, OverflowError):
        return False
    except OSError:
        return True
    return True
