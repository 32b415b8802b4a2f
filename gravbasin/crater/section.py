"""The density section: units assembled on depth and radius, stripped and buried, as contrast to the intact column."""

from __future__ import annotations

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin import labels
from gravbasin.crater.background import PORE_DEFICIT
from gravbasin.crater.cells import PARTS, Cells, Mesh, assemble, contrast_parts, default_mesh
from gravbasin.crater.model import CraterModel, crater_model
from gravbasin.scenario import Scenario
from gravbasin.scenario_file import scenario_hash

__all__ = ["UNITS", "density_section", "section_parts"]

Array = NDArray[np.float64]

UNITS = (
    "intact target",
    "cover",
    "sediment",
    "melt rock",
    "breccia",
    "fractured rock",
    "mantle",
    "water or air",
    "suevite",
)
"""Names of the unit codes, by code."""

FRACTURED_FROM = 0.005
"""Porosity above which rock below the floor is called fractured: the intact shield baseline (from memory)."""


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
    cells = assemble(model, mesh)
    contrast = np.asarray(sum(cells.parts))
    coords = {"depth": mesh.depth, "radius": mesh.radius}
    dims = ("depth", "radius")
    codes = _dominant(model, cells)
    unit = labels.data_array(codes, dims, coords, name="unit", units="1", long_name="dominant unit of the cell")
    unit.attrs |= {
        "flag_values": np.arange(len(UNITS), dtype=np.int8),
        "flag_meanings": " ".join(name.replace(" ", "_") for name in UNITS),
    }
    section = xr.Dataset(
        {
            "density": labels.data_array(
                _density(model, cells, contrast), dims, coords, name="density", units="kg m-3", long_name="bulk density"
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
                _porosity(model, cells),
                dims,
                coords,
                name="porosity",
                units="1",
                long_name="porosity of rock, breccia and suevite, sediment aside",
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


def _density(model: CraterModel, cells: Cells, contrast: Array) -> Array:
    """Bulk density: that of the cover, of the intact column, and the contrast on top."""
    cover = cells.shares[0]
    return cover * model.ground.cover_density + (1.0 - cover) * model.column.density(cells.middle)[:, None] + contrast


def _porosity(model: CraterModel, cells: Cells) -> Array:
    """Porosity of target rock, breccia and suevite; that of sediment is not told apart."""
    _, _, suevite, _, breccia, rock = cells.shares
    fill, before = model.fill, model.column.porosity(cells.middle)[:, None]
    broken = -(breccia * fill.breccia_contrast + suevite * fill.suevite_contrast) / PORE_DEFICIT
    return np.maximum(rock * (before + cells.porosity_change) + broken, 0.0)


def _dominant(model: CraterModel, cells: Cells) -> NDArray[np.int8]:
    largest = np.argmax(np.stack(cells.shares), axis=0)
    mantle = cells.middle[:, None] > model.column.moho
    rock = np.where(cells.porosity_change >= FRACTURED_FROM, 5, np.where(mantle, 6, 0))
    filled = 2 if model.fill.hollow == "sediment" or model.ground.loads else 7
    codes = (1, filled, 8, 3, 4)  # cover, hollow, suevite, melt, breccia
    return np.select([largest == i for i in range(5)], codes, default=rock).astype(np.int8)
