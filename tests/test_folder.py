"""leveller.folder: the output appears whole or not at all."""

from __future__ import annotations

import contextlib
import os
import re
import subprocess
import sys
import threading
from pathlib import Path
from types import FrameType
from typing import Any

import pytest

from leveller import folder as module
from leveller.errors import OutputError
from leveller.folder import OutputFolder, remove, take_back_all


def names(folder: Path) -> list[str]:
    """All names below a folder, hidden ones too."""
    return sorted(str(path.relative_to(folder)) for path in folder.rglob("*"))


def dead_pid() -> int:
    """The number of a process that has ended."""
    with subprocess.Popen([sys.executable, "-c", ""]) as process:
        process.wait()
    return process.pid


def test_published_folder_holds_all_files_and_nothing_else_stays(tmp_path: Path) -> None:
    """What was written appears under the wanted name, parents are made, no hidden folder stays."""
    with OutputFolder(tmp_path / "a" / "b" / "out", False) as folder:
        folder.file("mix.wav").write_bytes(b"mix")
        folder.file("stems/Host.wav").write_bytes(b"stem")
        assert not (tmp_path / "a" / "b" / "out").exists()
    assert names(tmp_path) == ["a", "a/b", "a/b/out", "a/b/out/mix.wav", "a/b/out/stems", "a/b/out/stems/Host.wav"]
    assert (tmp_path / "a/b/out/mix.wav").read_bytes() == b"mix"


@pytest.mark.parametrize("error", [ValueError, KeyboardInterrupt, SystemExit])
def test_any_exception_leaves_nothing(tmp_path: Path, error: type[BaseException]) -> None:
    """An exception, an interruption too, leaves no file, no hidden folder and no parent that was made."""

    def work() -> None:
        with OutputFolder(tmp_path / "a" / "out", False) as folder:
            folder.file("mix.wav").write_bytes(b"mix")
            raise error

    with pytest.raises(error):
        work()
    assert names(tmp_path) == []


def test_existing_folder_is_refused_and_the_way_out_named(tmp_path: Path) -> None:
    """A folder that exists is refused, word for word, and not touched."""
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "old").write_text("old")
    text = f"{tmp_path}/out: exists already. Choose another --out, or add --replace to replace it"
    with pytest.raises(OutputError, match=f"^{re.escape(text)}$"):
        OutputFolder(tmp_path / "out", False).__enter__()
    assert names(tmp_path) == ["out", "out/old"]


def test_replace_swaps_the_whole_folder(tmp_path: Path) -> None:
    """With replace the new folder takes the old one's place, and the old files are gone; until then they stay."""
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "old").write_text("old")
    with OutputFolder(tmp_path / "out", True) as folder:
        folder.file("new").write_text("new")
        assert (tmp_path / "out" / "old").read_text() == "old"
    assert names(tmp_path) == ["out", "out/new"]


def test_failed_replacement_keeps_the_old_folder(tmp_path: Path) -> None:
    """When the work fails the old folder is as it was."""
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "old").write_text("old")

    def work() -> None:
        with OutputFolder(tmp_path / "out", True) as folder:
            folder.file("new").write_text("new")
            raise RuntimeError("broken")

    with pytest.raises(RuntimeError, match="broken"):
        work()
    assert names(tmp_path) == ["out", "out/old"]


def test_failed_rename_puts_the_old_folder_back(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """When the second rename fails the first one is undone and the work is discarded."""
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "old").write_text("old")
    folder = OutputFolder(tmp_path / "out", True).__enter__()
    rename = Path.rename

    def failing(self: Path, target: Path) -> Path:
        if self == folder.work:
            raise OSError(5, "Input/output error")
        return rename(self, target)

    monkeypatch.setattr(Path, "rename", failing)
    with pytest.raises(OutputError, match="cannot be put here"):
        folder.publish()
    assert names(tmp_path) == ["out", "out/old"]


def test_folder_made_by_someone_else_meanwhile_is_kept(tmp_path: Path) -> None:
    """A folder that came into being during the work is not taken over."""
    folder = OutputFolder(tmp_path / "out", False).__enter__()
    (tmp_path / "out").mkdir()
    with pytest.raises(OutputError, match="exists by now"):
        folder.publish()
    assert names(tmp_path) == ["out"]


