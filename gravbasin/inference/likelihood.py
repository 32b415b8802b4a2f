"""Gaussian likelihood of ring means with their full covariance and the regional estimated jointly."""

from __future__ import annotations

import dataclasses

import numpy as np
from numpy.typing import NDArray
from scipy import linalg

from gravbasin.errors import CannotFinish

__all__ = ["RingLikelihood", "ring_likelihood", "shape_scatter"]

Array = NDArray[np.float64]


@dataclasses.dataclass(frozen=True, eq=False)
class RingLikelihood:
    """Whitening that also removes the regional; every statistic is an inner product of whitened vectors.

    Attributes
    ----------
    factor : (n, n) array
        Lower Cholesky factor of the covariance, mGal.
    nuisance : (n, q) array
        Orthonormal columns spanning the whitened regional.
    regional : (n, p) array
        The regional's columns as given.
    log_determinant : float
        Half the logarithm of |C| |X'C⁻¹X|: what a likelihood with the regional integrated out is divided by.

    Notes
    -----
    y = A t + X b + n, n ~ N(0, C). With W = L⁻¹ and the projector P off the whitened X, the amplitude is
    (t'Py)/(t'Pt), its variance 1/(t'Pt), the signal-to-noise ratio of amplitude one sqrt(t'Pt). This is the
    generalised-least-squares matched filter with the regional profiled out.
    """

    factor: Array
    nuisance: Array
    regional: Array
    log_determinant: float

    @property
    def dof(self) -> int:
        """Number of rings less the rank of the regional."""
        return int(self.factor.shape[0] - self.nuisance.shape[1])

    def whiten(self, vectors: Array) -> Array:
        """Whiten and project off the regional.

        Parameters
        ----------
        vectors : (n,) or (n, m) array, mGal
            Ring means or templates, one a column.
        """
        white = linalg.solve_triangular(self.factor, vectors, lower=True, check_finite=False)
        return np.asarray(white - self.nuisance @ (self.nuisance.T @ white))

    def filter(self, template: Array) -> Array:
        """Weights w of the matched filter: w'y estimates the template's amplitude times its power, regional or not."""
        return np.asarray(linalg.solve_triangular(self.factor, self.whiten(template), lower=True, trans="T"))

    def amplitude(self, template: Array, data: Array) -> tuple[float, float]:
        """Best multiple of the template and its standard error, with the regional free."""
        t, y = self.whiten(template), self.whiten(data)
        power = float(t @ t)
        if power == 0.0:
            return 0.0, np.inf
        return float(t @ y) / power, power**-0.5

    def fitted_regional(self, residual: Array) -> Array:
        """The regional's part of the ring means, mGal, fitted to data minus model."""
        white_x = linalg.solve_triangular(self.factor, self.regional, lower=True, check_finite=False)
        white_r = linalg.solve_triangular(self.factor, residual, lower=True, check_finite=False)
        coefficients, *_ = np.linalg.lstsq(white_x, white_r, rcond=1e-9)
        return np.asarray(self.regional @ coefficients)


def ring_likelihood(covariance: Array, regional: Array) -> RingLikelihood:
    """The likelihood of ring means under a covariance, with a regional of free coefficients.

    Parameters
    ----------
    covariance : (n, n) array, mGal²
        Covariance of the ring means (noise, and the scatter of the model where that is to count).
    regional : (n, p) array
        Ring means of the regional's columns. Columns that vanish or repeat over the rings (a plane averages out over
        complete rings) do not count.

    Raises
    ------
    CannotFinish
        A covariance that is not positive definite.
    """
    try:
        factor = linalg.cholesky(covariance, lower=True)
    except linalg.LinAlgError:
        raise CannotFinish(
            "the covariance of the ring means is singular: give the noise a nugget or widen the rings"
        ) from None
    white = linalg.solve_triangular(factor, regional, lower=True)
    left, size, _ = np.linalg.svd(white, full_matrices=False)
    kept = size > 1e-6 * size[0]
    log_determinant = float(np.sum(np.log(np.diag(factor))) + np.sum(np.log(size[kept])))
    return RingLikelihood(factor, left[:, kept], regional, log_determinant)


def shape_scatter(templates: Array, area: Array) -> Array:
    """Scatter of shape alone, mGal²: each draw less its best multiple of the model.

    A filter that counts it as noise does not lean on details of the rim that nobody knows; scatter of amplitude makes
    a structure no harder to see and is left out.

    Parameters
    ----------
    templates : (n_ring, 1 + n_draw) array, mGal
        Ring means of the model, then of draws of its scatter.
    area : (n_ring,) array, m²
        Areas of the rings, the weights by which a draw is compared with the model.
    """
    model, draws = templates[:, 0], templates[:, 1:]
    power = float(area @ model**2)
    amplitude = (area * model) @ draws / power if power > 0.0 else np.zeros(draws.shape[1])
    spread = draws - model[:, None] * amplitude
    return np.asarray(spread @ spread.T / max(draws.shape[1], 1))
