"""The modelled side of a run: section, anomaly on radii and on a grid, scatter, audit."""

from __future__ import annotations

import dataclasses
from typing import Any, Literal

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin import labels
from gravbasin.crater import (
    CraterModel,
    Mesh,
    contrast_parts,
    crater_model,
    default_mesh,
    density_section,
    shared_mesh,
)
from gravbasin.forward.audit import Audit, audit_anomaly
from gravbasin.forward.layers import grid_anomaly, layered_prisms
from gravbasin.forward.motion import is_axisymmetric
from gravbasin.forward.rings import RingTable, ring_table
from gravbasin.runs.deformed_run import deformed_anomaly, deformed_profiles
from gravbasin.scenario import Scenario
from gravbasin.scenario_file import scenario_hash

__all__ = ["Modelled", "model_anomaly", "profile_radii"]

Array = NDArray[np.float64]
KM = 1000.0

SPHERE_MATTERS_MGAL = 0.02
"""Flat-Earth error above which the spherical rings take over: the accuracy asked of the whole engine."""

DRAWN_CELLS = (40, 80)
"""Layers and rings on which draws of a deformed structure are bent, one by one."""


@dataclasses.dataclass(frozen=True, eq=False)
class Modelled:
    """What the scenario's structure looks like, with its scatter and its audit.

    Attributes
    ----------
    model : CraterModel
        The structure.
    section : Dataset (depth, radius)
        Its density.
    grid : DataArray (northing, easting)
        Anomaly on a grid about the centre, mGal.
    radius : (n_radius,) array
        Radii of the profiles, m.
    profile : (n_radius,) array
        Anomaly, mGal; of a deformed structure its mean over circles.
    parts : (part, n_radius) array
        The anomaly of the undeformed structure by cause; adds up to `profile` where nothing is deformed.
    draws : (n_draw, n_radius) array
        Anomaly of draws from the scatter of size laws and contrasts, mGal.
    earth : str
        "flat" or "sphere": which rings made the profiles.
    audit : Audit
        Fast engines against the reference.
    """

    model: CraterModel
    section: xr.Dataset
    grid: xr.DataArray
    radius: Array
    profile: Array
    parts: Array
    draws: Array
    earth: Literal["flat", "sphere"]
    audit: Audit

    @property
    def profiles(self) -> Array:
        """The model's profile and its draws as columns, (n_radius, 1 + n_draw), mGal."""
        return np.column_stack([self.profile, *self.draws])

    @property
    def peak(self) -> float:
        """Largest anomaly by size, with its sign, mGal."""
        return float(self.profile[np.argmax(np.abs(self.profile))])

    @property
    def half_width(self) -> float:
        """Radius beyond the peak at which the anomaly has fallen to half, m."""
        at = int(np.argmax(np.abs(self.profile)))
        outward = self.profile[at:] / self.profile[at] if self.profile[at] else np.zeros(1)
        below = int(np.argmax(outward < 0.5))
        if below == 0:
            return float("nan")
        x = np.interp(0.5, outward[[below, below - 1]], self.radius[at:][[below, below - 1]])
        return float(x)

    def mass_deficit(self) -> float:
        """Excess mass of the structure (negative: a deficit), kg, from the section itself."""
        section = self.section
        area = np.pi * np.diff(section.radius_edges.values**2)
        height = np.diff(section.depth_edges.values)
        return float(height @ section.density_contrast.values @ area)


def profile_radii(rim_diameter: float, farthest: float) -> Array:
    """Radii for a profile, m: even to beyond the rim, then growing to the farthest point of a map."""
    near = np.linspace(0.0, 0.8 * rim_diameter, 121)
    far = np.geomspace(near[-1], max(farthest, 2.0 * rim_diameter), 41)[1:]
    return np.concatenate([near, far])


