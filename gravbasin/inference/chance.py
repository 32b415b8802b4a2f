"""How often this very map offers as good a circle by chance: the same statistic at other centres."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy import sparse

from gravbasin.discs import ring_fractions
from gravbasin.inference.likelihood import RingLikelihood, ring_likelihood
from gravbasin.inference.response import ring_response
from gravbasin.observed import NoiseModel, polynomial_basis, ring_covariance, simulate_noise, stencil_axes

__all__ = ["Chance", "Stencil", "chance_of", "complete_nodes", "random_ring_means"]

Array = NDArray[np.float64]
Nodes = tuple[NDArray[np.intp], NDArray[np.intp]]
"""Rows and columns of grid nodes."""

ENOUGH_CENTRES = 200
"""With fewer other centres on the map, random fields of the fitted noise stand in for them."""


@dataclasses.dataclass(frozen=True)
class Chance:
    """Result of the chance test.

    Attributes
    ----------
    statistic : float
        Logarithm of the odds of an impact structure against regional noise at the structure.
    centres : int
        Other centres (or random fields) that were tried.
    p_value, standard_error : float
        Share that does as well, (1 + exceedances)/(1 + centres), and its Monte Carlo error.
    source : str
        "map" or "random fields".
    independent : float
        About how many structures of this size fit side by side into the tried part of the map: centres overlap.
    null : (centres,) array
        The statistic at the other centres.
    """

    statistic: float
    centres: int
    p_value: float
    standard_error: float
    source: str
    independent: float
    null: Array


@dataclasses.dataclass(frozen=True, eq=False)
class Stencil:
    """Complete rings about a grid node, one set for all centres of a map.

    Attributes
    ----------
    weights : (n_ring, n_cell) sparse array
        Ring-mean weights on the stencil's own lattice.
    shape : (int, int)
        Nodes of that lattice, northing and easting.
    area : (n_ring,) array
        Area of the rings, in cells.
    covariance : (n_ring, n_ring) array, mGal²
        Of the ring means under the noise.
    response : (n_ring, n_radius) array
        From a radial profile to ring means.
    likelihood : RingLikelihood
        Under the noise.
    """

    weights: sparse.csr_array
    shape: tuple[int, int]
    area: Array
    covariance: Array
    response: Array
    likelihood: RingLikelihood

    @classmethod
    def build(
        cls,
        edges: Array,
        spacing: tuple[float, float],
        noise: NoiseModel,
        *,
        radius: Array,
        resolution: float | None = None,
    ) -> Stencil:
        """Rings with these edges (m) on a lattice of this spacing (m), for profiles at `radius` (m)."""
        easting, northing = stencil_axes(edges, spacing)
        share = ring_fractions(easting, northing, edges).T.tocsr()
        area = np.asarray(share.sum(axis=1)).ravel()
        weights = sparse.csr_array(sparse.diags_array(1.0 / area) @ share)
        shape = (northing.size, easting.size)
        covariance = ring_covariance(weights, noise, shape=shape, spacing_m=spacing)
        east, north = np.meshgrid(easting, northing)
        basis = polynomial_basis(east, north, noise.regional_order, centre=(0.0, 0.0), scale=float(edges[-1]))
        response = ring_response(weights, easting, northing, radius, resolution=resolution)
        return cls(weights, shape, area, covariance, response, ring_likelihood(covariance, weights @ basis))

    @property
    def half(self) -> tuple[int, int]:
        """Nodes from the middle to the edge, northing and easting."""
        return self.shape[0] // 2, self.shape[1] // 2

    def ring_means(self, values: Array, rows: NDArray[np.intp], columns: NDArray[np.intp]) -> Array:
        """Ring means about grid nodes, (n_ring, n_centre), mGal; NaN where the stencil meets a node without data."""
        if rows.size == 0:
            return np.empty((self.area.size, 0))
        windows = np.lib.stride_tricks.sliding_window_view(values, self.shape)
        blocks = np.array_split(np.arange(rows.size), max(1, rows.size * self.weights.shape[1] // 4_000_000))
        return np.concatenate([self.weights @ self._columns(windows, rows[b], columns[b]) for b in blocks], axis=1)

    def _columns(self, windows: Array, rows: NDArray[np.intp], columns: NDArray[np.intp]) -> Array:
        picked = windows[rows - self.half[0], columns - self.half[1]]
        return np.asarray(picked.reshape(rows.size, -1).T)


def chance_of(
    statistic: float,
    elsewhere: Array,
    *,
    centres: int,
    independent: float,
    seed: int,
    fields: Callable[[int], Array],
) -> Chance:
    """Compare the statistic at the structure with its values elsewhere.

    Parameters
    ----------
    statistic : float
        At the structure.
    elsewhere : (n_place,) array
        At other places of the same map.
    centres : int
        How many of them to use at most, picked at random.
    independent : float
        About how many of the places do not overlap.
    seed : int
        Of the choice.
    fields : callable
        Gives the statistic on that many random fields, for maps with too few other places.
    """
    if elsewhere.size >= min(ENOUGH_CENTRES, centres):
        rng = np.random.default_rng([seed, 6])
        null = elsewhere[np.sort(rng.choice(elsewhere.size, min(centres, elsewhere.size), replace=False))]
        source = "map"
    else:
        null, source, independent = fields(centres), "random fields", float(centres)
    p = (1 + int(np.sum(null >= statistic))) / (1 + null.size)
    error = float(np.sqrt(p * (1 - p) / max(min(independent, null.size), 1.0)))
    return Chance(statistic, int(null.size), float(p), error, source, independent, null)


def complete_nodes(observed: xr.DataArray, shape: tuple[int, int]) -> Nodes:
    """Rows and columns of the nodes about which a stencil of this shape lies on the map, free of gaps."""
    half_n, half_e = shape[0] // 2, shape[1] // 2
    if observed.sizes["northing"] < shape[0] or observed.sizes["easting"] < shape[1]:
        return np.zeros(0, dtype=np.intp), np.zeros(0, dtype=np.intp)
    missing = np.cumsum(np.cumsum(np.pad(np.isnan(observed.values).astype(int), ((1, 0), (1, 0))), axis=0), axis=1)
    n, e = shape
    gaps = missing[n:, e:] - missing[:-n, e:] - missing[n:, :-e] + missing[:-n, :-e]
    row, column = np.nonzero(gaps == 0)
    return row + half_n, column + half_e


def random_ring_means(
    stencil: Stencil, spacing: tuple[float, float], noise: NoiseModel, variance: Array, seed: int
) -> Array:
    """Ring means of random fields of the noise, (n_ring, n_field) mGal, one for each variance relative to the model."""
    half_n, half_e = stencil.half
    easting, northing = spacing[1] * np.arange(-half_e, half_e + 1.0), spacing[0] * np.arange(-half_n, half_n + 1.0)
    rng = np.random.default_rng([seed, 7])
    found = np.empty((stencil.area.size, variance.size))
    for start in range(0, variance.size, 200):
        size = min(200, variance.size - start)
        fields = simulate_noise(noise, easting, northing, seed=rng, n=size).values.reshape(size, -1)
        found[:, start : start + size] = stencil.weights @ fields.T
    return found * np.sqrt(variance)
