"""Odds of a family against regional noise at many places of a map: the search, and the null of the chance test."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import special

from gravbasin.inference.evidence import log_likelihood
from gravbasin.inference.level import Level
from gravbasin.inference.likelihood import RingLikelihood

__all__ = ["log_odds"]

Array = NDArray[np.float64]

BLOCK = 4_000_000
"""Likelihoods held at a time: 32 MB."""


def log_odds(likelihood: RingLikelihood, templates: Array, data: Array, level: Level) -> Array:
    """Logarithm of evidence of a bank over that of regional noise alone, at every place.

    Parameters
    ----------
    likelihood : RingLikelihood
        Of the ring means under the noise.
    templates : (n_ring, n_model) array, mGal
        Ring means of the bank's models.
    data : (n_ring, n_place) array, mGal
        Ring means about the places.
    level : Level
        Prior of the local noise level, one for all places or one for each.

    Returns
    -------
    (n_place,) array

    Notes
    -----
    The likelihood of every model at every place is one matrix product of whitened vectors, done in blocks.
    """
    result = np.empty(data.shape[1])
    nothing = np.zeros((templates.shape[0], 1))
    scale = np.broadcast_to(np.asarray(level.scale, dtype=float), data.shape[1])
    step = max(1, BLOCK // templates.shape[1])
    for start in range(0, data.shape[1], step):
        block = data[:, start : start + step]
        here = Level(scale[start : start + step], level.dof)
        logs = log_likelihood(likelihood, templates, block, here)
        alone = log_likelihood(likelihood, nothing, block, here)[:, 0]
        result[start : start + step] = _log_mean_exp(logs) - alone
    return result


def _log_mean_exp(logs: Array) -> Array:
    return np.asarray(special.logsumexp(logs, axis=1) - np.log(logs.shape[1]))
