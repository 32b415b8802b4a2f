"""Thousands of what-if cases about one scenario: costed, computed, kept, and continued after any interruption."""

from __future__ import annotations

import contextlib
import time
from collections.abc import Callable
from pathlib import Path

import xarray as xr

from gravbasin import labels
from gravbasin.runs.case_file import write_cases, write_csv
from gravbasin.runs.case_store import CASES, CaseStore, synced
from gravbasin.runs.executors import Executor, executor_of
from gravbasin.runs.store import write_text
from gravbasin.runs.sweep_cost import LIMITS, Cost, cost_of, duration, refuse_above
from gravbasin.runs.sweep_plan import Plan
from gravbasin.scenario import Scenario
from gravbasin.scenario_file import scenario_hash, scenario_toml

__all__ = ["LIMITS", "Cost", "estimate_sweep", "sweep"]

Progress = Callable[[str, int, int], None]
GIB = 2.0**30

LOG_SECONDS = 10.0


def estimate_sweep(scenario: Scenario, executor: str = "serial", *, workers: int | None = None) -> Cost:
    """Number of cases, time, memory and disk of a sweep, from a sample of its cases; nothing is written.

    Raises
    ------
    InputError
        A scenario without [sweep], a field that is not known, values out of bounds, or a sample that fails throughout.
    """
    with executor_of(executor, workers) as made:
        return cost_of(Plan.of(scenario), made)


def sweep(
    scenario: Scenario,
    out_dir: str | Path,
    executor: str = "serial",
    *,
    workers: int | None = None,
    yes: bool = False,
    progress: Progress | None = None,
) -> xr.Dataset:
    """Compute all cases of a scenario's [sweep] table into a folder, or continue where a former run ended.

    Parameters
    ----------
    scenario : Scenario
        With a [sweep] table.
    out_dir : path
        Folder of this sweep: cases.nc, cases.csv, report.html, scenario.toml, sweep.log. A folder of the same sweep is
        continued; one of a sweep that differs is refused.
    executor : str
        "serial", "threads", "dask", or the address of a dask scheduler. The numbers do not depend on it.
    workers : int, optional
        Threads or local dask workers; by default one per core.
    yes : bool
        Go beyond `LIMITS`.
    progress : callable, optional
        Called with (text, done, cases) after every batch.

    Returns
    -------
    Dataset (case, ...)
        Read from cases.nc: fields and scalars over the cases, profile (case, radius) and grid (case, northing, easting)
        where asked for, mGal; ``failure`` (case) says why a case failed, its numbers are NaN. Larger than half a GiB it
        is left on disk and read as it is used.

    Raises
    ------
    InputError
        A bad scenario or folder, or a sweep above the limits without `yes`.
    CannotFinish
        No scheduler, a full disk, a folder that cannot be written or is in use; whatever was done is kept.

    Examples
    --------
    >>> import tempfile
    >>> from gravbasin.runs.sweep import sweep
    >>> fields = [{"field": "history.erosion_km", "values": [0.0, 1.0, 2.0]}]
    >>> noise = {"sill_mgal": 4.0, "range_km": 20.0, "smoothness": 0.8, "nugget_mgal": 0.3}
    >>> scenario = Scenario(crater={"rim_diameter_km": 20.0}, noise=noise, sweep={"fields": fields})
    >>> cases = sweep(scenario, tempfile.mkdtemp())
    >>> cases.sizes["case"], bool(cases.signal_to_noise[0] > cases.signal_to_noise[2])
    (3, True)
    """
    plan = Plan.of(scenario)
    folder = Path(out_dir)
    with plan.store(folder) as store:
        if not store.complete:
            _fill(plan, store, executor, workers, yes, progress or (lambda text, done, cases: None))
            _finish(scenario, plan, store)
    path = folder / CASES
    small = path.stat().st_size < GIB / 2
    return xr.load_dataset(path, engine="h5netcdf") if small else xr.open_dataset(path, engine="h5netcdf")


def _fill(plan: Plan, store: CaseStore, executor: str, workers: int | None, yes: bool, tell: Progress) -> None:
    log = _Log(store.folder / "sweep.log")
    try:
        with executor_of(executor, workers) as made:
            tell("measuring a sample", store.count, store.cases)
            cost = cost_of(plan, made)
            refuse_above(cost, store, yes)
            store.reserve()
            with store.told():
                log.write(f"{executor}: {store.count} of {store.cases} cases done before; " + "; ".join(cost.lines()))
            _run(plan, store, made, cost, tell, log)
    except BaseException as error:
        # A line that finds no room must not hide the fault that is being told.
        with contextlib.suppress(OSError):
            log.write(f"ended by {type(error).__name__} with {store.count} of {store.cases} cases kept: {error}")
        raise
    tell("writing", store.cases, store.cases)
    with store.told():
        log.write(f"done: {store.cases} cases, {len(store.failed)} of them failed; writing")


def _run(plan: Plan, store: CaseStore, executor: Executor, cost: Cost, tell: Progress, log: _Log) -> None:
    begun: float | None = None
    before, told = 0, time.monotonic()
    for done in executor.run(plan.recipe, plan.tasks(store, cost.batch)):
        store.put(done.first, done.rows, done.failed)
        now = time.monotonic()
        if begun is None:  # the first batch also waited for workers to start and to make their tables
            begun, before = now, store.count
        known = now - begun > 1.0
        rate = (store.count - before) / (now - begun) if known else executor.workers / cost.seconds_per_case
        text = f"{rate:.3g} cases/s, {duration((store.cases - store.count) / rate)} left"
        tell(text, store.count, store.cases)
        if now - told > LOG_SECONDS or store.count == store.cases:
            told = now
            with store.told():
                log.write(f"{store.count} of {store.cases} cases, {len(store.failed)} failed, {text}")


def _finish(scenario: Scenario, plan: Plan, store: CaseStore) -> None:
    """Everything a reader wants, made from the rows; only when all of it is safe do rows and journal go."""
    with store.told():
        _write(scenario, plan, store)
        for path in store.folder.iterdir():
            if path.suffix in (".nc", ".csv", ".html", ".toml"):
                synced(path)
    store.clear()


def _write(scenario: Scenario, plan: Plan, store: CaseStore) -> None:
    from gravbasin.report.sweep_page import sweep_report

    facts = labels.provenance(
        scenario_sha256=scenario_hash(scenario),
        seed=scenario.seed,
        versions=labels.versions("numpy", "scipy"),
        map={"sha256": plan.map_hash},
    )
    rows = store.records()
    write_csv(store.folder / "cases.csv", plan.maker, rows, store.failed)
    write_text(store.folder / "scenario.toml", scenario_toml(scenario))
    write_cases(store.folder / CASES, plan.maker, rows, store.failed, provenance=facts)
    with xr.open_dataset(store.folder / CASES, engine="h5netcdf") as cases:
        page = sweep_report(plan.scenario, cases.drop_vars(["profile", "grid"], errors="ignore").load())
    write_text(store.folder / "report.html", page)


class _Log:
    """Lines with the time, for a run that nobody watches."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def write(self, text: str) -> None:
        """Append a line."""
        with open(self.path, "a", encoding="utf-8") as file:
            file.write(f"{time.strftime('%Y-%m-%d %H:%M:%S')}  {' '.join(text.split())}\n")
