"""Worker processes on this computer, each a concurrent.futures executor of its own.

One process a pool: a process that is killed breaks its pool and no other, so it is known which episode was with it, and
only that pool is made anew. Processes are started afresh (spawn), import everything once, and serve many episodes. They
ignore Ctrl-C and a closed terminal (the batch decides), clean up on SIGTERM, and end when their batch is gone.

`default_jobs` counts what there is: processors this process may use, and free memory by what an episode takes at most.
"""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import signal
import sys
import threading
import time
from collections.abc import Callable, Iterator
from concurrent.futures import BrokenExecutor, Future, ProcessPoolExecutor
from pathlib import Path
from types import FrameType, TracebackType
from typing import Any

from leveller.folder import take_back_all
from leveller.interruptions import put_off
from leveller.lanes import THREAD_LIMITS, keep_heap, processor_count
from leveller.worker import busy

PROC, CGROUPS = Path("/proc"), Path("/sys/fs/cgroup")
JOB_BYTES = 600 << 20  # three hours of eight tracks stay under it
PATIENCE_S = 10.0  # for a worker to clean up
ENDED_EXIT = 143


class LocalWorkers:
    """So many processes; a context manager. `submit` needs a place that is free (`places`)."""

    lost: tuple[type[BaseException], ...] = (BrokenExecutor,)

    def __init__(self, jobs: int) -> None:
        self._pools: list[ProcessPoolExecutor | None] = [None] * jobs
        self._last: list[Future[Any] | None] = [None] * jobs
        self._others = set(multiprocessing.active_children())

    @property
    def places(self) -> int:
        """How many episodes can be at work at once."""
        return len(self._pools)

    def submit(self, function: Callable[..., Any], *arguments: Any) -> Future[Any]:
        """Run a function in a process that is free, a new one where that has died."""
        place = next(i for i, last in enumerate(self._last) if last is None or last.done())
        for _ in range(2):
            try:
                with _not_from_terminals():  # a process that starts now inherits this: multiprocessing's own helper,
                    pool = self._pools[place] = self._pools[place] or _new_pool()
                with _not_from_terminals():  # after whose start Ctrl-C is let through again, and the worker
                    future = pool.submit(_served, function, *arguments)
            except BrokenExecutor:  # its process has died, at work or idle
                self._pools[place] = None
                continue
            self._last[place] = future
            return future
        raise BrokenExecutor("no worker process can be started")

    def stop(self) -> None:
        """End all work now; workers remove what they have begun."""
        ours = [process for process in multiprocessing.active_children() if process not in self._others]
        for process in ours:
            process.terminate()
        for pool in self._pools:
            if pool is not None:
                pool.shutdown(wait=False, cancel_futures=True)
        end_s = time.monotonic() + PATIENCE_S  # for all of them together
        for process in ours:
            process.join(max(0.0, end_s - time.monotonic()))
            if process.is_alive():
                with contextlib.suppress(OSError):
                    process.kill()

    def __enter__(self) -> LocalWorkers:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
                 ) -> None:
        if kind is not None:
            self.stop()
        for pool in self._pools:
            if pool is not None:
                pool.shutdown(wait=True, cancel_futures=True)


def default_jobs() -> int:
    """As many processes as there are processors, unless the free memory is short of that."""
    cores, free = processor_count(), _free_bytes()
    return max(1, cores if free is None else min(cores, free // JOB_BYTES))


def _free_bytes() -> int | None:
    """Memory that programs can still take here, None where the system does not say."""
    found = [*_free_of_machine(), *_free_of_group()]
    return min(found) if found else None


def _free_of_machine() -> Iterator[int]:
    """What Linux estimates, proc(5)."""
    with contextlib.suppress(OSError, KeyError, ValueError):
        facts = dict(line.split(":", 1) for line in (PROC / "meminfo").read_text(encoding="ascii").splitlines())
        yield int(facts["MemAvailable"].split()[0]) * 1024


def _free_of_group() -> Iterator[int]:
    """What the limits of a container or a service leave, of all groups this process is in (cgroups(7), both kinds)."""
    with contextlib.suppress(OSError, ValueError):
        for line in (PROC / "self" / "cgroup").read_text(encoding="utf-8").splitlines():
            _, controllers, path = line.split(":", 2)
            if controllers == "":
                yield from _free_below(CGROUPS, path, ("memory.max", "memory.current"), "")
            elif "memory" in controllers.split(","):
                yield from _free_below(CGROUPS / controllers, path,
                                       ("memory.limit_in_bytes", "memory.usage_in_bytes"), "total_")


def _free_below(root: Path, path: str, files: tuple[str, str], prefix: str) -> Iterator[int]:
    """What a group and those above it leave; file cache is given back on need. A container sees its own as the root."""
    own = root / path.lstrip("/")
    for group in (own, *own.parents[: len(own.relative_to(root).parts)]):
        with contextlib.suppress(OSError, ValueError, KeyError):
            most, used = (int((group / name).read_text(encoding="ascii")) for name in files)  # "max" is no number
            facts = dict(line.split() for line in (group / "memory.stat").read_text(encoding="ascii").splitlines())
            cache = int(facts[f"{prefix}inactive_file"]) + int(facts[f"{prefix}active_file"])
            yield max(0, most - used + cache)


def _new_pool() -> ProcessPoolExecutor:
    """A pool of one process, which starts with its first work."""
    for name in THREAD_LIMITS:
        os.environ.setdefault(name, "1")
    return ProcessPoolExecutor(1, mp_context=multiprocessing.get_context("spawn"), initializer=_settle)


@contextlib.contextmanager
def _not_from_terminals() -> Iterator[None]:
    """Hold back for a moment what a terminal sends to all processes; multiprocessing's own helper is not to get it."""
    if not hasattr(signal, "pthread_sigmask"):
        yield
        return
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT, signal.SIGHUP})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)


def _settle() -> None:
    """What a worker process does first."""
    keep_heap()
    for name in ("SIGINT", "SIGHUP"):  # from a terminal they come to all of its processes
        if hasattr(signal, name):
            signal.signal(getattr(signal, name), signal.SIG_IGN)
    signal.signal(signal.SIGTERM, _leave)
    threading.Thread(target=_watch_batch, name="watch", daemon=True).start()


def _served(function: Callable[..., Any], *arguments: Any) -> Any:
    """Run a function; once its work is unwound after SIGTERM, end the process."""
    try:
        return function(*arguments)
    except SystemExit:
        take_back_all()  # it may have come between two steps of the unwinding, or before there was any
        os._exit(ENDED_EXIT)


def _leave(number: int, frame: FrameType | None) -> None:
    """Unwind, so that what is half-written is removed; a second signal does not disturb that."""
    if put_off(number, frame):
        return
    signal.signal(signal.SIGTERM, signal.SIG_IGN)
    sys.exit(ENDED_EXIT)


def _watch_batch() -> None:
    """Clean up and end when the batch has died: nobody would end this process otherwise."""
    batch = multiprocessing.parent_process()
    if batch is None:
        return
    batch.join()
    os.kill(os.getpid(), signal.SIGTERM)
    if busy.acquire(timeout=PATIENCE_S):
        take_back_all()
    os._exit(ENDED_EXIT)
