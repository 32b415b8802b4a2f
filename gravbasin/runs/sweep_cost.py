"""What a sweep will take, measured on a sample of its own cases before anything is spent."""

from __future__ import annotations

import dataclasses
import math
import resource
import shutil
import sys
import time

import numpy as np
from threadpoolctl import threadpool_limits

from gravbasin.errors import CannotFinish, InputError
from gravbasin.runs.case_store import CaseStore
from gravbasin.runs.executors import DaskExecutor, Executor
from gravbasin.runs.sweep_plan import Plan

__all__ = ["LIMITS", "Cost", "cost_of", "duration", "refuse_above"]

GIB = 2.0**30

LIMITS = {"seconds": 7200.0, "disk": 20 * GIB, "memory": 4 * GIB}
"""Above any of these a sweep starts only when told to: two hours, 20 GiB on disk, 4 GiB of memory."""

BATCH_SECONDS = (1.5, 5.0)
"""Least and most for a batch: long against what a scheduler spends on one, short against what a lost worker costs."""

SCHEDULER_SECONDS = 0.008
"""What a batch costs dask's scheduler and our end of it, measured with batches of no work (see DEVELOPERS.md)."""

SCHEDULER_SHARE = 0.5
"""Part of their time these two may be busy; above it workers begin to wait for them."""

BATCH_BYTES = 64 * 2**20


@dataclasses.dataclass(frozen=True)
class Cost:
    """What a sweep will take, from a measured sample of its own cases.

    Attributes
    ----------
    cases, workers : int
        How many, and of which executor.
    seconds_per_case, seconds_to_start : float
        One case on one worker; making the shared tables, once per worker.
    batch : int
        Cases handed to a worker at once.
    memory, disk : float, bytes
        Of all processes together; at most, while the dataset is written.
    """

    cases: int
    workers: int
    seconds_per_case: float
    seconds_to_start: float
    batch: int
    memory: float
    disk: float

    @property
    def seconds(self) -> float:
        """Time until all cases are done, s."""
        return self.seconds_to_start + self.cases * self.seconds_per_case / self.workers

    @property
    def excess(self) -> list[str]:
        """Which limits it passes, in words."""
        return [name for name, limit in LIMITS.items() if getattr(self, name) > limit]

    def lines(self) -> list[str]:
        """The estimate for a reader."""
        return [
            f"cases      {self.cases} of {1e3 * self.seconds_per_case:.3g} ms, in batches of {self.batch} "
            f"({self.batch * self.seconds_per_case:.2g} s)",
            f"time       {duration(self.seconds)} with {self.workers} worker{'s' if self.workers > 1 else ''}, "
            f"{duration(self.seconds_to_start)} of it to start",
            f"memory     {self.memory / GIB:.2g} GiB",
            f"disk       {self.disk / GIB:.2g} GiB",
        ]


def cost_of(plan: Plan, executor: Executor) -> Cost:
    """Measure a sample and reckon the whole."""
    maker, size = plan.maker, plan.design.size
    begun = time.perf_counter()
    with threadpool_limits(1):
        per_case, slow = _measured(plan)
    start = max(time.perf_counter() - begun - slow, 0.0)
    tiles = round(_batch_seconds(executor.workers) / per_case / maker.tile)
    fair = math.ceil(size / (4 * executor.workers) / maker.tile)
    fits = BATCH_BYTES // (8 * maker.width * maker.tile)
    batch = max(1, min(tiles, fair, fits)) * maker.tile
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * (1 if sys.platform == "darwin" else 1024)
    processes = 1 + (executor.workers if isinstance(executor, DaskExecutor) else 0)
    table = 20 * (len(maker.axes) + len(maker.scalars))
    disk = size * (2 * 8 * maker.width + table)
    return Cost(size, executor.workers, per_case, start, batch, float(processes * peak), float(disk))


def _batch_seconds(workers: int) -> float:
    """Seconds a batch should take, so that the scheduler keeps up with the workers.

    Examples
    --------
    >>> [round(_batch_seconds(n), 3) for n in (1, 200, 1000)]
    [1.5, 3.2, 5.0]
    """
    least, most = BATCH_SECONDS
    return min(max(least, workers * SCHEDULER_SECONDS / SCHEDULER_SHARE), most)


def _measured(plan: Plan) -> tuple[float, float]:
    """Seconds per case on one worker, tables made; and the seconds spent on the timed samples."""
    maker, size, spent, count = plan.maker, plan.design.size, 0.0, 8
    reasons: dict[int, str] = {}
    while True:
        numbers = np.unique(np.linspace(0, size - 1, count).round().astype(int))
        codes = np.concatenate([plan.design.codes(int(n), int(n) + 1) for n in numbers])
        maker.rows(0, codes)  # makes what tables these need
        start = time.perf_counter()
        _, reasons = maker.rows(0, codes)
        last = time.perf_counter() - start
        spent += last
        if last > 0.1 or len(numbers) == size or count >= 64:
            break
        count *= 8
    if len(reasons) == len(codes):
        raise InputError(
            "sweep",
            f"{len(codes)} sampled cases",
            f"fail, every one: {next(iter(reasons.values()))}",
            "mend the fields",
        )
    return max(last / len(codes), 1e-6), spent


def refuse_above(cost: Cost, store: CaseStore, yes: bool) -> None:
    """Stop a sweep that passes the limits without leave, or that the disk cannot hold."""
    if cost.excess and not yes:
        raise InputError(
            "sweep",
            f"{cost.cases} cases, {duration(cost.seconds)}, {cost.memory / GIB:.2g} GiB of memory, "
            f"{cost.disk / GIB:.2g} GiB on disk",
            f"passes the limits of {duration(LIMITS['seconds'])}, {LIMITS['memory'] / GIB:g} GiB and "
            f"{LIMITS['disk'] / GIB:g} GiB",
            "add --yes to go on all the same, or make fewer cases",
        )
    free = shutil.disk_usage(store.folder).free + store.reserved
    if cost.disk > free:
        raise CannotFinish(
            f"output folder {store.folder}: needs {cost.disk / GIB:.2g} GiB of {free / GIB:.2g} GiB free; "
            "make room, or choose another folder with -o"
        )


def duration(seconds: float) -> str:
    """Seconds as a person says them.

    Examples
    --------
    >>> duration(0.4), duration(75), duration(7300), duration(3e5)
    ('0.4 s', '75 s', '2 h 1 min', '3.5 days')
    """
    if not math.isfinite(seconds):
        return "unknown time"
    if seconds < 120:
        return f"{seconds:.2g} s" if seconds < 10 else f"{seconds:.0f} s"
    if seconds < 7200:
        return f"{seconds / 60:.0f} min"
    if seconds < 172800:
        return f"{int(seconds // 3600)} h {int(seconds % 3600 // 60)} min"
    return f"{seconds / 86400:.1f} days"
