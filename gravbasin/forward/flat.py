"""Uniform discs and rings under a flat ground: closed form, any station."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special

from gravbasin.constants import GRAVITATIONAL_CONSTANT, SI_TO_MGAL
from gravbasin.forward.elliptic import cel, row_blocks

__all__ = ["disc_potential", "flat_kernel"]

Array = NDArray[np.float64]

_FAR = 12.0  # radii of the disc beyond which the series below is exact to rounding and the closed form loses digits
_SERIES_TERMS = 8  # (1/12)^16 is far below 1e-16
_POINT = 1e-30  # metres


def disc_potential(radius: ArrayLike, disc_radius: ArrayLike, depth: ArrayLike) -> Array:
    """∫ dA / distance over a uniform disc, seen from a station beside, above, below or on it.

    Parameters
    ----------
    radius : array, m
        Distance of the station from the axis of the disc, ≥ 0.
    disc_radius : array, m
        Radius a of the disc, ≥ 0.
    depth : array, m
        Depth h of the disc below the station; only |h| matters.

    Returns
    -------
    array, m

    Notes
    -----
    In polar coordinates about the station the integral over distance is done at once, and what is left is a line
    integral along the rim: 2 s [E(m) + κ ∫ Δ/(1 − n sin²t) dt] − 2π|h| ε with s² = (a+r)² + h², κ = (a−r)/(a+r),
    n = 1 − κ², Δ² = 1 − m sin²t, and ε = 1, ½, 0 inside, on and outside the rim. It equals the form in K, E and Π of
    Lass and Blitzer 1983 (Celest. Mech. 30, 225), without the cancellation between K and Π. Far away: the multipole
    series of the disc.

    Examples
    --------
    >>> float(disc_potential(0.0, 3.0, 4.0) / np.pi)  # on the axis: 2π (√(a² + h²) − h)
    2.0
    """
    r, a, h = (np.asarray(x, dtype=float) for x in (radius, disc_radius, depth))
    r, a, h = np.broadcast_arrays(r, a, np.abs(h))
    far = r**2 + h**2 > (_FAR * a) ** 2
    out = np.asarray(_rim_integral(r, a, h))
    if far.any():
        out[far] = _multipoles(r[far], a[far], h[far])
    return out


def _rim_integral(r: Array, a: Array, h: Array) -> Array:
    across, ahead, square = np.maximum(a + r, _POINT), a - r, h * h  # the floor: a station on a disc of no size
    s = np.sqrt(across * across + square)
    kc = np.sqrt(ahead * ahead + square) / s
    kappa, kc_squared = ahead / across, kc * kc
    rim = s * (special.ellipe(1.0 - kc_squared) + kappa * cel(kc, kappa * kappa, 1.0, kc_squared))
    inside = 1.0 + np.sign(ahead)  # twice ε
    return 2.0 * rim - np.pi * h * inside


def _multipoles(r: Array, a: Array, h: Array) -> Array:
    """2πR Σ C(½, k) (a/R)^2k P_{2k−2}(h/R): the on-axis closed form carried off the axis."""
    distance = np.hypot(r, h)
    cosine, ratio = h / distance, (a / distance) ** 2
    even, odd = np.ones_like(cosine), cosine  # P_{2k−2}, P_{2k−1}
    power, total = np.ones_like(ratio), np.zeros_like(ratio)
    for k in range(1, _SERIES_TERMS + 1):
        power = power * ratio
        total += special.binom(0.5, k) * power * even
        degree = 2 * k - 1
        even = ((2 * degree + 1) * cosine * odd - degree * even) / (degree + 1)
        odd = ((2 * degree + 3) * cosine * even - (degree + 1) * odd) / (degree + 2)
    return 2.0 * np.pi * distance * total


def flat_kernel(radius: Array, radius_edges: Array, depth_edges: Array, height_m: float) -> Array:
    """Attraction of every ring cell at every station for unit contrast.

    Parameters
    ----------
    radius : (n_station,) array, m
    radius_edges : (n_ring + 1,) array, m
    depth_edges : (n_depth + 1,) array, m
    height_m : float
        Height of the stations above depth 0.

    Returns
    -------
    (n_station, n_depth, n_ring) array, mGal per kg/m³, positive down

    Notes
    -----
    The attraction of a cylinder is G times the difference of the potentials of its end discs, because the depth
    integral of h/R³ is −1/R. Only discs at edges occur, each shared by up to four cells, so the table is a double
    difference of (n_depth + 1)(n_ring + 1) potentials per station.
    """
    depth = depth_edges[:, None] + height_m
    out = np.empty((radius.size, depth_edges.size - 1, radius_edges.size - 1))
    potential = np.empty((depth_edges.size, radius_edges.size))
    for cells, r in zip(out, radius, strict=True):
        for rows in row_blocks(*potential.shape):
            potential[rows] = disc_potential(r, radius_edges, depth[rows])
        cells[...] = np.diff(np.diff(potential, axis=0), axis=1)
    out *= -GRAVITATIONAL_CONSTANT * SI_TO_MGAL
    return out
