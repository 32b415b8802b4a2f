"""Which field matters most, and how a number runs over two fields: read from the cases of a sweep."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin.runs.sampling import Axis
from gravbasin.scenario import Sweep

__all__ = ["Bins", "Effect", "Ranking", "bins_of", "means_over", "ranking"]

Array = NDArray[np.float64]

GROUPS = 32
"""Groups left out in turn for the standard errors."""

LEAST_CASES = 128
MOST_LEVELS, BINS = 24, 10


@dataclasses.dataclass(frozen=True)
class Effect:
    """Share of a number's variance that one field accounts for.

    Attributes
    ----------
    field : str
        Its dotted name.
    first, first_error : float
        By itself (first-order Sobol index), with its standard error.
    total, total_error : float
        With all its interactions (total Sobol index); NaN where the sample does not tell.
    """

    field: str
    first: float
    first_error: float
    total: float
    total_error: float


@dataclasses.dataclass(frozen=True)
class Ranking:
    """Effects of all fields on one number, the largest first, and how they were found or why not."""

    effects: tuple[Effect, ...]
    how: str


def ranking(cases: xr.Dataset, sweep: Sweep, scalar: str) -> Ranking:
    """Rank the fields of a sweep by their effect on a number.

    Parameters
    ----------
    cases : Dataset (case)
        From `sweep`.
    sweep : Sweep
        The table it was made from.
    scalar : str
        Name of the number.

    Notes
    -----
    Saltelli samples: first order by Saltelli et al. 2010, total by Jansen 1999 (both from memory), errors by leaving
    out groups of base points. Whole grids: exact sums of squares, every listed value with equal weight. Other samples:
    first order as the correlation ratio over bins of equal number, less what chance alone would give; total indices
    need pairs of cases that differ in one field, which such samples do not have.
    """
    values = cases[scalar].values.astype(float)
    codes = {given.field: _codes(cases, Axis.of(given)) for given in sweep.fields}
    good = np.isfinite(values)
    if good.sum() < 2 or not np.ptp(values[good]) > 0:
        return Ranking((), "it does not vary")
    if sweep.design == "saltelli":
        return _saltelli(list(codes), values)
    if sweep.design == "grid" and good.all():
        return _factorial(sweep, values)
    if sweep.design == "list":
        return Ranking((), "values side by side vary together, so their effects cannot be told apart")
    if good.sum() < LEAST_CASES:
        return Ranking((), f"fewer than {LEAST_CASES} cases with a value do not tell")
    effects = [Effect(name, *_ratio(code[good], values[good]), np.nan, np.nan) for name, code in codes.items()]
    how = "first order from bins; total indices need pairs of cases that differ in one field: set design = 'saltelli'"
    return Ranking(_sorted(effects), how)


def _sorted(effects: list[Effect]) -> tuple[Effect, ...]:
    return tuple(sorted(effects, key=lambda e: -(e.total if np.isfinite(e.total) else e.first)))


def _codes(cases: xr.Dataset, axis: Axis) -> Array:
    values = cases[axis.field].values
    if not axis.words:
        return np.asarray(values, dtype=float)
    return np.array([list(axis.words).index(v if isinstance(v, str) else bool(v)) for v in values], dtype=float)


def _saltelli(fields: list[str], values: Array) -> Ranking:
    blocks = values.reshape(-1, len(fields) + 2)
    blocks = blocks[np.isfinite(blocks).all(axis=1)]
    if len(blocks) < 2 * GROUPS:
        return Ranking((), f"fewer than {2 * GROUPS} base points with all their values do not tell")
    estimates, errors = _jackknife(_saltelli_indices, blocks)
    k = len(fields)
    effects = [
        Effect(f, *(float(v) for v in (estimates[i], errors[i], estimates[k + i], errors[k + i])))
        for i, f in enumerate(fields)
    ]
    return Ranking(_sorted(effects), f"Sobol indices from {len(blocks)} base points")


def _saltelli_indices(blocks: Array) -> Array:
    """First-order, then total indices of blocks (n, 2 + k): A, B, and A with one column of B."""
    a, b, mixed = blocks[:, :1], blocks[:, 1:2], blocks[:, 2:]
    variance = np.var(blocks[:, :2])
    first = np.mean((b - blocks[:, :2].mean()) * (mixed - a), axis=0) / variance
    total = 0.5 * np.mean((a - mixed) ** 2, axis=0) / variance
    return np.concatenate([first, total])


def _jackknife(estimate: Callable[[Array], Array], rows: Array) -> tuple[Array, Array]:
    """An estimate, and its standard errors from leaving out every GROUPS-th part in turn."""
    group = np.arange(len(rows)) % GROUPS
    left_out = np.stack([estimate(rows[group != g]) for g in range(GROUPS)])
    return estimate(rows), np.sqrt((GROUPS - 1) * np.var(left_out, axis=0))


def _factorial(sweep: Sweep, values: Array) -> Ranking:
    table = values.reshape([f.count or 0 for f in sweep.fields])
    variance = float(np.var(table))
    effects = []
    for i, given in enumerate(sweep.fields):
        others = tuple(j for j in range(table.ndim) if j != i)
        first = float(np.var(table.mean(axis=others))) / variance
        total = float(np.mean(np.var(table, axis=i))) / variance
        effects.append(Effect(given.field, first, 0.0, total, 0.0))
    return Ranking(_sorted(effects), "Sobol indices, exact for the values of this grid with equal weights")


def _ratio(code: Array, values: Array) -> tuple[float, float]:
    bins = _places(code)
    estimate, error = _jackknife(
        lambda rows: np.array([_correlation_ratio(rows[:, 0], rows[:, 1])]), np.c_[bins, values]
    )
    return float(estimate[0]), float(error[0])


def _places(code: Array) -> Array:
    """Number of the bin of every case: its level where there are few, else bins of about equal number."""
    levels, place = np.unique(code, return_inverse=True)
    if levels.size <= MOST_LEVELS:
        return place.astype(float)
    count = int(np.clip(np.sqrt(code.size) / 2, 4, 32))
    return np.minimum(np.argsort(np.argsort(code, kind="stable")) * count // code.size, count - 1).astype(float)


def _correlation_ratio(place: Array, values: Array) -> float:
    """Share of the variance between bins, less the share that chance gives."""
    _, group = np.unique(place, return_inverse=True)
    count = np.bincount(group)
    mean = np.bincount(group, weights=values) / count
    within = float(np.sum((values - mean[group]) ** 2)) / max(values.size - count.size, 1)
    return float(1.0 - within * (values.size - 1) / np.sum((values - values.mean()) ** 2))


@dataclasses.dataclass(frozen=True, eq=False)
class Bins:
    """How a field is divided for a heat map.

    Attributes
    ----------
    labels : tuple of str
        Of every bin, when it stands for one value; empty for a range.
    edges : (n + 1,) array
        Of the bins of a range.
    place : (n_case,) array
        Bin of every case.
    """

    labels: tuple[str, ...]
    edges: Array
    place: NDArray[np.intp]

    @property
    def count(self) -> int:
        """Number of bins."""
        return len(self.labels) or self.edges.size - 1


def bins_of(cases: xr.Dataset, axis: Axis) -> Bins:
    """Bins of one field: its values where they are few, else even steps of its scale."""
    code = _codes(cases, axis)
    if axis.words or 0 < axis.levels.size <= MOST_LEVELS:
        order = np.sort(axis.levels)
        labels = tuple(str(w).lower() if isinstance(w, bool) else str(w) for w in axis.words)
        labels = labels or tuple(f"{v:.4g}" for v in order)
        return Bins(labels, np.zeros(0), np.searchsorted(order, code))
    space = np.geomspace if axis.log else np.linspace
    edges = space(axis.low, axis.high, BINS + 1)
    place = np.clip(np.searchsorted(edges, code, side="right") - 1, 0, BINS - 1)
    return Bins((), edges, place)


def means_over(values: Array, x: Bins, y: Bins) -> tuple[Array, NDArray[np.intp]]:
    """Mean of a number over the cases in every pair of bins, (n_y, n_x), NaN where there are none; and how many."""
    good = np.isfinite(values)
    place = y.place[good] * x.count + x.place[good]
    count = np.bincount(place, minlength=x.count * y.count)
    total = np.bincount(place, weights=values[good], minlength=x.count * y.count)
    mean = np.divide(total, count, out=np.full(total.shape, np.nan), where=count > 0)
    return mean.reshape(y.count, x.count), count.reshape(y.count, x.count)
