"""Thousands of what-if cases about one scenario: costed, computed, kept, and continued after any interruption."""

from __future__ import annotations

import contextlib
import dataclasses
import math
import resource
import shutil
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from gravbasin import labels
from gravbasin.errors import CannotFinish, InputError
from gravbasin.observed import read_grid
from gravbasin.runs.case_bench import Recipe
from gravbasin.runs.case_file import write_cases, write_csv
from gravbasin.runs.case_store import CASES, CaseStore, synced
from gravbasin.runs.cases import CaseMaker
from gravbasin.runs.compare import noise_of
from gravbasin.runs.executors import Executor, Task, executor_of, maker_of, one_thread
from gravbasin.runs.sampling import Design
from gravbasin.runs.store import write_text
from gravbasin.scenario import Scenario
from gravbasin.scenario_file import scenario_hash, scenario_toml

__all__ = ["LIMITS", "Cost", "estimate_sweep", "sweep"]

Progress = Callable[[str, int, int], None]
KM = 1000.0
GIB = 2.0**30

LIMITS = {"seconds": 7200.0, "disk": 20 * GIB, "memory": 4 * GIB}
"""Above any of these a sweep starts only when told to: two hours, 20 GiB on disk, 4 GiB of memory."""

BATCH_SECONDS = 1.5
"""Aim for a batch: long against the milliseconds a scheduler spends on one, short against what a lost worker costs."""

BATCH_BYTES = 64 * 2**20
LOG_SECONDS = 10.0


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


def estimate_sweep(scenario: Scenario, executor: str = "serial", *, workers: int | None = None) -> Cost:
    """Number of cases, time, memory and disk of a sweep, from a sample of its cases; nothing is written.

    Raises
    ------
    InputError
        A scenario without [sweep], a field that is not known, values out of bounds, or a sample that fails throughout.
    """
    with executor_of(executor, workers) as made:
        return _cost(_Plan.of(scenario), made)


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
    plan = _Plan.of(scenario)
    folder = Path(out_dir)
    with plan.store(folder) as store:
        if not store.complete:
            _fill(plan, store, executor, workers, yes, progress or (lambda text, done, cases: None))
    path = folder / CASES
    small = path.stat().st_size < GIB / 2
    return xr.load_dataset(path, engine="h5netcdf") if small else xr.open_dataset(path, engine="h5netcdf")


