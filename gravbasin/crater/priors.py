"""Ranges of parameters before data are looked at."""

from __future__ import annotations

import dataclasses
from typing import Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["Draws", "Range"]

Array = NDArray[np.float64]


class Draws(Protocol):
    """Where scatter is drawn from: a numpy Generator, or a sampler that hands out its own numbers."""

    def standard_normal(self) -> float:
        """One standard normal number."""

    def uniform(self, low: float, high: float) -> float:
        """One number between two bounds."""


@dataclasses.dataclass(frozen=True)
class Range:
    """Prior of one parameter: uniform, or uniform in the logarithm, between two bounds (in the parameter's unit)."""

    low: float
    high: float
    logarithmic: bool = False

    def _scaled(self, value: ArrayLike) -> Array:
        return np.log(value) if self.logarithmic else np.asarray(value, dtype=float)

    def at(self, share: ArrayLike) -> Array:
        """Quantile of the prior: the value below which this share of it lies."""
        low, high = self._scaled(self.low), self._scaled(self.high)
        scaled = low + (high - low) * np.asarray(share, dtype=float)
        return np.exp(scaled) if self.logarithmic else scaled

    def draw(self, rng: np.random.Generator, n: int) -> Array:
        """Independent draws, (n,)."""
        return self.at(rng.uniform(size=n))

    def share(self, inner: Range) -> float:
        """Prior probability of a narrower range of the same kind."""
        whole = float(self._scaled(self.high) - self._scaled(self.low))
        return float(self._scaled(inner.high) - self._scaled(inner.low)) / whole if whole > 0 else 1.0

    def contains(self, value: ArrayLike) -> NDArray[np.bool_]:
        """Whether values lie within the bounds."""
        return np.asarray((np.asarray(value) >= self.low) & (np.asarray(value) <= self.high))
