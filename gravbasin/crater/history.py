"""What happened after the impact: erosion, burial and re-exhumation, applied in order."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray

from gravbasin.errors import InputError

__all__ = ["Burial", "Erosion", "Ground", "after"]

Array = NDArray[np.float64]


@dataclasses.dataclass(frozen=True)
class Erosion:
    """Rock or cover removed, m."""

    thickness: float


@dataclasses.dataclass(frozen=True)
class Burial:
    """Sediment laid down, m."""

    thickness: float


@dataclasses.dataclass(frozen=True)
class Ground:
    """Today's ground relative to the ground before impact.

    Attributes
    ----------
    erosion : float, m
        Rock stripped below the ground before impact.
    cover : float, m
        Sediment over the stripped surface today.
    cover_density : float, kg/m³
        Density of that sediment.
    loads : tuple of (float, float), m
        (stripped, cover) at the end of every burial: the states whose weight may have closed cracks.
    """

    erosion: float = 0.0
    cover: float = 0.0
    cover_density: float = 2400.0
    loads: tuple[tuple[float, float], ...] = ()

    def original_depth(self, depth: Array) -> Array:
        """Depth below the ground before impact of a depth below today's ground, m; cover maps above `erosion`."""
        return np.asarray(depth) - self.cover + self.erosion

    def largest_burial(self, depth: Array) -> Array:
        """Greatest depth below the ground of its day, m, of rock at a depth below the ground before impact."""
        return np.maximum.reduce([depth, *(depth - stripped + cover for stripped, cover in self.loads)])


def after(events: Iterable[Erosion | Burial], *, cover_density: float = 2400.0) -> Ground:
    """Today's ground after a sequence of episodes; erosion takes cover before rock.

    Examples
    --------
    >>> after([Erosion(2000.0), Burial(500.0), Erosion(800.0)]).erosion
    2300.0
    """
    stripped = cover = 0.0
    loads: list[tuple[float, float]] = []
    for event in events:
        if event.thickness < 0:
            raise InputError("event", event, "must not be negative", "give the thickness removed or laid down")
        if isinstance(event, Erosion):
            from_cover = min(cover, event.thickness)
            cover -= from_cover
            stripped += event.thickness - from_cover
        elif event.thickness > 0:
            cover += event.thickness
            loads.append((stripped, cover))
    return Ground(stripped, cover, cover_density, tuple(loads))
