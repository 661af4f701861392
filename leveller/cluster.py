"""Workers on many computers, by way of a Dask scheduler that runs already. The sole user of `distributed`.

The scheduler is spoken to through the same concurrent.futures interface as the processes of this computer
(`Client.get_executor`). Before anything is sent, every worker is asked for its versions and whether it sees the output
folder; a worker that joins later is asked with its first episode. Needs `leveller[cluster]`.

A scheduler hands the episode of a worker that was lost out again by itself, as often as it is set to; `worker` counts
how often an episode was begun and stops at `MOST_TRIES`. One that gives up at once raises, and it is sent again.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from concurrent.futures import Future
from pathlib import Path
from types import TracebackType
from typing import Any

from leveller.errors import InputError, SettingsError
from leveller.fingerprint import made_by
from leveller.worker import version_difference

ANSWER_S = 15  # until a scheduler has answered


class ClusterWorkers:
    """The workers of a scheduler; a context manager.

    Raises
    ------
    SettingsError
        on entry: `distributed` is not installed, no scheduler answers, it has no workers, or their versions differ
    InputError
        on entry: a worker does not see the output folder
    """

    def __init__(self, address: str, desk: Path) -> None:
        self._address, self._desk = address, desk
        self._client: Any = None
        self._executor: Any = None
        self.lost: tuple[type[BaseException], ...] = ()

    @property
    def places(self) -> int:
        """Threads of all workers that are there now; one at least, since others may come."""
        try:
            return max(1, int(sum(self._client.nthreads().values())))
        except (TimeoutError, OSError, ValueError):
            return 1  # the scheduler is out of reach; handing out will tell

    def submit(self, function: Callable[..., Any], *arguments: Any) -> Future[Any]:
        """Run a function on a worker."""
        future: Future[Any] = self._executor.submit(function, *arguments)
        return future

    def stop(self) -> None:
        """Take back what has not begun; workers stop what they do once the desk is gone."""
        self._executor.shutdown(wait=False)

    def __enter__(self) -> ClusterWorkers:
        try:
            from distributed import Client
            from distributed.scheduler import KilledWorker
        except ImportError:
            raise SettingsError("--cluster needs a package more: pip install 'leveller[cluster]'") from None
        try:
            self._client = Client(self._address, timeout=ANSWER_S, set_as_default=False)  # type: ignore[no-untyped-call]
        except (TimeoutError, OSError, ValueError) as error:
            raise SettingsError(f"--cluster {self._address}: no scheduler answers ({_first_line(error)}). Start one "
                                "with dask scheduler, and workers with dask worker ADDRESS") from None
        try:
            self._check()
        except BaseException:
            self._client.close()
            raise
        self._executor, self.lost = self._client.get_executor(pure=False, retries=0), (KilledWorker,)
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
                 ) -> None:
        if kind is not None:
            self.stop()
        self._client.close()

    def _check(self) -> None:
        """Every worker has our versions and sees the desk."""
        if not self._client.nthreads():
            raise SettingsError(f"--cluster {self._address}: the scheduler has no workers. Start some with dask worker "
                                f"{self._address}")
        answers = self._client.run(asked, str(self._desk), on_error="return")
        check_answers(answers, self._desk.parent)


def asked(desk: str) -> dict[str, Any]:
    """A worker's answer: its versions, and whether it sees the desk."""
    return {"made_by": made_by(), "sees": Path(desk).is_dir()}


def check_answers(answers: Mapping[str, Any], out: Path) -> None:
    """Refuse workers that have other versions or see other storage; those that cannot answer have no leveller."""
    for address, answer in answers.items():
        if not isinstance(answer, Mapping):
            raise SettingsError(f"worker {address}: cannot run leveller ({_first_line(answer)}). Install leveller "
                                f"{made_by()['leveller']} on all computers")
        difference = version_difference(made_by(), answer["made_by"])
        if difference:
            raise SettingsError(f"worker {address}: {difference}. Install the same versions on all computers")
        if not answer["sees"]:
            raise InputError(f"worker {address}: does not see {out}. Season and --out must lie on storage that all "
                             "workers share, under the same path")


def _first_line(error: object) -> str:
    """An error's first line."""
    return (str(error).splitlines() or [type(error).__name__])[0]
