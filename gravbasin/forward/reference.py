"""The same models by harmonica: slow, independent, at any point."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin.constants import EARTH_RADIUS
from gravbasin.errors import InputError
from gravbasin.forward.layers import PrismLayers, prism_layers
from gravbasin.forward.result import anomaly_array
from gravbasin.forward.sections import finite_vector, ring_cells
from gravbasin.labels import versions

__all__ = ["harmonica_anomaly", "tesseroid_anomaly"]

Array = NDArray[np.float64]

_CHUNK = 250_000  # prisms at a time: their boundaries then take 12 MB
_SECTORS = 12  # longitudes a ring is cut into


def harmonica_anomaly(
    prisms: xr.Dataset, easting_m: Any, northing_m: Any, height_m: Any = 1.0, *, parallel: bool = False
) -> xr.DataArray:
    """Gravity anomaly of layered prisms at any points, by direct summation.

    Parameters
    ----------
    prisms : Dataset
        As `layered_prisms` returns it.
    easting_m, northing_m, height_m : (n_station,) arrays or scalars, m
        The points; they are broadcast against each other. Heights are above today's ground (depth 0).
    parallel : bool
        Use all cores. Leave it off inside threads and workers, where numba's threads may abort the process.

    Returns
    -------
    DataArray (station), mGal
        Positive for excess mass. Prisms without contrast are left out; their number is in the provenance.

    Raises
    ------
    InputError
        The prisms are not a full set of layers, or the points do not match or are not finite.

    Examples
    --------
    >>> prisms = xr.Dataset(
    ...     {"density_contrast": (("layer", "northing", "easting"), np.full((1, 2, 2), 100.0))},
    ...     coords={"northing": [-500.0, 500.0], "easting": [-500.0, 500.0], "depth_edges": [0.0, 1e3]},
    ... )
    >>> above = harmonica_anomaly(prisms, [0.0, 3e3], 0.0, 10.0)
    >>> bool(above[0] > above[1] > 0.0)
    True
    """
    layers = prism_layers(prisms, "harmonica_anomaly")
    points = _points(easting_m, northing_m, height_m)
    values, used = _sum_prisms(layers, points, parallel)
    easting, northing, height = points
    return anomaly_array(
        values,
        ("station",),
        {"easting": easting, "northing": northing, "height": height},
        engine="harmonica prism_gravity",
        height_m=[float(height.min()), float(height.max())],
        prisms=used,
        null_prisms=layers.density.size - used,
        versions=versions("harmonica", "choclo"),
    )


def _points(*axes: Any) -> tuple[Array, Array, Array]:
    names = ("easting_m", "northing_m", "height_m")
    vectors = [finite_vector(name, axis, "harmonica_anomaly") for name, axis in zip(names, axes, strict=True)]
    sizes = {v.size for v in vectors} - {1}
    if len(sizes) > 1:
        raise InputError(
            "easting_m, northing_m, height_m",
            f"{[v.size for v in vectors]} values",
            "must have one length",
            "give one value per point, or one for all",
            "harmonica_anomaly",
        )
    easting, northing, height = (np.ascontiguousarray(v) for v in np.broadcast_arrays(*vectors))
    return easting, northing, height


def _sum_prisms(layers: PrismLayers, points: tuple[Array, Array, Array], parallel: bool) -> tuple[Array, int]:
    import harmonica

    half_n, half_e = (0.5 * s for s in layers.spacing)
    total = np.zeros(points[0].size)
    flat = layers.density.reshape(-1)
    filled = np.flatnonzero(flat)
    for start in range(0, filled.size, _CHUNK):
        chunk = filled[start : start + _CHUNK]
        layer, row, column = np.unravel_index(chunk, layers.density.shape)
        east, north = layers.easting[column], layers.northing[row]
        top, bottom = -layers.depth_edges[layer], -layers.depth_edges[layer + 1]  # upward
        boundaries = np.column_stack([east - half_e, east + half_e, north - half_n, north + half_n, bottom, top])
        total += harmonica.prism_gravity(points, boundaries, flat[chunk], field="g_z", parallel=parallel)
    return total, filled.size


def tesseroid_anomaly(
    section: xr.Dataset, radius_m: Any, height_m: float = 0.0, *, sectors: int = _SECTORS, parallel: bool = False
) -> xr.DataArray:
    """Gravity anomaly of a section wrapped on a sphere, by tesseroids with the structure's axis through the pole.

    Parameters
    ----------
    section : Dataset
        ``density_contrast`` on (depth, radius) with ``depth_edges`` and ``radius_edges`` (arc lengths at the ground).
    radius_m : (n_station,) array, m
        Arc lengths of the stations from the axis.
    height_m : float
        Height of the stations above today's ground, ≥ 0.
    sectors : int
        Pieces each ring is cut into, at least 4.
    parallel : bool
        Use all cores; leave it off inside threads and workers.

    Returns
    -------
    DataArray (radius), mGal
        With the pole on the axis every ring is a whole number of tesseroids, so only their quadrature (about 0.1 %)
        separates this from the spherical ring engine.

    Raises
    ------
    InputError
        The section lacks a part, or the stations are underground.
    """
    import harmonica

    cells = ring_cells(section, "tesseroid_anomaly")
    radius = finite_vector("radius_m", radius_m, "tesseroid_anomaly")
    if not height_m >= 0.0:
        raise InputError(
            "height_m", height_m, "must be 0 or more", "tesseroids need stations above them", "tesseroid_anomaly"
        )
    layer, ring = np.nonzero(cells.contrast)
    count, width = layer.size, 360.0 / sectors
    layer, ring, west = np.tile(layer, sectors), np.tile(ring, sectors), np.repeat(width * np.arange(sectors), count)
    latitude = 90.0 - np.degrees(cells.radius_edges / EARTH_RADIUS)
    level = EARTH_RADIUS - cells.depth_edges
    boundaries = np.column_stack(
        [west, west + width, latitude[ring + 1], latitude[ring], level[layer + 1], level[layer]]
    )
    # halfway along a sector, so that no station sees an edge
    stations = (
        np.full(radius.size, 0.5 * width),
        90.0 - np.degrees(radius / EARTH_RADIUS),
        np.full(radius.size, EARTH_RADIUS + height_m),
    )
    density = cells.contrast[layer, ring]
    values = harmonica.tesseroid_gravity(stations, boundaries, density, field="g_z", parallel=parallel)
    return anomaly_array(
        values,
        ("radius",),
        {"radius": radius},
        engine="harmonica tesseroid_gravity",
        height_m=float(height_m),
        earth_radius_m=EARTH_RADIUS,
        tesseroids=int(layer.size),
        versions=versions("harmonica", "choclo"),
    )
