"""The density column of the target before impact and its integrals."""

from __future__ import annotations

import dataclasses
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["GRAIN_DENSITY", "PORE_DEFICIT", "PRESETS", "Column", "saturated_porosity"]

Array = NDArray[np.float64]

GRAIN_DENSITY = 2700.0
"""Grains of mixed sediments, kg/m³: quartz 2650, calcite 2710, dolomite 2870, clays 2600-2800 (from memory)."""

PORE_DEFICIT = GRAIN_DENSITY - 1000.0
"""Mass missing per volume of water-filled pores, kg/m³."""


def saturated_porosity(density: float) -> float:
    """Porosity of a water-filled sediment from its bulk density (kg/m³), 0-1; 0 where it is as dense as its grains."""
    return min(max((GRAIN_DENSITY - density) / PORE_DEFICIT, 0.0), 1.0)


_SHIELD = ((0.0, 2680.0, 10.0, 0.0), (20.0, 2880.0, 5.0, 0.0))
_BASIN = tuple((top, 2400.0 + 50.0 * top, 50.0, saturated_porosity(2450.0 + 50.0 * top)) for top in (0.0, 2.0, 4.0))

PRESETS = {"crystalline": _SHIELD, "mixed": _SHIELD, "sedimentary": (*_BASIN, (6.0, 2740.0, 10.0, 0.0), _SHIELD[1])}
"""Layers by target rock: top (km), density there (kg/m³), gradient (kg/m³/km), porosity before impact.

Shield: 2.67-2.72 at the top, 8-12 kg/m³ per km (Christensen & Mooney 1995, from memory). Sedimentary: sandstone and
shale at the top (2.35-2.40) to compacted rock of 2.70 at 6 km, basement below (Telford et al. 1990, from memory)."""


@dataclasses.dataclass(frozen=True)
class Column:
    """Density against depth: crustal layers with linear gradients over a uniform mantle.

    Attributes
    ----------
    tops : tuple of float, m
        Tops of the crustal layers below the ground before impact, ascending from 0.
    densities : tuple of float, kg/m³
        Density at each top.
    gradients : tuple of float, kg/m³ per m
        Increase of density with depth within each layer.
    moho : float, m
        Depth of the crust-mantle boundary.
    mantle_density : float, kg/m³
        Density below it.
    porosities : tuple of float
        Porosity of each layer before impact (0-1); empty for none.
    """

    tops: tuple[float, ...]
    densities: tuple[float, ...]
    gradients: tuple[float, ...]
    moho: float
    mantle_density: float
    porosities: tuple[float, ...] = ()

    @cached_property
    def top_density(self) -> float:
        """Density at the ground, kg/m³."""
        return self.densities[0]

    @cached_property
    def _ramps(self) -> tuple[tuple[float, float, float], ...]:
        """Depth, jump of density and half the jump of gradient wherever the crust departs from its top density."""
        tops, rho, slope, _ = self._cumulative
        above = rho[:-1] + slope[:-1] * np.diff(tops)  # density just above the next knot
        jumps = np.concatenate([[0.0], rho[1:] - above])
        bends = np.diff(slope, prepend=0.0)
        return tuple((float(t), float(j), 0.5 * float(b)) for t, j, b in zip(tops, jumps, bends, strict=True))

    def excess_mass(self, depth: ArrayLike) -> Array:
        """Integral of `crust_density` minus the density at the ground, kg/m²: exactly zero for a flat column."""
        z = np.asarray(depth, dtype=float)
        total = np.zeros_like(z)
        for top, jump, bend in self._ramps:
            if jump or bend:
                inside = np.maximum(z - top, 0.0)
                total += inside * (jump + bend * inside)
        return total

    def porosity(self, depth: ArrayLike) -> Array:
        """Porosity before impact, 0-1."""
        z = np.asarray(depth, dtype=float)
        if not any(self.porosities):
            return np.zeros_like(z)
        total = np.full_like(z, self.porosities[0])
        for top, above, below in zip(self.tops[1:], self.porosities[:-1], self.porosities[1:], strict=True):
            if above != below:
                total += (below - above) * (z >= top)
        return total

    def pore_volume(self, depth: ArrayLike) -> Array:
        """Integral of `porosity` from the ground to a depth, m³/m²."""
        z = np.asarray(depth, dtype=float)
        if not any(self.porosities):
            return np.zeros(1)
        total = self.porosities[0] * z
        for top, above, below in zip(self.tops[1:], self.porosities[:-1], self.porosities[1:], strict=True):
            if above != below:
                total += (below - above) * np.maximum(z - top, 0.0)
        return np.asarray(total)

    @cached_property
    def _cumulative(self) -> tuple[Array, Array, Array, Array]:
        """Knots, densities, gradients of the crust (held constant below the Moho), and mass above each knot."""
        tops = np.array([*self.tops, self.moho])
        rho = np.array([*self.densities, self.densities[-1] + self.gradients[-1] * (self.moho - self.tops[-1])])
        slope = np.array([*self.gradients, 0.0])
        thickness = np.diff(tops)
        mass = np.concatenate([[0.0], np.cumsum(rho[:-1] * thickness + 0.5 * slope[:-1] * thickness**2)])
        return tops, rho, slope, mass

    @cached_property
    def moho_contrast(self) -> float:
        """Mantle minus deepest crust, kg/m³."""
        return self.mantle_density - float(self._cumulative[1][-1])

    def crust_density(self, depth: ArrayLike) -> Array:
        """Density of the crust, kg/m³; its deepest value goes on below the Moho, its top value above the ground."""
        tops, rho, slope, _ = self._cumulative
        z = np.maximum(np.asarray(depth, dtype=float), 0.0)
        layer = np.clip(np.searchsorted(tops, z, side="right") - 1, 0, tops.size - 1)
        return np.asarray(rho[layer] + slope[layer] * (z - tops[layer]))

    def density(self, depth: ArrayLike) -> Array:
        """Density of crust and mantle, kg/m³."""
        below = np.asarray(depth, dtype=float) > self.moho
        return np.where(below, self.mantle_density, self.crust_density(depth))

    def crust_mass(self, depth: ArrayLike) -> Array:
        """Integral of `crust_density` from the ground to a depth, kg/m²; negative above the ground."""
        tops, rho, slope, mass = self._cumulative
        z = np.asarray(depth, dtype=float)
        layer = np.clip(np.searchsorted(tops, z, side="right") - 1, 0, tops.size - 1)
        inside = z - tops[layer]
        # Above the ground the top density goes on, without its gradient.
        return np.asarray(mass[layer] + rho[layer] * inside + 0.5 * slope[layer] * np.maximum(inside, 0.0) ** 2)
