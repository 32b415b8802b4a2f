"""The same rings wrapped on a sphere: exact caps and small conical sides."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import special

from gravbasin.constants import EARTH_RADIUS, GRAVITATIONAL_CONSTANT, SI_TO_MGAL
from gravbasin.forward.elliptic import cel, row_blocks

__all__ = ["sphere_kernel"]

Array = NDArray[np.float64]

_NODES = 3  # of the depth quadrature along a conical side
_NEAR_NODES = 16  # the same where the station's level is within about a layer's thickness


def sphere_kernel(
    radius: Array, radius_edges: Array, depth_edges: Array, height_m: float, *, earth_radius: float = EARTH_RADIUS
) -> Array:
    """Attraction along the local vertical of every ring cell at every station, for unit contrast, on a sphere.

    Parameters
    ----------
    radius : (n_station,) array, m
        Arc length from the axis at today's ground, a sphere of radius `earth_radius`.
    radius_edges : (n_ring + 1,) array, m
        Arc lengths at today's ground; the edges are cones from the centre of the Earth.
    depth_edges : (n_depth + 1,) array, m
        Radial depths; the edges are concentric spheres.
    height_m : float
        Height of the stations above today's ground.
    earth_radius : float, m

    Returns
    -------
    (n_station, n_depth, n_ring) array, mGal per kg/m³, positive down

    Notes
    -----
    Gauss' theorem turns the attraction of a uniform body into ∮ n dS / distance. Projected on the station's vertical,
    the spherical top and bottom of a ring cell have a closed form (`_caps`), and what the conical sides add is small
    and smooth, because their normals are nearly horizontal: it vanishes on a flat Earth. Each side is a stack of
    circles, in complete elliptic integrals, summed over depth by Gauss-Legendre quadrature (`_sides`).
    Rounding is near 1e-16 of the widest edge times 2πG, as for the flat engine.
    """
    nodes, weights, starts = _depth_quadrature(depth_edges, height_m)
    out = np.empty((radius.size, depth_edges.size - 1, radius_edges.size - 1))
    caps = np.empty((depth_edges.size, radius_edges.size))
    sides = np.empty((nodes.size, radius_edges.size))
    for cells, station in zip(out, radius, strict=True):
        for rows in row_blocks(*caps.shape):
            caps[rows] = _caps(station, radius_edges, depth_edges[rows, None], height_m, earth_radius)
        for rows in row_blocks(*sides.shape):
            sides[rows] = _sides(station, radius_edges, nodes[rows, None], height_m, earth_radius)
        layers = np.add.reduceat(weights[:, None] * sides, starts, axis=0)
        cells[...] = np.diff(layers - np.diff(caps, axis=0), axis=1)
    out *= GRAVITATIONAL_CONSTANT * SI_TO_MGAL
    return out


def _depth_quadrature(depth_edges: Array, height_m: float) -> tuple[Array, Array, NDArray[np.intp]]:
    """Nodes and weights of all layers in a row, and where each layer starts."""
    half, middle = 0.5 * np.diff(depth_edges), 0.5 * (depth_edges[1:] + depth_edges[:-1])
    near = np.abs(middle + height_m) < 3.0 * half
    rules = {n: np.polynomial.legendre.leggauss(n) for n in (_NODES, _NEAR_NODES)}
    chosen = [rules[_NEAR_NODES if is_near else _NODES] for is_near in near]
    nodes = np.concatenate([m + h * x for m, h, (x, _) in zip(middle, half, chosen, strict=True)])
    weights = np.concatenate([h * w for h, (_, w) in zip(half, chosen, strict=True)])
    counts = [x.size for x, _ in chosen]
    return nodes, weights, np.cumsum([0, *counts[:-1]])


def _caps(station: float, edges: Array, depth: Array, height_m: float, earth_radius: float) -> Array:
    """∫ cos ψ dS / distance over a spherical cap, ψ the angle between a point and the station at the Earth's centre.

    With l the distance, cos ψ = (r² + R² − l²) / 2rR and dS = (R/r) l dl dα in polar coordinates about the station, so
    the integral over l is elementary: F(l) = l (r² + R² − l²/3). Along the rim, sin²ψ dα splits into partial fractions
    in 1 ∓ cos ψ, each of which is linear in l² and gives one elliptic integral. The two last terms are the winding of
    the rim about the station and about its antipode.
    """
    r, big_r, d = earth_radius + height_m, earth_radius - depth, height_m + depth
    half_sum, half_difference = (edges + station) / (2.0 * earth_radius), (edges - station) / (2.0 * earth_radius)
    sin_sum, sin_difference = np.sin(half_sum), np.sin(half_difference)
    cos_sum, cos_difference = np.cos(half_sum), np.cos(half_difference)
    kappa = sin_difference / np.where(sin_sum > 0.0, sin_sum, 1.0)
    kappa_anti = cos_difference / cos_sum
    chord, chord_anti = 4.0 * r * big_r * sin_sum**2, 4.0 * r * big_r * cos_sum**2
    s, kc = _modulus(d, chord, 4.0 * r * big_r * sin_difference**2)
    square, p = r**2 + big_r**2, r + big_r
    e = special.ellipe(1.0 - kc**2)
    rim = kappa * ((square - d**2 / 3.0) * cel(kc, kappa**2, 1.0, kc**2) - chord / 3.0 * e)
    rim += kappa_anti * ((square - p**2 / 3.0) * cel(kc, kappa_anti**2, 1.0, kc**2) + chord_anti / 3.0 * e)
    inside, antipode_inside = 0.5 + 0.5 * np.sign(half_difference), cos_sum < 0.0
    windings = antipode_inside * p * (square - p**2 / 3.0) - inside * np.abs(d) * (square - d**2 / 3.0)
    return np.where(edges > 0.0, (s * rim + np.pi * windings) / r**2, 0.0)


def _sides(station: float, edges: Array, depth: Array, height_m: float, earth_radius: float) -> Array:
    """∮ (n · up) / distance over the circle at (edge, depth), per metre of depth, n the outward normal of the cone."""
    r, big_r, d = earth_radius + height_m, earth_radius - depth, height_m + depth
    total, difference = (edges + station) / earth_radius, (station - edges) / earth_radius
    s, kc = _modulus(d, 4.0 * r * big_r * np.sin(0.5 * total) ** 2, 4.0 * r * big_r * np.sin(0.5 * difference) ** 2)
    present = np.sin(edges / earth_radius) > 0.0
    circle = cel(kc, 1.0, -np.sin(total), np.sin(difference))
    return np.where(present, 4.0 * big_r * np.sin(edges / earth_radius) * circle / s, 0.0)


def _modulus(d: Array, far_chord: Array, near_chord: Array) -> tuple[Array, Array]:
    """Largest distance from the station to a circle, and the ratio of the smallest to it."""
    s = np.sqrt(d**2 + far_chord)
    s = np.where(s > 0.0, s, 1.0)  # a station on a circle of no size; its factor is 0
    return s, np.sqrt(d**2 + near_chord) / s
