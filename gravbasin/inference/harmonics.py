"""Azimuthal harmonics of a map about its nodes, whitened: what a round body cannot have."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import fft, interpolate, linalg, sparse

from gravbasin.discs import ring_fractions
from gravbasin.observed import NoiseModel, polynomial_basis, ring_covariance, ring_radii, stencil_axes

__all__ = ["FINE_ORDERS", "SHAPE_ORDERS", "Harmonics"]

Array = NDArray[np.float64]

SHAPE_ORDERS = (1, 2, 3, 4)
"""Off-centre, elongated, three- and four-cornered anomalies."""

FINE_ORDERS = (5, 6)
"""Too fine for the shape of a structure: they tell how rough the crust is right here."""

TEXTURE_ORDERS = (3, 4, 5, 6)
"""What neither a wrong centre nor an elongated structure has: the texture of the map about a place."""

RINGS = 16
"""Rings, about, that finer ones are merged to: no harmonic of these orders needs more."""

NODES_PER_WAVE = 3.0
"""Nodes about a ring per wave of a harmonic, below which the ring does not count for that order."""


@dataclasses.dataclass(frozen=True, eq=False)
class _Wave:
    """Cosine or sine of one order: `whitening` (n_kept, n_cell) of map values, whitened and free of the regional.

    `moved` (n_kept, n_ring) makes of ring means, whitened alike, what a shift of the centre (first order) or a stretch
    (second order) of the anomaly adds; None for other orders.
    """

    whitening: Array
    moved: Array | None
    dof: int


@dataclasses.dataclass(frozen=True, eq=False)
class Harmonics:
    """Azimuthal harmonics over rings about a node, whitened order by order.

    Attributes
    ----------
    waves : dict
        By order, the cosine and the sine.
    radius : (n_ring,) array, m
        Mean radius of each ring.
    mean : (n_ring, n_cell) array
        Weights of the ring means.
    shape : (int, int)
        Nodes of the stencil, northing and easting.

    Notes
    -----
    Square cells are no circles: a cosine over few cells also answers to round anomalies (the fourth order most), and
    the cell at the centre has no azimuth. So every smooth function of radius, a cubic spline with a knot a ring, is
    projected out of the weights, and rings count only where an order has three nodes a wave.
    """

    waves: dict[int, tuple[_Wave, _Wave]]
    radius: Array
    mean: Array
    shape: tuple[int, int]

    @classmethod
    def build(
        cls, edges: Array, spacing: tuple[float, float], noise: NoiseModel, *, resolution: float | None = None
    ) -> Harmonics:
        """Harmonics over rings with these edges (m) on a lattice of this spacing (m), for a map of this resolution."""
        edges = edges[:: max(1, round((edges.size - 1) / RINGS))]
        easting, northing = stencil_axes(edges, spacing)
        shape, radius = (northing.size, easting.size), ring_radii(edges)
        share = ring_fractions(easting, northing, edges).T.tocsr()
        mean = np.asarray((sparse.diags_array(1.0 / np.asarray(share.sum(axis=1)).ravel()) @ share).toarray())
        east, north = (axis.ravel() for axis in np.meshgrid(easting, northing))
        azimuth, distance = np.arctan2(east, north), np.hypot(east, north)
        round_part = _round_functions(distance, edges, mean.sum(axis=0) > 0.0)
        basis = polynomial_basis(east, north, noise.regional_order, centre=(0.0, 0.0), scale=float(edges[-1]))[:, 1:]
        step = max(*spacing, resolution or 0.0)
        slope = _slope(radius, np.minimum(distance, radius[-1]))
        motions = {1: slope, 2: -distance[:, None] * slope}

        def wave(order: int, values: Array) -> _Wave:
            kept = 2.0 * np.pi * radius >= NODES_PER_WAVE * order * step
            weights = 2.0 * mean[kept] * values
            weights -= (weights @ round_part) @ round_part.T
            covariance = ring_covariance(sparse.csr_array(weights), noise, shape=shape, spacing_m=spacing)
            factor = linalg.cholesky(covariance, lower=True)
            moved = (weights * values) @ motions[order] if order in motions else None
            return _without(factor, weights, weights @ basis, moved, lost=int(order == 1))

        orders = SHAPE_ORDERS + FINE_ORDERS
        waves = {m: (wave(m, np.cos(m * azimuth)), wave(m, np.sin(m * azimuth))) for m in orders}
        return cls(waves, radius, mean, shape)

    def powers(self, windows: Array, orders: Sequence[int] = SHAPE_ORDERS) -> tuple[Array, NDArray[np.intp]]:
        """Whitened power by order.

        Parameters
        ----------
        windows : (n_cell, n_place) array, mGal
            Map values on the stencil, in C order.
        orders : sequence of int
            Of `SHAPE_ORDERS` and `FINE_ORDERS`.

        Returns
        -------
        power : (n_order, n_place) array
            Chi-square under the noise model; the first order less what the best shift of the centre explains.
        dof : (n_order,) array
            Degrees of freedom.
        """
        profile = self.mean @ windows
        power = [sum(_power(w, windows, profile if m == 1 else None) for w in self.waves[m]) for m in orders]
        return np.array(power), np.array([sum(wave.dof for wave in self.waves[m]) for m in orders])

    def texture(self, values: Array) -> Array:
        """Whitened power of orders 3 to 6 about every node of a map, 1 on average under the noise model.

        Parameters
        ----------
        values : (n_northing, n_easting) array, mGal
            The map; gaps are NaN.

        Returns
        -------
        (n_northing, n_easting) array
            NaN where rings leave the map, and everywhere if no ring has nodes enough; nodes whose rings meet a gap mean
            nothing.
        """
        waves = [wave for m in TEXTURE_ORDERS for wave in self.waves[m]]
        dof, (height, width) = sum(wave.dof for wave in waves), self.shape
        texture = np.full(values.shape, np.nan)
        if dof < 1 or values.shape[0] < height or values.shape[1] < width:
            return texture
        # Correlation that keeps within the map never wraps, so transforms need no padding.
        size = [fft.next_fast_len(n, real=True) for n in values.shape]
        spectrum = fft.rfft2(np.nan_to_num(values - np.nanmean(values)), size)
        power = np.zeros((values.shape[0] - height + 1, values.shape[1] - width + 1))
        for kernel in np.concatenate([wave.whitening for wave in waves]):
            found = fft.irfft2(spectrum * np.conj(fft.rfft2(kernel.reshape(height, width), size)), size)
            power += found[: power.shape[0], : power.shape[1]] ** 2
        texture[height // 2 : height // 2 + power.shape[0], width // 2 : width // 2 + power.shape[1]] = power / dof
        return texture

    def stretch(self, window: Array, anomaly: Array | None = None) -> tuple[Array, Array]:
        """Cosine and sine part of the elongation at one place, and their errors at the noise model's level.

        An anomaly stretched by ε along azimuth φ₀ is g - ε r g' cos 2(φ - φ₀) to first order.

        Parameters
        ----------
        window : (n_cell,) array, mGal
            Map values.
        anomaly : (n_ring,) array, optional
            The structure's anomaly g at the rings' radii, mGal. Default the map's own ring means: their noise is
            independent of the second order's, so tests stay exact, but of a faint anomaly both the elongation and its
            error come out too small, and of a sharp edge, which rings blunt, up to an eighth too large.

        Notes
        -----
        First order: above 0.15 the elongation comes out too small, 0.17 for 0.2 and 0.20 for 0.3 at a steep edge.
        """
        profile = self.mean @ window if anomaly is None else anomaly
        fitted = []
        for wave in self.waves[2]:
            assert wave.moved is not None
            template = wave.moved @ profile
            power = max(float(template @ template), np.finfo(float).tiny)
            fitted.append((float(template @ (wave.whitening @ window)) / power, power**-0.5))
        part, error = np.array(fitted).T
        return part, error


def _round_functions(distance: Array, edges: Array, inside: NDArray[np.bool_]) -> Array:
    """Orthonormal columns, (n_cell, n_function), that span cubic splines in radius over the cells that rings use."""
    # One knot a ring; the corner cells of the outermost ring reach beyond its edge.
    last = max(float(distance[inside].max()), float(edges[-1])) * (1.0 + 1e-9)
    knots = np.concatenate([np.repeat(edges[0], 4), edges[1:-1], np.repeat(last, 4)])
    columns = np.zeros((distance.size, knots.size - 4))
    columns[inside] = interpolate.BSpline.design_matrix(distance[inside], knots, 3).toarray()
    left, size, _ = np.linalg.svd(columns, full_matrices=False)
    return np.asarray(left[:, size > 1e-9 * size[0]])


def _slope(radius: Array, at: Array) -> Array:
    """Derivative, (n_at, n_ring) 1/m, of the spline through ring means, continued evenly through the centre."""
    even = np.concatenate([np.eye(radius.size)[::-1], np.eye(radius.size)])
    return np.asarray(interpolate.CubicSpline(np.concatenate([-radius[::-1], radius]), even)(at, 1))


def _without(factor: Array, weights: Array, regional: Array, moved: Array | None, *, lost: int) -> _Wave:
    """Whitened weights with the regional's part projected off; `lost` degrees of freedom go to a shift."""
    white = linalg.solve_triangular(factor, np.concatenate([weights, regional], axis=1), lower=True)
    whitening, nuisance = white[:, : weights.shape[1]], white[:, weights.shape[1] :]
    left, size, _ = np.linalg.svd(nuisance, full_matrices=False)
    # Columns have unit size at the outermost ring; what the symmetry of the order excludes is rounding.
    left = left[:, size > 1e-9 * np.abs(nuisance).sum(initial=1.0)]
    if moved is not None:
        moved = linalg.solve_triangular(factor, moved, lower=True)
        moved -= left @ (left.T @ moved)
    dof = weights.shape[0] - left.shape[1] - lost
    return _Wave(whitening - left @ (left.T @ whitening), moved, dof)


def _power(wave: _Wave, windows: Array, profile: Array | None) -> Array:
    found = wave.whitening @ windows
    power = np.sum(found**2, axis=0)
    if wave.moved is not None and profile is not None:
        moved = wave.moved @ profile
        size = np.sum(moved**2, axis=0)
        power -= np.divide(np.sum(moved * found, axis=0) ** 2, size, out=np.zeros_like(size), where=size > 0.0)
    return np.asarray(power)
