"""Rocks within the crater: the hollow, the melt sheet, the breccia lens, and sediment that compacts."""

from __future__ import annotations

import dataclasses
from typing import Literal

import numpy as np
from numpy.typing import NDArray

__all__ = ["LITHOLOGIES", "Compaction", "Fill"]

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


def _fade(radius: Array, inner: float, outer: float) -> Array:
    """1 within `inner`, 0 beyond `outer`, a cosine between."""
    x = np.clip((radius - inner) / (outer - inner), 0.0, 1.0)
    return 0.5 * (1.0 + np.cos(np.pi * x))


@dataclasses.dataclass(frozen=True)
class Fill:
    """Shape and density of everything between the ground before impact and the crater floor.

    From the top: the hollow with what filled it, the melt sheet, the breccia lens; then the floor.

    Attributes
    ----------
    rim_radius : float, m
        Half the rim diameter.
    simple : bool
        A simple crater: one paraboloid bowl, no peak.
    apparent_depth, peak_height : float, m
        Depth of the hollow below the ground before impact, and of peak or peak ring above that hollow's floor.
    peak_radius, peak_width : float, m
        Crest of the peak ring (0 for a central peak) and half-width of peak or ring.
    melt_volume : float, m³
        Volume of the melt sheet, conserved whatever its shape.
    melt_radius : float, m
        Radius of the melt sheet.
    breccia_thickness : float, m
        Thickness of the breccia lens away from the peak.
    breccia_contrast, melt_contrast : float, kg/m³
        Density minus that of intact target at the same depth.
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
    breccia_contrast: float
    melt_contrast: float
    hollow: Literal["sediment", "water", "air"]
    sediment_density: float
    compaction: Compaction | None = None

    def _bowl(self, radius: Array, flat: float, rim: float) -> Array:
        if self.simple:
            return np.maximum(1.0 - (radius / self.rim_radius) ** 2, 0.0)
        return _fade(radius, flat * self.rim_radius, rim * self.rim_radius)

    def _peak(self, radius: Array) -> Array:
        return np.exp(-(((radius - self.peak_radius) / self.peak_width) ** 2))

    def hollow_base(self, radius: Array) -> Array:
        """Depth of the hollow's floor below the ground before impact, m."""
        return np.maximum(
            self.apparent_depth * self._bowl(radius, 0.8, 1.0) - self.peak_height * self._peak(radius), 0.0
        )

    def melt_thickness(self, radius: Array) -> Array:
        """Thickness of the melt sheet, m; it thins over the peak and keeps its volume."""
        if self.melt_volume == 0.0:
            return np.zeros_like(radius)
        fine = (np.arange(2000) + 0.5) / 2000 * self.melt_radius
        volume = 2 * np.pi * np.sum(self._melt_shape(fine) * fine) * self.melt_radius / 2000
        return self.melt_volume / volume * self._melt_shape(radius)

    def _melt_shape(self, radius: Array) -> Array:
        peak = 0.0 if self.simple else self._peak(radius)
        return _fade(radius, 0.8 * self.melt_radius, self.melt_radius) * (1.0 - peak)

    def breccia_base_thickness(self, radius: Array) -> Array:
        """Thickness of the breccia lens, m; thin on the peak, gone at the rim."""
        peak = 0.0 if self.simple else 0.8 * self._peak(radius)
        return self.breccia_thickness * self._bowl(radius, 0.5, 1.0) * (1.0 - peak)

    def interfaces(self, radius: Array) -> tuple[Array, Array, Array]:
        """Depths of the base of the hollow, of the melt sheet and of the breccia lens (the floor), m."""
        hollow = self.hollow_base(radius)
        melt = hollow + self.melt_thickness(radius)
        return hollow, melt, melt + self.breccia_base_thickness(radius)
