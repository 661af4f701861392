"""Several tracks side by side on a few threads, each track strictly in order.

`walk` runs `step(lane, block)` for every block of every lane. A lane's blocks run one after the other (a file is read
from one thread at a time), lanes run side by side, and the results come back block by block in lane order, so that
whatever follows (a sum, a cross-correlation) sees the same order on any number of threads. At most `AHEAD` blocks a
lane are in flight, which bounds the memory.

numpy, soundfile and FFTs release the interpreter lock, so two threads pay on two cores. BLAS threads are kept at one:
its own pool under ours measured twice the time.
"""

from __future__ import annotations

import os
from collections import deque
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from typing import TypeVar

T = TypeVar("T")
AHEAD = 2  # blocks in flight per lane; one leaves a thread idle whenever lanes and threads do not divide


def thread_count() -> int:
    """Threads worth having: the processors this process may use, at most four."""
    cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    return max(1, min(4, cores))


def walk(
    step: Callable[[int, int], T], *, lanes: int, blocks: int, threads: int | None = None
) -> Iterator[list[T]]:
    """Yield, for every block in order, the lanes' results in order.

    The first exception of a step ends the walk and is raised here; steps not yet begun are dropped.
    """
    with ThreadPoolExecutor(threads or thread_count(), thread_name_prefix="lane") as pool:
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
