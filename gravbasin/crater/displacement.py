"""How far the rock has risen: one field of net rise for central uplift, syncline, rim and Moho."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["Displacement"]

Array = NDArray[np.float64]


def _annulus(radius: Array, crest: float, width: float) -> Array:
    """A ring of unit height; a hump on the axis when its crest is 0."""
    x = (radius - crest) / width
    return np.exp(-x * x)


def _annulus_volume(crest: float, width: float) -> float:
    x = crest / width
    return math.pi * width * (width * math.exp(-(x**2)) + crest * math.sqrt(math.pi) * (1 + math.erf(x)))


@dataclasses.dataclass(frozen=True)
class Displacement:
    """Net rise u(r, z) of the rock that now lies at radius r and depth z below the ground before impact.

    The core rises, collapses outward into a peak ring in large craters, and a ring syncline subsides so that at every
    depth the volume that rose equals the volume that sank: rock is moved, not made. Structural uplift fades linearly
    from the floor to `base`. The Moho rises by `moho_rise` within its own moat, and the crust above follows it in the
    same field, less and less towards the ground, so that nothing is counted twice.

    Attributes
    ----------
    rise : float, m
        Structural uplift below the centre of the floor, before any collapse into a ring.
    core_radius : float, m
        Radius at which the uplift has fallen to 1/e.
    floor : float, m
        Depth of the floor below the centre, where the rise is measured.
    base : float, m
        Depth at which structural uplift ends.
    ring_radius, ring_width, ring_share : float, m, m, 1
        Crest and width of the peak ring; share of the uplifted volume at the floor that collapsed into it.
    ring_depth : float, m
        Depth below the floor over which the collapse fades by 1/e.
    rim_radius, rim_width, rim_rise : float, m
        Uplift of the target under the rim.
    syncline_radius, syncline_width : float, m
        Trough of the ring syncline.
    moho, moho_rise, moho_radius : float, m
        Depth of the Moho before impact, its rise below the centre, and the radius at which that has fallen to 1/e.
    moat_radius, moat_width : float, m
        Trough of the Moho around its rise.
    """

    rise: float
    core_radius: float
    floor: float
    base: float
    ring_radius: float
    ring_width: float
    ring_share: float
    ring_depth: float
    rim_radius: float
    rim_width: float
    rim_rise: float
    syncline_radius: float
    syncline_width: float
    moho: float
    moho_rise: float
    moho_radius: float
    moat_radius: float
    moat_width: float

    def net_rise(self, depth: ArrayLike, radius: ArrayLike) -> Array:
        """Net rise on the lattice of depths and radii.

        Parameters
        ----------
        depth : (n_depth,) array, m
            Depth below the ground before impact.
        radius : (n_radius,) array, m
            Distance from the centre.

        Returns
        -------
        (n_depth, n_radius) array, m
            Positive where rock has risen.
        """
        across = np.stack([_annulus(np.asarray(radius, dtype=float), *form) for form in self._forms])
        return np.asarray(self._amplitudes(np.asarray(depth, dtype=float)) @ across)

    def steepest(self) -> float:
        """Largest decrease of the rise per metre of depth below the centre; rock would turn over at 1."""
        z = np.linspace(self.floor, max(self.base, self.floor + 1.0), 400)
        return float(np.max(-np.diff(self._amplitudes(z)[:, 0]) / np.diff(z)))

    @property
    def _forms(self) -> tuple[tuple[float, float], ...]:
        """Crest and width of each radial form: core, ring, rim, syncline, Moho, moat."""
        return (
            (0.0, self.core_radius),
            (self.ring_radius, self.ring_width),
            (self.rim_radius, self.rim_width),
            (self.syncline_radius, self.syncline_width),
            (0.0, self.moho_radius),
            (self.moat_radius, self.moat_width),
        )

    def _amplitudes(self, z: Array) -> Array:
        """Height of each radial form at every depth, (n_depth, 6) m; both troughs take back what rose."""
        volume = [_annulus_volume(*form) for form in self._forms]
        fade = np.clip((self.base - z) / max(self.base - self.floor, 1.0), 0.0, 1.0)
        structural, rim = self.rise * fade, self.rim_rise * fade
        collapse = self.ring_share * np.exp(-np.maximum(z - self.floor, 0.0) / self.ring_depth)
        core = structural * (1.0 - collapse)
        ring = structural * collapse * (volume[0] / volume[1])
        syncline = -(structural * volume[0] + rim * volume[2]) / volume[3]
        moho = self.moho_rise * np.maximum(1.0 - np.abs(z - self.moho) / self.moho, 0.0)
        return np.stack([core, ring, rim, syncline, moho, -moho * volume[4] / volume[5]], axis=-1)
