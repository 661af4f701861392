"""Ctrl-C and its kin as a question to ask, so that none of them comes in the middle of something.

A season is interrupted from the keyboard (SIGINT), by a system that shuts down or a timer (SIGTERM), or by a terminal
that is closed (SIGHUP). As an exception any of these might come between the start of a process and its note, or while
what is left is being removed. Inside `Interruptions` they are only remembered; whoever can stop asks `check`. Where
the program waits for others (a cluster that may not answer), `at_once` lets the next one through as it comes.

While a library is being imported nothing may be raised (`put_off`): an extension takes an exception in its start for a
fault. soxr's ends the process there (nanobind: abort), numpy's makes an ImportError of it, others drop it.

Signals that are ignored (nohup) or that somebody else has taken stay so. Handlers can be set in the main thread only;
in any other one nothing is done.
"""

from __future__ import annotations

import contextlib
import os
import signal
import threading
from collections.abc import Iterator
from types import FrameType, TracebackType

NAMES = ("SIGINT", "SIGTERM", "SIGHUP")  # the last one not on every system
IMPORTS = "<frozen importlib"  # the code that is in the stack while something is imported
AGAIN_S = 0.05


def put_off(number: int, frame: FrameType | None) -> bool:
    """For a handler: whether a library is being imported. Then the signal comes once more in a moment."""
    while frame is not None and not frame.f_code.co_filename.startswith(IMPORTS):
        frame = frame.f_back
    if frame is None:
        return False
    threading.Timer(AGAIN_S, os.kill, (os.getpid(), number)).start()
    return True


class Interruptions:
    """A context manager; on leaving, the handlers are again those from before."""

    def __init__(self) -> None:
        self.came = False
        self._at_once = False
        self._before: dict[signal.Signals, object] = {}

    def __enter__(self) -> Interruptions:
        if threading.current_thread() is threading.main_thread():
            for number in (getattr(signal, name) for name in NAMES if hasattr(signal, name)):
                before = signal.getsignal(number)
                if before == signal.SIG_DFL or (number == signal.SIGINT and callable(before)):
                    self._before[number] = before
                    signal.signal(number, self._note)
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
                 ) -> None:
        for number, before in self._before.items():
            signal.signal(number, before)  # type: ignore[arg-type]

    def check(self) -> None:
        """Raise KeyboardInterrupt where one has come."""
        if self.came:
            raise KeyboardInterrupt

    @contextlib.contextmanager
    def at_once(self) -> Iterator[None]:
        """Inside, one comes as KeyboardInterrupt wherever the program is; also one that has come before."""
        self._at_once = True
        try:
            self.check()
            yield
        finally:
            self._at_once = False

    def _note(self, number: int, frame: FrameType | None) -> None:
        """Remember it."""
        self.came = True
        if self._at_once and not put_off(number, frame):
            self._at_once = False  # a second one does not disturb what the first one ends
            raise KeyboardInterrupt
