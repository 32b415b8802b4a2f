"""Fracture porosity below the floor: how much the impact made, and what pressure and time have closed since."""

from __future__ import annotations

import dataclasses
from typing import Literal

import numpy as np
from numpy.typing import NDArray

__all__ = ["FLUID_DENSITY", "Damage"]

Array = NDArray[np.float64]

FLUID_DENSITY = {"fresh water": 1000.0, "sea water": 1030.0, "dry": 0.0}
"""Density of what fills the pores, kg/m³ (common practice)."""


@dataclasses.dataclass(frozen=True)
class Damage:
    """Porosity law of impact-fractured rock.

    Porosity is set by conditions at the impact: erosion later does not re-open cracks, deeper burial closes more, so
    every law sees the largest pressure the rock has carried.

    Attributes
    ----------
    form : str
        "exponential": phi0 exp(-z/e); "hyperbolic": phi0 b²/(z + b)² (Litinsky 1989, from memory);
        "pressure": phi0 (1 - P/Pc)^n. z is depth below the floor.
    porosity : float
        phi0, porosity at the floor (0-1).
    decay : float, m
        e or b.
    base : float, m
        Depth below the floor at which fractures end.
    closure_pressure : float, Pa
        Pc, weight of rock under which no crack stays open.
    exponent : float
        n of the pressure form.
    retention : float
        Share of the porosity that minerals have not sealed since (0-1).
    taper_radius : float, m
        Radius at which porosity has fallen to 1/e of its value at the axis, as exp(-(r/taper)⁴).
    core_suppression, core_radius : float, float (m)
        Share of porosity missing on the axis, where convergent flow kept pressure high, and the radius of that core.
    fluid_density : float, kg/m³
        Density of what fills the pores.
    """

    form: Literal["exponential", "hyperbolic", "pressure"]
    porosity: float
    decay: float
    base: float
    closure_pressure: float
    exponent: float
    retention: float
    taper_radius: float
    core_suppression: float
    core_radius: float
    fluid_density: float

    def open_porosity(self, below_floor: Array, radius: Array, pressure: Array) -> Array:
        """Porosity that is open today.

        Parameters
        ----------
        below_floor : array, m
            Depth below the crater floor; no porosity where negative.
        radius : array, m
            Distance from the centre.
        pressure : array, Pa
            Largest weight the rock has carried since the impact.

        Returns
        -------
        array
            Porosity, 0-1, of the broadcast shape.
        """
        z = np.maximum(below_floor, 0.0)
        load = np.clip(pressure / self.closure_pressure, 0.0, 1.0)
        if self.form == "pressure":
            depth_law = (1.0 - load) ** self.exponent
        else:
            depth_law = np.exp(-z / self.decay) if self.form == "exponential" else (self.decay / (z + self.decay)) ** 2
            # Open until close to the closure pressure, then shut within its last fifth.
            depth_law = depth_law * (1.0 - load**6)
        ends = 1.0 - np.clip(z / self.base, 0.0, 1.0) ** 6
        radial = np.exp(-((radius / self.taper_radius) ** 4))
        core = 1.0 - self.core_suppression * np.exp(-((radius / self.core_radius) ** 2))
        open_now = self.porosity * self.retention * depth_law * ends * radial * core
        return np.where(np.asarray(below_floor) >= 0.0, open_now, 0.0)
