"""How often this very map offers as good a circle by chance: the statistic repeated at other centres."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterator

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy import sparse

from gravbasin.discs import ring_fractions
from gravbasin.inference.likelihood import RingLikelihood, ring_likelihood, shape_scatter
from gravbasin.inference.response import ring_response
from gravbasin.observed import NoiseModel, polynomial_basis, ring_covariance, simulate_noise, stencil_axes

__all__ = ["Chance", "Stencil", "chance_test", "local_statistic"]

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
        Amplitude over its standard error at the structure, with the noise level taken from the same rings.
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
    covariance : (n_ring, n_ring) array, mGal²
        Of the ring means under the noise.
    response : (n_ring, n_radius) array
        From a radial profile to ring means.
    templates : (n_ring, 1 + n_draw) array, mGal
        Ring means of the model and of draws of its scatter.
    likelihood : RingLikelihood
        Under noise and shape scatter.
    """

    weights: sparse.csr_array
    shape: tuple[int, int]
    covariance: Array
    response: Array
    templates: Array
    likelihood: RingLikelihood

    @classmethod
    def build(
        cls,
        edges: Array,
        spacing: tuple[float, float],
        noise: NoiseModel,
        *,
        radius: Array,
        profiles: Array,
        resolution: float | None,
    ) -> Stencil:
        """Rings with these edges (m) on a lattice of this spacing (m).

        `profiles` (n_radius, 1 + n_draw), mGal, at `radius` (m) are the model and draws of its scatter.
        """
        easting, northing = stencil_axes(edges, spacing)
        share = ring_fractions(easting, northing, edges).T.tocsr()
        area = np.asarray(share.sum(axis=1)).ravel()
        weights = sparse.csr_array(sparse.diags_array(1.0 / area) @ share)
        shape = (northing.size, easting.size)
        covariance = ring_covariance(weights, noise, shape=shape, spacing_m=spacing)
        east, north = np.meshgrid(easting, northing)
        basis = polynomial_basis(east, north, noise.regional_order, centre=(0.0, 0.0), scale=float(edges[-1]))
        response = ring_response(weights, easting, northing, radius, resolution=resolution)
        templates = response @ profiles
        likelihood = ring_likelihood(covariance + shape_scatter(templates, area), weights @ basis)
        return cls(weights, shape, covariance, response, templates, likelihood)

    @property
    def half(self) -> tuple[int, int]:
        """Nodes from the middle to the edge, northing and easting."""
        return self.shape[0] // 2, self.shape[1] // 2

    def ring_means(self, values: Array, rows: NDArray[np.intp], columns: NDArray[np.intp]) -> Array:
        """Ring means about grid nodes, (n_ring, n_centre), mGal; NaN where the stencil meets a node without data."""
        windows = np.lib.stride_tricks.sliding_window_view(values, self.shape)
        blocks = np.array_split(np.arange(rows.size), max(1, rows.size * self.weights.shape[1] // 4_000_000))
        return np.concatenate([self.weights @ self._columns(windows, rows[b], columns[b]) for b in blocks], axis=1)

    def _columns(self, windows: Array, rows: NDArray[np.intp], columns: NDArray[np.intp]) -> Array:
        picked = windows[rows - self.half[0], columns - self.half[1]]
        return np.asarray(picked.reshape(rows.size, -1).T)


def local_statistic(likelihood: RingLikelihood, template: Array, data: Array) -> Array:
    """Amplitude of the template over its standard error, the noise level estimated from the same rings.

    Parameters
    ----------
    likelihood : RingLikelihood
        Covariance known up to its level.
    template : (n_ring,) array, mGal
        The model.
    data : (n_ring, n) array, mGal
        Ring means about n centres.

    Returns
    -------
    (n,) array
        Student's t with dof - 1 degrees of freedom on Gaussian noise: real crust is not equally rough everywhere, so
        each place is judged by its own roughness.
    """
    t, y = likelihood.whiten(template), likelihood.whiten(data)
    unit = t / np.sqrt(t @ t)
    along = unit @ y
    rest = np.maximum(np.sum(y**2, axis=0) - along**2, 1e-300)
    return np.asarray(along / np.sqrt(rest / (likelihood.dof - 1)))


def chance_test(
    observed: xr.DataArray,
    stencil: Stencil,
    statistic: float,
    *,
    centre: tuple[float, float],
    exclude_radius: float,
    centres: int,
    noise: NoiseModel,
    seed: int,
) -> Chance:
    """Repeat the statistic at other centres of the same map.

    Parameters
    ----------
    observed : DataArray (northing, easting), mGal
        The map.
    stencil : Stencil
        Rings, likelihood and template.
    statistic : float
        Its value at the structure, from `local_statistic`.
    centre : (easting, northing), m
        The structure, whose surroundings within `exclude_radius` (m) are no chance.
    centres : int
        How many others to try, at most.
    noise : NoiseModel
        For random fields where the map is too small.
    seed : int
        Seed of the choice of centres and of the fields.
    """
    rng = np.random.default_rng(seed)
    rows, columns = _other_centres(observed, stencil, centre, exclude_radius)
    spacing = (float(observed.northing[1] - observed.northing[0]), float(observed.easting[1] - observed.easting[0]))
    independent = rows.size * spacing[0] * spacing[1] / (np.pi * exclude_radius**2)
    if rows.size >= min(ENOUGH_CENTRES, max(centres, 1)):
        chosen = np.sort(rng.choice(rows.size, min(centres, rows.size), replace=False))
        data = stencil.ring_means(observed.values, rows[chosen], columns[chosen])
        source = "map"
    else:
        data = np.concatenate(list(_random_ring_means(stencil, spacing, noise, centres, seed)), axis=1)
        source, independent = "random fields", float(centres)
    null = local_statistic(stencil.likelihood, stencil.templates[:, 0], data)
    exceed = int(np.sum(null >= statistic))
    p = (1 + exceed) / (1 + null.size)
    error = float(np.sqrt(p * (1 - p) / max(min(independent, null.size), 1.0)))
    return Chance(statistic, int(null.size), float(p), error, source, float(independent), null)


def _other_centres(
    observed: xr.DataArray, stencil: Stencil, centre: tuple[float, float], exclude_radius: float
) -> Nodes:
    """Rows and columns of the nodes about which every ring is complete, away from the structure."""
    half_n, half_e = stencil.half
    rows, columns = (
        np.arange(half_n, observed.sizes["northing"] - half_n),
        np.arange(half_e, observed.sizes["easting"] - half_e),
    )
    if rows.size == 0 or columns.size == 0:
        return np.zeros(0, dtype=int), np.zeros(0, dtype=int)
    missing = np.cumsum(np.cumsum(np.pad(np.isnan(observed.values).astype(int), ((1, 0), (1, 0))), axis=0), axis=1)
    n, e = stencil.shape
    gaps = missing[n:, e:] - missing[:-n, e:] - missing[n:, :-e] + missing[:-n, :-e]
    away = np.hypot(
        observed.easting.values[columns][None, :] - centre[0], observed.northing.values[rows][:, None] - centre[1]
    )
    row, column = np.nonzero((away > exclude_radius) & (gaps == 0))
    return rows[row], columns[column]


def _random_ring_means(
    stencil: Stencil, spacing: tuple[float, float], noise: NoiseModel, count: int, seed: int, block: int = 200
) -> Iterator[Array]:
    half_n, half_e = stencil.half
    easting, northing = spacing[1] * np.arange(-half_e, half_e + 1.0), spacing[0] * np.arange(-half_n, half_n + 1.0)
    for start in range(0, count, block):
        size = min(block, count - start)
        fields = simulate_noise(noise, easting, northing, seed=seed + 1 + start, n=size).values.reshape(size, -1)
        yield np.asarray(stencil.weights @ fields.T)
