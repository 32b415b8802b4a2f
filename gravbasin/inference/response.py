"""What a map's rings would show of an axisymmetric anomaly: sampling, limited resolution, ring means."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import fft, sparse

__all__ = ["low_pass", "ring_response"]

Array = NDArray[np.float64]


def low_pass(grid: Array, spacing: tuple[float, float], resolution: float) -> Array:
    """A grid without wavelengths shorter than twice the resolution.

    Parameters
    ----------
    grid : (..., n_northing, n_easting) array
        Values; the margin should be quiet, the transform wraps around.
    spacing : (northing, easting), m
        Grid steps.
    resolution : float, m
        Half the shortest wavelength kept; a cosine flank of ±15 % about the cut keeps ringing small.
    """
    shape = grid.shape[-2:]
    k_n = fft.fftfreq(shape[0], spacing[0])[:, None]
    k_e = fft.rfftfreq(shape[1], spacing[1])[None, :]
    relative = np.hypot(k_n, k_e) * 2.0 * resolution
    gain = 0.5 * (1.0 + np.cos(np.pi * np.clip((relative - 0.85) / 0.3, 0.0, 1.0)))
    return np.asarray(fft.irfft2(fft.rfft2(grid) * gain, s=shape))


def ring_response(
    weights: sparse.csr_array,
    easting: Array,
    northing: Array,
    radius: Array,
    *,
    resolution: float | None = None,
) -> Array:
    """Matrix that turns a radial profile into the ring means a map would give.

    Parameters
    ----------
    weights : (n_ring, n_northing * n_easting) sparse array
        Ring-mean weights on the map's lattice (C order).
    easting, northing : (n_easting,), (n_northing,) arrays, m
        Axes of that lattice relative to the centre.
    radius : (n_radius,) array, m
        Ascending radii of the profile, from 0; the profile is interpolated linearly and zero beyond the last.
    resolution : float, optional
        Half the shortest wavelength the map holds, m; the profile passes through the same low-pass as the map did.

    Returns
    -------
    (n_ring, n_radius) array
        Ring means = matrix @ profile.
    """
    spacing = (float(northing[1] - northing[0]), float(easting[1] - easting[0]))
    if resolution is None or resolution <= max(spacing):
        return np.asarray((weights @ _interpolation(np.hypot(easting, northing[:, None]), radius)).toarray())
    # The low-pass is symmetric, so it may act on the few ring weights instead of on every radius.
    pad_n, pad_e = (int(np.ceil(6.0 * resolution / step)) for step in spacing)
    rings = weights.toarray().reshape(-1, northing.size, easting.size)
    smooth = low_pass(np.pad(rings, ((0, 0), (pad_n, pad_n), (pad_e, pad_e))), spacing, resolution)
    wide_n = northing[0] + spacing[0] * np.arange(-pad_n, northing.size + pad_n)
    wide_e = easting[0] + spacing[1] * np.arange(-pad_e, easting.size + pad_e)
    lookup = _interpolation(np.hypot(wide_e, wide_n[:, None]), radius)
    return np.asarray(smooth.reshape(weights.shape[0], -1) @ lookup)


def _interpolation(distance: Array, radius: Array) -> sparse.csr_array:
    """Linear interpolation from `radius` to `distance` as a sparse matrix; zero beyond the last radius."""
    distance = distance.ravel()
    index = np.clip(np.searchsorted(radius, distance, side="right") - 1, 0, radius.size - 2)
    fraction = (distance - radius[index]) / (radius[index + 1] - radius[index])
    inside = distance <= radius[-1]
    row = np.flatnonzero(inside)
    columns = np.concatenate([index[inside], index[inside] + 1])
    data = np.concatenate([1.0 - fraction[inside], fraction[inside]])
    return sparse.csr_array((data, (np.concatenate([row, row]), columns)), shape=(distance.size, radius.size))
