"""What each kilometre of erosion removes: contrasts of ever deeper cuts, units stripped, and how long it takes."""

from __future__ import annotations

import dataclasses

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin import labels
from gravbasin.crater.cells import PARTS, Mesh, assemble, default_mesh
from gravbasin.crater.model import CraterModel, crater_model
from gravbasin.scenario import Scenario
from gravbasin.scenario_file import scenario_hash

__all__ = ["EROSION_RATES", "erosion_chart"]

Array = NDArray[np.float64]
KM = 1000.0

EROSION_RATES = {
    "craton, slow": 1.0,
    "craton, usual": 2.5,
    "craton, fast; common practice, slow": 10.0,
    "common practice, fast": 50.0,
}
"""m/Myr. Cratons: below 2.5 for 1.5-1.7 Gyr (Flowers et al. 2006; Hall et al. 2021), 1-10 as a prior; bare rock has a
median of 5.4 (Portenga & Bierman 2011); 5-50 is common practice."""

STRIPPED_UNITS = ("hollow", "suevite", "melt rock", "breccia", "fractured rock", "other rock")


def erosion_chart(scenario: Scenario, *, deepest_km: float | None = None, step_km: float = 1.0) -> xr.Dataset:
    """The structure cut ever deeper, on one mesh below each cut.

    Anomalies are the caller's: one table of ring attractions on the mesh serves every cut, and the difference of two
    cuts is what the rock between them carried.

    Parameters
    ----------
    scenario : Scenario
        Its history is replaced: erosion from 0 down, no burial.
    deepest_km : float, optional
        Deepest cut; by default one step below the base of the structure.
    step_km : float
        Rock between two cuts.

    Returns
    -------
    Dataset
        ``density_contrast`` (erosion, part, depth, radius), kg/m³, with `depth` below each cut's own ground;
        ``stripped_volume`` (slice, stripped_unit), km³ within the model: which unit goes when;
        ``time`` (slice, rate), Myr, to strip each slice at each of `EROSION_RATES`; edges as in every section.

    Examples
    --------
    >>> chart = erosion_chart(Scenario(crater={"rim_diameter_km": 10.0}), step_km=0.5)
    >>> float(chart.time.sel(rate="common practice, fast")[0])
    10.0
    """
    fresh = dataclasses.replace(crater_model(_uneroded(scenario)), rebound=None)
    deepest = deepest_km if deepest_km is not None else step_km * np.ceil(fresh.base / KM / step_km)
    cuts: Array = step_km * np.arange(round(float(deepest) / step_km) + 1.0)
    mesh = default_mesh(fresh, layers=scenario.model.layers, rings=scenario.model.rings)
    contrast = np.stack([_parts(_cut(fresh, KM * depth), mesh) for depth in cuts])
    stripped = _stripped(fresh, mesh, KM * cuts)
    rates = np.array(list(EROSION_RATES.values()))
    names = ("depth", "radius", "depth_edges", "radius_edges")
    facts = labels.provenance(scenario=scenario_hash(scenario), versions=labels.versions())
    return xr.Dataset(
        {
            "density_contrast": (
                ("erosion", "part", "depth", "radius"),
                contrast,
                {"units": "kg m-3", "long_name": "density contrast by cause below each cut"},
            ),
            "stripped_volume": (
                ("slice", "stripped_unit"),
                stripped,
                {"units": "km3", "long_name": "volume of each unit within each slice"},
            ),
            "time": (
                ("slice", "rate"),
                np.diff(cuts)[:, None] * KM / rates,
                {"units": "Myr", "long_name": "time to strip a slice at each erosion rate"},
            ),
        },
        coords={
            **{name: labels.coordinate(name, getattr(mesh, name)) for name in names},
            "erosion": (
                "erosion",
                KM * cuts,
                {"units": "m", "long_name": "rock stripped below the ground before impact"},
            ),
            "slice": ("slice", KM * cuts[1:], {"units": "m", "long_name": "lower end of the slice"}),
            "part": list(PARTS),
            "stripped_unit": list(STRIPPED_UNITS),
            "rate": list(EROSION_RATES),
            "rate_value": ("rate", rates, {"units": "m Myr-1", "long_name": "erosion rate"}),
        },
        attrs={"title": "what each slice of erosion removes", "provenance": facts},
    )


def _uneroded(scenario: Scenario) -> Scenario:
    bare = {"erosion_km": None, "erosion_rate_m_per_myr": None, "burial_km": 0.0, "events": ()}
    return scenario.model_copy(update={"history": scenario.history.model_copy(update=bare)})


def _cut(model: CraterModel, depth: float) -> CraterModel:
    return dataclasses.replace(model, ground=dataclasses.replace(model.ground, erosion=depth))


def _parts(model: CraterModel, mesh: Mesh) -> Array:
    cells = assemble(model, mesh)
    return np.stack([cells.whole(part) for part in cells.parts])


def _stripped(fresh: CraterModel, mesh: Mesh, cuts: Array) -> Array:
    """Volume of each unit between two cuts, km³: exact in depth, on the rings of the mesh out to the rim."""
    within = mesh.radius <= fresh.fill.rim_radius
    area = np.pi * np.diff(mesh.radius_edges**2)[within]
    slices = Mesh(cuts, mesh.radius_edges)
    cells = assemble(fresh, slices)
    height = np.diff(cuts)[:, None]
    volumes = [(cells.whole(share) * height)[:, within] @ area for share in cells.shares]
    # Fractures end within a slice, so that rock is told apart on the fine mesh and summed by slice.
    fine = assemble(fresh, mesh)
    broken = fine.rock * (np.abs(fine.porosity_change) >= 0.005) * np.diff(mesh.depth_edges)[:, None]
    running = np.concatenate([[0.0], np.cumsum(broken[:, within] @ area)])
    rock = (cells.rock * height)[:, within] @ area
    fractured = np.minimum(np.diff(np.interp(cuts, mesh.depth_edges, running)), rock)
    return np.stack([*volumes, fractured, rock - fractured], axis=1) / KM**3
