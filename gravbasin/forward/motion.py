"""What a deformation does to a section's frame: the way back, the parts of the map, how far contrast reaches."""

from __future__ import annotations

import math
import warnings
from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin.errors import GravbasinWarning
from gravbasin.forward.clipping import clipped
from gravbasin.forward.sections import RingCells, ring_cells

if TYPE_CHECKING:
    from gravbasin.scenario import Deformation

__all__ = [
    "NEGLIGIBLE",
    "Motion",
    "continued",
    "is_axisymmetric",
    "layer_edges",
    "motion_of",
    "reach",
    "rock_above_m",
    "warn_of_missing_rock",
]

Array = NDArray[np.float64]
Line = tuple[tuple[float, float], float]

NEGLIGIBLE = 0.005
"""Of the peak contrast: below this the rim of a model, or what a grid cuts off, is not worth a word."""

_LARGEST_PADDING = 20  # layers put above a section that begins below the ground


@dataclass(frozen=True, eq=False)
class Motion:
    """A deformation in SI units.

    Attributes
    ----------
    matrix : (3, 3) array
        Takes easting, northing and depth today to those in the section; its determinant is 1.
    wedges : tuple of (from, to), radians
        Sectors that are left, clockwise from north, none wider than half a turn; empty when all is left.
    covered : ((easting, northing), float) or None
        Unit vector to the covered side, and distance of the edge along it, m.
    thickness : float, m
        Thickness of the cover.
    contrast : float, kg/m³
        Contrast of the cover.
    """

    matrix: Array
    wedges: tuple[tuple[float, float], ...] = ()
    covered: Line | None = None
    thickness: float = 0.0
    contrast: float = 0.0

    @property
    def keeps_layers(self) -> bool:
        """Whether every layer stays level and apart, so that exact areas describe it."""
        return not (self.matrix[2, :2].any() or self.matrix[:2, 2].any())

    def sides(self, sides: Array) -> Iterator[tuple[Array, float]]:
        """Parts of cells that hold the structure, and how far it lies lower there, m."""
        halves: list[tuple[list[Line], float]] = [([], 0.0)]
        if self.covered is not None:
            (east, north), edge = self.covered
            halves = [([((-east, -north), -edge)], 0.0), ([self.covered], self.thickness)]
        for lines, lower in halves:
            part = sides
            for line in lines:
                part = clipped(part, *line)
            for start, end in self.wedges or [(math.nan, math.nan)]:
                wedge = part
                if self.wedges:
                    wedge = clipped(wedge, (math.cos(start), -math.sin(start)), 0.0)
                    wedge = clipped(wedge, (-math.cos(end), math.sin(end)), 0.0)
                yield wedge, lower


def is_axisymmetric(deformation: Deformation | None) -> bool:
    """Whether the structure is still the same in every direction, so that rings describe it.

    Examples
    --------
    >>> from gravbasin.scenario import Deformation
    >>> is_axisymmetric(Deformation()), is_axisymmetric(Deformation(tilt_degrees=3.0))
    (True, False)
    """
    return deformation is None or not (
        deformation.tilt_degrees
        or deformation.stretch_ratio != 1.0
        or deformation.erosion_slope_m_per_km
        or deformation.missing_from_degrees is not None
        or deformation.cover_thickness_km
    )


def motion_of(deformation: Deformation) -> Motion:
    """A scenario's deformation in SI units, as the way back from today to the section."""
    stretched = _direction(deformation.stretch_azimuth_degrees)
    along = np.outer(stretched, stretched)
    ratio = math.sqrt(deformation.stretch_ratio)
    back = np.eye(3)
    back[:2, :2] = along / ratio + (np.eye(2) - along) * ratio
    shear = np.eye(3)
    shear[2, :2] = 1e-3 * deformation.erosion_slope_m_per_km * _direction(deformation.erosion_slope_azimuth_degrees)
    angle, dip = math.radians(deformation.tilt_degrees), _direction(deformation.tilt_azimuth_degrees)
    turn = np.eye(3)
    turn[:2, :2] += (math.cos(angle) - 1.0) * np.outer(dip, dip)
    turn[:2, 2], turn[2, :2], turn[2, 2] = math.sin(angle) * dip, -math.sin(angle) * dip, math.cos(angle)
    covered: Line | None = None
    if deformation.cover_thickness_km:
        east, north = _direction(deformation.cover_azimuth_degrees)
        covered = ((float(east), float(north)), 1e3 * deformation.cover_edge_km)
    return Motion(
        back @ shear @ turn,
        _wedges(deformation.missing_from_degrees, deformation.missing_to_degrees),
        covered,
        1e3 * deformation.cover_thickness_km,
        deformation.cover_contrast_kg_m3 or 0.0,
    )


def _direction(azimuth_degrees: float) -> Array:
    """Easting and northing of a unit vector; whole at the four quarters, so that symmetric models stay symmetric."""
    azimuth = math.radians(azimuth_degrees)
    return np.round([math.sin(azimuth), math.cos(azimuth)], 15)


