"""Uniform horizontal rectangles on a regular grid: the kernel of every layered prism."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from gravbasin.forward.elliptic import row_blocks

__all__ = ["rectangle_potentials"]

Array = NDArray[np.float64]

_NEAR = 35.0  # cells: here the closed form, losing digits outwards, and the series, gaining them, both have 12


def rectangle_potentials(
    shape: tuple[int, ...], spacing: tuple[float, float], depth: float, *, out: Array | None = None
) -> Array:
    """∫∫ dA / distance over one grid cell, from the stations of one quadrant around it.

    Parameters
    ----------
    shape : (n_y, n_x)
        Number of offsets, from 0 upwards, in each direction.
    spacing : (y, x), m
        Size of the cell, and step of the offsets.
    depth : float, m
        Depth of the rectangle below the stations; only its size matters, and it may be 0.
    out : (n_y, n_x) array, optional
        Where to put the result.

    Returns
    -------
    (n_y, n_x) array, m
        Even in both offsets, so one quadrant says all.

    Notes
    -----
    The attraction of a prism is G times the difference of the potentials of its top and bottom, because the depth
    integral of z/R³ is −1/R. Near: the corner function of Nagy, Papp and Benedek 2000 (J. Geod. 74, 552), whose
    logarithms are written as asinh so that nothing large cancels. Corners lie at half-integer offsets, never on a
    station's own axes, so no limit is needed. Far: the Taylor series of 1/R to the fourth order, where four corners
    would lose the digits that the difference between layers needs.
    """
    step_y, step_x = spacing
    offset_y: Array = np.arange(float(shape[0])) * step_y
    offset_x: Array = np.arange(float(shape[1])) * step_x
    out = np.empty(shape) if out is None else out
    with np.errstate(divide="ignore", invalid="ignore"):  # the series is infinite at a station on its own cell
        for rows in row_blocks(*shape):
            out[rows] = _taylor(offset_y[rows], offset_x, spacing, depth)
    near_y, near_x = (min(n, int(_NEAR * max(spacing) / s) + 1) for n, s in zip(shape, spacing, strict=True))
    y: Array = (np.arange(near_y + 1.0) - 0.5) * step_y
    x: Array = (np.arange(near_x + 1.0) - 0.5) * step_x
    out[:near_y, :near_x] = np.diff(np.diff(_corner(x, y[:, None], abs(depth)), axis=0), axis=1)
    return out


def _corner(x: Array, y: Array, z: float) -> Array:
    """The double primitive of 1/R in x and y, odd in both; x and y are not 0, z ≥ 0."""
    r = np.sqrt(x**2 + y**2 + z**2)
    logarithms = x * np.arcsinh(y / np.sqrt(x**2 + z**2)) + y * np.arcsinh(x / np.sqrt(y**2 + z**2))
    return logarithms - z * np.arctan2(x * y, z * r)


def _taylor(offset_y: Array, offset_x: Array, spacing: tuple[float, float], depth: float) -> Array:
    """Area over distance, times one plus the second and fourth moments of the rectangle."""
    b, a = (0.25 * s**2 for s in spacing)  # squared half sides
    x, y = offset_x**2, (offset_y**2)[:, None]
    u = 1.0 / (x + (y + depth**2))
    x, y = x * u, y * u  # squared direction cosines
    fourth = x * (105.0 / 120.0 * a * a * x + 105.0 / 36.0 * a * b * y - (90.0 / 120.0 * a + 15.0 / 36.0 * b) * a)
    fourth += y * (105.0 / 120.0 * b * b * y - (90.0 / 120.0 * b + 15.0 / 36.0 * a) * b)
    fourth += 9.0 / 120.0 * (a * a + b * b) + 3.0 / 36.0 * a * b
    second = 0.5 * a * x + (0.5 * b * y - (a + b) / 6.0)
    return spacing[0] * spacing[1] * np.sqrt(u) * (1.0 + u * (second + u * fourth))
