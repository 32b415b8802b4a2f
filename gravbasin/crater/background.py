"""The density column of the target before impact, its integrals and its pressure."""

from __future__ import annotations

import dataclasses
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gravbasin.constants import STANDARD_GRAVITY

__all__ = ["Column"]

Array = NDArray[np.float64]


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
    """

    tops: tuple[float, ...]
    densities: tuple[float, ...]
    gradients: tuple[float, ...]
    moho: float
    mantle_density: float

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

    def pressure(self, depth: ArrayLike) -> Array:
        """Weight of the rock column above a depth, Pa; zero above the ground."""
        z = np.maximum(np.asarray(depth, dtype=float), 0.0)
        mantle = self.moho_contrast * np.maximum(z - self.moho, 0.0)
        return STANDARD_GRAVITY * (self.crust_mass(z) + mantle)
