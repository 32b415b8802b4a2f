"""How much of a map cell lies within a circle: exact areas, for prisms from rings and for ring means of grids."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

__all__ = ["disc_cell_area", "ring_fractions"]

Array = NDArray[np.float64]


def _quadrant_area(x: Array, y: Array, radius: Array) -> Array:
    """Area of the disc within 0 ≤ u ≤ x, 0 ≤ v ≤ y (all arguments ≥ 0)."""
    x, y = np.minimum(x, radius), np.minimum(y, radius)
    across = np.sqrt(np.maximum(radius**2 - y**2, 0.0))
    along = np.sqrt(np.maximum(radius**2 - x**2, 0.0))
    sector = 0.5 * radius**2 * (np.arctan2(x, along) - np.arctan2(across, y))
    return np.where(x**2 + y**2 <= radius**2, x * y, 0.5 * (across * y + x * along) + sector)


def disc_cell_area(west: Array, east: Array, south: Array, north: Array, radius: Array) -> Array:
    """Area shared by a rectangle and a disc centred on the origin.

    Parameters
    ----------
    west, east, south, north : arrays, m
        Sides of the rectangles relative to the disc's centre.
    radius : array, m
        Radius of the disc.

    Returns
    -------
    array, m²
        Exact areas (closed form: circular sector plus triangles), to about 1e-16 of the disc's area.

    Examples
    --------
    >>> float(disc_cell_area(0.0, 2.0, 0.0, 2.0, 1.0))  # a quarter of the unit disc
    0.7853981633974483
    """
    west, east, south, north, radius = np.broadcast_arrays(*map(np.asarray, (west, east, south, north, radius)))

    def signed(x: Array, y: Array) -> Array:
        return np.sign(x) * np.sign(y) * _quadrant_area(np.abs(x), np.abs(y), radius)

    return signed(east, north) - signed(west, north) - signed(east, south) + signed(west, south)


def ring_fractions(easting: Array, northing: Array, edges: Array) -> sparse.csr_array:
    """Share of every grid cell's area that lies in every ring about the origin.

    Parameters
    ----------
    easting, northing : (n_easting,), (n_northing,) arrays, m
        Cell centres of an evenly spaced grid, relative to the centre of the rings.
    edges : (n_ring + 1,) array, m
        Ascending edges of the rings; the first may be 0.

    Returns
    -------
    (n_northing * n_easting, n_ring) sparse array, dimensionless
        Rows in C order (northing slow). A row sums to 1 where the cell lies wholly within the rings.
    """
    easting, northing, edges = (np.asarray(a, dtype=float) for a in (easting, northing, edges))
    half_e, half_n = 0.5 * (easting[1] - easting[0]), 0.5 * (northing[1] - northing[0])
    x, y = (a.ravel() for a in np.meshgrid(easting, northing))
    nearest = np.hypot(np.maximum(np.abs(x) - half_e, 0.0), np.maximum(np.abs(y) - half_n, 0.0))
    farthest = np.hypot(np.abs(x) + half_e, np.abs(y) + half_n)
    first = np.clip(np.searchsorted(edges, nearest, side="right") - 1, 0, None)
    last = np.searchsorted(edges, farthest, side="left")  # the first edge that encloses the whole cell
    last = np.minimum(last, edges.size - 1)
    counts = np.maximum(last - first + 1, 0)  # edges whose disc must be measured, per cell
    counts[nearest >= edges[-1]] = 0
    cell = np.repeat(np.arange(x.size), counts)
    start = np.repeat(np.cumsum(counts) - counts, counts)
    edge = np.arange(cell.size) - start + np.repeat(first, counts)
    area = disc_cell_area(x[cell] - half_e, x[cell] + half_e, y[cell] - half_n, y[cell] + half_n, edges[edge])
    same_cell = cell[1:] == cell[:-1]
    share = (area[1:] - area[:-1])[same_cell] / (4.0 * half_e * half_n)
    rows, columns = cell[:-1][same_cell], edge[:-1][same_cell]
    keep = share > 1e-13
    return sparse.csr_array((share[keep], (rows[keep], columns[keep])), shape=(x.size, edges.size - 1))
