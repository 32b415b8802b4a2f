"""The density section: units assembled on depth and radius, stripped and buried, as contrast to the intact column."""

from __future__ import annotations

import functools
from collections.abc import Mapping
from typing import Any

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

_CONTRAST_NAME = "density minus that of the intact column at the same depth"
_COORDINATES = ("depth", "radius", "depth_edges", "radius_edges")


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
    contrast = cells.contrast
    flags = {
        "flag_values": np.arange(len(UNITS), dtype=np.int8),
        "flag_meanings": " ".join(name.replace(" ", "_") for name in UNITS),
    }
    return _dataset(
        {
            "density": (_density(model, cells, contrast), "kg m-3", "bulk density", {}),
            "density_contrast": (contrast, "kg m-3", _CONTRAST_NAME, {}),
            "porosity": (
                _porosity(model, cells),
                "1",
                "porosity of rock, breccia and suevite, sediment aside",
                {},
            ),
            "unit": (_dominant(model, cells), "1", "dominant unit of the cell", flags),
        },
        ("depth", "radius"),
        mesh,
        {"title": "density section of an impact structure", "provenance": labels.provenance(**facts)},
    )


def section_parts(scenario: Scenario | CraterModel, *, mesh: Mesh | None = None) -> xr.Dataset:
    """The section split by cause: density_contrast (part, depth, radius), kg/m³; the parts add up to the whole."""
    model, mesh, facts = _prepare(scenario, mesh)
    parts: Any = (contrast_parts(model, mesh), "kg m-3", f"{_CONTRAST_NAME}, by cause", {})
    attrs = {"title": "density section by cause", "provenance": labels.provenance(**facts)}
    section = _dataset({"density_contrast": parts}, ("part", "depth", "radius"), mesh, attrs)
    return section.assign_coords(part=list(PARTS))


def _prepare(scenario: Scenario | CraterModel, mesh: Mesh | None) -> tuple[CraterModel, Mesh, dict[str, object]]:
    facts: dict[str, object] = {"versions": _versions()}
    if isinstance(scenario, Scenario):
        facts["scenario"] = scenario_hash(scenario)
        model = crater_model(scenario)
        size = {"layers": scenario.model.layers, "rings": scenario.model.rings}
    else:
        model, size = scenario, {}
    return model, mesh or default_mesh(model, **size), facts


@functools.cache
def _versions() -> dict[str, str]:
    return labels.versions()


def _dataset(
    variables: Mapping[str, tuple[Any, str, str, dict[str, Any]]],
    dims: tuple[str, ...],
    mesh: Mesh,
    attrs: dict[str, str],
) -> xr.Dataset:
    """All variables in one construction, several times faster than one array after the other."""
    coords = {name: labels.coordinate(name, getattr(mesh, name)) for name in _COORDINATES}
    return xr.Dataset(
        {
            name: (dims, values, {"units": units, "long_name": long_name, **extra})
            for name, (values, units, long_name, extra) in variables.items()
        },
        coords=coords,
        attrs=attrs,
    )


def _density(model: CraterModel, cells: Cells, contrast: Array) -> Array:
    """Bulk density: that of the cover, of the intact column, and the contrast on top."""
    cover = _cover(model, cells)[:, None]
    intact = model.column.density(cells.middle)[:, None]
    return cover * model.ground.cover_density + (1.0 - cover) * intact + contrast


def _cover(model: CraterModel, cells: Cells) -> Array:
    """Share of each layer in the cover that buried the structure."""
    return 1.0 - cells.rock[:, -1] if model.ground.cover else np.zeros(len(cells.rock))


def _porosity(model: CraterModel, cells: Cells) -> Array:
    """Porosity of target rock, breccia and suevite; that of sediment is not told apart."""
    _, suevite, _, breccia = cells.shares
    fill = model.fill
    before = model.column.porosity(cells.middle)[:, None]
    broken = -(breccia * fill.breccia_contrast + suevite * fill.suevite_contrast) / PORE_DEFICIT
    total = cells.rock * (before + cells.porosity_change)
    total[: len(broken)] += broken
    return np.maximum(total, 0.0)


def _dominant(model: CraterModel, cells: Cells) -> NDArray[np.int8]:
    """Code of the unit that holds most of each cell."""
    below = np.where((cells.middle > model.column.moho)[:, None], 6, 0)
    unit = np.where(cells.porosity_change >= FRACTURED_FROM, 5, below).astype(np.int8)
    filled = 2 if model.fill.hollow == "sediment" or model.ground.loads else 7
    codes = np.array([filled, 8, 3, 4], dtype=np.int8)
    reached = len(cells.shares[0])
    shares = np.stack([*cells.shares, cells.rock[:reached]])
    largest = np.argmax(shares, axis=0)
    unit[:reached] = np.where(largest < codes.size, codes[np.minimum(largest, codes.size - 1)], unit[:reached])
    unit[_cover(model, cells) > 0.5] = 1
    return unit