def _wedges(missing_from: float | None, missing_to: float | None) -> tuple[tuple[float, float], ...]:
    if missing_from is None or missing_to is None:
        return ()
    start, width = math.radians(missing_to), math.radians((missing_from - missing_to) % 360.0)
    if width <= math.pi:
        return ((start, start + width),)
    return ((start, start + 0.5 * width), (start + 0.5 * width, start + width))


def rock_above_m(section: xr.Dataset, deformation: Deformation) -> float:
    """Height above today's ground from which the section must begin so that no rock is missing on the side that sinks.

    Parameters
    ----------
    section : Dataset
        ``density_contrast`` on (depth, radius) with its edges.
    deformation : Deformation

    Returns
    -------
    float, m
        0 where the rock at the section's top has no contrast to speak of.
    """
    return _rock_above(ring_cells(section, "rock_above_m"), motion_of(deformation).matrix)


def _rock_above(cells: RingCells, matrix: Array) -> float:
    filled = np.flatnonzero(np.abs(cells.contrast[0]) > NEGLIGIBLE * cells.peak)
    if filled.size == 0 or cells.depth_edges[0] > 0.0:
        return 0.0
    return float(_sinking(matrix) * cells.radius_edges[filled[-1] + 1])


def _sinking(matrix: Array) -> float:
    """Steepest descent of the section's level surfaces below today's ground, per metre of radius in the section."""
    back = np.linalg.inv(matrix)
    return float(np.hypot(*back[2, :2]) / back[2, 2])


def warn_of_missing_rock(cells: RingCells, motion: Motion, stacklevel: int) -> None:
    """Say how much contrast the side that sinks would have brought in from above the section's top."""
    needed = _rock_above(cells, motion.matrix)
    top = -float(cells.depth_edges[0])
    if needed <= top:
        return
    radius = 0.5 * (cells.radius_edges[1:] + cells.radius_edges[:-1])
    circle = np.cos(np.linspace(0.0, np.pi, 65))[:-1]
    height = np.maximum(_sinking(motion.matrix) * radius * circle[:, None] - top, 0.0).mean(axis=0)
    ring = np.diff(cells.radius_edges**2)
    mass = np.abs(cells.contrast) * np.diff(cells.depth_edges)[:, None] * ring
    share = float((np.abs(cells.contrast[0]) * height * ring).sum() / mass.sum())
    if share > NEGLIGIBLE:
        warnings.warn(
            f"the side that sinks brings in rock from up to {needed / 1e3:.3g} km above today's ground, where the "
            f"section holds none: taken as intact. Were it like the section's top, {100 * share:.2g} % of the "
            f"structure's excess mass would be missing; give a section that begins at {-needed:.0f} m or tilt less",
            GravbasinWarning,
            stacklevel=stacklevel,
        )


def reach(cells: RingCells, motion: Motion, threshold: float) -> tuple[Array, Array]:
    """Box that holds every ring cell with a contrast above `threshold` after the motion, as far as it is underground.

    Returns
    -------
    least, greatest : (3,) arrays, m
        Easting, northing, depth; relative to the centre.
    """
    layer, ring = np.nonzero(np.abs(cells.contrast) > threshold)
    back = np.linalg.inv(motion.matrix)
    around = np.hypot(back[:, :1], back[:, 1:2]) * cells.radius_edges[ring + 1]
    ends = back[:, 2:] * cells.depth_edges[None, layer], back[:, 2:] * cells.depth_edges[None, layer + 1]
    least, greatest = np.minimum(*ends) - around, np.maximum(*ends) + around
    buried = greatest[2] > 0.0
    if not buried.any():
        return np.zeros(3), np.zeros(3)
    lower = np.array([0.0, 0.0, motion.thickness])
    return least[:, buried].min(axis=1), greatest[:, buried].max(axis=1) + lower


def layer_edges(cells: RingCells, motion: Motion) -> Array:
    """Depth edges of the moved section, m: its own below today's ground, and more where contrast has moved out of them.

    Layers put below are as thick as the section's last one, those put above about as thick as its first.
    """
    edges = cells.depth_edges
    if motion.keeps_layers and motion.thickness == 0.0 and edges[0] >= 0.0:
        return edges
    least, greatest = reach(cells, motion, 0.0)
    if edges[0] < 0.0:
        edges = np.concatenate([[0.0], edges[edges > 0.0]])
    elif edges[0] > 0.0 and (motion.thickness or least[2] < edges[0]):
        count = min(math.ceil(edges[0] / (edges[1] - edges[0])), _LARGEST_PADDING)
        edges = np.concatenate([np.linspace(0.0, edges[0], count + 1)[:-1], edges])
    return continued(edges, greatest[2])


def continued(edges: Array, farthest: float) -> Array:
    """Edges with more cells, as wide as the last one, until `farthest` lies within them."""
    last = edges[-1] - edges[-2]
    count = math.ceil(max(farthest - edges[-1], 0.0) / last)
    return np.concatenate([edges, edges[-1] + last * np.arange(1.0, count + 1.0)])
