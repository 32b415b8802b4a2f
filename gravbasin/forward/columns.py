"""Mean contrast along vertical columns of today's ground through a section that was moved as a whole."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from gravbasin.forward.sections import RingCells

__all__ = ["ColumnTable"]

Array = NDArray[np.float64]

_STEPS = 16  # nodes of the table across the width of a column


@dataclass(frozen=True, eq=False)
class ColumnTable:
    """Contrast summed over depth, at evenly spaced distances from the axis, blurred to the width of a column.

    A column is a small square on the map and its mean over rings is nearly that of an interval of radius as wide as
    the square: both spread over the same distance in every direction. That keeps the edges of rings as smooth in
    cells as exact areas do.

    Attributes
    ----------
    totals : (n_radius * (n_depth + 1),) array, kg/m²
        Contrast from the section's top down to each depth edge, distance slow; 0 at the last distance and beyond.
    width : float, m
        Width of the columns; the distances are 16 to a width.
    depth_edges : (n_depth + 1,) array, m
    """

    totals: Array
    width: float
    depth_edges: Array

    @property
    def radius_step(self) -> float:
        """Step of the distances, m."""
        return self.width / _STEPS

    @classmethod
    def of(cls, cells: RingCells, width: float) -> ColumnTable:
        """The table of a section for columns `width` metres wide."""
        step = width / _STEPS
        radius = step * np.arange(np.ceil((cells.radius_edges[-1] + 0.5 * width) / step) + 2.0)
        inner, outer = np.maximum(radius - 0.5 * width, 0.0) ** 2, (radius + 0.5 * width) ** 2
        squares = cells.radius_edges**2
        mass = np.cumsum(cells.contrast * np.diff(cells.depth_edges)[:, None], axis=0)
        mass = np.pad(np.cumsum(mass * np.diff(squares), axis=1), ((1, 0), (1, 0)))
        totals = np.array([np.interp(outer, squares, row) - np.interp(inner, squares, row) for row in mass])
        return cls(np.ascontiguousarray((totals / (outer - inner)).T).ravel(), width, cells.depth_edges)

    def means(self, points: Array, depth_edges: Array, motion: Array) -> Iterator[Array]:
        """Mean contrast of every column in one layer after the other.

        Parameters
        ----------
        points : (2, n) array, m
            Easting and northing of the columns' axes, relative to the centre.
        depth_edges : (n_layer + 1,) array, m
            Edges of the layers, in the frame the motion starts from. A layer without thickness has mean 0.
        motion : (3, 3) array
            Takes easting, northing and depth of today to those in the section.

        Yields
        ------
        (n,) array, kg/m³

        Notes
        -----
        Along the column the section's layers are met exactly; its rings are read halfway down the layer, or down each
        of several parts of it where the column drifts sideways by more than its width.
        """
        horizontal, slope = motion[:2, :2] @ points, motion[2, :2] @ points
        upper = self._place(slope + motion[2, 2] * depth_edges[0])
        for top, bottom in pairwise(depth_edges):
            total = np.zeros(slope.size)
            drift = float(np.hypot(*motion[:2, 2])) * (bottom - top)
            for start, end in pairwise(np.linspace(top, bottom, math.ceil(drift / self.width) + 1 if drift else 2)):
                if bottom > top:
                    lower = self._place(slope + motion[2, 2] * end)
                    row = self._row(horizontal + (0.5 * (start + end) * motion[:2, 2])[:, None])
                    total += self._total(row, *lower) - self._total(row, *upper)
                    upper = lower
            yield total * (1.0 / (motion[2, 2] * (bottom - top))) if bottom > top else total

    def _row(self, points: Array) -> NDArray[np.intp]:
        """Where the totals at the nearest distance begin."""
        count, last = self.depth_edges.size, self.totals.size // self.depth_edges.size - 1
        row = np.minimum(np.hypot(*points) * (1.0 / self.radius_step) + 0.5, last).astype(np.intp)
        row *= count
        return row

    def _place(self, depth: Array) -> tuple[NDArray[np.intp], Array]:
        """Index of the section's layer at a depth, and how far down in it; clamped to the section."""
        place = np.interp(depth, self.depth_edges, np.arange(float(self.depth_edges.size)))
        index = np.minimum(place, self.depth_edges.size - 2).astype(np.intp)
        return index, place - index

    def _total(self, row: NDArray[np.intp], index: NDArray[np.intp], part: Array) -> Array:
        at = row + index
        above = self.totals.take(at)
        at += 1
        return np.asarray(above + part * (self.totals.take(at) - above))
