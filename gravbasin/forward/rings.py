"""Axisymmetric sections: a table of ring attractions once, then every model is one matrix product."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import Any, Literal, get_args

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike, NDArray

from gravbasin.constants import EARTH_RADIUS
from gravbasin.errors import InputError
from gravbasin.forward.flat import flat_kernel
from gravbasin.forward.result import anomaly_array
from gravbasin.forward.sections import ascending, finite_vector, ring_cells
from gravbasin.forward.sphere import sphere_kernel
from gravbasin.labels import versions

__all__ = ["Earth", "RingTable", "ring_anomaly", "ring_table"]

Array = NDArray[np.float64]
Earth = Literal["flat", "sphere"]

_CACHED_TABLES = 6  # about 30 MB each at 300 stations, 160 rings and 80 layers


@dataclass(frozen=True, eq=False)
class RingTable:
    """Attraction of each ring cell at each station, ready for any contrast on the same cells.

    Attributes
    ----------
    radius : (n_station,) array, m
        Distance of the stations from the axis.
    radius_edges, depth_edges : (n_ring + 1,), (n_depth + 1,) arrays, m
    height_m : float
        Height of the stations above today's ground.
    earth : "flat" or "sphere"
    kernel : (n_station, n_depth, n_ring) array, mGal per kg/m³
        Read-only, because tables are shared.
    """

    radius: Array
    radius_edges: Array
    depth_edges: Array
    height_m: float
    earth: Earth
    kernel: Array

    def anomaly(self, contrast: ArrayLike) -> Array:
        """Anomaly of one model or of many.

        Parameters
        ----------
        contrast : (n_depth, n_ring) or (n_model, n_depth, n_ring) array, kg/m³

        Returns
        -------
        (n_station,) or (n_model, n_station) array, mGal

        Raises
        ------
        InputError
            The cells do not match the table, or the contrast is not finite.
        """
        values = np.asarray(contrast, dtype=float)
        cells = self.kernel.shape[1:]
        if values.ndim not in (2, 3) or values.shape[-2:] != cells:
            raise InputError(
                "contrast",
                f"shape {values.shape}",
                f"must end in {cells} (depth, radius)",
                "use the cells the table was built for",
                "RingTable.anomaly",
            )
        rows = values.reshape(*values.shape[:-2], -1)
        result = rows @ self.kernel.reshape(self.radius.size, -1).T
        if not np.isfinite(result).all():
            raise InputError(
                "contrast",
                "NaN or infinity",
                "must be finite everywhere",
                "repair the model's densities",
                "RingTable.anomaly",
            )
        return np.asarray(result)


def ring_table(
    radius_m: ArrayLike,
    radius_edges: ArrayLike,
    depth_edges: ArrayLike,
    *,
    height_m: float = 0.0,
    earth: Earth = "flat",
) -> RingTable:
    """The table of ring attractions for given stations and cells.

    Parameters
    ----------
    radius_m : (n_station,) array, m
        Distances of the stations from the axis, ≥ 0, in any order; on the sphere, arc lengths at today's ground.
    radius_edges, depth_edges : ascending arrays, m
        Edges of the rings and layers. Stations may lie exactly on them.
    height_m : float
        Height of all stations above today's ground (depth 0).
    earth : "flat" or "sphere"
        Flat ground, or the section wrapped on a sphere of radius `gravbasin.constants.EARTH_RADIUS`.

    Returns
    -------
    RingTable
        Equal arguments return the same table from a small cache.

    Raises
    ------
    InputError
        Negative, unsorted or non-finite distances, or an unknown Earth.

    Examples
    --------
    >>> table = ring_table([0.0, 5e3], [0.0, 1e4], [0.0, 2e3])
    >>> np.round(table.anomaly([[-100.0]]), 6)  # a disc of 10 km radius and 2 km thickness, at its centre and inside
    array([-7.556679, -7.364704])
    """
    radius = finite_vector("radius_m", radius_m, "ring_table")
    rings = ascending("radius_edges", radius_edges, "ring_table")
    layers = ascending("depth_edges", depth_edges, "ring_table")
    for name, values in (("radius_m", radius), ("radius_edges", rings)):
        if values.min() < 0.0:
            raise InputError(name, values.min(), "must not be negative", "give distances from the centre", "ring_table")
    if not math.isfinite(height_m):
        raise InputError("height_m", height_m, "must be finite", "give metres above the ground", "ring_table")
    if earth not in get_args(Earth):
        raise InputError("earth", earth, "must be flat or sphere", "choose one of them", "ring_table")
    if earth == "sphere":
        _check_fits_sphere(max(radius.max(), rings[-1]), layers[-1], height_m)
    return _cached_table(radius.tobytes(), rings.tobytes(), layers.tobytes(), float(height_m), earth)


def _check_fits_sphere(widest: float, deepest: float, height_m: float) -> None:
    if widest > math.pi * EARTH_RADIUS * (1.0 + 1e-12):
        raise InputError("radius", widest, "must not pass the antipode", "use smaller distances", "ring_table")
    if deepest > EARTH_RADIUS or height_m <= -EARTH_RADIUS:
        raise InputError(
            "depth",
            max(deepest, -height_m),
            "must not pass the centre of the Earth",
            "use smaller depths",
            "ring_table",
        )


@lru_cache(maxsize=_CACHED_TABLES)
def _cached_table(radius: bytes, rings: bytes, layers: bytes, height_m: float, earth: Earth) -> RingTable:
    """The bytes are the content, so equal arrays find the same table whoever holds them."""
    r, a, z = (np.frombuffer(raw, dtype=float) for raw in (radius, rings, layers))
    kernel = flat_kernel(r, a, z, height_m) if earth == "flat" else sphere_kernel(r, a, z, height_m)
    kernel.flags.writeable = False
    return RingTable(r, a, z, height_m, earth, kernel)


def ring_anomaly(section: xr.Dataset, radius_m: Any, *, height_m: float = 0.0, earth: Earth = "flat") -> xr.DataArray:
    """Gravity anomaly of an axisymmetric section along a profile from its centre.

    Parameters
    ----------
    section : Dataset
        ``density_contrast`` on (depth, radius) with ``depth_edges`` and ``radius_edges``; cells are uniform rings.
    radius_m : (n_station,) array, m
        Distances from the centre.
    height_m : float
        Height of the stations above today's ground.
    earth : "flat" or "sphere"
        Flat ground (closed form), or the same section wrapped on a sphere.

    Returns
    -------
    DataArray (radius), mGal
        The attraction of all contrasts, positive down: what a complete Bouguer map shows once its regional is removed.

    Raises
    ------
    InputError
        The section lacks a part, or a value is out of range.

    Examples
    --------
    >>> section = xr.Dataset(
    ...     {"density_contrast": (("depth", "radius"), [[-100.0, 0.0]])},
    ...     coords={"depth_edges": [0.0, 2e3], "radius_edges": [0.0, 1e4, 1.5e4]},
    ... )
    >>> round(float(ring_anomaly(section, [0.0])[0]), 6)  # 2πGΔρ (z₂ + R − √(R² + z₂²))
    -7.556679
    """
    cells = ring_cells(section, "ring_anomaly")
    table = ring_table(radius_m, cells.radius_edges, cells.depth_edges, height_m=height_m, earth=earth)
    sphere = {"earth_radius_m": EARTH_RADIUS} if earth == "sphere" else {}
    return anomaly_array(
        table.anomaly(cells.contrast),
        ("radius",),
        {"radius": table.radius},
        engine="rings",
        earth=earth,
        height_m=table.height_m,
        versions=versions("numpy", "scipy"),
        **sphere,
    )
