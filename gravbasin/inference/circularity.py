"""Is the anomaly round: power of azimuthal harmonics against what the noise alone would give."""

from __future__ import annotations

import dataclasses

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy import linalg, sparse, stats

from gravbasin.discs import ring_fractions
from gravbasin.observed import NoiseModel, ring_covariance, stencil_axes

__all__ = ["Circularity", "Harmonics", "circularity_test"]

Array = NDArray[np.float64]

HIGHEST_ORDER = 4
"""Orders 1 to 4: an off-centre, an elongated, a three- and a four-cornered anomaly."""


@dataclasses.dataclass(frozen=True)
class Circularity:
    """Result of the test.

    Attributes
    ----------
    ratio : float
        Whitened power of orders 1-4 over its expectation under noise; 1 for a round anomaly on noise.
    order_power : tuple of float
        The same for each order.
    p_value : float
        Share of other places of the map with as much non-round power relative to their round power, or of the F
        distribution where there are too few: small means less round than the noise explains.
    """

    ratio: float
    order_power: tuple[float, ...]
    p_value: float


@dataclasses.dataclass(frozen=True, eq=False)
class Harmonics:
    """Cosine and sine means over rings about a node, with their noise covariance whitened order by order.

    Attributes
    ----------
    weights : tuple of (n_ring, n_cell) sparse arrays
        For each order its cosine and then its sine weights, on the stencil's lattice.
    factors : tuple of (n_ring, n_ring) arrays
        Lower Cholesky factor of the covariance of each.
    shape : (int, int)
        Nodes of the stencil, northing and easting.
    """

    weights: tuple[sparse.csr_array, ...]
    factors: tuple[Array, ...]
    shape: tuple[int, int]

    @classmethod
    def build(cls, edges: Array, spacing: tuple[float, float], noise: NoiseModel) -> Harmonics:
        """Harmonics over rings with these edges (m) on a lattice of this spacing (m)."""
        easting, northing = stencil_axes(edges, spacing)
        share = ring_fractions(easting, northing, edges).T.tocsr()
        area = np.asarray(share.sum(axis=1)).ravel()
        mean = sparse.csr_array(sparse.diags_array(1.0 / area) @ share)
        azimuth = np.arctan2(easting[None, :], northing[:, None]).ravel()
        shape = (northing.size, easting.size)
        weights, factors = [], []
        for order in range(1, HIGHEST_ORDER + 1):
            for wave in (np.cos, np.sin):
                w = sparse.csr_array(mean @ sparse.diags_array(2.0 * wave(order * azimuth)))
                covariance = ring_covariance(w, noise, shape=shape, spacing_m=spacing)
                # The innermost rings hold too few nodes for the higher orders: a floor keeps them harmless.
                covariance += 1e-6 * np.trace(covariance) / covariance.shape[0] * np.eye(covariance.shape[0])
                weights.append(w)
                factors.append(linalg.cholesky(covariance, lower=True))
        return cls(tuple(weights), tuple(factors), shape)

    def powers(self, windows: Array) -> Array:
        """Whitened power by order, relative to its expectation.

        Parameters
        ----------
        windows : (n_cell, n_place) array, mGal
            Map values on the stencil, in C order.

        Returns
        -------
        (HIGHEST_ORDER, n_place) array
        """
        power = [
            np.mean(linalg.solve_triangular(factor, w @ windows, lower=True) ** 2, axis=0)
            for w, factor in zip(self.weights, self.factors, strict=True)
        ]
        return 0.5 * (np.array(power[0::2]) + np.array(power[1::2]))


def circularity_test(
    observed: xr.DataArray, harmonics: Harmonics, node: tuple[int, int], others: tuple[Array, Array]
) -> Circularity | None:
    """Test the anomaly about a node of the map against other nodes.

    Parameters
    ----------
    observed : DataArray (northing, easting), mGal
        The map.
    harmonics : Harmonics
        From `Harmonics.build`.
    node : (int, int)
        Row and column of the node nearest the centre.
    others : (rows, columns)
        Nodes to compare with.

    Returns
    -------
    Circularity or None
        None where the rings about the centre leave the map or meet nodes without data.
    """
    half = (harmonics.shape[0] // 2, harmonics.shape[1] // 2)
    row, column = node
    fits = (
        half[0] <= row < observed.sizes["northing"] - half[0]
        and half[1] <= column < observed.sizes["easting"] - half[1]
    )
    if not fits:
        return None
    windows = np.lib.stride_tricks.sliding_window_view(observed.values, harmonics.shape)
    here = windows[row - half[0], column - half[1]].reshape(-1, 1)
    if np.isnan(here).any():
        return None
    powers = harmonics.powers(here)[:, 0]
    ratio = float(powers.mean())
    rows, columns = others
    if rows.size < 100:
        dof = 2 * HIGHEST_ORDER * harmonics.factors[0].shape[0]
        return Circularity(ratio, tuple(map(float, powers)), float(stats.chi2.sf(ratio * dof, dof)))
    elsewhere = windows[rows - half[0], columns - half[1]].reshape(rows.size, -1).T
    null = harmonics.powers(elsewhere).mean(axis=0)
    return Circularity(ratio, tuple(map(float, powers)), float((1 + np.sum(null >= ratio)) / (1 + null.size)))
