"""Where the cases of a sweep are computed: here, in threads, or on dask workers, near or far.

All do the same work on the same pieces, with one thread of linear algebra each, so the numbers agree to the last bit.
"""

from __future__ import annotations

import contextlib
import dataclasses
import os
import tempfile
import threading
import time
from collections.abc import Iterator
from concurrent import futures
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits

from gravbasin.errors import CannotFinish, InputError
from gravbasin.runs.case_bench import Recipe
from gravbasin.runs.cases import CaseMaker

if TYPE_CHECKING:
    from distributed import Client

__all__ = ["Done", "Executor", "Task", "executor_of"]

Array = NDArray[np.float64]

ANSWER_SECONDS = 10.0
"""How long a scheduler may take to answer."""

AHEAD = 3
"""Batches per worker that wait at the scheduler: enough that none idles, few enough that neither it nor we fill up."""


@dataclasses.dataclass(frozen=True, eq=False)
class Task:
    """A batch of neighbouring cases: the number of the first, and the codes of all."""

    first: int
    codes: Array


@dataclasses.dataclass(frozen=True, eq=False)
class Done:
    """What became of a batch: a row for every case, why some failed, and the seconds it took its worker."""

    first: int
    rows: Array
    failed: dict[int, str]
    seconds: float


class Executor(Protocol):
    """Something that works through batches; a context manager that lets go of its workers."""

    workers: int

    def run(self, recipe: Recipe, tasks: Iterator[Task]) -> Iterator[Done]:
        """Do the batches, in any order."""

    def __enter__(self) -> Executor: ...

    def __exit__(self, *fault: object) -> None: ...


def executor_of(name: str, workers: int | None = None) -> Executor:
    """An executor by name.

    Parameters
    ----------
    name : str
        "serial", "threads", "dask" for a cluster on this machine, or the address of a running dask scheduler
        ("tcp://host:8786").
    workers : int, optional
        Threads or local dask workers; by default one per core. A scheduler brings its own.

    Raises
    ------
    InputError
        An unknown name, or dask without its extra.
    """
    if workers is not None and workers < 1:
        raise InputError("workers", workers, "must be 1 or more", "leave it out to use every core")
    cores = workers or os.cpu_count() or 1
    if name == "serial":
        return SerialExecutor()
    if name == "threads":
        return ThreadExecutor(cores)
    if name == "dask" or "://" in name:
        return DaskExecutor(None if name == "dask" else name, cores)
    raise InputError("executor", name, "is not known", "choose serial, threads, dask, or a scheduler, tcp://HOST:PORT")


class SerialExecutor:
    """One batch after the other, in this thread."""

    workers = 1

    def __enter__(self) -> SerialExecutor:
        return self

    def __exit__(self, *fault: object) -> None:
        pass

    def run(self, recipe: Recipe, tasks: Iterator[Task]) -> Iterator[Done]:
        """Do the batches in order."""
        with threadpool_limits(1):
            for task in tasks:
                yield _work(recipe, task)


class ThreadExecutor:
    """Threads of this process; they share the tables, and gain where numpy lets go of the interpreter."""

    def __init__(self, workers: int) -> None:
        self.workers = workers

    def __enter__(self) -> ThreadExecutor:
        self._pool = futures.ThreadPoolExecutor(self.workers, "gravbasin-sweep")
        return self

    def __exit__(self, *fault: object) -> None:
        self._pool.shutdown(cancel_futures=True)

    def run(self, recipe: Recipe, tasks: Iterator[Task]) -> Iterator[Done]:
        """Do the batches as threads come free."""
        waiting: set[futures.Future[Done]] = set()
        with threadpool_limits(1):
            for task in tasks:
                waiting.add(self._pool.submit(_work, recipe, task))
                if len(waiting) > self.workers:
                    ready, waiting = futures.wait(waiting, return_when=futures.FIRST_COMPLETED)
                    yield from (future.result() for future in ready)
            yield from (future.result() for future in futures.as_completed(waiting))


