"""Linear contrasts of ring means: the regional removed, derivatives of the profile, their errors and their ratios."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import linalg, stats

from gravbasin.inference.evidence import Posterior
from gravbasin.inference.level import Level
from gravbasin.inference.likelihood import RingLikelihood

__all__ = ["CONFIDENCE", "Noise", "adapted", "cleaning", "derivatives", "equal_draws", "fieller", "ring_noise"]

Array = NDArray[np.float64]

CONFIDENCE = 0.9
"""Of every interval here, and of the families' expected ranges."""


@dataclasses.dataclass(frozen=True, eq=False)
class Noise:
    """Errors of cleaned ring means: a multivariate Student's t, because the local noise level is itself inferred.

    Attributes
    ----------
    scale : (n_ring, n_ring) array, mGal²
        Scale matrix; the covariance is dof / (dof - 2) times this.
    dof : float
        Degrees of freedom.
    """

    scale: Array
    dof: float

    @property
    def quantile(self) -> float:
        """Half width of the confidence interval, in scales."""
        return float(stats.t.ppf(0.5 + 0.5 * CONFIDENCE, self.dof))

    @property
    def inflation(self) -> float:
        """Standard error over scale."""
        return math.sqrt(self.dof / (self.dof - 2.0))

    def between(self, first: Array, second: Array) -> float:
        """Scale of the product of two contrasts; with itself, the square of a contrast's scale."""
        return float(first @ self.scale @ second)

    def p_value(self, z: float) -> float:
        """Two-sided tail of a contrast that many scales from its null."""
        return float(2.0 * stats.t.sf(abs(z), self.dof))

    def draws(self, count: int, rng: np.random.Generator) -> Array:
        """Random errors, (n_ring, count) mGal."""
        value, vector = linalg.eigh(self.scale)
        root = vector * np.sqrt(np.maximum(value, 0.0))
        return np.asarray(
            root @ rng.standard_normal((value.size, count)) * np.sqrt(self.dof / rng.chisquare(self.dof, count))
        )


def cleaning(likelihood: RingLikelihood, templates: Array) -> Array:
    """Matrix that takes the regional out of ring means, fitted jointly with templates of free amplitude.

    Parameters
    ----------
    likelihood : RingLikelihood
        Covariance and regional.
    templates : (n_ring, n_template) array, mGal
        What the structure may look like, so that the regional does not swallow part of it.

    Returns
    -------
    (n_ring, n_ring) array
        K with K (y + X b) = K y for every regional and K t = t for every template that is not itself a regional.

    Notes
    -----
    Whitened, the joint fit is y = T a + Q c + e with Q orthonormal and T made orthogonal to it: a = T⁺ y first, then
    the regional is Q Q' (y - T a).
    """
    factor, identity = likelihood.factor, np.eye(likelihood.factor.shape[0])
    white = linalg.solve_triangular(factor, identity, lower=True)
    fitted = np.linalg.pinv(likelihood.whiten(templates), rcond=1e-6) @ likelihood.whiten(identity)
    regional = factor @ likelihood.nuisance @ likelihood.nuisance.T @ white
    return np.asarray(identity - regional @ (identity - templates @ fitted))


def ring_noise(
    likelihoods: Sequence[RingLikelihood], clean: Array, residuals: Array, weights: Array, level: Level
) -> Noise:
    """Errors of cleaned ring means, averaged over plausible noise models, at the local noise level.

    Parameters
    ----------
    likelihoods : sequence of RingLikelihood
        Under plausible noise models, equally weighted.
    clean : (n_ring, n_ring) array
        From `cleaning`.
    residuals : (n_ring, n_model) array, mGal
        Ring means less models.
    weights : (n_model,) array
        Their posterior weights.
    level : Level
        Prior of the local noise variance, an inverse gamma.

    Notes
    -----
    Given a model of chi-square χ² over n degrees of freedom the variance relative to the noise model has an
    inverse-gamma posterior: a Student's t of ν + n degrees of freedom and squared scale (ν s + χ²)/(ν + n).
    """
    covariance = np.mean([each.factor @ each.factor.T for each in likelihoods], axis=0)
    chi2 = float(np.sum(likelihoods[0].whiten(residuals) ** 2, axis=0) @ weights)
    dof = level.dof + likelihoods[0].dof
    factor = (level.dof * level.scale + chi2) / dof
    return Noise(factor * clean @ covariance @ clean.T, dof)


def adapted(reference: Array, data: Array, noise: Noise, discrepancy: Array) -> Array:
    """A modelled profile moved towards the data as far as the noise allows, (n_ring,) mGal.

    Parameters
    ----------
    reference, data : (n_ring,) arrays, mGal
        The model and the cleaned ring means.
    noise : Noise
        Errors of the data.
    discrepancy : (n_ring, n_ring) array, mGal²
        How wrong the model may be: the result is the best linear predictor of a profile that departs from it so.
    """
    gain = discrepancy @ np.linalg.pinv(discrepancy + noise.scale, rcond=1e-9, hermitian=True)
    return np.asarray(reference + gain @ (data - reference))


def equal_draws(posterior: Posterior, response: Array, count: int) -> Array:
    """Ring means of that many equally weighted models of a posterior, (n_ring, count) mGal; no randomness.

    Systematic resampling: model i is taken about count × weight times.
    """
    cumulative = np.cumsum(posterior.weights)
    picked = np.searchsorted(cumulative / cumulative[-1], (np.arange(count) + 0.5) / count)
    return np.asarray(response @ posterior.bank.profiles[picked].T)


def derivatives(radius: Array, at: Array, half_width: float) -> tuple[Array, Array]:
    """First and second derivative of a radial profile as weights of its values.

    Parameters
    ----------
    radius : (n_ring,) array, m
        Radii of the values.
    at : (n_at,) array, m
        Where to take the derivatives.
    half_width : float, m
        Half width of the window; three rings must lie inside it.

    Returns
    -------
    first, second : (n_at, n_ring) arrays, 1/m and 1/m²

    Notes
    -----
    Local quadratic with tricube weights, the profile continued evenly through the centre: exact for a profile that
    is quadratic in the window.
    """
    count = radius.size
    distance = (np.concatenate([-radius[::-1], radius]) - at[:, None]) / half_width
    root = np.clip(1.0 - np.abs(distance) ** 3, 0.0, None) ** 1.5
    design = np.stack([np.ones_like(distance), distance, distance**2], axis=2)
    weights = np.linalg.pinv(design * root[:, :, None]) * root[:, None, :]
    folded = weights[:, :, count:] + weights[:, :, count - 1 :: -1]
    return folded[:, 1] / half_width, 2.0 * folded[:, 2] / half_width**2


def fieller(top: float, bottom: float, scales: tuple[float, float, float], quantile: float) -> tuple[float, float]:
    """Confidence limits of a ratio of two correlated estimates.

    Parameters
    ----------
    top, bottom : float
        Estimates; the bottom must lie more than `quantile` scales from zero, else the set is unbounded.
    scales : (var top, var bottom, covariance)
        Squared scales of both and their product.
    quantile : float
        Half width of the interval of a single estimate, in scales.

    Returns
    -------
    low, high : float
        All ratios θ with |top - θ bottom| ≤ quantile × its scale: exact, unlike first-order propagation
        (Fieller 1954, from memory).
    """
    square = quantile**2
    a = bottom**2 - square * scales[1]
    b = top * bottom - square * scales[2]
    c = top**2 - square * scales[0]
    root = math.sqrt(max(b * b - a * c, 0.0))
    return (b - root) / a, (b + root) / a