def test_source_inside_the_folder_to_be_replaced_is_refused(tmp_path: Path) -> None:
    """A folder that holds a source is not replaced, even through a link."""
    source = tmp_path / "out" / "stems" / "Host.wav"
    source.parent.mkdir(parents=True)
    source.write_bytes(b"voice")
    link = tmp_path / "link.wav"
    link.symlink_to(source)
    for path in (source, link):
        with pytest.raises(OutputError, match="holds the source"):
            OutputFolder(tmp_path / "out", True, sources=[path]).__enter__()
    assert source.read_bytes() == b"voice"


def test_current_folder_is_never_replaced(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The folder one stands in, or one above it, is refused."""
    (tmp_path / "here" / "below").mkdir(parents=True)
    monkeypatch.chdir(tmp_path / "here" / "below")
    with pytest.raises(OutputError, match="the current folder"):
        OutputFolder(tmp_path / "here", True).__enter__()


def test_file_in_the_way_is_refused(tmp_path: Path) -> None:
    """A file of that name is never replaced by a folder."""
    (tmp_path / "out").write_text("a file")
    with pytest.raises(OutputError, match="is no folder"):
        OutputFolder(tmp_path / "out", True).__enter__()


def test_no_room_is_refused_before_work(tmp_path: Path) -> None:
    """When the disk cannot hold what is needed, nothing is made."""
    with pytest.raises(OutputError, match=r"needs 1000000000\.00 GB, but .* GB are free"):
        OutputFolder(tmp_path / "a" / "out", False, needed_bytes=10**18).__enter__()
    assert names(tmp_path) == []


def test_place_that_cannot_be_written_is_refused(tmp_path: Path) -> None:
    """A parent that is a file, or that takes no new folder, gives one clear line."""
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="cannot be written here"):
        OutputFolder(tmp_path / "file" / "out", False).__enter__()
    if os.geteuid() != 0:  # root may write everywhere
        (tmp_path / "locked").mkdir(mode=0o555)
        with pytest.raises(OutputError, match="cannot be written here"):
            OutputFolder(tmp_path / "locked" / "out", False).__enter__()
    with pytest.raises(OutputError, match="cannot be written here"):
        OutputFolder(tmp_path / ("x" * 300), False).__enter__()


@pytest.mark.parametrize("name", ["../x.wav", "stems/../../x.wav", "/etc/x.wav", ".", "stems/.."])
def test_names_stay_inside(tmp_path: Path, name: str) -> None:
    """A name that leads out of the folder is refused."""
    with OutputFolder(tmp_path / "out", False) as folder, pytest.raises(OutputError, match="leads out"):
        folder.file(name)
    assert names(tmp_path) == ["out"]


def test_rests_of_dead_processes_are_cleaned_up_and_others_kept(tmp_path: Path) -> None:
    """Work folders of dead processes go; those of living ones, of other names and of no process stay."""
    dead = dead_pid()
    keep = [f".out.part-{os.getppid()}", f".other.part-{dead}", ".out.part-notes"]
    for name in [f".out.part-{dead}", f".out.part-{os.getpid()}", *keep]:
        (tmp_path / name).mkdir()
        (tmp_path / name / "half").write_text("")
    with OutputFolder(tmp_path / "out", False):
        pass
    assert sorted(path.name for path in tmp_path.iterdir()) == sorted([*keep, "out"])


def test_folder_moved_aside_by_a_dead_process_comes_back(tmp_path: Path) -> None:
    """When a process died between the two renames, the old folder is put back and counts as existing."""
    old = tmp_path / f".out.old-{dead_pid()}"
    old.mkdir()
    (old / "mix.wav").write_text("old")
    with pytest.raises(OutputError, match="put back after an interruption"):
        OutputFolder(tmp_path / "out", False).__enter__()
    assert names(tmp_path) == ["out", "out/mix.wav"]


def test_second_writer_of_the_same_folder_does_not_harm_the_first(tmp_path: Path) -> None:
    """Two at once on one folder in one process: the second is refused, the first comes out whole."""
    with OutputFolder(tmp_path / "out", False) as first:
        first.file("mix.wav").write_text("first")
        with pytest.raises(OutputError, match="this very process is writing it already"):
            OutputFolder(tmp_path / "out", False).__enter__()
    assert names(tmp_path) == ["out", "out/mix.wav"]
    first.discard()  # too late: what is published stays
    assert names(tmp_path) == ["out", "out/mix.wav"]


class InterruptedAt:
    """Ctrl-C before the line of that number that the module runs (every line of the module is a moment for it)."""

    def __init__(self, moment: int) -> None:
        self.moment, self.lines = moment, 0

    def __call__(self, frame: FrameType, event: str, _: object) -> Any:
        """As `sys.settrace` asks for."""
        if frame.f_code.co_filename != module.__file__:
            return None
        if event == "line":
            self.lines += 1
            if self.lines == self.moment:
                raise KeyboardInterrupt
        return self

    def __enter__(self) -> InterruptedAt:
        self._before = sys.gettrace()
        sys.settrace(self)
        return self

    def __exit__(self, *_: object) -> None:
        sys.settrace(self._before)


def written(out: Path, replace: bool, trace: InterruptedAt) -> None:
    """Write a folder under that trace; in a thread of its own, whose exception state the trace leaves untidy."""
    with contextlib.suppress(KeyboardInterrupt), trace, OutputFolder(out, replace) as folder:
        folder.file("stems/Host.wav").write_text("new")


@pytest.mark.parametrize("older", [False, True])
def test_interruption_at_any_line_leaves_all_or_nothing(tmp_path: Path, older: bool) -> None:
    """Whichever line Ctrl-C comes before, there is the older state or the new folder in the end, and no hidden name."""
    reached = set()
    for moment in range(1, 1000):
        home = tmp_path / str(moment)
        (home / "a" if not older else home / "a" / "out").mkdir(parents=True)
        if older:
            (home / "a" / "out" / "old").write_text("old")
        before, trace = names(home), InterruptedAt(moment)
        one = threading.Thread(target=written, args=(home / "a" / ("out" if older else "b/out"), older, trace))
        one.start()
        one.join()
        take_back_all()  # as at the end of the process
        after = names(home)
        new = ["a", "a/b", "a/b/out", "a/b/out/stems", "a/b/out/stems/Host.wav"] if not older else [
            "a", "a/out", "a/out/stems", "a/out/stems/Host.wav"]
        assert after in (before, new), moment
        reached.add(after == new)
        if trace.lines < moment:
            break
    assert reached == {False, True}
    assert moment > 40


@pytest.mark.parametrize("name", ["mkdir", "rename"])
@pytest.mark.parametrize("call", [1, 2, 3])
def test_interruption_just_after_the_system_has_done_it(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, name: str, call: int
) -> None:
    """The folder is made or renamed, and Ctrl-C comes before the program knows: all or nothing all the same."""
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "old").write_text("old")
    calls, real = [], getattr(Path, name)

    def done_then_interrupted(self: Path, *arguments: Any, **options: Any) -> Any:
        result = real(self, *arguments, **options)
        calls.append(self)
        if len(calls) == call:
            raise KeyboardInterrupt
        return result

    monkeypatch.setattr(Path, name, done_then_interrupted)
    ended = False
    try:
        with OutputFolder(tmp_path / "out", True) as folder:
            folder.file("new").write_text("new")
        ended = True
    except KeyboardInterrupt:
        pass
    monkeypatch.undo()
    take_back_all()
    published = ended or (name, call) == ("rename", 2)
    assert names(tmp_path) == (["out", "out/new"] if published else ["out", "out/old"])


def test_process_that_ends_in_the_middle_takes_its_work_back(tmp_path: Path) -> None:
    """A folder that is never left, as by an interruption at the wrong moment, goes with the process."""
    code = "import sys; from leveller.folder import *; OutputFolder(Path(sys.argv[1]), False).__enter__().file('a/b')"
    subprocess.run([sys.executable, "-c", code, tmp_path / "c" / "out"], check=True)
    assert names(tmp_path) == []


def test_folder_is_removed_though_a_thread_still_writes(tmp_path: Path) -> None:
    """What comes into a folder while it is deleted is deleted with it."""
    folder = tmp_path / "work"
    folder.mkdir()
    begun = threading.Event()

    def write() -> None:
        for number in range(300):
            try:
                (folder / f"{number}.wav").write_bytes(b"late")
            except OSError:
                return
            begun.set()

    writer = threading.Thread(target=write)
    writer.start()
    begun.wait(10)
    remove(folder)
    writer.join()
    assert names(tmp_path) == []
