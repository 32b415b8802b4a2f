"""Adaptive importance sampling of a posterior with few parameters and an expensive density."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import linalg, special

from gravbasin.observed._lattice import Array

__all__ = ["Sample", "importance_sample"]

_DOF = 4.0  # Student tails, heavier than any posterior in logarithms
_INFLATE = 1.3  # on scale: a proposal too wide wastes points, one too narrow misses a tail
_LEARN_FROM = 20.0  # effective points that a proposal is shaped by, if need be with flattened weights


@dataclass(frozen=True, eq=False)
class Sample:
    """Weighted points of a posterior: `points` (n, d), `weights` (n,) summing to 1, `extra` (n,) carried along."""

    points: Array
    weights: Array
    extra: Array

    @property
    def mean(self) -> Array:
        """Weighted mean, (d,)."""
        return self.weights @ self.points

    @property
    def covariance(self) -> Array:
        """Weighted covariance, (d, d)."""
        away = self.points - self.mean
        return (away * self.weights[:, None]).T @ away

    @property
    def effective_size(self) -> float:
        """1 / Σw²: how many equal points this is worth."""
        return float(1.0 / np.sum(self.weights**2))

    def resample(self, count: int, rng: np.random.Generator) -> NDArray[np.int64]:
        """Indices of `count` equally likely points (systematic resampling), in random order, (count,)."""
        ladder = (np.arange(count) + rng.random()) / count
        pick = np.searchsorted(np.cumsum(self.weights) / self.weights.sum(), ladder)
        return rng.permutation(np.minimum(pick, self.weights.size - 1))


def importance_sample(
    density: Callable[[Array], tuple[float, float]],
    centre: Array,
    covariance: Array,
    *,
    bounds: Array,
    rng: np.random.Generator,
    sizes: tuple[int, ...],
) -> Sample:
    """Sample a posterior whose whereabouts are roughly known.

    Parameters
    ----------
    density : callable
        Maps a point (d,) to (log density up to a constant, a number to carry along).
    centre, covariance : (d,), (d, d) arrays
        Of the first proposal.
    bounds : (d, 2) array
        Box outside which the density is zero (it is not called there).
    rng : numpy Generator
        Source of randomness.
    sizes : tuple of int
        Points per round; each round's proposal takes mean and covariance from all the points before it.

    Returns
    -------
    Sample

    Notes
    -----
    Multivariate Student proposals; every point is weighted against the mixture of all rounds' proposals (adaptive
    multiple importance sampling, Cornuet, Marin, Mira & Robert 2012, from memory).
    """
    proposals: list[tuple[float, Array, Array]] = []
    sample = Sample(np.empty((0, centre.size)), np.empty(0), np.empty(0))
    logs = log_weight = np.empty(0)
    for size in sizes:
        if logs.size:
            learnt = Sample(sample.points, _tempered(log_weight), sample.extra)
            centre, covariance = learnt.mean, learnt.covariance + 0.01 * np.diag(np.diag(covariance))
        factor = np.asarray(_INFLATE * np.linalg.cholesky(covariance), dtype=float)
        fresh, tried = _propose(centre, factor, bounds, size, rng)
        proposals.append((tried, centre, factor))
        values = np.array([density(point) for point in fresh])
        points, extra = np.vstack([sample.points, fresh]), np.concatenate([sample.extra, values[:, 1]])
        logs = np.concatenate([logs, values[:, 0]])
        mixture = special.logsumexp([np.log(n) + _log_student(points, c, f) for n, c, f in proposals], axis=0)
        log_weight = logs - mixture
        sample = Sample(points, np.exp(log_weight - special.logsumexp(log_weight)), extra)
    return sample


def _propose(
    centre: Array,
    factor: Array,
    bounds: Array,
    size: int,
    rng: np.random.Generator,
) -> tuple[Array, float]:
    """`size` points of the Student proposal inside the box, and how many it took to find them."""
    kept, tried = np.empty((0, centre.size)), 0
    while len(kept) < size:
        scale = np.sqrt(_DOF / rng.chisquare(_DOF, size=size))
        fresh = centre + scale[:, None] * (rng.standard_normal((size, centre.size)) @ factor.T)
        inside = np.flatnonzero(((fresh >= bounds[:, 0]) & (fresh <= bounds[:, 1])).all(axis=1))
        missing = size - len(kept)
        tried += size if inside.size < missing else int(inside[missing - 1]) + 1
        kept = np.vstack([kept, fresh[inside[:missing]]])
    return kept, float(tried)


def _tempered(log_weight: Array) -> Array:
    """Weights to the power that leaves enough effective points: a few lucky points must not shape a proposal."""
    power = 1.0
    while True:
        weights = np.exp(power * log_weight - special.logsumexp(power * log_weight))
        if 1.0 / np.sum(weights**2) >= _LEARN_FROM or power < 1e-3:
            return weights
        power *= 0.8


def _log_student(points: Array, centre: Array, factor: Array) -> Array:
    """Log density of a multivariate Student distribution, up to a constant common to all."""
    whitened = linalg.solve_triangular(factor, (points - centre).T, lower=True)
    squared = (whitened**2).sum(axis=0)
    return -0.5 * (_DOF + centre.size) * np.log1p(squared / _DOF) - np.log(np.diag(factor)).sum()
