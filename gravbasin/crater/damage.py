"""Fracture porosity below the floor: how much the impact made, and what pressure and time have closed since."""

from __future__ import annotations

import dataclasses
import math
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gravbasin.crater.priors import Draws

__all__ = ["FLUID_DENSITY", "Damage", "Sealing", "bulking", "sealing"]

Array = NDArray[np.float64]

FLUID_DENSITY = {"fresh water": 1000.0, "sea water": 1030.0, "dry": 0.0}
"""Density of what fills the pores, kg/m³ (common practice)."""

SEALED_FRACTURES, SEALED_BRECCIA = 0.25, 0.1
"""Share of the land contrast that sea-water sealing left in fractures and breccia (Sturkell et al. 1998)."""

DRY_BULKING = -0.5
"""Least share of the new porosity in dry porous rock; negative because shock crushes its pores (by choice)."""

OLD_MYR = 1000.0
"""Age from which cracks on land may be as sealed as those under the sea, Myr: two anchors only, common practice."""


@dataclasses.dataclass(frozen=True)
class Sealing:
    """Share of a contrast that minerals have not sealed: the expected value and the range it is drawn from."""

    expected: float
    low: float
    high: float

    def draw(self, rng: Draws | None) -> float:
        """The expected value, or with `rng` one from a log-uniform range."""
        if rng is None:
            return self.expected
        return math.exp(rng.uniform(math.log(self.low), math.log(self.high)))


def sealing(setting: str, age_myr: float | None, *, sealed: float) -> Sealing:
    """How much of a contrast is left, by setting and age.

    No law of healing is published; the ends are a fresh crater on land (1) and sea-water sealing (`sealed`). On land
    the range opens from 1 at 1 Myr to `sealed` at 1 Gyr, evenly in the logarithm of age, and its geometric middle is
    expected; without an age the crater counts as fresh but draws span the whole range. Long-lived hot water lies
    between the two ends, sea water at the lower one with a factor of two either way.

    Parameters
    ----------
    setting : str
        "land", "marine" or "hydrothermal".
    age_myr : float or None
        Age of the impact, Myr.
    sealed : float
        What is left when sealed: `SEALED_FRACTURES` or `SEALED_BRECCIA`.
    """
    if setting == "marine":
        return Sealing(sealed, 0.5 * sealed, min(2.0 * sealed, 1.0))
    if setting == "hydrothermal":
        return Sealing(math.sqrt(sealed), sealed, 1.0)
    progress = 1.0 if age_myr is None else min(max(math.log(max(age_myr, 1.0)) / math.log(OLD_MYR), 0.0), 1.0)
    lowest = sealed**progress
    return Sealing(1.0 if age_myr is None else math.sqrt(lowest), lowest, 1.0)


def bulking(porosity_before: ArrayLike, crossover: float, *, least: float = 0.0) -> Array:
    """Share of the new porosity that rock takes on which was porous already.

    1 in dense rock, 0 at the crossover (near 7 % for fractures: Milbury et al. 2015; linear between by choice). Beyond
    it, shock closes more pores than it opens only where they are dry, as in that lunar work: `least` is then -0.5 by
    choice. Pores full of water resist crushing, so `least` is 0 (common practice).
    """
    return np.maximum(1.0 - np.asarray(porosity_before, dtype=float) / crossover, least)


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
    crossover : float
        Porosity before impact at which shock closes as much as it opens.
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
    crossover: float = 0.07

    @property
    def least_bulking(self) -> float:
        """Lower end of `bulking`: negative where pores are dry and can be crushed."""
        return DRY_BULKING if self.fluid_density == 0.0 else 0.0

    def open_porosity(self, below_floor: Array, radius: Array, pressure: Array) -> Array:
        """Porosity that is open today in rock that was dense before the impact (`bulking` reduces it in porous rock).

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
        depth = np.maximum(below_floor, 0.0)
        load = np.clip(pressure * (1.0 / self.closure_pressure), 0.0, 1.0)
        if self.form == "pressure":
            vertical = 1.0 - load if self.exponent == 1.0 else (1.0 - load) ** self.exponent
        else:
            # Open until close to the closure pressure, then shut within its last fifth.
            shut = 1.0 - _sixth_power(load)
            vertical = shut * (np.exp(-depth / self.decay) if self.form == "exponential" else _hyperbola(depth, self))
        ends = 1.0 - _sixth_power(np.minimum(depth / self.base, 1.0))
        return np.where(np.asarray(below_floor) >= 0.0, vertical * ends * self._radial(radius), 0.0)

    def _radial(self, radius: Array) -> Array:
        core = 1.0 - self.core_suppression * np.exp(-((radius / self.core_radius) ** 2))
        return self.porosity * self.retention * core * np.exp(-((radius / self.taper_radius) ** 4))


def _hyperbola(depth: Array, damage: Damage) -> Array:
    x = damage.decay / (depth + damage.decay)
    return x * x


def _sixth_power(x: Array) -> Array:
    cube = x * x * x  # several times faster than x**6
    return cube * cube
