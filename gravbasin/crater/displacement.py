"""How far the rock has risen: one field of net rise for central uplift, syncline, rim and Moho."""

from __future__ import annotations

import dataclasses

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import erf

__all__ = ["Displacement"]

Array = NDArray[np.float64]


def _hump(radius: Array, core: float) -> Array:
    return np.exp(-((radius / core) ** 2))


def _hump_volume(core: float) -> float:
    return float(np.pi * core**2)


def _annulus(radius: Array, crest: float, width: float) -> Array:
    return np.exp(-(((radius - crest) / width) ** 2))


def _annulus_volume(crest: float, width: float) -> float:
    x = crest / width
    return float(np.pi * width * (width * np.exp(-(x**2)) + crest * np.sqrt(np.pi) * (1 + erf(x))))


@dataclasses.dataclass(frozen=True)
class Displacement:
    """Net rise u(r, z) of the rock that now lies at radius r and depth z below the ground before impact.

    The core rises, collapses outward into a peak ring in large craters, and a ring syncline subsides so that at every
    depth the volume that rose equals the volume that sank: rock is moved, not made. Structural uplift fades linearly
    from the floor to `base`; the Moho rises by `moho_rise`, in the same field, so that nothing is counted twice.

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
        Trough of the ring syncline and of the moat of the Moho.
    moho, moho_rise : float, m
        Depth of the Moho before impact and its rise below the centre.
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
        z = np.asarray(depth, dtype=float)
        r = np.asarray(radius, dtype=float)
        core, ring, rim, trough = self._vertical(z)
        return np.asarray(
            np.outer(core, _hump(r, self.core_radius))
            + np.outer(ring, _annulus(r, self.ring_radius, self.ring_width))
            + np.outer(rim, _annulus(r, self.rim_radius, self.rim_width))
            - np.outer(trough, _annulus(r, self.syncline_radius, self.syncline_width))
        )

    def steepest(self) -> float:
        """Largest decrease of the core's rise per metre of depth; rock would turn over at 1."""
        z = np.linspace(self.floor, max(self.base, self.floor + 1.0), 400)
        amplitude = self._vertical(z)[0]
        return float(np.max(-np.diff(amplitude) / np.diff(z)))

    def _vertical(self, z: Array) -> tuple[Array, Array, Array, Array]:
        fade = np.clip((self.base - z) / max(self.base - self.floor, 1.0), 0.0, 1.0)
        structural = self.rise * fade
        moho = self.moho_rise * np.maximum(1.0 - np.abs(z - self.moho) / self.moho, 0.0)
        collapse = self.ring_share * np.exp(-np.maximum(z - self.floor, 0.0) / self.ring_depth)
        core = structural * (1.0 - collapse) + moho
        hump, crest = _hump_volume(self.core_radius), _annulus_volume(self.ring_radius, self.ring_width)
        ring = structural * collapse * hump / crest
        rim = self.rim_rise * fade
        risen = core * hump + ring * crest + rim * _annulus_volume(self.rim_radius, self.rim_width)
        trough = risen / _annulus_volume(self.syncline_radius, self.syncline_width)
        return core, ring, rim, trough
