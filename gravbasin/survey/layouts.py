"""Where stations may stand and how to lay them out: grids, lines, traverses, roads."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from gravbasin.errors import CannotFinish, InputError
from gravbasin.survey.shapes import Polygon

__all__ = ["MOST_NODES", "Site", "inside", "layout_stations", "polygon_area", "square_area"]

Array = NDArray[np.float64]

MOST_NODES = 200_000
"""Nodes laid over the area's surroundings before those outside are dropped."""

TOO_NEAR = 0.5
"""New stations nearer to another than this share of the spacing are dropped: one of the two is enough."""


@dataclasses.dataclass(frozen=True, eq=False)
class Site:
    """The place of a survey, all in metres.

    Attributes
    ----------
    centre : (2,) array
        Of the structure.
    area, no_go : tuples of Polygon
        Where stations may stand, and where not.
    roads : tuple of (n, 2) arrays
    existing : (n, 2) array
        Stations read already.
    crs : pyproj CRS or None
        Of all these coordinates.
    """

    centre: Array
    area: tuple[Polygon, ...]
    no_go: tuple[Polygon, ...] = ()
    roads: tuple[Array, ...] = ()
    existing: Array = dataclasses.field(default_factory=lambda: np.zeros((0, 2)))
    crs: Any = None

    def free(self, points: Array) -> NDArray[np.bool_]:
        """Which points lie in the area and outside every no-go polygon, (n,)."""
        allowed = np.any([inside(polygon, points) for polygon in self.area], axis=0)
        for polygon in self.no_go:
            allowed &= ~inside(polygon, points)
        return np.asarray(allowed, dtype=bool)

    @property
    def bounds(self) -> tuple[Array, Array]:
        """South-west and north-east corner of the area's surroundings."""
        outer = np.concatenate([polygon[0] for polygon in self.area])
        return outer.min(axis=0), outer.max(axis=0)

    @property
    def size(self) -> float:
        """Area, m², no-go polygons included."""
        return float(sum(polygon_area(polygon) for polygon in self.area))


def square_area(centre: Array, half: float) -> tuple[Polygon, ...]:
    """A square about the centre, `half` metres to each side."""
    corners = half * np.array([[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]])
    return ((centre + corners,),)


def polygon_area(polygon: Polygon) -> float:
    """Area of the outer ring less its holes, m² (shoelace)."""
    sizes = [0.5 * abs(np.sum(x * np.roll(y, -1) - y * np.roll(x, -1))) for x, y in (ring.T for ring in polygon)]
    return float(sizes[0] - sum(sizes[1:]))


def inside(polygon: Polygon, points: Array) -> NDArray[np.bool_]:
    """Which points lie in a polygon and not in its holes, by the even-odd rule, (n,).

    Examples
    --------
    >>> square = (np.array([[0.0, 0.0], [2.0, 0.0], [2.0, 2.0], [0.0, 2.0]]),)
    >>> inside(square, np.array([[1.0, 1.0], [3.0, 1.0]])).tolist()
    [True, False]
    """
    odd = np.zeros(len(points), dtype=bool)
    x, y = points[:, 0], points[:, 1]
    for ring in polygon:
        for (x0, y0), (x1, y1) in zip(ring, np.roll(ring, -1, axis=0), strict=True):
            if y0 == y1:
                continue
            crossed = (y0 <= y) != (y1 <= y)
            odd ^= crossed & (x < x0 + (y - y0) * (x1 - x0) / (y1 - y0))
    return odd


