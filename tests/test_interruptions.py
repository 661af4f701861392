"""leveller.interruptions: a signal is a question to ask, and comes at once only where that is wanted."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
from pathlib import Path

import pytest

from leveller.interruptions import Interruptions

ALL = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)


@pytest.mark.parametrize("number", ALL)
def test_one_is_remembered_until_somebody_asks(number: signal.Signals) -> None:
    """Nothing is raised where it comes, however often; asked, it is a KeyboardInterrupt; after it all is as before."""
    before = [signal.getsignal(each) for each in ALL]
    with Interruptions() as interruptions:
        interruptions.check()
        os.kill(os.getpid(), number)
        os.kill(os.getpid(), number)
        assert interruptions.came
        with pytest.raises(KeyboardInterrupt):
            interruptions.check()
    assert [signal.getsignal(each) for each in ALL] == before


def test_one_comes_at_once_where_that_is_wanted() -> None:
    """Inside `at_once` the first one is raised where it comes, the second not; one from before is raised on entry."""
    tidied: list[bool] = []

    def interrupted_twice() -> None:
        try:
            os.kill(os.getpid(), signal.SIGINT)
            raise AssertionError("not reached")
        finally:
            os.kill(os.getpid(), signal.SIGINT)
            tidied.append(True)

    with Interruptions() as interruptions:
        with pytest.raises(KeyboardInterrupt), interruptions.at_once():
            interrupted_twice()
        assert tidied
        with pytest.raises(KeyboardInterrupt), interruptions.at_once():
            raise AssertionError("not reached")
        os.kill(os.getpid(), signal.SIGINT)  # remembered again


def test_none_comes_into_an_import(tmp_path: Path) -> None:
    """Ctrl-C while a library is imported waits until that is done, and ends the command then like any other."""
    (tmp_path / "struck.py").write_text(
        "import os, signal\nos.kill(os.getpid(), signal.SIGINT)\nsum(range(1000))\nprint('imported whole')\n")
    (tmp_path / "run.py").write_text(
        "import sys, time\nfrom leveller import cli\n"
        "def work(arguments):\n    try:\n        import struck\n        time.sleep(20)\n"
        "    except KeyboardInterrupt:\n        return 130\n    return 0\n"
        "cli._run = work\ncli.main()\n")
    run = subprocess.run([sys.executable, str(tmp_path / "run.py")], capture_output=True, text=True, timeout=15)
    assert (run.returncode, run.stdout, run.stderr) == (130, "imported whole\n", "")


DROPPED = """
import os, signal, time
from leveller import cli

class Ending:
    def __del__(self):
        os.kill(os.getpid(), signal.SIGINT)
        sum(range(1000))

def work(arguments):
    try:
        Ending()
        time.sleep(20)
    except KeyboardInterrupt:
        return 130
    return 0

cli._run = work
cli.main()
"""

IMPATIENT = """
import atexit, os, signal, time
from leveller import cli

def press():
    os.kill(os.getpid(), signal.SIGINT)
    sum(range(1000))

def work(arguments):
    try:
        press()
        time.sleep(20)
    except KeyboardInterrupt:
        press()
        press()
        return 130
    return 0

atexit.register(press)
cli._run = work
cli.main()
"""


@pytest.mark.parametrize("script", [DROPPED, IMPATIENT], ids=["dropped", "impatient"])
def test_ctrl_c_ends_a_command_once_and_for_all(tmp_path: Path, script: str) -> None:
    """Also where it comes into the end of an object, where Python drops it; and further ones disturb nothing then."""
    (tmp_path / "run.py").write_text(script)
    run = subprocess.run([sys.executable, str(tmp_path / "run.py")], capture_output=True, text=True, timeout=15)
    assert (run.returncode, run.stdout, run.stderr) == (130, "", "")


def test_what_is_ignored_stays_so(monkeypatch: pytest.MonkeyPatch) -> None:
    """nohup's SIGHUP, and a handler that somebody else has set for SIGTERM, are left alone."""
    heard: list[int] = []
    before = signal.signal(signal.SIGHUP, signal.SIG_IGN), signal.signal(signal.SIGTERM, lambda n, _: heard.append(n))
    try:
        with Interruptions() as interruptions:
            os.kill(os.getpid(), signal.SIGHUP)
            os.kill(os.getpid(), signal.SIGTERM)
            interruptions.check()
    finally:
        signal.signal(signal.SIGHUP, before[0])
        signal.signal(signal.SIGTERM, before[1])
    assert heard == [signal.SIGTERM]


def test_a_thread_sets_no_handler() -> None:
    """Outside the main thread, where handlers cannot be set, nothing is done and nothing fails."""
    found: list[object] = []

    def inside() -> None:
        with Interruptions() as interruptions:
            found.extend([signal.getsignal(signal.SIGINT), interruptions.came])

    thread = threading.Thread(target=inside)
    thread.start()
    thread.join()
    assert found == [signal.getsignal(signal.SIGINT), False]
