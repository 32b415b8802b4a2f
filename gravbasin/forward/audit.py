"""Every fast anomaly checked in the same run: against harmonica, a finer mesh and a round Earth."""

from __future__ import annotations

from dataclasses import dataclass
from importlib import metadata
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin.errors import InputError
from gravbasin.forward.flat import flat_kernel
from gravbasin.forward.layers import PrismLayers, prism_layers
from gravbasin.forward.reference import harmonica_anomaly
from gravbasin.forward.sections import RingCells, ring_cells
from gravbasin.forward.sphere import sphere_kernel

__all__ = ["Audit", "audit_anomaly"]

Array = NDArray[np.float64]

_MAX_PAIRS = 1e7  # prism-station pairs of the direct sum: about two seconds on one core
_FEWEST_STATIONS = 5
_PROFILE_STATIONS = 25
_GRID_STATIONS = 100


@dataclass(frozen=True)
class Audit:
    """How far a modelled anomaly can be trusted.

    Attributes
    ----------
    reference : str
        The independent engine and its version.
    stations : int
        Grid points at which it was run.
    max_abs_difference_mgal : float
        Largest difference between it and the grid engine, for the same prisms.
    mesh_error_mgal : float
        Largest change of the ring profile when the section is refined; 0 when no refined section was given.
    grid_error_mgal : float
        Largest difference between the prism grid and the ring profile: square cells against true circles.
    flat_earth_error_mgal : float
        Largest difference between the ring profile on a flat and on a spherical Earth.
    """

    reference: str
    stations: int
    max_abs_difference_mgal: float
    mesh_error_mgal: float
    grid_error_mgal: float
    flat_earth_error_mgal: float

    @property
    def discretisation_error_mgal(self) -> float:
        """The larger of the errors of the section's mesh and of the grid's cells."""
        return max(self.mesh_error_mgal, self.grid_error_mgal)

    def as_dict(self) -> dict[str, Any]:
        """The entries of a verdict's ``audit`` table."""
        return {
            "reference": self.reference,
            "stations": self.stations,
            "max_abs_difference_mgal": self.max_abs_difference_mgal,
            "discretisation_error_mgal": self.discretisation_error_mgal,
            "flat_earth_error_mgal": self.flat_earth_error_mgal,
        }


def audit_anomaly(
    section: xr.Dataset,
    prisms: xr.Dataset,
    grid: xr.DataArray,
    *,
    height_m: float,
    seed: int,
    stations: int = 25,
    refined_section: xr.Dataset | None = None,
    centre: tuple[float, float] = (0.0, 0.0),
    max_pairs: float = _MAX_PAIRS,
) -> Audit:
    """Measure the errors of an anomaly grid and of the section behind it.

    Parameters
    ----------
    section, prisms, grid
        The section, its `layered_prisms` and their `grid_anomaly` at `height_m`.
    height_m : float
        Height of the stations above today's ground.
    seed : int
        Chooses the stations: the grid's peak, and others at random.
    stations : int
        Grid points to check with harmonica. Fewer are taken, down to 5, when the direct sum would visit more than
        `max_pairs` pairs; the audit says how many were used.
    refined_section : Dataset, optional
        The same structure on a finer mesh.
    centre : (float, float), m
        Easting and northing of the axis on the grid.
    max_pairs : float
        Prism-station pairs the direct sum may visit.

    Returns
    -------
    Audit

    Raises
    ------
    InputError
        The grid is not on the prisms' own columns, or a part is malformed.

    Notes
    -----
    The grid is compared with exact rings at up to 100 of its points, the mesh and the flat Earth on 25 radii from the
    axis to the section's rim, so each maximum is over that sample.
    """
    cells, layers = ring_cells(section, "audit_anomaly"), prism_layers(prisms, "audit_anomaly")
    values = _same_grid(grid, layers)
    rng = np.random.default_rng(seed)
    order = rng.permutation(values.size)
    peak = int(np.argmax(np.abs(values)))
    order = np.concatenate([[peak], order[order != peak]])

    affordable = int(max_pairs) // max(int(np.count_nonzero(layers.density)), 1)
    chosen = order[: min(stations, max(affordable, _FEWEST_STATIONS))]
    difference = _points_of(layers, chosen, prisms, height_m) - values.ravel()[chosen]

    sample = order[:_GRID_STATIONS]
    row, column = np.unravel_index(sample, values.shape)
    distance = np.hypot(layers.easting[column] - centre[0], layers.northing[row] - centre[1])
    grid_error = values.ravel()[sample] - _profile(cells, distance, height_m)

    radius = np.linspace(0.0, cells.radius_edges[-1], _PROFILE_STATIONS)
    flat = _profile(cells, radius, height_m)
    sphere = _product(sphere_kernel(radius, cells.radius_edges, cells.depth_edges, height_m), cells)
    finer = (
        flat if refined_section is None else _profile(ring_cells(refined_section, "audit_anomaly"), radius, height_m)
    )
    return Audit(
        reference=f"harmonica {metadata.version('harmonica')}",
        stations=int(chosen.size),
        max_abs_difference_mgal=_largest(difference),
        mesh_error_mgal=_largest(finer - flat),
        grid_error_mgal=_largest(grid_error),
        flat_earth_error_mgal=_largest(sphere - flat),
    )


def _same_grid(grid: xr.DataArray, layers: PrismLayers) -> Array:
    """The grid's values, if they lie on the prisms' columns."""
    if set(grid.dims) != {"northing", "easting"}:
        raise InputError("grid", grid.dims, "must have the dimensions northing and easting",
                         "give what grid_anomaly returned", "audit_anomaly")  # fmt: skip
    for name, axis in (("northing", layers.northing), ("easting", layers.easting)):
        given = np.asarray(grid[name], dtype=float)
        if given.shape != axis.shape or not np.allclose(given, axis, rtol=0.0, atol=1e-3):
            raise InputError(f"grid.{name}", f"{given.size} values from {given[0]:g} m",
                             "must equal the prisms' columns", "audit the grid made from these prisms",
                             "audit_anomaly")  # fmt: skip
    return np.asarray(grid.transpose("northing", "easting"), dtype=float)


def _points_of(layers: PrismLayers, chosen: NDArray[np.intp], prisms: xr.Dataset, height_m: float) -> Array:
    row, column = np.unravel_index(chosen, (layers.northing.size, layers.easting.size))
    return np.asarray(harmonica_anomaly(prisms, layers.easting[column], layers.northing[row], height_m))


def _profile(cells: RingCells, radius: Array, height_m: float) -> Array:
    """Flat rings without the table cache: these stations serve once."""
    return _product(flat_kernel(radius, cells.radius_edges, cells.depth_edges, height_m), cells)


def _product(kernel: Array, cells: RingCells) -> Array:
    return np.asarray(np.tensordot(kernel, cells.contrast, axes=2))


def _largest(values: Array) -> float:
    return float(np.abs(values).max())