def layout_stations(
    site: Site,
    layout: str,
    spacing: float,
    *,
    line_azimuth: float = 90.0,
    line_ratio: float = 4.0,
    spokes: int = 12,
) -> Array:
    """New stations of one layout in the order of reading.

    Parameters
    ----------
    site : Site
        Where they may stand; stations read already are kept and not repeated.
    layout : str
        "square", "staggered", "lines", "radial" or "roads".
    spacing : float, m
        Between neighbours: along rows, lines, spokes or roads.
    line_azimuth : float, degrees
        Direction of rows and lines, clockwise from north.
    line_ratio : float
        Distance of lines over spacing along them.
    spokes : int
        Radial traverses.

    Returns
    -------
    (n, 2) array, m
        May be empty where the spacing is wider than the area.

    Notes
    -----
    Grids and lines have a node at the centre. A staggered grid puts every other row half a step aside, rows √3/2
    apart, so that all six neighbours are equally far: it has 15 % more stations than a square one.
    """
    if layout == "square":
        points = _rows(site, spacing, spacing, line_azimuth)
    elif layout == "staggered":
        points = _rows(site, spacing, spacing * np.sqrt(0.75), line_azimuth, stagger=True)
    elif layout == "lines":
        points = _rows(site, spacing, line_ratio * spacing, line_azimuth)
    elif layout == "radial":
        points = _spokes(site, spacing, spokes)
    elif layout == "roads":
        points = _along(site.roads, spacing)
    else:
        raise InputError("survey.layouts", layout, "is not a layout", "choose square, staggered, lines, radial, roads")
    points = points[site.free(points)] if len(points) else points
    if len(site.existing) and len(points):
        away, _ = cKDTree(site.existing).query(points)
        points = points[away >= TOO_NEAR * spacing]
    return points


def _rows(site: Site, along: float, across: float, azimuth: float, *, stagger: bool = False) -> Array:
    """Nodes of parallel rows, read to and fro."""
    angle = np.deg2rad(azimuth)
    axes = np.array([[np.sin(angle), np.cos(angle)], [np.cos(angle), -np.sin(angle)]])  # along, across
    low, high = site.bounds
    corners = np.array([[x, y] for x in (low[0], high[0]) for y in (low[1], high[1])]) - site.centre
    turned = corners @ axes.T
    first, last = np.floor(turned.min(axis=0) / [along, across]), np.ceil(turned.max(axis=0) / [along, across])
    if np.prod(last - first + 1.0) > MOST_NODES:
        raise CannotFinish(
            f"a spacing of {along / 1e3:g} km lays more than {MOST_NODES} nodes over the area; use a wider spacing"
        )
    columns = np.arange(first[0], last[0] + 1)
    found = []
    for number, row in enumerate(np.arange(first[1], last[1] + 1)):
        shift = 0.5 if stagger and row % 2 else 0.0
        place = along * (columns + shift)
        if number % 2:
            place = place[::-1]
        found.append(site.centre + place[:, None] * axes[0] + across * row * axes[1])
    return np.concatenate(found)


def _spokes(site: Site, spacing: float, spokes: int) -> Array:
    """The centre, then out along one spoke and in along the next."""
    low, high = site.bounds
    reach = np.hypot(*np.maximum(np.abs(low - site.centre), np.abs(high - site.centre)))
    radius = spacing * np.arange(1.0, np.floor(reach / spacing) + 1.0)
    if radius.size * spokes > MOST_NODES:
        raise CannotFinish(f"spokes at {spacing / 1e3:g} km hold more than {MOST_NODES} stations; use a wider spacing")
    found = [site.centre[None, :]]
    for number, angle in enumerate(2.0 * np.pi * np.arange(spokes) / spokes):
        order = radius if number % 2 == 0 else radius[::-1]
        found.append(site.centre + order[:, None] * np.array([np.sin(angle), np.cos(angle)]))
    return np.concatenate(found)


def _along(roads: tuple[Array, ...], spacing: float) -> Array:
    """Stations along lines, the left-over shared by both ends; where lines meet, the first one keeps its station."""
    found: list[Array] = []
    for line in roads:
        length = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(line, axis=0).T))])
        steps = np.floor(length[-1] / spacing)
        if steps > MOST_NODES:
            raise CannotFinish(f"roads at {spacing / 1e3:g} km hold too many stations; use a wider spacing")
        start = 0.5 * (length[-1] - steps * spacing)
        place = start + spacing * np.arange(steps + 1.0)
        found.append(np.stack([np.interp(place, length, column) for column in line.T], axis=1))
    points = np.concatenate(found) if found else np.zeros((0, 2))
    keep = np.ones(len(points), dtype=bool)
    for first, second in sorted(cKDTree(points).query_pairs(TOO_NEAR * spacing)) if len(points) else []:
        if keep[first]:
            keep[second] = False
    return points[keep]
