"""Every random number behind a model as one vector of standard normals, so that a sampler can move through them."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray
from scipy import special

from gravbasin.crater.priors import Range

__all__ = ["LatentStream", "main_parameters"]

Array = NDArray[np.float64]


class LatentStream:
    """Stands in for a random generator: hands out given standard normals in order, then zeros.

    A structure draws the same quantities in the same order whatever their values, so that one entry of the vector
    always means the same quantity.
    """

    def __init__(self, values: Array) -> None:
        self._values = iter(values.tolist())
        self.used = 0

    def standard_normal(self) -> float:
        """The next value."""
        self.used += 1
        return float(next(self._values, 0.0))

    def uniform(self, low: float, high: float) -> float:
        """The next value, carried over to a uniform distribution."""
        return low + (high - low) * 0.5 * math.erfc(-self.standard_normal() / math.sqrt(2.0))


def main_parameters(latent: Array, ranges: Mapping[str, Range]) -> dict[str, Array]:
    """Main parameters from the first entries of latent vectors.

    Parameters
    ----------
    latent : (n_model, n_latent) array
        Standard normals; the first ``len(ranges)`` columns belong to the main parameters, in order.
    ranges : mapping
        Their priors.
    """
    shares = special.ndtr(latent[:, : len(ranges)])
    return {name: prior.at(shares[:, i]) for i, (name, prior) in enumerate(ranges.items())}
