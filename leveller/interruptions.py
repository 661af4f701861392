"""Ctrl-C and its kin: none of them is lost, and none comes in the middle of something that it would spoil.

One session is interrupted from the keyboard, wherever the program is (`Keyboard`): what is begun unwinds, and output
folders tidy up behind themselves (`folder`). Impatience does not disturb that: for a moment more of them do nothing.

A season is interrupted from the keyboard (SIGINT), by a system that shuts down or a timer (SIGTERM), or by a terminal
that is closed (SIGHUP). As an exception any of these might come between the start of a process and its note, or while
what is left is being removed. Inside `Interruptions` they are only remembered; whoever can stop asks `check`. Where
the program waits for others (a cluster that may not answer), `at_once` lets the next one through as it comes.

While a library is being imported nothing may be raised (`put_off`): an extension takes an exception in its start for a
fault. soxr's ends the process there (nanobind: abort), numpy's makes an ImportError of it, others drop it. What comes
into the end of an object is dropped by Python itself; `Keyboard` hears of that and lets it come once more.

Signals that are ignored (nohup) or that somebody else has taken stay so. Handlers can be set in the main thread only;
in any other one nothing is done.
"""

from __future__ import annotations

import contextlib
import os
import signal
import sys
import threading
import time
from collections.abc import Iterator
from types import FrameType, TracebackType

NAMES = ("SIGINT", "SIGTERM", "SIGHUP")  # the last one not on every system
IMPORTS = "<frozen importlib"  # the code that is in the stack while something is imported
AGAIN_S = 0.05
QUIET_S = 1.0  # after one that is under way; tidying up is through by then


def put_off(number: int, frame: FrameType | None) -> bool:
    """For a handler: whether a library is being imported. Then the signal comes once more in a moment."""
    while frame is not None and not frame.f_code.co_filename.startswith(IMPORTS):
        frame = frame.f_back
    if frame is None:
        return False
    _once_more(number)
    return True


def _once_more(number: int) -> None:
    """Let a signal come again in a moment."""
    threading.Timer(AGAIN_S, os.kill, (os.getpid(), number)).start()


class Keyboard:
    """Ctrl-C ends what this process does, from the first one on; a context manager round all of it.

    On leaving, Ctrl-C does nothing any more: the process ends by itself. Where Ctrl-C is ignored already, or somebody
    else takes it, nothing is done.
    """

    def __init__(self) -> None:
        self._raised_s = -QUIET_S
        self._reported = sys.unraisablehook

    def __enter__(self) -> Keyboard:
        if signal.getsignal(signal.SIGINT) is signal.default_int_handler:
            signal.signal(signal.SIGINT, self._interrupt)
            sys.unraisablehook = self._dropped
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
                 ) -> None:
        if signal.getsignal(signal.SIGINT) == self._interrupt:
            signal.signal(signal.SIGINT, signal.SIG_IGN)
            sys.unraisablehook = self._reported

    def _interrupt(self, number: int, frame: FrameType | None) -> None:
        """The handler."""
        if put_off(number, frame) or time.monotonic() < self._raised_s + QUIET_S:
            return
        self._raised_s = time.monotonic()
        raise KeyboardInterrupt

    def _dropped(self, dropped: sys.UnraisableHookArgs) -> None:
        """Python has told of an exception that cannot be raised where it came."""
        if isinstance(dropped.exc_value, KeyboardInterrupt):
            self._raised_s = -QUIET_S
            _once_more(signal.SIGINT)
        else:
            self._reported(dropped)


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
