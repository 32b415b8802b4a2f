"""Is the anomaly round: power of azimuthal harmonics against what the noise alone would give."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy import interpolate, linalg, sparse, stats

from gravbasin.discs import ring_fractions
from gravbasin.inference.evidence import Level
from gravbasin.observed import NoiseModel, polynomial_basis, ring_covariance, ring_radii, stencil_axes

__all__ = ["Circularity", "Harmonics", "circularity_test"]

Array = NDArray[np.float64]

SHAPE_ORDERS = (1, 2, 3, 4)
"""Off-centre, elongated, three- and four-cornered anomalies."""

FINE_ORDERS = (5, 6)
"""Too fine for the shape of a structure: they tell how rough the crust is right here."""

NODES_PER_WAVE = 3.0
"""Nodes about a ring per wave of a harmonic, below which the ring does not count for that order."""

ENOUGH_PLACES = 100
"""Other places from which a rank among them is worth more than the F distribution."""

BLOCK = 4_000_000
"""Map values held at a time: 32 MB."""


@dataclasses.dataclass(frozen=True)
class Circularity:
    """Result of the test.

    Attributes
    ----------
    ratio : float
        Whitened power of orders 1-4 over its expectation under noise of the local level; about 1 for a round anomaly.
    order_power : tuple of float
        The same for each order.
    p_value : float
        Share of other places of the map with as large a ratio, or the tail of its F distribution where there are too
        few places: small means less round than the noise explains.
    local_level : float
        Noise variance about the centre relative to the noise model, from orders 5 and 6 and the prior level.
    source : str
        "map" or "F distribution".
    elongation, elongation_error : float
        (a - b)/(a + b) of the axes that fit the second order best, and the standard error of each of its two
        components; noise alone gives about 1.3 times the error.
    elongation_azimuth_deg : float
        Of the long axis, clockwise from grid north, 0 to 180.
    elongation_p_value : float
        Of a round anomaly: sharper than `p_value`, because it looks for one shape only.
    """

    ratio: float
    order_power: tuple[float, ...]
    p_value: float
    local_level: float
    source: str
    elongation: float
    elongation_error: float
    elongation_azimuth_deg: float
    elongation_p_value: float


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


def circularity_test(
    observed: xr.DataArray,
    harmonics: Harmonics,
    node: tuple[int, int],
    others: tuple[NDArray[np.intp], NDArray[np.intp]],
    *,
    level: Level | None = None,
    profile: tuple[Array, Array] | None = None,
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
        Nodes to compare with, their rings complete.
    level : Level, optional
        Prior of the local noise level.
    profile : (radius, anomaly), optional, m and mGal
        The structure's modelled anomaly, to measure its elongation by; default the map's own rings.

    Returns
    -------
    Circularity or None
        None where the rings about the centre leave the map or meet nodes without data.

    Notes
    -----
    Noise differs in level from place to place, so the power of orders 1-4 is set against that of orders 5 and 6 at the
    same place, there as here: under noise T = (χ²/n) / ((ν s + χ²')/(ν + n')) follows F(n, ν + n'). The first order
    is taken after the best shift of the centre, because the node nearest the centre is not the centre, and no
    structure's centre is known to half a cell.
    """
    level = level or Level()
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
    power, dof = harmonics.powers(here)
    (local,), local_dof = _local_level(harmonics, here, level)
    ratio = float(power.sum() / dof.sum() / local)
    rows, columns = others
    if rows.size < ENOUGH_PLACES:
        source, p_value = "F distribution", float(stats.f.sf(ratio, dof.sum(), local_dof))
    else:
        source, exceeding = "map", 0
        for block in np.array_split(np.arange(rows.size), 1 + rows.size * here.size // BLOCK):
            there = windows[rows[block] - half[0], columns[block] - half[1]].reshape(block.size, -1).T
            total = harmonics.powers(there)[0].sum(axis=0) / dof.sum()
            exceeding += int(np.sum(total / _local_level(harmonics, there, level)[0] >= ratio))
        p_value = (1 + exceeding) / (1 + rows.size)
    modelled = None if profile is None else np.interp(harmonics.radius, *profile, right=0.0)
    part, error = harmonics.stretch(here[:, 0], modelled)
    return Circularity(
        ratio=ratio,
        order_power=tuple(map(float, power[:, 0] / np.maximum(dof, 1) / local)),
        p_value=p_value,
        local_level=float(local),
        source=source,
        elongation=float(np.hypot(*part)),
        elongation_error=float(np.sqrt(local * np.mean(error**2))),
        elongation_azimuth_deg=float(np.degrees(0.5 * np.arctan2(part[1], part[0])) % 180.0),
        elongation_p_value=float(stats.f.sf(np.mean((part / error) ** 2) / local, 2, local_dof)),
    )


def _local_level(harmonics: Harmonics, windows: Array, level: Level) -> tuple[Array, float]:
    """Noise variance relative to the noise model at every place, and its degrees of freedom."""
    fine, dof = harmonics.powers(windows, FINE_ORDERS)
    total = level.dof + float(dof.sum())
    return (level.dof * level.scale + fine.sum(axis=0)) / total, total
