"""A posterior by tempering, for families whose prior draws hardly meet the data."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import linalg, optimize, special

from gravbasin.inference.bank import Bank, Family, bank_of
from gravbasin.inference.evidence import Posterior, log_likelihood_of_models
from gravbasin.inference.level import Level
from gravbasin.inference.likelihood import RingLikelihood

__all__ = ["ENOUGH", "refined"]

Array = NDArray[np.float64]

ENOUGH = 100.0
"""Effective number of models below which a posterior is refined."""

PARTICLES = 600
MOVES, LAST_MOVES = 2, 5
"""Moves of every particle at each temperature, and at the last."""

AIMED_ACCEPTANCE = 0.3


@dataclasses.dataclass(frozen=True, eq=False)
class _Cloud:
    """Particles: their models and log-likelihoods."""

    bank: Bank
    logs: Array

    def picked(self, index: NDArray[np.intp]) -> _Cloud:
        return _Cloud(_rows(self.bank, index), self.logs[index])


def refined(
    family: Family,
    first: Posterior,
    response: Array,
    likelihoods: Sequence[RingLikelihood],
    data: Array,
    level: Level,
    *,
    height: float,
    rng: np.random.Generator,
) -> Posterior:
    """A posterior and evidence carried by enough models.

    Parameters
    ----------
    family : Family
        The kind of body.
    first : Posterior
        From draws of its prior; returned as it is when enough of them carry the weight.
    response : (n_ring, n_radius) array
        From profiles to ring means.
    likelihoods : sequence of RingLikelihood
        Under plausible noise models.
    data : (n_ring,) array, mGal
        Observed ring means.
    level : Level
        Prior of the local noise level.
    height : float, m
        Of the stations.
    rng : numpy Generator
        For resampling and moves.

    Notes
    -----
    Sequential Monte Carlo (Del Moral, Doucet & Jasra 2006, from memory): the likelihood is raised from power 0 to 1 in
    steps that keep half of the particles effective; at each the particles are resampled and moved in the space of the
    standard normals behind every model, by Crank-Nicolson steps about a normal distribution fitted to the particles and
    a Metropolis-Hastings test. The evidence is the product of the mean incremental weights.
    """
    if first.effective_size >= ENOUGH:
        return first

    def forwarded(latent: Array) -> _Cloud:
        bank = bank_of(family, latent, first.bank.radius, height=height)
        return _Cloud(bank, log_likelihood_of_models(likelihoods, response @ bank.profiles.T, data, level))

    logs = log_likelihood_of_models(likelihoods, response @ first.bank.profiles.T, data, level)
    cloud, power, step = _Cloud(first.bank, logs), 0.0, 0.5
    log_evidence, variance = 0.0, 0.0
    while power < 1.0:
        rise = _next_rise(cloud.logs, 1.0 - power, 0.5 * min(PARTICLES, cloud.logs.size))
        scaled = rise * cloud.logs
        total = special.logsumexp(scaled)
        weights = np.exp(scaled - total)
        log_evidence += float(total) - np.log(weights.size)
        variance += float(np.sum(weights**2)) - 1.0 / weights.size
        power += rise
        reference = _Reference.fitted(cloud.bank.latent, weights)
        cloud = cloud.picked(_systematic(weights, PARTICLES, rng))
        for _ in range(MOVES if power < 1.0 else LAST_MOVES):
            cloud, accepted = _moved(cloud, forwarded, reference, power, step, rng)
            step = float(np.clip(step * np.exp(2 * (accepted - AIMED_ACCEPTANCE)), 0.05, 0.95))
    distinct = float(np.unique(cloud.logs).size)
    weights = np.full(PARTICLES, 1.0 / PARTICLES)
    return Posterior(first.name, log_evidence, float(np.sqrt(variance)), distinct, weights, cloud.bank)


def _next_rise(logs: Array, most: float, wanted: float) -> float:
    """Largest rise of the power, at most `most`, that leaves the wanted effective number of particles."""

    def effective(rise: float) -> float:
        scaled = rise * logs
        return float(np.exp(2 * special.logsumexp(scaled) - special.logsumexp(2 * scaled)))

    if effective(most) >= wanted:
        return most
    return float(optimize.brentq(lambda rise: effective(rise) - wanted, 0.0, most, xtol=1e-6 * most))


def _systematic(weights: Array, size: int, rng: np.random.Generator) -> NDArray[np.intp]:
    """Systematic resampling: particles in proportion to their weights, with the least scatter."""
    points = (rng.uniform() + np.arange(size)) / size
    return np.minimum(np.searchsorted(np.cumsum(weights), points), weights.size - 1)


@dataclasses.dataclass(frozen=True, eq=False)
class _Reference:
    """A normal distribution fitted to particles: moves that leave it untouched are nearly right for them too."""

    mean: Array
    factor: Array

    @classmethod
    def fitted(cls, latent: Array, weights: Array) -> _Reference:
        mean = weights @ latent
        spread = (latent - mean) * np.sqrt(weights)[:, None]
        covariance = spread.T @ spread
        effective = 1.0 / float(np.sum(weights**2))
        # Few particles cannot tell many correlations: those are held back, variances are not.
        held = effective / (effective + latent.shape[1])
        covariance = held * covariance + (1.0 - held) * np.diag(np.diag(covariance))
        covariance += 1e-9 * np.eye(latent.shape[1])
        return cls(mean, np.linalg.cholesky(1.2 * covariance))

    def log_density(self, latent: Array) -> Array:
        white = linalg.solve_triangular(self.factor, (latent - self.mean).T, lower=True)
        return np.asarray(-0.5 * np.sum(white**2, axis=0))

    def proposed(self, latent: Array, step: float, rng: np.random.Generator) -> Array:
        noise = rng.standard_normal(latent.shape) @ self.factor.T
        return np.asarray(self.mean + np.sqrt(1.0 - step**2) * (latent - self.mean) + step * noise)


def _moved(
    cloud: _Cloud,
    forwarded: Callable[[Array], _Cloud],
    reference: _Reference,
    power: float,
    step: float,
    rng: np.random.Generator,
) -> tuple[_Cloud, float]:
    """One step of every particle, and the share that took it."""

    def target(particles: _Cloud) -> Array:
        latent = particles.bank.latent
        return power * particles.logs - 0.5 * np.sum(latent**2, axis=1) - reference.log_density(latent)

    tried = forwarded(reference.proposed(cloud.bank.latent, step, rng))
    size = cloud.logs.size
    accept = np.log(rng.uniform(size=size)) < target(tried) - target(cloud)
    both = _Cloud(_joined(cloud.bank, tried.bank), np.concatenate([cloud.logs, tried.logs]))
    return both.picked(np.arange(size) + np.where(accept, size, 0)), float(accept.mean())


def _rows(bank: Bank, index: NDArray[np.intp]) -> Bank:
    parameters = {name: values[index] for name, values in bank.parameters.items()}
    return Bank(bank.name, parameters, bank.radius, bank.profiles[index], bank.latent[index])


def _joined(first: Bank, second: Bank) -> Bank:
    parameters = {name: np.concatenate([v, second.parameters[name]]) for name, v in first.parameters.items()}
    profiles, latent = (np.concatenate([getattr(b, n) for b in (first, second)]) for n in ("profiles", "latent"))
    return Bank(first.name, parameters, first.radius, profiles, latent)
