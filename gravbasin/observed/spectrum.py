"""Does the noise model describe the map's spectrum, and has the map a grain? Held against simulated maps."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy import fft

from gravbasin.observed._lattice import Array, Disc, Lattice, lattice_of
from gravbasin.observed.noise import NoiseModel
from gravbasin.observed.regional import polynomial_basis
from gravbasin.observed.simulate import simulate_noise

__all__ = ["SpectrumCheck", "check_spectrum"]

MODELS, FIELDS = 11, 9
"""Plausible noise models, and simulated maps of each: 99 maps, so the smallest p-value is 0.01."""

MOST_NODES = 128
"""Nodes along each side; larger maps are cut to every k-th node, and so are the simulated ones."""

BINS, LEAST_MODES = 10, 6


@dataclass(frozen=True, kw_only=True)
class SpectrumCheck:
    """Power of the map against that of simulated maps, by wavelength and by direction.

    Attributes
    ----------
    wavelength_km : tuple of float
        Middle of every band, long to short.
    ratio, low, high : tuple of float
        Power of the map over the mean of simulated maps, and 5 and 95 % of simulated maps over the same.
    p_value : float
        Share of simulated maps whose spectrum departs as far from their mean.
    grain_ratio : float
        Power of waves across the grain over that of waves along it; 1 where no direction is preferred.
    grain_azimuth_deg : float
        Direction in which the map is smoothest, clockwise from grid north, 0 to 180.
    grain_p_value : float
        Share of simulated maps, which have no grain, that seem as directed.
    """

    wavelength_km: tuple[float, ...]
    ratio: tuple[float, ...]
    low: tuple[float, ...]
    high: tuple[float, ...]
    p_value: float
    grain_ratio: float
    grain_azimuth_deg: float
    grain_p_value: float


def check_spectrum(
    observed: xr.DataArray, noise: NoiseModel, exclude: Disc | None = None, *, seed: int | np.random.Generator = 1
) -> SpectrumCheck | None:
    """Hold the tapered periodogram of a map against those of maps simulated from its noise model.

    Parameters
    ----------
    observed : DataArray (northing, easting), mGal
        The map; gaps are NaN.
    noise : NoiseModel
        The model on trial; its uncertainty counts.
    exclude : (easting, northing, radius), m, optional
        Disc left out.
    seed : int or numpy Generator
        Of the simulated maps.

    Returns
    -------
    SpectrumCheck or None
        None where the map has too few wavelengths between its size and its resolution.

    Notes
    -----
    Taper (Hann), gaps, the disc and the removal of the regional do to simulated maps what they do to the real one, so
    leakage and lost power cancel in the ratio. Power spectra of steep fields would not survive without a taper (common
    practice).
    """
    lattice = lattice_of(observed, where="check_spectrum")
    stride = [max(1, -(-n // MOST_NODES)) for n in lattice.values.shape]
    rows, columns = slice(None, None, stride[0]), slice(None, None, stride[1])
    keep = lattice.valid(exclude, where="check_spectrum")[rows, columns]
    cut = Lattice(lattice.easting[columns], lattice.northing[rows], lattice.values[rows, columns])
    bins, azimuth, middle = _bands(cut, noise)
    if len(middle) < 3 or keep.sum() < keep.size / 3:
        return None
    prepare = _Periodogram.of(cut, keep, noise.regional_order)
    power = prepare(cut.values)
    rng = np.random.default_rng(seed)
    models = [noise, *noise.draws(rng, MODELS - 1)] if noise.posterior else [noise] * MODELS
    simulated = np.concatenate(
        [
            [prepare(field) for field in simulate_noise(m, cut.easting, cut.northing, seed=rng, n=FIELDS).values]
            for m in models
        ]
    )
    expected = simulated.mean(axis=0)
    real, others = (_summaries(p / expected, bins, azimuth, len(middle)) for p in (power[None], simulated))
    departure = _departures(np.log(real[0]), np.log(others[0]))
    grain, strength = real[1][0], np.abs(others[1])
    contrast = min(2.0 * abs(grain), 0.99)
    low, high = np.quantile(others[0], [0.05, 0.95], axis=0)
    return SpectrumCheck(
        wavelength_km=tuple(map(float, 1e-3 / middle)),
        ratio=tuple(map(float, real[0][0])),
        low=tuple(map(float, low)),
        high=tuple(map(float, high)),
        p_value=departure,
        grain_ratio=float((1.0 + contrast) / (1.0 - contrast)),
        grain_azimuth_deg=float((np.degrees(0.5 * np.angle(grain)) + 90.0) % 180.0),
        grain_p_value=float((1 + np.sum(strength >= abs(grain))) / (1 + strength.size)),
    )


def _bands(lattice: Lattice, noise: NoiseModel) -> tuple[NDArray[np.intp], Array, Array]:
    """Band of every mode of the transform (-1 outside), azimuth of its wave, and middle wavenumbers of bands, 1/m."""
    step_n, step_e = lattice.spacing
    north = fft.fftfreq(lattice.northing.size, step_n)[:, None]
    east = fft.rfftfreq(lattice.easting.size, step_e)
    wavenumber = np.hypot(north, east)
    longest = 2.0 / min(step_n * lattice.northing.size, step_e * lattice.easting.size)
    shortest = 0.5 / max(step_n, step_e, noise.resolution_m or 0.0)
    if shortest <= longest:
        return np.full(wavenumber.shape, -1), np.arctan2(east, north), np.zeros(0)
    edges = np.geomspace(longest, shortest, BINS + 1)
    bins = np.digitize(wavenumber, edges) - 1
    bins[(wavenumber < longest) | (wavenumber >= shortest)] = -1
    count = np.bincount(bins[bins >= 0], minlength=BINS)
    good = np.flatnonzero(count >= LEAST_MODES)
    renumbered = np.full(BINS + 1, -1)
    renumbered[good] = np.arange(good.size)
    return renumbered[bins], np.arctan2(east, north), np.sqrt(edges[:-1] * edges[1:])[good]


@dataclass(frozen=True, eq=False)
class _Periodogram:
    """Power of a map less its regional, tapered; what is left out counts as nothing."""

    keep: NDArray[np.bool_]
    basis: Array
    taper: Array

    @classmethod
    def of(cls, lattice: Lattice, keep: NDArray[np.bool_], order: int) -> _Periodogram:
        east, north = np.meshgrid(lattice.easting, lattice.northing)
        basis = np.linalg.qr(polynomial_basis(east[keep], north[keep], order))[0]
        taper = np.outer(*(np.sin(np.pi * (np.arange(n) + 0.5) / n) ** 2 for n in keep.shape))
        return cls(keep, basis, taper)

    def __call__(self, values: Array) -> Array:
        kept = values[self.keep]
        whole = np.zeros(self.keep.shape)
        whole[self.keep] = kept - self.basis @ (self.basis.T @ kept)
        return np.abs(fft.rfft2(self.taper * whole)) ** 2


def _summaries(
    whitened: Array, bins: NDArray[np.intp], azimuth: Array, count: int
) -> tuple[Array, NDArray[np.complex128]]:
    """Mean of whitened power in every band, (n_map, n_band), and the second azimuthal harmonic over all, (n_map,)."""
    inside = bins >= 0
    values, band = whitened[:, inside], bins[inside]
    turn = np.exp(2j * azimuth[inside])
    share = np.zeros((band.size, count))
    share[np.arange(band.size), band] = 1.0
    total = values @ share
    # Every band has the same say: short waves are many, but the grain of a map is in its long ones too.
    harmonic = ((values * turn) @ share / total).mean(axis=1)
    return total / share.sum(axis=0), harmonic


def _departures(real: Array, simulated: Array) -> float:
    """Share of simulated log spectra as far from their mean as the real one, bands in units of their spread."""
    middle, spread = simulated.mean(axis=0), simulated.std(axis=0)
    far = [np.sum(((spectra - middle) / spread) ** 2, axis=1) for spectra in (real, simulated)]
    return float((1 + np.sum(far[1] >= far[0][0])) / (1 + len(simulated)))