@dataclasses.dataclass(frozen=True, eq=False)
class _Plan:
    """A sweep checked and ready: its design, and what workers must know."""

    scenario: Scenario
    design: Design
    recipe: Recipe
    map_hash: str | None

    @classmethod
    def of(cls, scenario: Scenario) -> _Plan:
        if scenario.sweep is None:
            raise InputError(
                "sweep", "(missing)", "is needed to make cases", "add a [sweep] table, see configs/sweep_demo.toml"
            )
        design = Design.of(scenario)
        _check(scenario, design)
        noise, spacing, map_hash = _of_map(scenario, design)
        size = KM * scenario.crater.rim_diameter_km
        disc = scenario.inference.outer_radius_in_diameters
        sizes = _ends(design, "crater.rim_diameter_km", size / KM)
        discs = _ends(design, "inference.outer_radius_in_diameters", disc)
        recipe = Recipe(scenario, KM * sizes[0], KM * sizes[1], discs[1], noise, spacing)
        return cls(scenario, design, recipe, map_hash)

    @property
    def maker(self) -> CaseMaker:
        return maker_of(self.recipe)

    def store(self, folder: Path) -> CaseStore:
        tree = self.scenario.model_dump(mode="json")
        for table in ("observed", "samples"):
            if tree[table]:
                tree[table]["path"] = Path(tree[table]["path"]).name
        head = {
            "schema": 1,
            "scenario": tree,
            "observed.path (contents)": self.map_hash,
            "versions": labels.versions("numpy", "scipy"),
        }
        return CaseStore(folder, head, cases=self.design.size, width=self.maker.width, tile=self.maker.tile)

    def tasks(self, store: CaseStore, batch: int) -> Iterator[Task]:
        for first, last in store.missing(batch // self.maker.tile):
            yield Task(first, self.design.codes(first, last))


def _check(scenario: Scenario, design: Design) -> None:
    """Refuse what is wrong with a field by itself; fields at odds with each other are the cases' own affair."""
    from gravbasin.runs.variants import Variants
    from gravbasin.scenario_file import ScenarioError

    fields = [axis.field for axis in design.axes]
    Variants(scenario, tuple(fields)).check()
    for axis in design.axes:
        for code in {*axis.levels.tolist()} or {axis.low, axis.high}:
            try:
                Variants(scenario, (axis.field,)).scenario([axis.value(code)])
            except ScenarioError as error:
                own = [fault for fault in error.faults if fault.what.removeprefix("case: ") == axis.field]
                if own:
                    raise InputError(
                        "sweep.fields", f"{axis.field} = {axis.value(code)}", own[0].rule, own[0].remedy
                    ) from None


def _ends(design: Design, field: str, given: float) -> tuple[float, float]:
    for axis in design.axes:
        if axis.field == field:
            return axis.low, axis.high
    return given, given


def _of_map(scenario: Scenario, design: Design) -> tuple[Any, float | None, str | None]:
    """Noise and step of the scenario's map, estimated once for all cases; a stated noise is each case's own."""
    given = scenario.observed
    if given is None:
        noise_of(scenario, None)  # says what is missing
        return None, None, None
    observed = read_grid(given.path, variable=given.variable, nan=given.nan, units=given.units)
    step = float(max(observed.easting[1] - observed.easting[0], observed.northing[1] - observed.northing[0]))
    swept = [axis.field for axis in design.axes if axis.field.startswith("noise.")]
    stated = scenario.noise.stated
    if swept and not stated:
        raise InputError(
            "sweep.fields", swept[0], "cannot vary: the noise comes from the map", "state the noise, or drop it"
        )
    with one_thread():
        noise = None if stated else noise_of(scenario, observed)
    return noise, step, labels.read_provenance(observed).get("sha256")


def _cost(plan: _Plan, executor: Executor) -> Cost:
    maker, size = plan.maker, plan.design.size
    begun = time.perf_counter()
    with one_thread():
        per_case, slow = _measured(plan)
    start = max(time.perf_counter() - begun - slow, 0.0)
    tiles = round(BATCH_SECONDS / per_case / maker.tile)
    fair = math.ceil(size / (4 * executor.workers) / maker.tile)
    fits = BATCH_BYTES // (8 * maker.width * maker.tile)
    batch = max(1, min(tiles, fair, fits)) * maker.tile
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * (1 if sys.platform == "darwin" else 1024)
    from gravbasin.runs.executors import DaskExecutor

    processes = 1 + (executor.workers if isinstance(executor, DaskExecutor) else 0)
    table = 20 * (len(maker.axes) + len(maker.scalars))
    disk = size * (2 * 8 * maker.width + table)
    return Cost(size, executor.workers, per_case, start, batch, float(processes * peak), float(disk))


def _measured(plan: _Plan) -> tuple[float, float]:
    """Seconds per case on one worker, tables made; and the seconds spent on the timed samples."""
    maker, size, spent, count = plan.maker, plan.design.size, 0.0, 4
    reasons: dict[int, str] = {}
    while True:
        numbers = np.unique(np.linspace(0, size - 1, count).round().astype(int))
        codes = np.concatenate([plan.design.codes(int(n), int(n) + 1) for n in numbers])
        maker.rows(0, codes)  # makes what tables these need
        start = time.perf_counter()
        _, reasons = maker.rows(0, codes)
        last = time.perf_counter() - start
        spent += last
        if last > 0.25 or len(numbers) == size or count >= 256:
            break
        count *= 4
    if len(reasons) == len(codes):
        raise InputError(
            "sweep",
            f"{len(codes)} sampled cases",
            f"fail, every one: {next(iter(reasons.values()))}",
            "mend the fields",
        )
    return max(last / len(codes), 1e-6), spent


def _fill(plan: _Plan, store: CaseStore, executor: str, workers: int | None, yes: bool, tell: Progress) -> None:
    log = _Log(store.folder / "sweep.log")
    try:
        with executor_of(executor, workers) as made:
            tell("measuring a sample", store.count, store.cases)
            cost = _cost(plan, made)
            _refuse(cost, store, yes)
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
        _finish(plan, store)
        log.write(f"finished: {store.cases} cases, {len(store.failed)} of them failed")
    store.clear()


def _refuse(cost: Cost, store: CaseStore, yes: bool) -> None:
    if cost.excess and not yes:
        raise InputError(
            "sweep",
            f"{cost.cases} cases, {duration(cost.seconds)}, {cost.memory / GIB:.2g} GiB of memory, "
            f"{cost.disk / GIB:.2g} GiB on disk",
            f"passes the limits of {duration(LIMITS['seconds'])}, {LIMITS['memory'] / GIB:g} GiB and "
            f"{LIMITS['disk'] / GIB:g} GiB",
            "add --yes to go on all the same, or make fewer cases",
        )
    free = shutil.disk_usage(store.folder).free + (8 * cost.cases * store.width)  # the rows have their room already
    if cost.disk > free:
        raise CannotFinish(
            f"output folder {store.folder}: needs {cost.disk / GIB:.2g} GiB of {free / GIB:.2g} GiB free; "
            "make room, or choose another folder with -o"
        )


def _run(plan: _Plan, store: CaseStore, executor: Executor, cost: Cost, tell: Progress, log: _Log) -> None:
    before, begun, told = store.count, time.monotonic(), 0.0
    for done in executor.run(plan.recipe, plan.tasks(store, cost.batch)):
        store.put(done.first, done.rows, done.failed)
        elapsed = time.monotonic() - begun
        rate = (store.count - before) / max(elapsed, 1e-9)
        text = f"{rate:.3g} cases/s, {duration((store.cases - store.count) / rate)} left"
        tell(text, store.count, store.cases)
        if elapsed - told > LOG_SECONDS or store.count == store.cases:
            told = elapsed
            with store.told():
                log.write(f"{store.count} of {store.cases} cases, {len(store.failed)} failed, {text}")


def _finish(plan: _Plan, store: CaseStore) -> None:
    """Everything a reader wants, made from the rows; cases.nc comes last but one, the end of the journal last."""
    from gravbasin.report.sweep_page import sweep_report

    facts = labels.provenance(
        scenario_sha256=scenario_hash(plan.scenario),
        seed=plan.scenario.seed,
        versions=labels.versions("numpy", "scipy"),
        map_sha256=plan.map_hash,
    )
    rows = store.records()
    write_csv(store.folder / "cases.csv", plan.maker, rows, store.failed)
    write_text(store.folder / "scenario.toml", scenario_toml(plan.scenario))
    write_cases(store.folder / CASES, plan.maker, rows, store.failed, provenance=facts)
    with xr.open_dataset(store.folder / CASES, engine="h5netcdf") as cases:
        page = sweep_report(plan.scenario, cases.drop_vars(["profile", "grid"], errors="ignore").load())
    write_text(store.folder / "report.html", page)
    for path in store.folder.iterdir():
        if path.suffix in (".nc", ".csv", ".html", ".toml"):
            synced(path)


class _Log:
    """Lines with the time, for a run that nobody watches."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def write(self, text: str) -> None:
        """Append a line."""
        with open(self.path, "a", encoding="utf-8") as file:
            file.write(f"{time.strftime('%Y-%m-%d %H:%M:%S')}  {' '.join(text.split())}\n")


def duration(seconds: float) -> str:
    """Seconds as a person says them.

    Examples
    --------
    >>> duration(0.4), duration(75), duration(7300), duration(3e5)
    ('0.4 s', '75 s', '2 h 2 min', '3.5 days')
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
