"""Generalised least squares with a Matérn covariance on scattered nodes: the algebra that the estimates share."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import linalg

from gravbasin.errors import CannotFinish
from gravbasin.observed._lattice import Array, Nodes
from gravbasin.observed.noise import NoiseModel, matern_correlation

__all__ = ["Lags", "Whitened", "covariance_of", "whiten"]


@dataclass(frozen=True, eq=False)
class Lags:
    """The distinct distances between nodes: an evaluation of the covariance needs each of them once.

    `distance` (n_lag,) in metres; `index` (n, n) into it.
    """

    distance: Array
    index: NDArray[np.int64]

    @classmethod
    def between(cls, nodes: Nodes) -> Lags:
        """Lags of every pair of nodes; distances equal to within a nanometre per kilometre count as one."""
        away = _distances(nodes)
        grain = max(float(away.max()), 1.0) * 1e-12
        distance, index = np.unique(np.round(away / grain), return_inverse=True)
        return cls(distance * grain, np.asarray(index, dtype=np.int64).reshape(away.shape))

    def correlation(self, range_m: float, smoothness: float) -> Array:
        """Matérn correlation of every pair, (n, n)."""
        return matern_correlation(self.distance, range_m=range_m, smoothness=smoothness)[self.index]


@dataclass(frozen=True, eq=False)
class Whitened:
    """Cholesky factor L of the covariance V, L⁻¹X and L⁻¹y, and what least squares makes of them.

    `coefficients` (p,), `coefficient_factor` R with R'R = X'V⁻¹X, `residual` = L⁻¹(y − Xb), `log_determinant` of V.
    """

    factor: Array
    design: Array
    residual: Array
    coefficients: Array
    coefficient_factor: Array
    log_determinant: float

    @property
    def quadratic(self) -> float:
        """(y − Xb)' V⁻¹ (y − Xb)."""
        return float(self.residual @ self.residual)

    @property
    def log_determinant_design(self) -> float:
        """ln |X' V⁻¹ X|."""
        return 2.0 * float(np.log(np.abs(np.diag(self.coefficient_factor))).sum())


def whiten(covariance: Array, design: Array, values: Array) -> Whitened:
    """Solve y = Xb + e, e ~ N(0, V). The covariance is overwritten.

    Raises
    ------
    CannotFinish
        V is not positive definite in double precision.
    """
    try:
        factor = linalg.cholesky(covariance, lower=True, overwrite_a=True, check_finite=False)
    except linalg.LinAlgError as fault:
        raise CannotFinish("the noise covariance of the map's nodes is singular; give the noise a nugget") from fault
    both = linalg.solve_triangular(factor, np.column_stack([design, values]), lower=True, check_finite=False)
    columns, target = both[:, :-1], both[:, -1]
    q, r = linalg.qr(columns, mode="economic", check_finite=False)
    coefficients = linalg.solve_triangular(r, q.T @ target, check_finite=False)
    return Whitened(
        factor, columns, target - columns @ coefficients, coefficients, r, 2.0 * float(np.log(np.diag(factor)).sum())
    )


def covariance_of(nodes: Nodes, noise: NoiseModel) -> Array:
    """Covariance of the nodes under the noise model, nugget on the diagonal, (n, n) mGal²."""
    matrix = noise.covariance(_distances(nodes))
    matrix[np.diag_indices_from(matrix)] += noise.nugget_mgal**2
    return matrix


def _distances(nodes: Nodes) -> Array:
    return np.hypot(nodes.easting[:, None] - nodes.easting, nodes.northing[:, None] - nodes.northing)
