"""What filled the hollow, and the largest weight the floor has carried since the impact."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from gravbasin.crater.background import Column
from gravbasin.crater.damage import FLUID_DENSITY
from gravbasin.crater.fill import Fill, Interfaces
from gravbasin.crater.history import Ground

__all__ = ["filling_density", "largest_overburden"]

Array = NDArray[np.float64]


def filling_density(fill: Fill, ground: Ground, depth: Array) -> Array | None:
    """Density of what lies in the hollow at a depth below the ground before impact, kg/m³; None for air.

    A hollow of water or air that was buried later is full of the sediment that buried it.
    """
    if fill.hollow == "sediment":
        if fill.compaction is not None:
            return fill.compaction.density(ground.largest_burial(depth))
        return np.full_like(depth, fill.sediment_density)
    if ground.loads:
        return np.full_like(depth, ground.cover_density)
    return None if fill.hollow == "air" else np.full_like(depth, FLUID_DENSITY["fresh water"])


def largest_overburden(column: Column, fill: Fill, ground: Ground, bases: Interfaces) -> Array:
    """Largest mass that ever lay above the floor, less that of the intact column down to the same depth, kg/m².

    Below the floor the weight on rock at depth z is then (mass of the intact column to z + this) times gravity.
    States compared: the open crater, the hollow filled, and the end of every burial.

    Parameters
    ----------
    column, fill, ground
        The target, the crater's rocks, and its history.
    bases : Interfaces
        Bases of the units, each (n_radius,) m.

    Returns
    -------
    (n_radius,) array, kg/m²
    """
    filled = filling_density(fill, ground, 0.5 * bases.hollow)
    states: list[tuple[float, float, Array | float]] = [(0.0, 0.0, 0.0)]
    if filled is not None:
        states += [(0.0, 0.0, filled)] if fill.hollow != "air" else []
        states += [(stripped, cover, filled) for stripped, cover in ground.loads]
    return np.maximum.reduce([_surface_mass(column, fill, bases, ground.cover_density, *state) for state in states])


def _surface_mass(
    column: Column,
    fill: Fill,
    bases: Interfaces,
    cover_density: float,
    stripped: float,
    cover: float,
    filled: Array | float,
) -> Array:
    """Mass above the floor less that of the intact column, kg/m², with `stripped` m removed and `cover` m on top."""
    hollow, suevite, melt, floor = (np.maximum(base, stripped) for base in bases)
    rocks = (
        fill.suevite_contrast * (suevite - hollow)
        + fill.melt_contrast * (melt - suevite)
        + fill.breccia_contrast * (floor - melt)
    )
    return filled * (hollow - stripped) - column.crust_mass(hollow) + rocks + cover_density * cover
