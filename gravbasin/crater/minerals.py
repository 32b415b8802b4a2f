"""Densities of minerals, and laws from velocity to density."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["MINERALS", "brocher_density", "gardner_density", "grain_density"]

Array = NDArray[np.float64]

MINERALS: Mapping[str, tuple[float, float]] = {
    "quartz": (2650.0, 2650.0),
    "k_feldspar": (2540.0, 2570.0),
    "plagioclase": (2620.0, 2760.0),
    "biotite": (2800.0, 3300.0),
    "muscovite": (2770.0, 2880.0),
    "chlorite": (2600.0, 3300.0),
    "amphibole": (3000.0, 3400.0),
    "pyroxene": (3200.0, 3500.0),
    "olivine": (3270.0, 3700.0),
    "garnet": (3500.0, 4300.0),
    "epidote": (3300.0, 3500.0),
    "sillimanite": (3230.0, 3270.0),
    "cordierite": (2530.0, 2780.0),
    "serpentine": (2500.0, 2650.0),
    "calcite": (2710.0, 2710.0),
    "dolomite": (2850.0, 2870.0),
    "anhydrite": (2890.0, 2980.0),
    "gypsum": (2310.0, 2330.0),
    "halite": (2160.0, 2170.0),
    "clay": (2600.0, 2800.0),
    "glass": (2300.0, 2600.0),
    "magnetite": (5170.0, 5200.0),
    "ilmenite": (4700.0, 4790.0),
    "pyrite": (4950.0, 5030.0),
}
"""Least and largest density, kg/m³; from memory (ranges of solid solution as in mineralogy textbooks)."""


def grain_density(volume_percent: Mapping[str, ArrayLike]) -> tuple[Array, Array]:
    """Least and largest density of a rock's grains from its modes, kg/m³; modes are scaled to 100 %.

    Examples
    --------
    >>> low, high = grain_density({"quartz": 30.0, "k_feldspar": 35.0, "plagioclase": 30.0, "biotite": 5.0})
    >>> round(float(low)), round(float(high))
    (2610, 2688)
    """
    names = list(volume_percent)
    modes = np.stack([np.asarray(volume_percent[name], dtype=float) for name in names])
    share = modes / modes.sum(axis=0)
    low, high = (np.tensordot([MINERALS[name][end] for name in names], share, axes=1) for end in (0, 1))
    return low, high


def gardner_density(velocity: ArrayLike) -> Array:
    """Density, kg/m³, from P velocity, m/s: 310 V^0.25 (Gardner et al. 1974, from memory); made for sediments."""
    return np.asarray(310.0 * np.asarray(velocity, dtype=float) ** 0.25)


def brocher_density(velocity: ArrayLike) -> Array:
    """Density, kg/m³, from P velocity, m/s (1500-8500): polynomial of Brocher 2005, from memory; made for crust."""
    v = np.asarray(velocity, dtype=float) / 1000.0
    return np.asarray(1000.0 * v * (1.6612 + v * (-0.4721 + v * (0.0671 + v * (-0.0043 + v * 0.000106)))))
