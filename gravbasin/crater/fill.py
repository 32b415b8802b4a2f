"""Rocks within the crater: the hollow, suevite, the melt sheet, the breccia lens, and sediment that compacts."""

from __future__ import annotations

import dataclasses
import math
from functools import cached_property
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

__all__ = ["LITHOLOGIES", "Compaction", "Fill", "Interfaces", "lithified_density"]

Array = NDArray[np.float64]


@dataclasses.dataclass(frozen=True)
class Compaction:
    """Sediment that loses porosity with its largest burial: phi = phi0 exp(-z/z0) (Athy 1930).

    Attributes
    ----------
    porosity : float
        phi0 at the surface.
    decay : float, m
        z0.
    grain_density : float, kg/m³
        Density of the grains.
    """

    porosity: float
    decay: float
    grain_density: float

    def density(self, largest_burial: Array, fluid_density: float = 1030.0) -> Array:
        """Saturated density, kg/m³, at the largest depth of burial (m)."""
        phi = self.porosity * np.exp(-np.maximum(largest_burial, 0.0) / self.decay)
        return self.grain_density + phi * (fluid_density - self.grain_density)


LITHOLOGIES = {
    "shale": Compaction(0.63, 1960.0, 2720.0),
    "sand": Compaction(0.49, 3703.0, 2650.0),
    "chalk": Compaction(0.70, 1408.0, 2710.0),
    "shaly sand": Compaction(0.56, 2464.0, 2680.0),
    "platform carbonate": Compaction(0.417, 2498.0, 2710.0),
}
"""Curves of Sclater & Christie 1980, the carbonate of Schmoker & Halley 1982; grain densities from memory."""


def lithified_density(age_myr: float | None) -> float:
    """Density of sediment in a hollow when only its age is known, kg/m³.

    2000 at 1 Myr (alluvium 1.98), 2500 at 1 Gyr (mean of sandstone, shale, limestone and dolomite; Telford et al.
    1990, from memory), evenly in the logarithm of age between by choice; 2300 without an age.
    """
    if age_myr is None:
        return 2300.0
    return 2000.0 + 500.0 * min(max(math.log10(max(age_myr, 1.0)) / 3.0, 0.0), 1.0)


def _fade(radius: Array, inner: float, outer: float) -> Array:
    """1 within `inner`, 0 beyond `outer`, a cosine between."""
    x = np.clip((radius - inner) / (outer - inner), 0.0, 1.0)
    return 0.5 * (1.0 + np.cos(np.pi * x))


class Interfaces(NamedTuple):
    """Bases of the hollow, of suevite, melt sheet and breccia (the floor): depth below the ground before impact, m."""

    hollow: Array
    suevite: Array
    melt: Array
    floor: Array


@dataclasses.dataclass(frozen=True)
class Fill:
    """Shape and density of everything between the ground before impact and the crater floor.

    From the top: the hollow with what filled it, suevite, the melt sheet, the breccia lens; then the floor.

    Attributes
    ----------
    rim_radius : float, m
        Half the rim diameter.
    simple : bool
        A simple crater: one paraboloid bowl, no peak.
    apparent_depth, peak_height : float, m
        Depth of the hollow below the ground before impact, and of peak or peak ring above that hollow's floor.
    peak_radius, peak_width : float, m
        Crest of the peak ring (0 for a central peak) and half-width of peak or ring at 1/e of its height.
    melt_volume : float, m³
        Volume of the melt sheet, conserved whatever its shape.
    melt_radius : float, m
        Radius of the melt sheet.
    breccia_thickness : float, m
        Thickness of suevite and breccia together away from the peak.
    suevite_thickness, suevite_radius : float, m
        Thickness and radius of the melt-bearing top of the breccia.
    breccia_contrast, suevite_contrast, melt_contrast : float, kg/m³
        Density minus that of intact, dense target at the same depth.
    breccia_crossover, suevite_crossover : float
        Porosity before impact (0-1) of target rock as light as the breccia or suevite made of it.
    melt_layering : float, kg/m³
        Density of the lower minus the upper half of a differentiated melt sheet; its mean stays `melt_contrast`.
    hollow : str
        "sediment", "water" or "air" (air counts as terrain that the Bouguer reduction has corrected).
    sediment_density : float, kg/m³
        Density of sediment in the hollow, unless it compacts.
    compaction : Compaction or None
        Curve that replaces `sediment_density`.
    """

    rim_radius: float
    simple: bool
    apparent_depth: float
    peak_height: float
    peak_radius: float
    peak_width: float
    melt_volume: float
    melt_radius: float
    breccia_thickness: float
    suevite_thickness: float
    suevite_radius: float
    breccia_contrast: float
    suevite_contrast: float
    melt_contrast: float
    breccia_crossover: float
    suevite_crossover: float
    melt_layering: float
    hollow: Literal["sediment", "water", "air"]
    sediment_density: float
    compaction: Compaction | None = None

    def interfaces(self, radius: Array) -> Interfaces:
        """Bases of the units along the radius, m."""
        peak, bowl = self._peak(radius), self._bowl(radius, 0.8)
        hollow = np.maximum(self.apparent_depth * bowl - self.peak_height * peak, 0.0)
        # On the peak the breccia is thin: it slid off.
        thin = 1.0 - 0.8 * peak
        lens = self.breccia_thickness * self._bowl(radius, 0.5) * thin
        suevite = self.suevite_thickness * _fade(radius, 0.8 * self.suevite_radius, self.suevite_radius) * thin
        suevite = hollow + np.minimum(suevite, lens)
        melt = suevite + self.melt_thickness(radius)
        return Interfaces(hollow, suevite, melt, melt + hollow + lens - suevite)

    def melt_thickness(self, radius: Array) -> Array:
        """Thickness of the melt sheet, m; it thins over the peak and keeps its volume."""
        if self.melt_volume == 0.0:
            return np.zeros_like(radius)
        return self.melt_volume / self._melt_unit_volume * self._melt_shape(radius)

    @cached_property
    def _melt_unit_volume(self) -> float:
        """Volume under the melt sheet's shape of unit height, m³."""
        fine = (np.arange(400) + 0.5) / 400 * self.melt_radius
        return float(2 * np.pi * np.sum(self._melt_shape(fine) * fine) * self.melt_radius / 400)

    def _melt_shape(self, radius: Array) -> Array:
        return _fade(radius, 0.8 * self.melt_radius, self.melt_radius) * (1.0 - self._peak(radius))

    def _bowl(self, radius: Array, flat: float) -> Array:
        if self.simple:
            return np.maximum(1.0 - (radius / self.rim_radius) ** 2, 0.0)
        return _fade(radius, flat * self.rim_radius, self.rim_radius)

    def _peak(self, radius: Array) -> Array:
        if self.simple or self.peak_height == 0.0:
            return np.zeros_like(radius)
        x = (radius - self.peak_radius) / self.peak_width
        return np.exp(-x * x)