class DaskExecutor:
    """Workers of dask.distributed: processes on this machine, or whatever a running scheduler has.

    A worker that dies loses nothing: its batch goes to another one, and the same batch gives the same numbers.
    """

    def __init__(self, address: str | None, workers: int) -> None:
        try:
            import distributed  # noqa: F401 - only whether it is there
        except ImportError:
            raise InputError(
                "executor", address or "dask", "needs dask.distributed", "install it: pip install 'gravbasin[dask]'"
            ) from None
        self.address, self.workers = address, workers

    def __enter__(self) -> DaskExecutor:
        self._stack = contextlib.ExitStack()
        self._shelf: Path | None = None
        try:
            self.client = self._stack.enter_context(self._connected())
        except BaseException:
            self._stack.close()
            raise
        return self

    def _connected(self) -> Client:
        import dask
        from distributed import Client, LocalCluster

        if self.address is None:
            # In place of dask's own settings: returning memory to the system early costs a case an eighth more time.
            alone = {f"{name}_NUM_THREADS": 1 for name in ("OMP", "MKL", "NUMBA", "OPENBLAS")}
            self._stack.enter_context(dask.config.set({"distributed.nanny.pre-spawn-environ": alone}))
            self._shelf = Path(self._stack.enter_context(tempfile.TemporaryDirectory(prefix="gravbasin-")))
            cluster = self._stack.enter_context(
                LocalCluster(
                    n_workers=self.workers,
                    threads_per_worker=1,
                    processes=True,
                    dashboard_address="127.0.0.1:0",  # any free port: the usual one may be taken
                    silence_logs="CRITICAL",
                )
            )
            return Client(cluster)
        try:
            client = Client(self.address, timeout=ANSWER_SECONDS)
        except (OSError, TimeoutError, ValueError) as error:
            raise CannotFinish(
                f"no dask scheduler answers at {self.address} ({type(error).__name__}); "
                "start one, check the address, or use --executor dask for workers on this machine"
            ) from None
        self.workers = sum(client.nthreads().values())
        if not self.workers:
            client.close()
            raise CannotFinish(f"the dask scheduler at {self.address} has no workers; start some, then try again")
        return client

    def __exit__(self, *fault: object) -> None:
        self._stack.close()

    def run(self, recipe: Recipe, tasks: Iterator[Task]) -> Iterator[Done]:
        """Do the batches on the workers, a few ahead of each."""
        from distributed import as_completed

        if self._shelf is not None:
            maker_of(recipe).bench.fill_shelf(self._shelf)
        running = as_completed()
        try:
            for task in tasks:
                running.add(self._submitted(recipe, task))
                if running.count() >= AHEAD * self.workers:
                    yield self._result(next(running))
            while running.count():
                yield self._result(next(running))
        finally:
            running.clear()

    def _submitted(self, recipe: Recipe, task: Task) -> Any:
        return self.client.submit(
            _work_alone, recipe, task, self._shelf, pure=False, key=f"cases-{recipe.key[:12]}-{task.first}"
        )

    def _result(self, future: Any) -> Done:
        from distributed import KilledWorker
        from distributed.comm.core import CommClosedError

        try:
            done: Done = future.result()
        except KilledWorker:
            raise CannotFinish(
                "one batch took down several workers, most likely for lack of memory; "
                "the cases done so far are kept: use fewer workers, and the same command continues"
            ) from None
        except (futures.CancelledError, CommClosedError, TimeoutError):
            raise CannotFinish(
                "the dask scheduler is gone; the cases done so far are kept, and the same command continues"
            ) from None
        return done


_MAKERS: dict[str, CaseMaker] = {}
_LOCK = threading.Lock()


def maker_of(recipe: Recipe) -> CaseMaker:
    """The one maker of this process for a sweep; that of a former sweep goes."""
    with _LOCK:
        if recipe.key not in _MAKERS:
            _MAKERS.clear()
            _MAKERS[recipe.key] = CaseMaker(recipe)
        return _MAKERS[recipe.key]


def _work(recipe: Recipe, task: Task) -> Done:
    maker = maker_of(recipe)
    start = time.perf_counter()
    rows, failed = maker.rows(task.first, task.codes)
    return Done(task.first, rows, failed, time.perf_counter() - start)


def _work_alone(recipe: Recipe, task: Task, shelf: Path | None) -> Done:
    """On a dask worker: held to one thread of linear algebra for good, since its threads come and go together."""
    maker_of(recipe).bench.shelf = shelf
    global _held
    if not _held:
        threadpool_limits(1)
        _held = True
    return _work(recipe, task)


_held = False
