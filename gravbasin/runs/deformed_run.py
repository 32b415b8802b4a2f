"""The modelled anomaly of a deformed structure: its grid, and its mean over circles."""

from __future__ import annotations

import dataclasses
from typing import Literal

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin import labels
from gravbasin.crater import CraterModel, Mesh, density_section
from gravbasin.forward.deformation import azimuthal_mean
from gravbasin.forward.layers import grid_anomaly, layered_prisms
from gravbasin.forward.motion import rock_above_m
from gravbasin.forward.rings import ring_anomaly
from gravbasin.scenario import Scenario

__all__ = ["deformed_anomaly"]

Array = NDArray[np.float64]


def deformed_anomaly(
    scenario: Scenario,
    model: CraterModel,
    mesh: Mesh,
    grid: xr.DataArray,
    radius: Array,
    earth: Literal["flat", "sphere"],
) -> tuple[Array, xr.DataArray]:
    """Mean anomaly over circles at `radius` (m), and the anomaly on a grid as fine as the undeformed one, mGal.

    Parameters
    ----------
    scenario : Scenario
        With its deformation.
    model, mesh
        The undeformed structure and the cells of its section.
    grid : DataArray (northing, easting)
        The undeformed anomaly: sets the step.
    radius : (n_radius,) array, m
        Where the mean is wanted.
    earth : str
        "flat" or "sphere", as for the undeformed profile.
    """
    section = _reaching_up(scenario, model, mesh)
    mean = azimuthal_mean(section, scenario.deformation)
    height = scenario.model.station_height_m
    profile = ring_anomaly(mean, radius, height_m=height, earth=earth).values
    step = float(grid.easting[1] - grid.easting[0])
    half = int(np.ceil(float(mean.radius_edges[-1]) / step)) + 2
    axis = step * np.arange(-half, half + 1.0)
    prisms = layered_prisms(section, axis, axis, deformation=scenario.deformation)
    return profile, grid_anomaly(prisms, height_m=height)


def _reaching_up(scenario: Scenario, model: CraterModel, mesh: Mesh) -> xr.Dataset:
    """The section with the rock above today's ground that the deformation brings down; a cover has none to bring."""
    section = density_section(model, mesh=mesh)
    ground = model.ground
    missing = min(rock_above_m(section, scenario.deformation), ground.erosion)
    if missing <= 0.0 or ground.cover > 0.0:
        return section
    # The same structure less eroded, on a mesh with layers added on top, then moved back up.
    thickness = max(missing / 20, float(mesh.depth_edges[1]))
    above = np.linspace(0.0, missing, int(np.ceil(missing / thickness)) + 1)
    edges = np.concatenate([above[:-1], missing + mesh.depth_edges])
    less = dataclasses.replace(model, ground=dataclasses.replace(ground, erosion=ground.erosion - missing))
    taller = density_section(less, mesh=Mesh(edges, mesh.radius_edges))
    return taller.assign_coords(
        depth=labels.coordinate("depth", taller.depth.values - missing),
        depth_edges=labels.coordinate("depth_edges", edges - missing),
    )
