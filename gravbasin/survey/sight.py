"""What stations tell about radial profiles: one small matrix per noise model, from which every merit follows."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import linalg, special
from scipy.interpolate import CubicSpline

from gravbasin.errors import CannotFinish
from gravbasin.inference.likelihood import ring_likelihood
from gravbasin.observed import NoiseModel, polynomial_basis

__all__ = ["MOST_STATIONS", "Curves", "Plane", "Sight", "Stations", "profile_curves", "ring_sight", "station_sight"]

Array = NDArray[np.float64]

MOST_STATIONS = 4000
"""Dense algebra up to here: 130 MB and about a second per noise model."""

_TABLE = 1 << 15  # distances at which a covariance is tabulated; linear between them, good to 1e-6 of the sill


@dataclasses.dataclass(frozen=True, eq=False)
class Sight:
    """What a set of data tells about profiles under several noise models, given as coefficients c or as values.

    Attributes
    ----------
    gram : (n_noise, n_mode, n_mode) array
        c'Gc is the squared signal-to-noise ratio of the profile with coefficients c, the regional estimated jointly:
        G = R'MR with R from coefficients to data and M = C⁻¹ − C⁻¹X(X'C⁻¹X)⁻¹X'C⁻¹. The first is of the best noise.

    Notes
    -----
    Distances between profiles, filters and evidence are inner products in G, so a layout is worked out once and any
    number of models cost next to nothing.
    """

    gram: Array


@dataclasses.dataclass(frozen=True, eq=False)
class Curves:
    """A few curves whose sums are all the profiles of interest.

    Attributes
    ----------
    radius : (n_radius,) array, m
        Nodes of the profiles, ascending from 0.
    shapes : (n_radius, n_mode) array
        The curves.
    weight : (n_radius,) array, m²
        Area that each node stands for.
    error_mgal : float
        Root mean square over area of what the curves miss of the worst profile.
    """

    radius: Array
    shapes: Array
    weight: Array
    error_mgal: float

    def coefficients(self, profiles: Array) -> Array:
        """Of profiles (n_radius,) or (n_radius, n), as (n_mode,) or (n_mode, n)."""
        weight = self.weight if profiles.ndim == 1 else self.weight[:, None]
        return np.asarray(self.shapes.T @ (weight * profiles))

    def at(self, distance: Array) -> Array:
        """The curves at distances from the centre, m, (n, n_mode); splines, level at the centre, 0 beyond the last."""
        return spline_at(self.radius, self.shapes, distance)


def spline_at(radius: Array, values: Array, distance: Array) -> Array:
    """Profiles (n_radius, m) at distances (n,), as cubic splines that are level at the centre, 0 beyond the last."""
    level = np.zeros(values.shape[1])
    spline = CubicSpline(radius, values, bc_type=((1, level), (2, level)))
    inside = (distance <= radius[-1])[:, None]
    return np.where(inside, spline(np.minimum(distance, radius[-1])), 0.0)


def disc_weights(radius: Array) -> Array:
    """Area that each node of a profile stands for, m²."""
    edges = np.concatenate([[0.0], 0.5 * (radius[1:] + radius[:-1]), radius[-1:]])
    return np.asarray(np.pi * np.diff(edges**2))


def profile_curves(radius: Array, profiles: Array, *, tolerance_mgal: float = 0.02) -> Curves:
    """The fewest curves that give every profile to the tolerance.

    Parameters
    ----------
    radius : (n_radius,) array, m
    profiles : (n_radius, n) array, mGal
    tolerance_mgal : float
        Root mean square of what is missed of the worst profile, over the area in which it exceeds 1 % of its peak.
    """
    weight = disc_weights(radius)
    root = np.sqrt(weight)[:, None]
    _, left = np.linalg.eigh((root * profiles) @ (root * profiles).T)
    left = left[:, ::-1]
    scaled = left.T @ (root * profiles)
    reach = np.maximum(np.sum(weight[:, None] * (np.abs(profiles) > 0.01 * np.abs(profiles).max(axis=0)), axis=0), 1.0)
    missed = np.sqrt(np.cumsum((scaled**2)[::-1], axis=0)[::-1] / reach).max(axis=1)
    count = int(np.argmax(missed < tolerance_mgal)) if (missed < tolerance_mgal).any() else radius.size
    count = max(count, 1)
    error = float(missed[count]) if count < missed.size else 0.0
    return Curves(radius, left[:, :count] / root, weight, error)


@dataclasses.dataclass(frozen=True, eq=False)
class Stations:
    """Stations relative to the structure's centre.

    Attributes
    ----------
    place : (n, 2) array, m
        East and north of the centre.
    error : (n,) array, mGal
        Standard deviation of each one's own error.
    """

    place: Array
    error: Array

    @property
    def distance(self) -> Array:
        """From the centre, m, (n,)."""
        return np.hypot(*self.place.T)


def station_sight(stations: Stations, curves: Curves, noises: Sequence[NoiseModel]) -> Sight:
    """What point stations tell, the noise correlated between them.

    Parameters
    ----------
    stations : Stations
    curves : Curves
    noises : sequence of NoiseModel
        Plausible models; the nugget of each (short geology) adds to the stations' own errors.

    Raises
    ------
    CannotFinish
        More than 4000 stations, or a covariance that is singular (no error at all in very smooth noise).
    """
    count = len(stations.place)
    if count > MOST_STATIONS:
        raise CannotFinish(
            f"{count} stations are more than the {MOST_STATIONS} that the correlated noise is worked out for; "
            "widen the spacing or shrink the area"
        )
    modes = curves.shapes.shape[1]
    order = noises[0].regional_order
    basis = regional_columns(stations.place, order)
    if count <= basis.shape[1]:
        return Sight(np.zeros((len(noises), modes, modes)))
    right = np.concatenate([basis, curves.at(stations.distance)], axis=1)
    lags = Lags.between(stations.place, stations.place)
    grams = []
    for noise in noises:
        matrix = lags.covariance(noise)
        matrix[np.diag_indices(count)] = noise.sill_mgal**2 + noise.nugget_mgal**2 + stations.error**2
        white = _whitened(matrix, right, basis.shape[1])
        grams.append(white.T @ white)
    return Sight(np.stack(grams))


def regional_columns(place: Array, order: int) -> Array:
    """Columns of the regional at stations, (n, 1 | 3 | 6), scaled to their spread."""
    return polynomial_basis(place[:, 0], place[:, 1], order)


@dataclasses.dataclass(frozen=True, eq=False)
class Lags:
    """Distances between two sets of places, held so that a covariance of all of them is one table look-up."""

    below: NDArray[np.int32]
    fraction: Array
    step: float

    @classmethod
    def between(cls, first: Array, second: Array) -> Lags:
        """Of every place of the first set with every one of the second."""
        away = np.hypot(first[:, 0, None] - second[:, 0], first[:, 1, None] - second[:, 1])
        step = max(float(away.max()), 1.0) / (_TABLE - 2)
        away /= step
        below = away.astype(np.int32)
        away -= below
        return cls(below, away, step)

    def covariance(self, noise: NoiseModel) -> Array:
        """Of the correlated part, mGal², one entry per pair."""
        table = noise.covariance(self.step * np.arange(_TABLE))
        matrix = np.diff(table)[self.below]
        matrix *= self.fraction
        matrix += table[self.below]
        return matrix


def _whitened(covariance: Array, columns: Array, regional: int) -> Array:
    """Columns after the regional (the first ones), whitened and free of it. The covariance is overwritten."""
    try:
        factor = linalg.cholesky(covariance, lower=True, overwrite_a=True, check_finite=False)
    except linalg.LinAlgError:
        raise CannotFinish(
            "the covariance of the stations is singular: give them some error, or the noise a nugget"
        ) from None
    white = linalg.solve_triangular(factor, columns, lower=True, check_finite=False)
    base, rest = white[:, :regional], white[:, regional:]
    left, size, _ = np.linalg.svd(base, full_matrices=False)
    left = left[:, size > 1e-9 * size[0]]  # stations on one line cannot tell a plane's slope across it
    return np.asarray(rest - left @ (left.T @ rest))


def ring_sight(response: Array, covariances: Sequence[Array], regional: Array) -> Sight:
    """What ring means of a map tell; coefficients are the profile's values at its own radii.

    Parameters
    ----------
    response : (n_ring, n_radius) array
        From profiles to ring means (`ring_response`).
    covariances : sequence of (n_ring, n_ring) arrays, mGal²
        Of the ring means, the first under the best noise.
    regional : (n_ring, p) array
        Ring means of the regional's columns.
    """
    white = [ring_likelihood(covariance, regional).whiten(response) for covariance in covariances]
    return Sight(np.stack([w.T @ w for w in white]))


@dataclasses.dataclass(frozen=True, eq=False)
class Plane:
    """An endless even survey, worked out in wavenumbers: the ceiling of all surveys, and what a search costs.

    Attributes
    ----------
    wavenumber : (n_k,) array, rad/m
    transform : (n_k, n) array, m²
        Hankel transform T(k) = 2π ∫ t(r) J0(kr) r dr of the profile with every coefficient one by itself.
    """

    wavenumber: Array
    transform: Array

    @classmethod
    def of(cls, radius: Array) -> Plane:
        """For profiles given by their values at these radii, m, down to twice the finest step between them."""
        highest = np.pi / float(np.diff(radius).min())
        count = int(np.clip(4.0 * highest * radius[-1] / np.pi, 1000, 4000))
        k = highest * (np.arange(count) + 0.5) / count
        nodes, weights = np.polynomial.legendre.leggauss(4)
        # Gauss nodes within every interval of the spline; intervals far out are cut so that J0 stays resolved there.
        pieces = np.maximum(np.ceil(np.diff(radius) * highest / np.pi), 1).astype(int)
        spans = zip(radius[:-1], radius[1:], pieces, strict=True)
        edges = np.concatenate([np.linspace(a, b, n, endpoint=False) for a, b, n in spans])
        edges = np.append(edges, radius[-1])
        half = 0.5 * np.diff(edges)[:, None]
        r = (0.5 * (edges[1:] + edges[:-1]))[:, None] + half * nodes
        weight = (half * weights * r).ravel()
        # The last tenth is faded out: a step at the last radius would ring at every wavenumber.
        fade = 0.5 * (1.0 + np.cos(np.pi * np.clip((r.ravel() / radius[-1] - 0.9) / 0.1, 0.0, 1.0)))
        values = spline_at(radius, np.eye(radius.size), r.ravel()) * (weight * fade)[:, None]
        return cls(k, 2.0 * np.pi * special.j0(np.outer(k, r.ravel())) @ values)

    def through(self, curves: Curves) -> Plane:
        """The same for profiles given by their coefficients."""
        return Plane(self.wavenumber, self.transform @ curves.shapes)

    def density(self, noise: NoiseModel, *, spacing: float = 0.0, error: float = 0.0) -> Array:
        """Noise power at every wavenumber: geology, and white error of stations at a spacing, mGal² m²."""
        return noise.spectrum(self.wavenumber) + (error**2 + noise.nugget_mgal**2) * spacing**2

    def gram(self, noises: Sequence[NoiseModel], *, spacing: float = 0.0, error: float = 0.0) -> Sight:
        """G of an endless survey: ∫ T T' / P k dk / 2π; every wavelength with spacing 0, else those above Nyquist's."""
        k = self.wavenumber
        step = k[1] - k[0]
        kept = k <= (np.pi / spacing if spacing else np.inf)
        grams = []
        for noise in noises:
            weight = kept * k * step / (2.0 * np.pi) / self.density(noise, spacing=spacing, error=error)
            grams.append((self.transform * weight[:, None]).T @ self.transform)
        return Sight(np.stack(grams))