def model_anomaly(scenario: Scenario, *, farthest: float = 0.0) -> Modelled:
    """Build the scenario's structure, its anomaly, its scatter, and audit the engines on it.

    Parameters
    ----------
    scenario : Scenario
        The question.
    farthest : float, m
        Distance to which the profile must reach (the farthest corner of the map).
    """
    options, height = scenario.model, scenario.model.station_height_m
    model = crater_model(scenario)
    draws = _draws(scenario)
    deepest = max([model, *draws], key=lambda m: m.base)
    mesh = default_mesh(deepest, layers=options.layers, rings=options.rings)
    section = density_section(scenario, mesh=mesh)
    radius = profile_radii(KM * scenario.crater.rim_diameter_km, farthest)
    grid, audit = _audited_grid(scenario, model, mesh, section)
    earth: Literal["flat", "sphere"] = "sphere" if audit.flat_earth_error_mgal > SPHERE_MATTERS_MGAL else "flat"
    table = ring_table(radius, mesh.radius_edges, mesh.depth_edges, height_m=height, earth=earth)
    parts = table.anomaly(contrast_parts(model, mesh))
    profile = parts.sum(axis=0)
    if is_axisymmetric(scenario.deformation):
        scattered = _forward_draws(draws, mesh, table)
    else:
        step = float(grid.easting[1] - grid.easting[0])
        profile, grid = deformed_anomaly(scenario, model, mesh, step, radius, earth)
        grid = _placed(scenario, grid)
        scattered = _bend_draws(scenario, draws, radius, earth)
    facts = labels.provenance(
        scenario=scenario_hash(scenario),
        versions=labels.versions("harmonica", "numpy", "scipy"),
        engine="layers",
        seed=scenario.seed,
    )
    grid.attrs |= {
        "provenance": facts,
        "long_name": "modelled anomaly: attraction of all contrasts to the intact column",
    }
    return Modelled(model, section, grid, radius, profile, parts, scattered, earth, audit)


def _draws(scenario: Scenario) -> list[CraterModel]:
    if not scenario.model.scatter:
        return []
    rng = np.random.default_rng([scenario.seed, 1])
    return [crater_model(scenario, rng) for _ in range(scenario.model.draws)]


def _forward_draws(draws: list[CraterModel], mesh: Mesh, table: RingTable) -> Array:
    if not draws:
        return np.zeros((0, table.kernel.shape[0]))
    contrasts = np.stack([contrast_parts(draw, mesh).sum(axis=0) for draw in draws])
    return np.asarray(table.anomaly(contrasts))


def _bend_draws(scenario: Scenario, draws: list[CraterModel], radius: Array, earth: Literal["flat", "sphere"]) -> Array:
    if not draws:
        return np.zeros((0, radius.size))
    coarse = shared_mesh(draws, layers=DRAWN_CELLS[0], rings=DRAWN_CELLS[1])
    return deformed_profiles(scenario, draws, coarse, radius, earth)


def _audited_grid(
    scenario: Scenario, model: CraterModel, mesh: Mesh, section: xr.Dataset
) -> tuple[xr.DataArray, Audit]:
    """Anomaly on a grid that resolves the structure, whatever the map's own step, and the audit of it."""
    diameter, options = KM * scenario.crater.rim_diameter_km, scenario.model
    step = KM * options.grid_step_km if options.grid_step_km else diameter / 80
    half = int(np.ceil(model.outer_radius / step)) + 2
    axis = step * np.arange(-half, half + 1.0)
    prisms = layered_prisms(section, axis, axis)
    grid = grid_anomaly(prisms, height_m=options.station_height_m)
    fine = default_mesh(model, layers=2 * options.layers, rings=2 * options.rings)
    audit = audit_anomaly(
        section,
        prisms,
        grid,
        height_m=options.station_height_m,
        stations=25,
        seed=scenario.seed,
        refined_section=density_section(scenario, mesh=fine),
    )
    return _placed(scenario, grid), audit


def _placed(scenario: Scenario, grid: xr.DataArray) -> xr.DataArray:
    """The grid in the map's coordinates, where there is a map."""
    if scenario.observed is None:
        return grid
    shifts = {
        "easting": KM * scenario.observed.centre_easting_km,
        "northing": KM * scenario.observed.centre_northing_km,
    }
    moved: dict[str, Any] = {name: labels.coordinate(name, grid[name].values + shift) for name, shift in shifts.items()}
    return grid.assign_coords(moved)
