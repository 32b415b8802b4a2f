"""Random gravity fields with exactly the covariance of a noise model on a grid."""

from __future__ import annotations

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike
from scipy import fft

from gravbasin.errors import CannotFinish, InputError
from gravbasin.labels import data_array, provenance
from gravbasin.observed._lattice import Array, even_axis
from gravbasin.observed.noise import NoiseModel

__all__ = ["simulate_noise", "torus_covariance"]

NEGATIVE_LIMIT = 1e-6
"""Largest negative eigenvalue of the embedding that is set to zero, as a share of the largest eigenvalue."""

MAX_TORUS_NODES = 4096 * 4096
"""Embeddings above this (about 1 GB of work space) are refused."""


def simulate_noise(
    noise: NoiseModel,
    easting_m: ArrayLike,
    northing_m: ArrayLike,
    *,
    seed: int | np.random.Generator = 1,
    n: int = 1,
) -> xr.DataArray:
    """Random fields of the noise model, nugget included, mean zero, no regional.

    Parameters
    ----------
    noise : NoiseModel
        The model.
    easting_m, northing_m : (n_easting,), (n_northing,) arrays, m
        Ascending, evenly spaced axes.
    seed : int or numpy Generator
        Source of randomness; the first fields are the same whatever `n`.
    n : int
        Number of fields.

    Returns
    -------
    DataArray (northing, easting), or (draw, northing, easting) when n > 1, mGal

    Raises
    ------
    InputError
        Uneven or descending axes, n below 1.
    CannotFinish
        No embedding small enough is positive: the range is very long or the field very smooth for this grid.

    Notes
    -----
    Circulant embedding (Dietrich & Newsam 1997; Wood & Chan 1994, from memory): the covariance is laid on a torus at
    least twice as wide as the grid, so that no wrap-around reaches it, and the torus grows until its eigenvalues are
    not negative.

    Examples
    --------
    >>> noise = NoiseModel(sill_mgal=8.0, range_m=30e3, smoothness=0.8, nugget_mgal=0.5)
    >>> simulate_noise(noise, range(0, 200_000, 5_000), range(0, 150_000, 5_000), seed=4).shape
    (30, 40)
    """
    where = "simulate_noise"
    easting, northing = _axis(easting_m, "easting_m"), _axis(northing_m, "northing_m")
    if int(n) < 1:
        raise InputError("n", n, "must be 1 or more", "give the number of fields", where)
    spacing = (float(northing[1] - northing[0]), float(easting[1] - easting[0]))
    shape = (northing.size, easting.size)
    amplitude, lowest = _torus_amplitude(noise, shape, spacing)
    field_rng, nugget_rng = np.random.default_rng(seed).spawn(2)
    fields = np.empty((n, *shape))
    for i in range(0, n, 2):
        white = field_rng.standard_normal((*amplitude.shape, 2)).view(complex)[..., 0]
        white *= amplitude
        both = fft.fft2(white, overwrite_x=True)[: shape[0], : shape[1]]
        fields[i] = both.real
        if i + 1 < n:
            fields[i + 1] = both.imag
    if noise.nugget_mgal > 0:
        for field in fields:
            field += noise.nugget_mgal * nugget_rng.standard_normal(shape)
    facts = provenance(
        noise=noise.as_dict(),
        seed=seed if isinstance(seed, int) else "generator",
        embedding=list(amplitude.shape),
        lowest_eigenvalue_ratio=lowest,
    )
    dims = ("northing", "easting") if n == 1 else ("draw", "northing", "easting")
    return data_array(
        fields[0] if n == 1 else fields,
        dims,
        {"northing": northing, "easting": easting},
        name="noise",
        units="mGal",
        long_name="simulated gravity noise",
        provenance=facts,
    )


def torus_covariance(noise: NoiseModel, shape: tuple[int, int], spacing: tuple[float, float]) -> Array:
    """Covariance (correlated part, mGal²) of every node of a torus with its first node, `shape` (northing, easting)."""
    rows, columns = (step * np.arange(count // 2 + 1) for count, step in zip(shape, spacing, strict=True))
    quadrant = noise.covariance(np.hypot(rows[:, None], columns))
    pick = [np.minimum(np.arange(count), count - np.arange(count)) for count in shape]
    return quadrant[np.ix_(*pick)]


def _axis(values: ArrayLike, name: str) -> Array:
    axis = even_axis(np.asarray(values, dtype=float), name, where="simulate_noise")
    if axis[1] < axis[0]:
        raise InputError(name, f"{axis[0]:g} to {axis[-1]:g}", "must ascend", "reverse it", "simulate_noise")
    return axis


def _torus_amplitude(noise: NoiseModel, shape: tuple[int, int], spacing: tuple[float, float]) -> tuple[Array, float]:
    """Root of eigenvalue over node count on the smallest good torus, and its lowest eigenvalue over the largest."""
    growth = 2.0
    while True:
        rows, columns = (fft.next_fast_len(int(np.ceil(growth * count)), real=True) for count in shape)
        if rows * columns > MAX_TORUS_NODES:
            raise CannotFinish(
                f"simulate_noise: no positive circulant embedding within {MAX_TORUS_NODES} nodes for a grid of {shape} "
                f"with range {noise.range_m / 1e3:g} km and smoothness {noise.smoothness:g}; use a shorter range"
            )
        values = fft.fft2(torus_covariance(noise, (rows, columns), spacing)).real
        lowest = float(values.min() / values.max())
        if lowest >= -NEGATIVE_LIMIT:
            return np.sqrt(np.maximum(values, 0.0) / values.size), lowest
        growth *= 1.5
