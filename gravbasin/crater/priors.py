"""Ranges of parameters before data are looked at."""

from __future__ import annotations

import dataclasses

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["Range"]

Array = NDArray[np.float64]


@dataclasses.dataclass(frozen=True)
class Range:
    """Prior of one parameter: uniform, or uniform in the logarithm, between two bounds (in the parameter's unit)."""

    low: float
    high: float
    logarithmic: bool = False

    def _scaled(self, value: ArrayLike) -> Array:
        return np.log(value) if self.logarithmic else np.asarray(value, dtype=float)

    def draw(self, rng: np.random.Generator, n: int) -> Array:
        """Independent draws, (n,)."""
        drawn = rng.uniform(self._scaled(self.low), self._scaled(self.high), n)
        return np.exp(drawn) if self.logarithmic else drawn

    def share(self, inner: Range) -> float:
        """Prior probability of a narrower range of the same kind."""
        whole = float(self._scaled(self.high) - self._scaled(self.low))
        return float(self._scaled(inner.high) - self._scaled(inner.low)) / whole if whole > 0 else 1.0

    def contains(self, value: ArrayLike) -> NDArray[np.bool_]:
        """Whether values lie within the bounds."""
        return np.asarray((np.asarray(value) >= self.low) & (np.asarray(value) <= self.high))
