"""A second bank where the first one's posterior lies, when too few of its models carry the weight."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from gravbasin.crater.priors import Range
from gravbasin.inference.bank import Family, build_bank
from gravbasin.inference.evidence import Level, Posterior, evidence, merged, weighted_quantile
from gravbasin.inference.likelihood import RingLikelihood

__all__ = ["ENOUGH", "refined"]

Array = NDArray[np.float64]

ENOUGH = 100.0
"""Effective number of models below which a posterior is refined."""

ROUNDS = 2


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
    """A posterior refined until enough models carry it or two rounds have passed.

    Parameters
    ----------
    family : Family
        The kind of body.
    first : Posterior
        From draws of its prior.
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
        For the further draws.

    Notes
    -----
    Each round draws twice the first bank's number of models from the box of main parameters that holds nearly all
    posterior weight; the merged sample stands for the prior without bias, each draw for its own region.
    """
    posterior, whole, ranges = first, first.bank, dict(family.ranges)
    for _ in range(ROUNDS):
        if posterior.effective_size >= ENOUGH:
            break
        ranges = {name: _narrowed(prior, posterior, name) for name, prior in ranges.items()}
        again = build_bank(family, whole.radius, models=2 * first.bank.size, height=height, rng=rng, ranges=ranges)
        whole = merged(whole, again, {name: (r.low, r.high) for name, r in ranges.items()})
        posterior = evidence(likelihoods, response @ whole.profiles.T, data, whole, level)
    return posterior


def _narrowed(prior: Range, posterior: Posterior, name: str) -> Range:
    """The range that holds nearly all posterior weight, with a margin for what few draws have missed."""
    values = posterior.bank.parameters[name]
    # A tempered posterior has wider tails: a handful of heavy draws must not shut out their neighbours.
    tempered = np.sqrt(posterior.weights)
    low, high = weighted_quantile(values, tempered / tempered.sum(), [0.002, 0.998])
    margin = 0.1 * (prior.high - prior.low)
    low, high = max(prior.low, float(low) - margin), min(prior.high, float(high) + margin)
    return Range(low, high, prior.logarithmic) if high > low else prior
