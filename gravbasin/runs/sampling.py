"""From a [sweep] table to the values of every case: grids, lists, Sobol, Latin-hypercube and Saltelli samples.

A case is known by its number. Its values follow from the scenario alone, so any piece of a design can be made by
itself, in any order, on any machine.
"""

from __future__ import annotations

import dataclasses
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from gravbasin.runs.variants import Value
from gravbasin.scenario import Scenario, Sweep, SweptField

if TYPE_CHECKING:
    from scipy.stats import qmc

__all__ = ["Axis", "Design"]

Array = NDArray[np.float64]

STREAM = 20
"""Stream of the scenario's seed from which samples are made; the cases' own scatter has the next one."""


@dataclasses.dataclass(frozen=True)
class Axis:
    """The values one field takes; words are kept as their number in the list.

    Attributes
    ----------
    field : str
        Dotted name.
    words : tuple
        Words or truth values, in the order of their codes; empty for numbers.
    numbers : tuple of float
        Listed or evenly spaced numbers; empty for a sampled range and for words.
    low, high, log
        Ends and scale of the range (of the numbers, where they are listed).
    """

    field: str
    words: tuple[Value, ...]
    numbers: tuple[float, ...]
    low: float
    high: float
    log: bool

    @classmethod
    def of(cls, given: SweptField) -> Axis:
        """From one entry of sweep.fields."""
        if given.values and isinstance(given.values[0], (str, bool)):
            return cls(given.field, given.values, (), 0.0, float(len(given.values) - 1), False)
        if given.values:
            numbers = tuple(float(v) for v in given.values)
            return cls(given.field, (), numbers, min(numbers), max(numbers), False)
        assert given.low is not None
        assert given.high is not None
        log = given.scale == "log"
        numbers = ()
        if given.steps:
            space = np.geomspace if log else np.linspace
            numbers = tuple(space(given.low, given.high, given.steps).tolist())
        return cls(given.field, (), numbers, given.low, given.high, log)

    @property
    def levels(self) -> Array:
        """Codes of listed values: the numbers themselves, or the numbers of the words; empty for a sampled range."""
        return np.arange(len(self.words), dtype=float) if self.words else np.array(self.numbers)

    def at(self, unit: Array) -> Array:
        """Codes at places between 0 and 1."""
        levels = self.levels
        if levels.size:
            return np.asarray(levels[np.minimum((unit * levels.size).astype(int), levels.size - 1)])
        if self.log:
            return np.asarray(np.exp(np.log(self.low) + unit * (np.log(self.high) - np.log(self.low))))
        return np.asarray(self.low + unit * (self.high - self.low))

    def value(self, code: float) -> Value:
        """The value behind a code."""
        return self.words[int(code)] if self.words else code


@dataclasses.dataclass(frozen=True, eq=False)
class Design:
    """All cases of a sweep.

    Attributes
    ----------
    sweep : Sweep
        The table.
    seed : int
        The scenario's seed.
    """

    sweep: Sweep
    seed: int

    @classmethod
    def of(cls, scenario: Scenario) -> Design:
        """Of a scenario with a [sweep] table."""
        assert scenario.sweep is not None
        return cls(scenario.sweep, scenario.seed)

    @cached_property
    def axes(self) -> tuple[Axis, ...]:
        """The fields that vary."""
        return tuple(Axis.of(given) for given in self.sweep.fields)

    @property
    def size(self) -> int:
        """Number of cases."""
        return self.sweep.size

    def codes(self, first: int, last: int) -> Array:
        """Codes of the cases from number `first` to before `last`, (n_case, n_field); words as numbers."""
        number = np.arange(first, last)
        if self.sweep.design == "grid":
            shape = tuple(axis.levels.size for axis in self.axes)
            index = np.unravel_index(number, shape)
            return np.stack([axis.levels[i] for axis, i in zip(self.axes, index, strict=True)], axis=1)
        if self.sweep.design == "list":
            return np.stack([axis.levels[number] for axis in self.axes], axis=1)
        unit = self._unit(first, last)
        return np.stack([axis.at(u) for axis, u in zip(self.axes, unit.T, strict=True)], axis=1)

    def _unit(self, first: int, last: int) -> Array:
        if self.sweep.design == "latin hypercube":
            return self._hypercube[first:last]
        if self.sweep.design == "sobol":
            return self._sobol(first, last)
        # Saltelli: for every base point the rows A, B, and A with one column of B, side by side.
        k = len(self.axes)
        base = np.arange(first // (k + 2), (last - 1) // (k + 2) + 1)
        pair = self._sobol(int(base[0]), int(base[-1]) + 1)
        a, b = pair[:, :k], pair[:, k:]
        rows = np.stack([a, b, *(np.where(np.arange(k) == j, b, a) for j in range(k))], axis=1).reshape(-1, k)
        start = int(base[0]) * (k + 2)
        return rows[first - start : last - start]

    def _sobol(self, first: int, last: int) -> Array:
        sampler = self._sampler
        if sampler.num_generated > first:
            sampler.reset()
        # The first piece, and it alone, must be a power of two long: take one point by itself.
        nothing = np.empty((0, sampler.d))
        start = sampler.random(1) if sampler.num_generated == 0 else nothing
        if first > sampler.num_generated:
            sampler.fast_forward(first - sampler.num_generated)
        rest = last - sampler.num_generated
        points = sampler.random(rest) if rest else nothing
        return np.concatenate([start, points]) if first == 0 else points

    @cached_property
    def _sampler(self) -> qmc.Sobol:
        from scipy.stats import qmc

        dimensions = len(self.axes) * (2 if self.sweep.design == "saltelli" else 1)
        seed = int(np.random.default_rng([self.seed, STREAM]).integers(2**31))
        return qmc.Sobol(dimensions, seed=seed)

    @cached_property
    def _hypercube(self) -> Array:
        """One point in each of n even slices of every field, at random within the slice and in random order."""
        rng = np.random.default_rng([self.seed, STREAM])
        n = self.size
        return np.stack([(rng.permutation(n) + rng.random(n)) / n for _ in self.axes], axis=1)
