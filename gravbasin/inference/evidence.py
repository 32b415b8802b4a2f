"""How well each family explains the ring means: likelihood of whole banks, evidence, posterior, effective size."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import special

from gravbasin.inference.bank import Bank
from gravbasin.inference.level import Level
from gravbasin.inference.likelihood import RingLikelihood

__all__ = [
    "Fit",
    "Posterior",
    "evidence",
    "log_likelihood",
    "log_likelihood_of_models",
    "predictive_fit",
    "weighted_quantile",
]

Array = NDArray[np.float64]


def log_likelihood(likelihood: RingLikelihood, templates: Array, data: Array, level: Level) -> Array:
    """Log-likelihood of every datum under every template, the regional and the local noise level integrated out.

    Parameters
    ----------
    likelihood : RingLikelihood
        Covariance of the ring means under the noise.
    templates : (n_ring, n_model) array, mGal
        Ring means of the models.
    data : (n_ring, n_place) array, mGal
        Ring means about places.
    level : Level
        Prior of the noise level, one for all or one a place: the density is a multivariate Student's t.

    Returns
    -------
    (n_place, n_model) array
    """
    chi2 = _chi2(likelihood.whiten(templates), likelihood.whiten(data))
    return _student(chi2, likelihood, level)


def _chi2(white_models: Array, white_data: Array) -> Array:
    cross = white_data.T @ white_models
    cross *= -2.0
    cross += np.sum(white_models**2, axis=0)
    cross += np.sum(white_data**2, axis=0)[:, None]
    return np.maximum(cross, 0.0, out=cross)


def _student(chi2: Array, likelihood: RingLikelihood, level: Level) -> Array:
    n, nu = likelihood.dof, level.dof
    base = nu * np.reshape(level.scale, (-1, 1))
    constant = special.gammaln(0.5 * (nu + n)) - special.gammaln(0.5 * nu) - 0.5 * n * np.log(np.pi)
    constant = constant + 0.5 * nu * np.log(base) - likelihood.log_determinant
    chi2 += base
    np.log(chi2, out=chi2)
    chi2 *= -0.5 * (nu + n)
    chi2 += constant
    return chi2


@dataclasses.dataclass(frozen=True, eq=False)
class Posterior:
    """What the ring means say about one family.

    Attributes
    ----------
    name : str
        The family.
    log_evidence, standard_error : float
        Logarithm of the mean likelihood over the prior, and its Monte Carlo error.
    effective_size : float
        Number of equally weighted models the posterior is worth; below about 50 intervals are rough.
    weights : (n_model,) array
        Posterior weight of every model of the bank, summing to 1.
    bank : Bank
        The models.
    """

    name: str
    log_evidence: float
    standard_error: float
    effective_size: float
    weights: Array
    bank: Bank

    def interval(self, parameter: str, probability: float = 0.9) -> tuple[float, float, float]:
        """Median, lower and upper bound of the central interval of a parameter."""
        tails = [0.5, 0.5 - probability / 2, 0.5 + probability / 2]
        median, low, high = weighted_quantile(self.bank.parameters[parameter], self.weights, tails)
        return float(median), float(low), float(high)

    def quantiles(self, curves: Array, probabilities: Sequence[float]) -> Array:
        """Posterior quantiles of curves, (n_point, n_model), point by point: (n_probability, n_point)."""
        return np.array([weighted_quantile(point, self.weights, probabilities) for point in curves]).T

    def correlation(self, first: str, second: str) -> float:
        """Posterior correlation of two parameters: near ±1 they cannot be told apart."""
        table = np.stack([self.bank.parameters[first], self.bank.parameters[second]])
        covariance = np.cov(table, aweights=self.weights)
        spread = np.sqrt(np.diag(covariance))
        return float(covariance[0, 1] / (spread[0] * spread[1])) if spread.all() else float("nan")


def log_likelihood_of_models(
    likelihoods: Sequence[RingLikelihood], templates: Array, data: Array, level: Level
) -> Array:
    """Log-likelihood of models, (n_model,), averaged over equally plausible noise models.

    Parameters
    ----------
    likelihoods : sequence of RingLikelihood
        Under plausible noise models.
    templates : (n_ring, n_model) array, mGal
        Ring means of the models.
    data : (n_ring,) array, mGal
        Observed ring means.
    level : Level
        Prior of the local noise level.
    """
    logs = np.stack([log_likelihood(each, templates, data[:, None], level)[0] for each in likelihoods])
    return np.asarray(special.logsumexp(logs, axis=0) - np.log(len(likelihoods)))


def evidence(
    likelihoods: Sequence[RingLikelihood], templates: Array, data: Array, bank: Bank, level: Level
) -> Posterior:
    """Evidence and posterior from a bank drawn from the prior: arguments as in `log_likelihood_of_models`."""
    logs = log_likelihood_of_models(likelihoods, templates, data, level)
    total = special.logsumexp(logs)
    weights = np.exp(logs - total)
    size = 1.0 / float(np.sum(weights**2))
    error = float(np.sqrt(max(1.0 / size - 1.0 / weights.size, 0.0)))
    return Posterior(bank.name, float(total - np.log(weights.size)), error, size, weights, bank)


@dataclasses.dataclass(frozen=True)
class Fit:
    """Agreement of a family with the map.

    Attributes
    ----------
    chi2 : float
        Of its best model.
    dof : int
        Rings less the rank of the regional.
    p_value : float
        Posterior predictive: how often ring means drawn from the family would lie as far from it.
    """

    chi2: float
    dof: int
    p_value: float


def predictive_fit(likelihood: RingLikelihood, templates: Array, data: Array, weights: Array, level: Level) -> Fit:
    """Whether a family explains the ring means at all, averaged over its posterior.

    With the local level an inverse gamma, chi²/(dof scale) of a true model follows F(dof, level.dof).
    """
    from scipy import stats

    chi2 = _chi2(likelihood.whiten(templates), likelihood.whiten(data[:, None]))[0]
    tail = stats.f.sf(chi2 / (likelihood.dof * level.scale), likelihood.dof, level.dof)
    return Fit(float(chi2.min()), likelihood.dof, float(weights @ tail))


def weighted_quantile(values: Array, weights: Array, probabilities: Sequence[float]) -> Array:
    """Quantiles of weighted values, (n_probability,)."""
    order = np.argsort(values)
    cumulative = np.cumsum(weights[order])
    cumulative -= 0.5 * weights[order]
    return np.asarray(np.interp(probabilities, cumulative / np.sum(weights), values[order]))
