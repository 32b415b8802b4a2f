"""Is the anomaly round: power of azimuthal harmonics against what the noise alone would give."""

from __future__ import annotations

import dataclasses

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy import stats

from gravbasin.inference.harmonics import FINE_ORDERS, Harmonics
from gravbasin.inference.level import Level

__all__ = ["Circularity", "circularity_test"]

Array = NDArray[np.float64]

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
