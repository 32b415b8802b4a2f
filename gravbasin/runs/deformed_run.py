"""The modelled anomaly of a deformed structure: its grid, and its mean over circles."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from typing import Literal

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin import labels
from gravbasin.crater import CraterModel, Mesh, density_section
from gravbasin.forward.deformation import azimuthal_mean
from gravbasin.forward.layers import grid_anomaly, layered_prisms
from gravbasin.forward.motion import rock_above_m
from gravbasin.forward.rings import ring_table
from gravbasin.scenario import Scenario

__all__ = ["deformed_anomaly", "deformed_map", "deformed_profiles"]

Array = NDArray[np.float64]


def deformed_anomaly(
    scenario: Scenario, model: CraterModel, mesh: Mesh, step: float, radius: Array, earth: Literal["flat", "sphere"]
) -> tuple[Array, xr.DataArray]:
    """Mean anomaly over circles at `radius` (m), and the anomaly on a grid of this step (m) about the centre, mGal."""
    (section,), means = _bent(scenario, [model], mesh)
    half = int(np.ceil(float(means[0].radius_edges[-1]) / step)) + 2
    grid = _on_axis(scenario, section, step * np.arange(-half, half + 1.0))
    return _profiles(scenario, means, radius, earth)[0], grid


def deformed_profiles(
    scenario: Scenario, models: Sequence[CraterModel], mesh: Mesh, radius: Array, earth: Literal["flat", "sphere"]
) -> Array:
    """Mean anomaly over circles of deformed structures, (n_model, n_radius), mGal.

    Parameters
    ----------
    scenario : Scenario
        With its deformation.
    models : sequence of CraterModel
        The structures before it.
    mesh : Mesh
        Cells that hold them all.
    radius : (n_radius,) array, m
        Where the mean is wanted.
    earth : str
        "flat" or "sphere".
    """
    return _profiles(scenario, _bent(scenario, models, mesh)[1], radius, earth)


def deformed_map(scenario: Scenario, model: CraterModel, mesh: Mesh, axis: Array) -> xr.DataArray:
    """Anomaly on the nodes of an axis about the centre, m, easting and northing alike, mGal."""
    return _on_axis(scenario, _reaching_up(scenario, [model], mesh)[0], axis)


def _on_axis(scenario: Scenario, section: xr.Dataset, axis: Array) -> xr.DataArray:
    prisms = layered_prisms(section, axis, axis, deformation=scenario.deformation)
    return grid_anomaly(prisms, height_m=scenario.model.station_height_m)


def _bent(scenario: Scenario, models: Sequence[CraterModel], mesh: Mesh) -> tuple[list[xr.Dataset], list[xr.Dataset]]:
    """Sections, and their azimuthal means once deformed, on the rings that the widest one needs."""
    sections = _reaching_up(scenario, models, mesh)
    widest = max(range(len(models)), key=lambda i: models[i].outer_radius)
    first = azimuthal_mean(sections[widest], scenario.deformation)
    rings = first.radius_edges.values
    means = [
        first if i == widest else azimuthal_mean(section, scenario.deformation, radius_edges=rings)
        for i, section in enumerate(sections)
    ]
    return sections, means


def _profiles(
    scenario: Scenario, means: Sequence[xr.Dataset], radius: Array, earth: Literal["flat", "sphere"]
) -> Array:
    """Anomaly of means on common rings; where contrast sank deeper there are more layers below the common ones."""
    layers, rings = max((mean.depth_edges.values for mean in means), key=len), means[0].radius_edges.values
    contrasts = np.zeros((len(means), layers.size - 1, rings.size - 1))
    for contrast, mean in zip(contrasts, means, strict=True):
        contrast[: mean.sizes["depth"]] = mean.density_contrast.values
    table = ring_table(radius, rings, layers, height_m=scenario.model.station_height_m, earth=earth)
    return np.asarray(table.anomaly(contrasts))


def _reaching_up(scenario: Scenario, models: Sequence[CraterModel], mesh: Mesh) -> list[xr.Dataset]:
    """Sections with the rock above today's ground that the deformation brings down; a cover has none to bring."""
    sections = [density_section(model, mesh=mesh) for model in models]
    highest = max(rock_above_m(section, scenario.deformation) for section in sections)
    missing = min(highest, *(model.ground.erosion for model in models))
    if missing <= 0.0 or any(model.ground.cover > 0.0 for model in models):
        return sections
    # The same structures less eroded, on a mesh with layers added on top, then moved back up.
    thickness = max(missing / 20, float(mesh.depth_edges[1]))
    above = np.linspace(0.0, missing, int(np.ceil(missing / thickness)) + 1)
    edges = np.concatenate([above[:-1], missing + mesh.depth_edges])
    taller = Mesh(edges, mesh.radius_edges)
    depths = labels.coordinate("depth_edges", edges - missing)
    found = []
    for model in models:
        ground = dataclasses.replace(model.ground, erosion=model.ground.erosion - missing)
        section = density_section(dataclasses.replace(model, ground=ground), mesh=taller)
        depth = labels.coordinate("depth", section.depth.values - missing)
        found.append(section.assign_coords({"depth": depth, "depth_edges": depths}))
    return found
