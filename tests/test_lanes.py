"""leveller.lanes: tracks side by side, each strictly in order."""

from __future__ import annotations

import threading
import time
from concurrent.futures import ThreadPoolExecutor

import pytest

from leveller import lanes
from leveller.lanes import AHEAD, limited_to, second_thread, thread_count, walk


@pytest.mark.parametrize("threads", [1, 2, 4, 16])
@pytest.mark.parametrize(("lanes", "blocks"), [(1, 1), (1, 9), (3, 5), (12, 4)])
def test_results_come_in_order(threads: int, lanes: int, blocks: int) -> None:
    """Block by block, in lane order, on any number of threads."""
    with walk(lambda lane, block: (block, lane), lanes=lanes, blocks=blocks, threads=threads) as rows:
        found = list(rows)
    assert found == [[(block, lane) for lane in range(lanes)] for block in range(blocks)]


def test_a_lane_is_never_in_two_places() -> None:
    """One lane's steps run one after the other and in order, though lanes run side by side."""
    inside, seen, wrong = [0] * 3, [[], [], []], []
    lock = threading.Lock()

    def step(lane: int, block: int) -> None:
        with lock:
            inside[lane] += 1
            wrong.append(inside[lane] > 1)
            seen[lane].append(block)
        time.sleep(0.001 * (lane + 1))
        with lock:
            inside[lane] -= 1

    with walk(step, lanes=3, blocks=8, threads=4) as rows:
        assert len(list(rows)) == 8
    assert len(wrong) == 24
    assert not any(wrong)
    assert seen == [list(range(8))] * 3


def test_no_more_than_a_few_blocks_are_in_flight() -> None:
    """While the reader dawdles, no lane gets further ahead than AHEAD blocks: memory stays bounded."""
    begun = []
    with walk(lambda _, block: begun.append(block), lanes=2, blocks=20, threads=2) as rows:
        for block, _ in enumerate(rows):
            time.sleep(0.002)
            assert max(begun) <= block + AHEAD


@pytest.mark.parametrize("threads", [1, 4])
def test_the_first_error_ends_the_walk(threads: int) -> None:
    """A step that fails is raised here, at its block; later blocks are dropped, and no thread is left behind."""
    begun = []

    def step(lane: int, block: int) -> int:
        begun.append(block)
        if (lane, block) == (1, 2):
            raise OSError("gone")
        return block

    found = []
    with pytest.raises(OSError, match="gone"), walk(step, lanes=3, blocks=100, threads=threads) as rows:
        found.extend(rows)
    assert found == [[0, 0, 0], [1, 1, 1]]
    assert max(begun) <= 2 + AHEAD
    assert not [thread for thread in threading.enumerate() if thread.name.startswith("lane")]


def test_a_reader_that_leaves_ends_the_walk() -> None:
    """Leaving after the first block drops the rest."""
    begun = []
    with walk(lambda _, block: begun.append(block), lanes=1, blocks=1000, threads=2) as rows:
        next(rows)
    assert len(begun) <= 1 + AHEAD


@pytest.mark.parametrize("error", [OSError, KeyboardInterrupt])
def test_an_error_between_the_rows_leaves_no_step_at_work(error: type[BaseException]) -> None:
    """Once the walk is left by an error, while that error is still under way, no step runs: files can be removed."""
    begun, ended = [], []

    def step(lane: int, block: int) -> None:
        begun.append((lane, block))
        time.sleep(0.02)
        ended.append((lane, block))

    try:
        with walk(step, lanes=2, blocks=1000, threads=2) as rows:
            next(rows)
            raise error
    except error:
        assert sorted(begun) == sorted(ended)
        before = len(begun)
        time.sleep(0.1)
        assert len(begun) == before


def test_no_blocks_no_rows() -> None:
    """Nothing to walk."""
    with walk(lambda *_: None, lanes=2, blocks=0) as rows:
        assert list(rows) == []


def test_threads_worth_having(monkeypatch: pytest.MonkeyPatch) -> None:
    """As many as there are processors, at most four, and within a limit; a limit raises nothing and ends."""
    for processors, threads in ((1, 1), (2, 2), (4, 4), (64, 4)):
        monkeypatch.setattr(lanes, "processor_count", lambda count=processors: count)
        assert thread_count() == threads
        with limited_to(2):
            assert thread_count() == min(2, threads)
        with limited_to(99):
            assert thread_count() == threads
        assert thread_count() == threads


def test_a_limit_is_that_of_its_own_thread(monkeypatch: pytest.MonkeyPatch) -> None:
    """Two episodes in two threads of one process each keep to their own limit."""
    monkeypatch.setattr(lanes, "processor_count", lambda: 4)
    with limited_to(1), ThreadPoolExecutor(1) as other:
        assert other.submit(thread_count).result() == 4
        assert thread_count() == 1


@pytest.mark.parametrize(("threads", "alone"), [(1, True), (2, False)])
def test_limited_to_one_nothing_starts_a_thread(
    threads: int, alone: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    """With one thread all work is done by the caller; with two it is not."""
    monkeypatch.setattr(lanes, "processor_count", lambda: 2)
    with limited_to(threads), second_thread() as second:
        workers = {second.submit(threading.get_ident).result()}
        with walk(lambda *_: threading.get_ident(), lanes=3, blocks=5) as rows:
            workers |= {one for row in rows for one in row}
    assert (workers == {threading.get_ident()}) is alone


@pytest.mark.parametrize("threads", [1, 2])
def test_an_error_beside_waits_until_it_is_asked_for(threads: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """Work of the second thread that fails raises where its result is wanted, on one thread as on two."""
    monkeypatch.setattr(lanes, "processor_count", lambda: 2)
    with limited_to(threads), second_thread() as second:
        future = second.submit(int, "none")
        with pytest.raises(ValueError, match="none"):
            future.result()
