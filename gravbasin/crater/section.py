"""The density section: units assembled on depth and radius, stripped and buried, as contrast to the intact column."""

from __future__ import annotations

import dataclasses
from functools import cached_property

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin import labels
from gravbasin.crater.damage import FLUID_DENSITY
from gravbasin.crater.model import CraterModel, crater_model
from gravbasin.scenario import Scenario
from gravbasin.scenario_file import scenario_hash

__all__ = ["PARTS", "UNITS", "Mesh", "contrast_parts", "default_mesh", "density_section", "section_parts"]

Array = NDArray[np.float64]

PARTS = ("sediment in the hollow", "melt", "breccia", "fractures", "crustal uplift", "Moho uplift")
"""Causes of contrast; they add up to the whole."""

UNITS = ("intact target", "cover", "sediment", "melt rock", "breccia", "fractured rock", "mantle", "water or air")
"""Names of the unit codes, by code."""

FRACTURED_FROM = 0.005
"""Porosity above which rock below the floor is called fractured: the intact shield baseline (from memory)."""


@dataclasses.dataclass(frozen=True)
class Mesh:
    """Edges of the section's cells, m: depth below today's ground, distance from the centre."""

    depth_edges: Array
    radius_edges: Array

    @cached_property
    def radius(self) -> Array:
        """Middle of every ring, m."""
        return 0.5 * (self.radius_edges[1:] + self.radius_edges[:-1])

    @cached_property
    def depth(self) -> Array:
        """Middle of every layer, m."""
        return 0.5 * (self.depth_edges[1:] + self.depth_edges[:-1])


def default_mesh(model: CraterModel, *, layers: int = 80, rings: int = 160) -> Mesh:
    """Even rings to where the model ends; layers that grow with depth, thinnest at the ground.

    Parameters
    ----------
    model : CraterModel
        Sets how deep and how wide the mesh must be.
    layers, rings : int
        Number of cells in depth and in radius.
    """
    ground = model.ground
    base = max(model.base - ground.erosion, 1000.0)
    growth = 3.0  # the deepest layer is exp(3) = 20 times the thinnest
    below = base * np.expm1(growth * np.arange(layers + 1) / layers) / np.expm1(growth)
    return Mesh(_with_cover(below, ground.cover), np.linspace(0.0, model.outer_radius, rings + 1))


