"""Flexural rebound of a plate from which a disc of rock was eroded.

Off by default (`history.rebound_elastic_thickness_km`): loads as wide as a crater (wavelengths up to 200 km) are
compensated by less than 6 % where the plate is 40 km thick or more, and erosion of a whole region lifts everything
by the same amount, which leaves no residual anomaly (it only moves the datum).
"""

from __future__ import annotations

import dataclasses

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import bei, beip, ber, berp, kei, keip, ker, kerp

from gravbasin.constants import STANDARD_GRAVITY
from gravbasin.errors import InputError

__all__ = ["Plate", "Rebound"]

Array = NDArray[np.float64]


@dataclasses.dataclass(frozen=True)
class Plate:
    """An elastic plate over a fluid mantle.

    Attributes
    ----------
    elastic_thickness : float, m
    young_modulus : float, Pa
    poisson_ratio : float
    mantle_density : float, kg/m³
        Density of what flows in below.
    """

    elastic_thickness: float
    young_modulus: float = 100e9
    poisson_ratio: float = 0.25
    mantle_density: float = 3300.0

    @property
    def rigidity(self) -> float:
        """Flexural rigidity E Te³ / (12 (1 - nu²)), N m."""
        return self.young_modulus * self.elastic_thickness**3 / (12.0 * (1.0 - self.poisson_ratio**2))

    @property
    def length(self) -> float:
        """Axisymmetric flexural length (D / (rho_m g))^(1/4), m."""
        return float((self.rigidity / (self.mantle_density * STANDARD_GRAVITY)) ** 0.25)

    def compensation(self, wavelength: ArrayLike) -> Array:
        """Share of a load of a wavelength (m) that the mantle supports: 1 / (1 + (length k)⁴)."""
        k = 2.0 * np.pi / np.asarray(wavelength, dtype=float)
        return 1.0 / (1.0 + (self.length * k) ** 4)


@dataclasses.dataclass(frozen=True)
class Rebound:
    """Rise of the plate after a disc of rock was removed (Brotchie & Silvester 1969, from memory).

    Attributes
    ----------
    plate : Plate
    disc_radius : float, m
        Radius of the eroded region.
    thickness : float, m
        Rock removed.
    density : float, kg/m³
        Density of that rock.
    """

    plate: Plate
    disc_radius: float
    thickness: float
    density: float

    def __post_init__(self) -> None:
        if self.disc_radius > 900.0 * self.plate.length:  # the Kelvin functions overflow; the answer is local isostasy
            raise InputError(
                "eroded radius",
                f"{self.disc_radius / 1e3:g} km",
                "must not exceed 900 flexural lengths",
                "lower it, raise the elastic thickness, or leave rebound off",
            )

    def rise(self, radius: ArrayLike) -> Array:
        """Rise at distances from the centre of the disc, m; closed form in Kelvin functions."""
        ell, r = self.plate.length, np.asarray(radius, dtype=float)
        x = self.disc_radius / ell
        inner, outer = np.minimum(r, self.disc_radius) / ell, np.maximum(r, self.disc_radius) / ell
        within = 1.0 + x * kerp(x) * ber(inner) - x * keip(x) * bei(inner)
        without = x * berp(x) * ker(outer) - x * beip(x) * kei(outer)
        local = self.density * self.thickness / self.plate.mantle_density
        return np.asarray(local * np.where(r <= self.disc_radius, within, without))
