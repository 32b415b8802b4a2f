"""A sweep checked and ready to run: its design, its store, and what workers must know."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterator
from pathlib import Path

from threadpoolctl import threadpool_limits

from gravbasin import labels
from gravbasin.crater import with_samples
from gravbasin.errors import InputError
from gravbasin.observed import NoiseModel
from gravbasin.runs.case_bench import Recipe
from gravbasin.runs.case_store import CaseStore
from gravbasin.runs.cases import CaseMaker
from gravbasin.runs.compare import noise_of
from gravbasin.runs.executors import Task, maker_of
from gravbasin.runs.sampling import Design
from gravbasin.runs.scenario_map import scenario_map
from gravbasin.runs.variants import Variants
from gravbasin.scenario import Scenario
from gravbasin.scenario_file import ScenarioError

__all__ = ["Plan"]

KM = 1000.0


@dataclasses.dataclass(frozen=True, eq=False)
class Plan:
    """A sweep checked and ready.

    Attributes
    ----------
    scenario : Scenario
        As given, narrowed by its samples where it has any.
    design : Design
        Values of every case.
    recipe : Recipe
        What a worker must know.
    map_hash : str or None
        SHA-256 of the map.
    """

    scenario: Scenario
    design: Design
    recipe: Recipe
    map_hash: str | None

    @classmethod
    def of(cls, scenario: Scenario) -> Plan:
        """Check a scenario's [sweep] and estimate the noise of its map, once for all cases."""
        if scenario.sweep is None:
            raise InputError(
                "sweep", "(missing)", "is needed to make cases", "add a [sweep] table, see configs/sweep_demo.toml"
            )
        if scenario.samples is not None:
            scenario = with_samples(scenario)[0]
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
        """Maker of the rows, in this process."""
        return maker_of(self.recipe)

    def store(self, folder: Path) -> CaseStore:
        """The folder's store, with what makes this sweep this one."""
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
        """What is missing, in batches of so many cases."""
        for first, last in store.missing(batch // self.maker.tile):
            yield Task(first, self.design.codes(first, last))


def _check(scenario: Scenario, design: Design) -> None:
    """Refuse what is wrong with a field by itself; fields at odds with each other are the cases' own affair."""
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


def _of_map(scenario: Scenario, design: Design) -> tuple[NoiseModel | None, float | None, str | None]:
    """Noise and step of the scenario's map, estimated once for all cases; a stated noise is each case's own."""
    observed = scenario_map(scenario, centred=False)
    if observed is None:
        noise_of(scenario, None)  # says what is missing
        return None, None, None
    step = float(max(observed.easting[1] - observed.easting[0], observed.northing[1] - observed.northing[0]))
    swept = [axis.field for axis in design.axes if axis.field.startswith("noise.")]
    stated = scenario.noise.stated
    if swept and not stated:
        raise InputError(
            "sweep.fields", swept[0], "cannot vary: the noise comes from the map", "state the noise, or drop it"
        )
    with threadpool_limits(1):
        noise = None if stated else noise_of(scenario, observed)
    return noise, step, labels.read_provenance(observed).get("sha256")
