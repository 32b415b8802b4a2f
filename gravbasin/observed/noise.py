"""The noise of a gravity map: not the gravimeter's but the geology's, a Matérn field plus a nugget."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import ArrayLike
from scipy import special

from gravbasin.errors import InputError
from gravbasin.observed._lattice import Array

__all__ = ["LOG_NAMES", "NoiseModel", "matern_correlation"]

LOG_NAMES = ("sill", "range", "smoothness", "nugget")
"""Order of the logarithms in `NoiseModel.posterior`."""

SMOOTHNESS_BOUNDS = (0.3, 2.5)
"""Smoothness that estimates may take: map spectra from k^-2.6 to k^-7."""

USER_LEVEL_SCATTER = 0.15
"""Scatter of ln(sill) for a model given without errors (judgement: as far as two masks of one map commonly differ)."""

_TABLE_FROM = 3000  # arrays above this size are interpolated: Bessel functions cost about a microsecond each
_TABLE_STEP = 0.01  # in ln(distance); cubic interpolation is then good to 1e-9 of the sill (tested)


def matern_correlation(distance_m: ArrayLike, *, range_m: float, smoothness: float) -> Array:
    """Matérn correlation, 2^(1−ν)/Γ(ν) x^ν K_ν(x) with x = √(2ν) s/L.

    Large arrays are interpolated in ln(distance) from exact values, to about 1e-9.
    """
    distance = np.abs(np.asarray(distance_m, dtype=float))
    scale = math.sqrt(2.0 * smoothness) / range_m
    if distance.size <= _TABLE_FROM:
        return _matern(distance * scale, smoothness)
    smallest = distance[distance > 0.0].min(initial=np.inf)
    largest = float(distance.max())
    if not smallest < largest:
        return _matern(distance * scale, smoothness)
    from scipy.interpolate import CubicSpline  # slow to import

    count = int(math.log(largest / smallest) / _TABLE_STEP) + 8
    nodes = np.linspace(math.log(smallest), math.log(largest), count)
    spline = CubicSpline(nodes, _matern(np.exp(nodes) * scale, smoothness))
    return np.where(distance > 0.0, spline(np.log(np.maximum(distance, smallest))), 1.0)


def _matern(x: Array, smoothness: float) -> Array:
    near, far = x < 1e-10, x > 600.0
    safe = np.where(near | far, 1.0, x)
    scale = (1.0 - smoothness) * math.log(2.0) - special.gammaln(smoothness)
    value = np.exp(scale + smoothness * np.log(safe) - safe) * special.kve(smoothness, safe)
    return np.where(near, 1.0, np.where(far, 0.0, value))


@dataclass(frozen=True, kw_only=True)
class NoiseModel:
    """A stationary, isotropic Matérn field plus white nugget, about a polynomial regional.

    Parameters
    ----------
    sill_mgal : float
        Units: mGal. Definition: standard deviation of the correlated part.
    range_m : float
        Units: m. Definition: L in the correlation 2^(1−ν)/Γ(ν) x^ν K_ν(x), x = √(2ν) s/L.
    smoothness : float
        Units: 1. Definition: ν; the map's spectrum falls as k^−(2ν+2).
    nugget_mgal : float
        Units: mGal. Definition: standard deviation of the part that differs from node to node.
    regional_order : int
        Definition: order (0, 1, 2) of the polynomial regional to estimate jointly with whatever is fitted.
    model : str
        Always "matern".
    posterior : (n_draw, 4) nested tuple, optional
        Equally likely values of ln(sill), ln(range), ln(smoothness), ln(nugget) where the model was estimated.
    n_points : int
        Number of nodes the estimate rests on, 0 for a given model.
    log_likelihood : float, optional
        Restricted log-likelihood at the estimate (without prior).
    resolution_m : float, optional
        Units: m. Definition: spacing below which the map was not taken as data.

    Examples
    --------
    >>> noise = NoiseModel(sill_mgal=8.0, range_m=30e3, smoothness=0.5, nugget_mgal=0.5)
    >>> noise.covariance([0.0, 30e3]).round(3).tolist()  # ν = 1/2 is exponential: 64/e at one range
    [64.0, 23.544]
    """

    sill_mgal: float
    range_m: float
    smoothness: float
    nugget_mgal: float = 0.0
    regional_order: int = 1
    model: str = "matern"
    posterior: tuple[tuple[float, ...], ...] | None = field(default=None, repr=False)
    n_points: int = 0
    log_likelihood: float | None = None
    resolution_m: float | None = None

    def __post_init__(self) -> None:
        rules = {
            "sill_mgal": (0.0 < self.sill_mgal < math.inf, "must be greater than 0 mGal", "give a standard deviation"),
            "range_m": (0.0 < self.range_m < math.inf, "must be greater than 0 m", "give metres"),
            "smoothness": (0.0 < self.smoothness <= 20.0, "must be above 0 and at most 20", "0.5 to 2 is usual"),
            "nugget_mgal": (0.0 <= self.nugget_mgal < math.inf, "must be 0 mGal or more", "give a standard deviation"),
            "regional_order": (self.regional_order in (0, 1, 2), "must be 0, 1 or 2", "1 is a tilted plane"),
            "model": (self.model == "matern", 'must be "matern"', "leave it out"),
        }
        for name, (good, rule, remedy) in rules.items():
            if not good:
                raise InputError(f"noise.{name}", getattr(self, name), rule, remedy)

    def correlation(self, distance_m: ArrayLike) -> Array:
        """Correlation of the correlated part at the distances, any shape, dimensionless."""
        return matern_correlation(distance_m, range_m=self.range_m, smoothness=self.smoothness)

    def roughness(self, distance_m: float) -> float:
        """Standard deviation of the difference between places this far apart, over the square root of 2, mGal.

        Range and sill trade against each other in an estimate; this is what both say of structures of that size.
        """
        correlated = self.sill_mgal**2 * (1.0 - float(self.correlation(distance_m)))
        return math.sqrt(correlated + self.nugget_mgal**2)

    def covariance(self, distance_m: ArrayLike) -> Array:
        """Covariance of the correlated part at the distances, any shape, mGal²; the nugget is not in it."""
        return self.sill_mgal**2 * self.correlation(distance_m)

    def spectrum(self, wavenumber: ArrayLike) -> Array:
        """Two-dimensional power density of the correlated part.

        Parameters
        ----------
        wavenumber : array, rad/m
            Radial wavenumber k.

        Returns
        -------
        array, mGal² m²
            P(k) = 4πν l² σ² (1 + k² l²)^−(ν+1), l = L/√(2ν); the variance is (1/2π) ∫ P(k) k dk.
        """
        k = np.asarray(wavenumber, dtype=float)
        squared = self.range_m**2 / (2.0 * self.smoothness)
        level = 4.0 * math.pi * self.smoothness * squared * self.sill_mgal**2
        return np.asarray(level * (1.0 + k**2 * squared) ** -(self.smoothness + 1.0))

    @property
    def relative_errors(self) -> dict[str, float]:
        """Standard errors of the logarithms (so, relative errors) by name; empty for a given model."""
        if self.posterior is None:
            return {}
        return dict(zip(LOG_NAMES, np.std(self.posterior, axis=0).tolist(), strict=True))

    def as_dict(self) -> dict[str, Any]:
        """The model in the units and names of verdict.json; estimated models add their errors and number of nodes."""
        plain: dict[str, Any] = {
            "model": self.model,
            "sill_mgal": self.sill_mgal,
            "range_km": self.range_m / 1e3,
            "smoothness": self.smoothness,
            "nugget_mgal": self.nugget_mgal,
            "regional_order": self.regional_order,
        }
        if self.posterior is not None:
            plain["relative_errors"] = self.relative_errors
            plain["n_points"] = self.n_points
            plain["log_likelihood"] = self.log_likelihood
        if self.resolution_m is not None:
            plain["resolution_km"] = self.resolution_m / 1e3
        return plain

    def draws(self, rng: np.random.Generator, n: int, *, level_scatter: float | None = None) -> list[NoiseModel]:
        """Models as plausible as this one, to average a likelihood over.

        An estimated model draws from its posterior; a model given without one varies in level alone.

        Parameters
        ----------
        rng : numpy Generator
            Source of randomness.
        n : int
            Number of models.
        level_scatter : float, optional
            Scatter of ln(sill), with which the nugget moves; for an estimate it comes on top of the posterior's.
            Default 0.15 for a given model, 0 for an estimate.

        Returns
        -------
        list of NoiseModel
            Without posterior: a draw is not itself an estimate.
        """
        if level_scatter is None:
            level_scatter = USER_LEVEL_SCATTER if self.posterior is None else 0.0
        level = np.exp(level_scatter * rng.standard_normal(n))
        if self.posterior is None:
            values = np.tile([self.sill_mgal, self.range_m, self.smoothness, self.nugget_mgal], (n, 1))
        else:
            logs = np.array(self.posterior)
            values = np.exp(logs[rng.choice(len(logs), size=n, replace=n > len(logs))])
        values[:, [0, 3]] *= level[:, None]
        return [
            replace(
                self,
                sill_mgal=sill,
                range_m=range_m,
                smoothness=smoothness,
                nugget_mgal=nugget,
                posterior=None,
                n_points=0,
                log_likelihood=None,
            )
            for sill, range_m, smoothness, nugget in values.tolist()
        ]
