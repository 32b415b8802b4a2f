"""Observed maps: reading them, their noise, their regional and their ring profiles. Knows nothing of craters."""

from gravbasin.observed.estimate import estimate_noise
from gravbasin.observed.noise import NoiseModel
from gravbasin.observed.profile import (
    RingMeans,
    radial_profile,
    ring_covariance,
    ring_edges,
    ring_means,
    ring_radii,
    stencil_axes,
)
from gravbasin.observed.quality import NoiseCheck, check_noise
from gravbasin.observed.readers import read_grid
from gravbasin.observed.regional import fit_regional, polynomial_basis
from gravbasin.observed.simulate import simulate_noise
from gravbasin.observed.spectrum import SpectrumCheck, check_spectrum

__all__ = [
    "NoiseCheck",
    "NoiseModel",
    "RingMeans",
    "SpectrumCheck",
    "check_noise",
    "check_spectrum",
    "estimate_noise",
    "fit_regional",
    "polynomial_basis",
    "radial_profile",
    "read_grid",
    "ring_covariance",
    "ring_edges",
    "ring_means",
    "ring_radii",
    "simulate_noise",
    "stencil_axes",
]
