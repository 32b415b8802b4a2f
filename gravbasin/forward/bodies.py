"""Geometric bodies as sections and prisms, with the exact mass in every cell."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike, NDArray

__all__ = ["prisms_of", "revolution_section", "section_of"]

Array = NDArray[np.float64]

_NODES = 12  # of the depth quadrature within a layer


def section_of(contrast: ArrayLike, depth_edges: ArrayLike, radius_edges: ArrayLike) -> xr.Dataset:
    """A section from plain arrays.

    Parameters
    ----------
    contrast : (n_depth, n_ring) array, kg/m³
    depth_edges, radius_edges : (n_depth + 1,), (n_ring + 1,) arrays, m

    Examples
    --------
    >>> section_of([[-100.0]], [0.0, 2e3], [0.0, 1e4]).sizes["radius"]
    1
    """
    z, a = np.asarray(depth_edges, dtype=float), np.asarray(radius_edges, dtype=float)
    return xr.Dataset(
        {"density_contrast": (("depth", "radius"), np.asarray(contrast, dtype=float))},
        coords={
            "depth": 0.5 * (z[1:] + z[:-1]),
            "radius": 0.5 * (a[1:] + a[:-1]),
            "depth_edges": z,
            "radius_edges": a,
        },
    )


def prisms_of(density: ArrayLike, depth_edges: ArrayLike, northing: ArrayLike, easting: ArrayLike) -> xr.Dataset:
    """Layered prisms from plain arrays.

    Parameters
    ----------
    density : (n_layer, n_northing, n_easting) array, kg/m³
    depth_edges, northing, easting : arrays, m
    """
    return xr.Dataset(
        {"density_contrast": (("layer", "northing", "easting"), np.asarray(density, dtype=float))},
        coords={
            "northing": np.asarray(northing, dtype=float),
            "easting": np.asarray(easting, dtype=float),
            "depth_edges": np.asarray(depth_edges, dtype=float),
        },
    )


def revolution_section(
    outline: Callable[[Array], Array],
    depth_edges: ArrayLike,
    radius_edges: ArrayLike,
    *,
    contrast: Callable[[Array], Array],
) -> xr.Dataset:
    """A solid of revolution, every cell holding its own mass.

    Parameters
    ----------
    outline : callable
        Radius of the body, m, at depths, m.
    depth_edges, radius_edges : arrays, m
        Cells; they should reach beyond the body.
    contrast : callable
        Contrast, kg/m³, at depths, m.

    Returns
    -------
    Dataset (depth, radius)
        Mean contrast of each cell: exact across the radius, Gauss-Legendre over the depth of a layer.
    """
    z, squares = np.asarray(depth_edges, dtype=float), np.asarray(radius_edges, dtype=float) ** 2
    x, w = np.polynomial.legendre.leggauss(_NODES)
    middle, half = 0.5 * (z[1:] + z[:-1]), 0.5 * np.diff(z)
    depth = middle[:, None] + half[:, None] * x
    body = outline(depth)[:, :, None] ** 2
    share = (np.clip(body, squares[:-1], squares[1:]) - squares[:-1]) / np.diff(squares)
    mean = np.einsum("n,lnr,ln->lr", 0.5 * w, share, contrast(depth))
    return section_of(mean, z, radius_edges)
