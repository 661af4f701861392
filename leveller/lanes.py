"""Several tracks side by side on a few threads, each track strictly in order.

`with walk(step, ...) as rows` runs `step(lane, block)` for every block of every lane. A lane's blocks run one after the
other (a file is read from one thread at a time), lanes run side by side, and the results come back block by block in
lane order, so that whatever follows (a sum, a cross-correlation) sees the same order on any number of threads. At most
`AHEAD` blocks a lane are in flight, which bounds the memory. Once it is left, by an error or an interruption too, no
step runs any more: what the steps read and write can be closed and removed.

How many threads: the processors there are, at most four; inside `limited_to(threads)` no more than that. Limited to
one, nothing starts a thread: `walk` and the work of a `second_thread` run where they are called, so that an episode of
a season takes one processor and no more.

`keep_heap` is for a process's start: what a block needs is allocated once, not block by block.

numpy, soundfile and FFTs release the interpreter lock, so two threads pay on two cores. BLAS threads are kept at one:
its own pool under ours measured twice the time.
"""

from __future__ import annotations

import contextlib
import ctypes
import os
from collections import deque
from collections.abc import Callable, Generator, Iterator
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from contextvars import ContextVar
from typing import Any, TypeVar

T = TypeVar("T")
AHEAD = 2  # blocks in flight per lane; one leaves a thread idle whenever lanes and threads do not divide
MOST_THREADS = 4  # readers and writers of one disk gain nothing from more
THREAD_LIMITS = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")  # of BLAS, read as numpy is imported

ARENA_MAX, MMAP_THRESHOLD, TRIM_THRESHOLD, TOP_PAD = -8, -3, -1, -2  # of glibc's mallopt (malloc.h)
BLOCK_BYTES = 4 << 20  # arrays up to this are taken from the heap; those of a block of one channel are smaller
KEPT_BYTES = 64 << 20  # free at the heap's end before any of it is given back

_limit: ContextVar[int] = ContextVar("limit", default=MOST_THREADS)  # two threads of one process have one each


def keep_heap() -> None:
    """Take blocks from one heap that is kept, where the C library is glibc; elsewhere nothing happens.

    One heap for all threads: an hour took 263 MB, not 296. Kept: five minutes of three tracks took 2.5 s of processor
    time, not 2.8, and a seventh of the page faults, since the system need not clear the same memory for every block.
    """
    with contextlib.suppress(AttributeError, OSError, TypeError):
        tune = ctypes.CDLL(None).mallopt
        for what, value in ((ARENA_MAX, 1), (MMAP_THRESHOLD, BLOCK_BYTES), (TRIM_THRESHOLD, KEPT_BYTES),
                            (TOP_PAD, BLOCK_BYTES)):
            tune(what, value)


def processor_count() -> int:
    """Processors that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def thread_count() -> int:
    """Threads worth having: the processors this process may use, at most `MOST_THREADS`, within `limited_to`."""
    return max(1, min(_limit.get(), MOST_THREADS, processor_count()))


@contextlib.contextmanager
def limited_to(threads: int) -> Iterator[None]:
    """Use no more threads than these, in what this thread does inside."""
    before = _limit.set(threads)
    try:
        yield
    finally:
        _limit.reset(before)


@contextlib.contextmanager
def second_thread() -> Iterator[Executor]:
    """A thread for what may run beside; on leaving, only what it has begun is still done. None where one is all."""
    if thread_count() == 1:
        yield _AtOnce()
        return
    with ThreadPoolExecutor(1, thread_name_prefix="beside") as second:
        try:
            yield second
        finally:
            second.shutdown(wait=False, cancel_futures=True)


class _AtOnce(Executor):
    """An executor that works when it is asked, in the caller's thread."""

    def submit(self, fn: Callable[..., T], /, *args: Any, **kwargs: Any) -> Future[T]:
        """Run it now; an error waits in the future, as it would with a thread."""
        future: Future[T] = Future()
        try:
            future.set_result(fn(*args, **kwargs))
        except Exception as error:
            future.set_exception(error)
        return future


def walk(
    step: Callable[[int, int], T], *, lanes: int, blocks: int, threads: int | None = None
) -> contextlib.closing[Generator[list[T], None, None]]:
    """Give, for every block in order, the lanes' results in order, until it is left.

    The first exception of a step ends the walk and is raised here; steps not yet begun are dropped. On one thread the
    steps run here, in the same order.
    """
    return contextlib.closing(_rows(step, lanes, blocks, threads or thread_count()))


def _rows(step: Callable[[int, int], T], lanes: int, blocks: int, count: int) -> Generator[list[T], None, None]:
    """The rows of a walk; closing it waits for the steps that are begun."""
    if count == 1:
        yield from ([step(lane, block) for lane in range(lanes)] for block in range(blocks))
        return
    with ThreadPoolExecutor(count, thread_name_prefix="lane") as pool:
        before: list[Future[T] | None] = [None] * lanes
        flight: deque[list[Future[T]]] = deque()
        try:
            for block in range(blocks):
                row = [pool.submit(_after, before[lane], step, lane, block) for lane in range(lanes)]
                before = list(row)
                flight.append(row)
                if len(flight) >= AHEAD:
                    yield [future.result() for future in flight.popleft()]
            while flight:
                yield [future.result() for future in flight.popleft()]
        finally:
            pool.shutdown(wait=True, cancel_futures=True)


def _after(before: Future[T] | None, step: Callable[[int, int], T], lane: int, block: int) -> T:
    """Run a step once the lane's step before it is done; the pool is first-in first-out, so that one has begun."""
    if before is not None:
        before.result()
    return step(lane, block)