def _with_cover(edges: Array, cover: float) -> Array:
    """Edges below the cover's base, with a few layers of cover put on top and as many edges as before."""
    if cover == 0:
        return edges
    count = max(2, edges.size // 20)
    kept = np.concatenate(
        [edges[:1], np.interp(np.linspace(0, 1, edges.size - count)[1:], np.linspace(0, 1, edges.size), edges)]
    )
    return np.concatenate([np.linspace(0.0, cover, count + 1)[:-1], cover + kept])


@dataclasses.dataclass(frozen=True)
class _Cells:
    """Contrast by part, with what else a reader wants to know of every cell."""

    parts: Array
    porosity: Array
    unit: Array
    background: Array


def contrast_parts(model: CraterModel, mesh: Mesh) -> Array:
    """Density contrast of every cell by cause.

    Parameters
    ----------
    model : CraterModel
        The structure.
    mesh : Mesh
        Any mesh; thin units are averaged over the cells they cross, so their mass does not depend on it.

    Returns
    -------
    (part, depth, radius) array, kg/m³
        In the order of `PARTS`.
    """
    return _assemble(model, mesh).parts


def density_section(scenario: Scenario | CraterModel, *, mesh: Mesh | None = None) -> xr.Dataset:
    """The density section of a scenario.

    Parameters
    ----------
    scenario : Scenario or CraterModel
        What to build.
    mesh : Mesh, optional
        Cells to build it on; by default those of the scenario's resolution.

    Returns
    -------
    Dataset (depth, radius)
        density, density_contrast (kg/m³), porosity (1), unit (codes with CF flag_meanings), with `depth_edges` and
        `radius_edges` (m). Depth is positive down from today's ground. Contrast is relative to the intact column.

    Examples
    --------
    >>> from gravbasin.scenario import Scenario
    >>> section = density_section(Scenario(crater={"rim_diameter_km": 30.0}))
    >>> section.sizes["radius"]
    160
    """
    model, mesh, facts = _prepare(scenario, mesh)
    cells = _assemble(model, mesh)
    contrast = cells.parts.sum(axis=0)
    coords = {"depth": mesh.depth, "radius": mesh.radius}
    dims = ("depth", "radius")
    unit = labels.data_array(cells.unit, dims, coords, name="unit", units="1", long_name="dominant unit of the cell")
    unit.attrs |= {
        "flag_values": np.arange(len(UNITS), dtype=np.int8),
        "flag_meanings": " ".join(name.replace(" ", "_") for name in UNITS),
    }
    section = xr.Dataset(
        {
            "density": labels.data_array(
                cells.background + contrast, dims, coords, name="density", units="kg m-3", long_name="bulk density"
            ),
            "density_contrast": labels.data_array(
                contrast,
                dims,
                coords,
                name="density_contrast",
                units="kg m-3",
                long_name="density minus that of the intact column at the same depth",
            ),
            "porosity": labels.data_array(
                cells.porosity,
                dims,
                coords,
                name="porosity",
                units="1",
                long_name="porosity of fractures and breccia, sediment aside",
            ),
            "unit": unit,
        },
        attrs={"title": "density section of an impact structure", "provenance": labels.provenance(**facts)},
    )
    return _with_edges(section, mesh)


def section_parts(scenario: Scenario | CraterModel, *, mesh: Mesh | None = None) -> xr.Dataset:
    """The section split by cause: density_contrast (part, depth, radius), kg/m³; the parts add up to the whole."""
    model, mesh, facts = _prepare(scenario, mesh)
    contrast = labels.data_array(
        contrast_parts(model, mesh),
        ("part", "depth", "radius"),
        {"depth": mesh.depth, "radius": mesh.radius},
        name="density_contrast",
        units="kg m-3",
        long_name="density contrast by cause",
    ).assign_coords(part=list(PARTS))
    section = xr.Dataset({"density_contrast": contrast}, attrs={"provenance": labels.provenance(**facts)})
    return _with_edges(section, mesh)


def _prepare(scenario: Scenario | CraterModel, mesh: Mesh | None) -> tuple[CraterModel, Mesh, dict[str, object]]:
    facts: dict[str, object] = {"versions": labels.versions()}
    if isinstance(scenario, Scenario):
        facts["scenario"] = scenario_hash(scenario)
        model = crater_model(scenario)
        size = {"layers": scenario.model.layers, "rings": scenario.model.rings}
    else:
        model, size = scenario, {}
    return model, mesh or default_mesh(model, **size), facts


def _with_edges(section: xr.Dataset, mesh: Mesh) -> xr.Dataset:
    return section.assign_coords(
        depth_edges=labels.coordinate("depth_edges", mesh.depth_edges),
        radius_edges=labels.coordinate("radius_edges", mesh.radius_edges),
    )


def _assemble(model: CraterModel, mesh: Mesh) -> _Cells:
    ground, column = model.ground, model.column
    edges = np.maximum(ground.original_depth(mesh.depth_edges), ground.erosion)
    top, bottom = edges[:-1, None], edges[1:, None]
    height = np.diff(mesh.depth_edges)[:, None]
    hollow, melt, floor = (z[None, :] for z in model.fill.interfaces(mesh.radius))

    def share(upper: Array, lower: Array) -> Array:
        """Share of each cell between two interfaces."""
        return np.maximum(np.minimum(bottom, lower) - np.maximum(top, upper), 0.0) / height

    middle = 0.5 * (edges[1:] + edges[:-1])
    intact = column.density(middle)[:, None]
    sediment = share(np.full_like(hollow, -np.inf), hollow)
    melt_share, breccia, rock = share(hollow, melt), share(melt, floor), share(floor, np.full_like(floor, np.inf))
    crust_rise, moho_rise = _uplift_contrast(model, mesh, edges, floor)
    solid = intact + crust_rise
    below_floor = 0.5 * (np.maximum(top, floor) + np.maximum(bottom, floor)) - floor
    at_impact = np.maximum(column.pressure(middle)[:, None] - column.pressure(hollow), 0.0)
    pressure = ground.largest_pressure(column, middle[:, None], at_impact)
    fractures = model.damage.open_porosity(below_floor, mesh.radius[None, :], pressure)
    fill_density = _hollow_density(model, middle)[:, None]
    parts = np.stack(
        [
            sediment * (fill_density - intact),
            melt_share * model.fill.melt_contrast,
            breccia * model.fill.breccia_contrast,
            -rock * fractures * (solid - model.damage.fluid_density),
            rock * crust_rise,
            rock * moho_rise,
        ]
    )
    breccia_porosity = np.maximum(-model.fill.breccia_contrast, 0.0) / (intact - model.damage.fluid_density)
    cover = 1.0 - np.diff(edges)[:, None] / height
    background = cover * ground.cover_density + (1.0 - cover) * intact
    shares = [cover + np.zeros_like(rock), sediment, melt_share, breccia, rock]
    unit = _dominant(shares, fractures, middle[:, None] > column.moho, model.fill.hollow)
    return _Cells(parts, rock * fractures + breccia * breccia_porosity, unit, background + np.zeros_like(rock))


def _uplift_contrast(model: CraterModel, mesh: Mesh, edges: Array, floor: Array) -> tuple[Array, Array]:
    """Mean contrast of the risen rock in every cell, crust and Moho apart: that of the interval it came from."""
    column = model.column
    rise = model.displacement.net_rise(edges, mesh.radius)
    upper, lower = np.maximum(edges[:-1, None], floor), np.maximum(edges[1:, None], floor)
    # Within the cell that the floor cuts, the rise is taken as linear.
    span = np.maximum(np.diff(edges)[:, None], 1e-9)
    slope = np.diff(rise, axis=0) / span
    source_top = upper + rise[:-1] + slope * (upper - edges[:-1, None])
    source_bottom = lower + rise[1:]
    here, source = lower - upper, np.maximum(source_bottom - source_top, 1e-9)
    crust = (column.crust_mass(source_bottom) - column.crust_mass(source_top)) / source
    intact = (column.crust_mass(lower) - column.crust_mass(upper)) / np.maximum(here, 1e-9)
    mantle_now = np.maximum(source_bottom - np.maximum(source_top, column.moho), 0.0) / source
    mantle_before = np.maximum(lower - np.maximum(upper, column.moho), 0.0) / np.maximum(here, 1e-9)
    exists = here > 1e-6
    return np.where(exists, crust - intact, 0.0), np.where(
        exists, column.moho_contrast * (mantle_now - mantle_before), 0.0
    )


def _hollow_density(model: CraterModel, depth: Array) -> Array:
    """Density of what lies in the hollow at a depth below the ground before impact, kg/m³."""
    fill, ground = model.fill, model.ground
    if fill.hollow == "air":
        return model.column.density(depth)
    if fill.hollow == "water":
        return np.full_like(depth, FLUID_DENSITY["fresh water"])
    if fill.compaction is None:
        return np.full_like(depth, fill.sediment_density)
    burial = np.maximum.reduce([depth, *(depth - stripped + cover for stripped, cover in ground.loads)])
    return fill.compaction.density(burial)


def _dominant(shares: list[Array], fractures: Array, mantle: Array, hollow: str) -> NDArray[np.int8]:
    largest = np.argmax(np.stack(shares), axis=0)
    rock = np.where(fractures >= FRACTURED_FROM, 5, np.where(mantle, 6, 0))
    filled = 2 if hollow == "sediment" else 7
    return np.select([largest == i for i in range(4)], [1, filled, 3, 4], default=rock).astype(np.int8)
