"""The cases of a sweep: structures built, forwarded and seen, a fixed number at a time."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from gravbasin.crater import CraterModel, contrast, crater_model, density_section
from gravbasin.crater.history import Ground
from gravbasin.forward.layers import grid_anomaly, layered_prisms
from gravbasin.forward.motion import is_axisymmetric
from gravbasin.inference.detect import detectability, required_snr
from gravbasin.inference.likelihood import shape_scatter
from gravbasin.runs.case_bench import Bench, Recipe, Survey
from gravbasin.runs.deformed_run import deformed_map, deformed_profiles
from gravbasin.runs.sampling import Design
from gravbasin.runs.variants import Variants
from gravbasin.scenario import Scenario
from gravbasin.survey.vanish import last_crossing

__all__ = ["CaseMaker", "Scalar", "peak_of", "scalars_of", "tile_size"]

Array = NDArray[np.float64]
KM = 1000.0

STREAM = 21
"""Stream of the scenario's seed for the scatter of a case; its number is the third part of the seed. The cases about
one base point of a Saltelli sample share theirs, so that scatter does not pass for the effect of a field."""

MODELS_AT_ONCE = 288

IMPOSSIBLE = 6000.0
"""Density contrast, kg/m³, that no two materials of a scenario can have: its densities are bounded by it."""


@dataclasses.dataclass(frozen=True)
class Scalar:
    """A number kept of every case."""

    name: str
    units: str
    long_name: str


_KNOWN = "the shape taken as known"
_FILTER = "the scatter of its shape counted as noise"


def scalars_of(draws: int) -> tuple[Scalar, ...]:
    """The numbers kept of every case, in the order of the store."""
    how = _FILTER if draws else _KNOWN
    spread = "noise models and draws of scatter" if draws else "noise models"
    found = [
        Scalar("peak_mgal", "mGal", "largest anomaly by size, with its sign"),
        Scalar("centre_mgal", "mGal", "anomaly at the centre"),
        Scalar("half_width_km", "km", "radius beyond the peak at which the anomaly has fallen to half"),
        Scalar("excess_mass_kg", "kg", "excess mass of the structure, negative for a deficit"),
        Scalar("signal_to_noise", "1", f"signal-to-noise ratio at a known place, {how}"),
        Scalar("snr_low", "1", f"5 % of the signal-to-noise ratio over {spread}"),
        Scalar("snr_high", "1", f"95 % of the signal-to-noise ratio over {spread}"),
        Scalar("detection_probability", "1", f"detection probability averaged over {spread}"),
        Scalar(
            "vanishing_erosion_km",
            "km",
            f"deepest erosion at which the unburied structure is still detected, {_KNOWN}; 0 where it never is",
        ),
    ]
    if draws:
        found += [
            Scalar("peak_low_mgal", "mGal", "5 % of the largest anomaly over draws of scatter"),
            Scalar("peak_high_mgal", "mGal", "95 % of the largest anomaly over draws of scatter"),
        ]
    return tuple(found)


def tile_size(draws: int) -> int:
    """Cases computed together. It never depends on the machine: a matrix product of another size rounds otherwise."""
    return max(1, min(32, MODELS_AT_ONCE // (1 + draws)))


@dataclasses.dataclass(frozen=True, eq=False)
class _Case:
    number: int
    scenario: Scenario
    models: tuple[CraterModel, ...]


class CaseMaker:
    """Makes the rows of any cases of one sweep; built once in every worker.

    A row holds the codes of the fields, the scalars, and by request profile and map, all as float64.
    """

    def __init__(self, recipe: Recipe) -> None:
        sweep = recipe.scenario.sweep
        assert sweep is not None
        self.sweep, self.recipe = sweep, recipe
        self.bench = Bench(recipe)
        self.axes = Design.of(recipe.scenario).axes
        self.variants = Variants(recipe.scenario, tuple(axis.field for axis in self.axes))
        self.scalars = scalars_of(sweep.draws)
        self.tile = tile_size(sweep.draws)

    @cached_property
    def grid_axis(self) -> Array:
        """Easting and northing of the maps, m."""
        step = KM * self.sweep.grid_step_km if self.sweep.grid_step_km else self.recipe.widest / 40
        half = int(np.ceil(0.8 * self.recipe.widest / step)) + 1
        return np.asarray(step * np.arange(-half, half + 1.0))

    @property
    def width(self) -> int:
        """Numbers in a row."""
        profile = self.bench.radius.size if self.sweep.profiles else 0
        grid = self.grid_axis.size**2 if self.sweep.grids else 0
        return len(self.axes) + len(self.scalars) + profile + grid

    def rows(self, first: int, codes: Array) -> tuple[Array, dict[int, str]]:
        """Rows of the cases from number `first` on, and why those failed that did (their row is NaN but for the codes).

        Parameters
        ----------
        first : int
            A multiple of the tile.
        codes : (n_case, n_field) array
            From `Design.codes`.
        """
        rows = np.full((len(codes), self.width), np.nan)
        rows[:, : codes.shape[1]] = codes
        failed: dict[int, str] = {}
        for start in range(0, len(codes), self.tile):
            piece = slice(start, start + self.tile)
            failed |= self._fill(first + start, codes[piece], rows[piece, codes.shape[1] :])
        return rows, failed

    def _fill(self, first: int, codes: Array, rows: Array) -> dict[int, str]:
        """One tile into its rows, in place."""
        failed: dict[int, str] = {}
        cases: list[_Case] = []
        contrasts: list[list[Array]] = []
        for i, code in enumerate(codes):
            try:
                case = self._case(first + i, code)
                contrasts.append([self._contrast(model, case.scenario) for model in case.models])
                cases.append(case)
            except MemoryError:
                raise
            except Exception as error:
                failed[first + i] = _reason(error)
        profiles, masses = self._forwarded(cases, contrasts)
        vanishing = self._vanishing(cases)
        for case, profile, mass, level in zip(cases, profiles, masses, vanishing, strict=True):
            try:
                rows[case.number - first] = self._row(case, profile, float(mass), float(level))
            except MemoryError:
                raise
            except Exception as error:
                failed[case.number] = _reason(error)
        return failed

    def _case(self, number: int, code: Array) -> _Case:
        scenario = self.variants.scenario([axis.value(float(c)) for axis, c in zip(self.axes, code, strict=True)])
        shared = len(self.axes) + 2 if self.sweep.design == "saltelli" else 1
        rng = np.random.default_rng([self.recipe.scenario.seed, STREAM, number // shared])
        draws = (crater_model(scenario, rng) for _ in range(self.sweep.draws))
        return _Case(number, scenario, (crater_model(scenario), *draws))

    def _contrast(self, model: CraterModel, scenario: Scenario) -> Array:
        values = contrast(model, self.bench.cells(model, scenario.model.station_height_m).mesh)
        if not np.abs(values).max() < IMPOSSIBLE:
            raise ArithmeticError("the density contrast is beyond that of any rock: the structure folds over itself")
        return values

    def _forwarded(self, cases: Sequence[_Case], contrasts: Sequence[Sequence[Array]]) -> tuple[list[Array], Array]:
        """Profiles (n_model, n_radius) of every case, model and draws, and the excess mass of its model."""
        profiles = [np.empty((len(case.models), self.bench.radius.size)) for case in cases]
        masses = np.empty(len(cases))
        groups: dict[int, list[tuple[int, int]]] = {}
        for i, case in enumerate(cases):
            for j, model in enumerate(case.models):
                cells = self.bench.cells(model, case.scenario.model.station_height_m)
                groups.setdefault(id(cells.table), []).append((i, j))
        for members in groups.values():
            i, j = members[0]
            cells = self.bench.cells(cases[i].models[j], cases[i].scenario.model.station_height_m)
            batch = np.stack([contrasts[i][j] for i, j in members])
            anomalies = cells.table.anomaly(batch)
            mass = batch.reshape(len(batch), -1) @ cells.volume
            for (i, j), anomaly, kilograms in zip(members, anomalies, mass, strict=True):
                profiles[i][j] = anomaly
                if j == 0:
                    masses[i] = kilograms
        return profiles, masses

    def _row(self, case: _Case, profiles: Array, mass: float, vanishing: float) -> Array:
        deformed = not is_axisymmetric(case.scenario.deformation)
        if deformed:
            profiles = self._deformed_profiles(case)
        peak, half_width = peak_of(self.bench.radius, profiles[0])
        seen = self._seen(case, profiles)
        values = [peak, profiles[0, 0], half_width / KM, mass, *seen, vanishing / KM]
        if self.sweep.draws:
            peaks = [peak_of(self.bench.radius, profile)[0] for profile in profiles[1:]]
            values += np.quantile(peaks, [0.05, 0.95]).tolist()
        pieces = [np.array(values)]
        if self.sweep.profiles:
            pieces.append(profiles[0])
        if self.sweep.grids:
            pieces.append(self._grid(case).ravel())
        row = np.concatenate(pieces)
        if not np.isfinite(np.delete(row, [2, 8])).all():  # half-width and vanishing level may be undefined
            raise ArithmeticError("the anomaly is not finite")
        return row

    def _seen(self, case: _Case, profiles: Array) -> tuple[float, float, float, float]:
        survey, inference = self.bench.survey(case.scenario), case.scenario.inference
        count = self._rings(survey, case.scenario)
        templates = survey.response[:count] @ profiles.T
        scatter = shape_scatter(templates, survey.area[:count]) if self.sweep.draws else None
        found = detectability(
            survey.likelihood(count, scatter),
            list(survey.covariances[:, :count, :count]),
            templates,
            false_alarm_probability=inference.false_alarm_probability,
            band_km=(np.nan, np.nan),
        )
        return found.snr, found.snr_low, found.snr_high, found.detection_probability

    def _rings(self, survey: Survey, scenario: Scenario) -> int:
        return survey.count(KM * scenario.inference.outer_radius_in_diameters * scenario.crater.rim_diameter_km)

    def _vanishing(self, cases: Sequence[_Case]) -> Array:
        """Deepest erosion at which every case is still detected, m; NaN where it is not asked for or deformed."""
        levels = np.full(len(cases), np.nan)
        if not self.sweep.vanishing:
            return levels
        groups: dict[int, list[int]] = {}
        fresh = [_uneroded(case.models[0]) for case in cases]
        for i, case in enumerate(cases):
            if is_axisymmetric(case.scenario.deformation):
                groups.setdefault(id(self.bench.fading(fresh[i], case.scenario)), []).append(i)
        for members in groups.values():
            fading = self.bench.fading(fresh[members[0]], cases[members[0]].scenario)
            means = fading.ring_means(np.stack([contrast(fresh[i], fading.mesh) for i in members]))
            for number, i in enumerate(members):
                levels[i] = self._last_seen(cases[i].scenario, fading.cuts, means[:, number])
        return levels

    def _last_seen(self, scenario: Scenario, cuts: Array, means: Array) -> float:
        """Deepest crossing of the ratio needed; beyond the last cut nothing is left."""
        survey, inference = self.bench.survey(scenario), scenario.inference
        needed = required_snr(inference.detection_probability, inference.false_alarm_probability)
        count = self._rings(survey, scenario)
        snr = np.linalg.norm(survey.likelihood(count).whiten(means[:, :count].T), axis=0)
        levels = np.append(cuts, 2 * cuts[-1] - cuts[-2])
        return float(last_crossing(levels, np.append(snr, 0.0)[:, None], needed)[0])

    def _deformed_profiles(self, case: _Case) -> Array:
        """One by one, each on its own cells, as the round ones are."""
        height = case.scenario.model.station_height_m
        meshes = [self.bench.cells(model, height).mesh for model in case.models]
        profiles = [
            deformed_profiles(case.scenario, [model], mesh, self.bench.radius, "sphere")[0]
            for model, mesh in zip(case.models, meshes, strict=True)
        ]
        return np.array(profiles)

    def _grid(self, case: _Case) -> Array:
        model, height = case.models[0], case.scenario.model.station_height_m
        mesh, axis = self.bench.cells(model, height).mesh, self.grid_axis
        if not is_axisymmetric(case.scenario.deformation):
            return deformed_map(case.scenario, model, mesh, axis).values
        prisms = layered_prisms(density_section(model, mesh=mesh), axis, axis)
        return np.asarray(grid_anomaly(prisms, height_m=height).values)


def peak_of(radius: Array, profile: Array) -> tuple[float, float]:
    """Largest anomaly by size with its sign, mGal, and the radius beyond it of half that anomaly, m (NaN if none)."""
    at = int(np.argmax(np.abs(profile)))
    peak = float(profile[at])
    if peak == 0.0:
        return 0.0, float("nan")
    outward = profile[at:] / peak
    below = int(np.argmax(outward < 0.5))
    if below == 0:
        return peak, float("nan")
    step = [below, below - 1]
    return peak, float(np.interp(0.5, outward[step], radius[at:][step]))


def _uneroded(model: CraterModel) -> CraterModel:
    """The structure on its first day, without what the region's unloading did to it."""
    ground = Ground(cover_density=model.ground.cover_density)
    return dataclasses.replace(model, ground=ground, rebound=None)


def _reason(error: Exception) -> str:
    """Why a case failed, in one line."""
    text = " | ".join(line.removeprefix("case: ") for line in str(error).splitlines() if line.strip())
    return text or type(error).__name__
