"""Map cells as bundles of directed sides: clipped by half-planes, moved, and shared with discs, in closed form."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

__all__ = ["area", "clipped", "disc_area", "rectangles", "ring_shares"]

Array = NDArray[np.float64]


def rectangles(west: Array, east: Array, south: Array, north: Array) -> Array:
    """Sides of rectangles, anticlockwise.

    Parameters
    ----------
    west, east, south, north : (n,) arrays, m
        Relative to the centre of the discs.

    Returns
    -------
    (4, 2, 2, n) array, m
        Side; start and end; easting and northing; rectangle. The closed form of an area is a sum over sides, so a
        polygon needs no order, and a side of no length adds nothing.
    """
    corners = np.array([[west, south], [east, south], [east, north], [west, north]])
    return np.stack([corners, np.roll(corners, -1, axis=0)], axis=1)


def clipped(sides: Array, normal: tuple[float, float], offset: float) -> Array:
    """The part of convex polygons on one side of a line.

    Parameters
    ----------
    sides : (n_side, 2, 2, n) array, m
    normal : (float, float)
        Unit vector, easting and northing, towards the part that is kept.
    offset : float, m
        Distance of the line from the origin along it.

    Returns
    -------
    (n_side + 1, 2, 2, n) array, m
        What lies beyond is shrunk to the origin; the last side runs along the line and closes the polygon.
    """
    reach = normal[0] * sides[:, :, 0] + normal[1] * sides[:, :, 1] - offset
    inside = reach >= 0.0
    start, end = sides[:, 0], sides[:, 1]
    leaves, enters = inside[:, 0] & ~inside[:, 1], ~inside[:, 0] & inside[:, 1]
    drop = np.where(leaves | enters, reach[:, 0] - reach[:, 1], 1.0)
    crossing = start + (reach[:, 0] / drop)[:, None] * (end - start)
    kept = np.zeros_like(sides)
    for at, point in enumerate((start, end)):
        kept[:, at] = np.where(inside[:, None, at], point, np.where((leaves | enters)[:, None], crossing, 0.0))
    closing = [np.where(mask[:, None], crossing, 0.0).sum(axis=0) for mask in (leaves, enters)]
    return np.concatenate([kept, np.stack(closing)[None]])


def area(sides: Array) -> Array:
    """Areas of polygons, (n,) m²; negative where the sides run clockwise."""
    return 0.5 * _cross(sides[:, 0], sides[:, 1], axis=1).sum(axis=0)


def disc_area(sides: Array, radius: Array) -> Array:
    """Area shared by polygons and discs about the origin.

    Parameters
    ----------
    sides : (n_side, 2, 2, n) array, m
    radius : (n,) array, m

    Returns
    -------
    (n,) array, m²
        Exact to rounding.

    Notes
    -----
    Every side spans a triangle with the origin, and the disc keeps of it a sector, a triangle and a sector: up to
    where the side enters the circle, within it, and from where it leaves.

    Examples
    --------
    >>> square = rectangles(*np.array([[0.0], [2.0], [0.0], [2.0]]))
    >>> disc_area(square, np.array([1.0])).round(12)  # a quarter of the unit disc
    array([0.78539816])
    """
    total = np.zeros(np.shape(radius))
    for start, end in sides:
        along = end - start
        length = np.maximum(_dot(along, along), 1e-300)
        middle = -_dot(start, along) / length
        half = np.sqrt(np.maximum(middle**2 - (_dot(start, start) - radius**2) / length, 0.0))
        enter, leave = (_point(start, end, t) for t in (middle - half, middle + half))
        total += 0.5 * _cross(enter, leave) + 0.5 * radius**2 * (_angle(start, enter) + _angle(leave, end))
    return total


def _point(start: Array, end: Array, t: Array) -> Array:
    """Along a side, or its very ends beyond them: rounding there would turn a corner about the origin."""
    return np.where(t >= 1.0, end, np.where(t <= 0.0, start, start + t * (end - start)))


def _dot(a: Array, b: Array) -> Array:
    return np.asarray(a[0] * b[0] + a[1] * b[1])


def _cross(a: Array, b: Array, axis: int = 0) -> Array:
    a, b = np.moveaxis(a, axis, 0), np.moveaxis(b, axis, 0)
    return np.asarray(a[0] * b[1] - a[1] * b[0])


def _angle(a: Array, b: Array) -> Array:
    return np.asarray(np.arctan2(_cross(a, b), _dot(a, b)))


def ring_shares(sides: Array, centres: Array, half_diagonal: float, cell_area: float, edges: Array) -> sparse.csr_array:
    """Share of every cell's area that lies in every ring, for cells of any shape.

    Parameters
    ----------
    sides : (n_side, 2, 2, n_cell) array, m
        Parts of the cells, relative to the centre of the rings.
    centres : (2, n_cell) array, m
        Points of which no part of a cell is farther than `half_diagonal`.
    half_diagonal : float, m
    cell_area : float, m²
        Area of a whole cell.
    edges : (n_ring + 1,) array, m
        Ascending edges of the rings.

    Returns
    -------
    (n_cell, n_ring) sparse array
    """
    distance = np.hypot(*centres)
    first = np.clip(np.searchsorted(edges, distance - half_diagonal, side="right") - 1, 0, None)
    last = np.minimum(np.searchsorted(edges, distance + half_diagonal), edges.size - 1)
    counts = np.maximum(last - first + 1, 0)
    counts[distance - half_diagonal >= edges[-1]] = 0
    cell = np.repeat(np.arange(distance.size), counts)
    edge = np.arange(cell.size) - np.repeat(np.cumsum(counts) - counts - first, counts)
    within = np.zeros(cell.size)
    for side in sides:
        used = np.flatnonzero(side.any(axis=(0, 1))[cell])
        within[used] += disc_area(side[None, :, :, cell[used]], edges[edge[used]])
    same = cell[1:] == cell[:-1]
    share = np.diff(within)[same] / cell_area
    keep = np.abs(share) > 1e-13
    rows, columns = cell[:-1][same][keep], edge[:-1][same][keep]
    return sparse.csr_array((share[keep], (rows, columns)), shape=(distance.size, edges.size - 1))
