"""The spectrum on trial: honest on its own noise, alive to rougher maps and to a grain; noise without a mask."""

import numpy as np
import pytest
import xarray as xr
from scipy import stats

from gravbasin.observed import NoiseModel, check_spectrum, estimate_noise, simulate_noise

NOISE = NoiseModel(sill_mgal=9.0, range_m=35e3, smoothness=0.9, nugget_mgal=0.5)
EASTING, NORTHING = 4e3 * np.arange(80), 5e3 * np.arange(70)  # not square, neither nodes nor cells
DISC = (160e3, 170e3, 30e3)


def _map(noise=NOISE, seed=1) -> xr.DataArray:
    return simulate_noise(noise, EASTING, NORTHING, seed=seed)


def test_maps_of_the_model_pass_as_often_as_they_should():
    """60 maps; Kolmogorov-Smirnov at 0.1 % for both p-values."""
    found = [check_spectrum(_map(seed=i), NOISE, DISC, seed=1000 + i) for i in range(60)]
    assert stats.kstest([c.p_value for c in found], "uniform").pvalue > 1e-3
    assert stats.kstest([c.grain_p_value for c in found], "uniform").pvalue > 1e-3
    assert np.mean([c.ratio for c in found]) == pytest.approx(1.0, abs=0.1)


@pytest.mark.parametrize("smoothness", [0.4, 1.8])
def test_another_smoothness_is_found_out(smoothness):
    other = NoiseModel(sill_mgal=9.0, range_m=35e3, smoothness=smoothness, nugget_mgal=0.5)
    found = check_spectrum(_map(other, seed=2), NOISE, DISC)
    assert found.p_value == 0.01  # the least that 99 maps can tell
    short = found.ratio[-1]
    assert short > 1.5 if smoothness < NOISE.smoothness else short < 0.6


@pytest.mark.parametrize("azimuth", [0.0, 35.0, 100.0, 160.0])
def test_a_grain_is_found_along_its_azimuth(azimuth):
    """Ridges added along an azimuth (clockwise from north): smoothest along it, within 12 degrees."""
    rng, angle = np.random.default_rng(4), np.radians(azimuth)
    across = EASTING * np.cos(angle) - NORTHING[:, None] * np.sin(angle)
    ridges = sum(
        np.sqrt(wave) * np.cos(2 * np.pi * across / wave / 1e3 + rng.uniform(0, 7)) for wave in (25, 40, 60, 90)
    )
    found = check_spectrum(_map() + ridges, NOISE)
    off = (found.grain_azimuth_deg - azimuth + 90.0) % 180.0 - 90.0
    assert abs(off) < 12.0
    assert found.grain_p_value <= 0.02
    assert found.grain_ratio > 1.5


def test_gaps_are_treated_alike_in_map_and_simulation():
    """A third of the map empty: on 40 maps no p-value below 0.01 more often than one in 40 or so."""
    found = []
    for i in range(40):
        holed = _map(seed=50 + i)
        holed[10:45, 5:50] = np.nan
        found.append(check_spectrum(holed, NOISE, seed=i).p_value)
    assert stats.kstest(found, "uniform").pvalue > 1e-3


def test_a_map_of_few_wavelengths_is_not_judged():
    assert check_spectrum(_map()[:5, :5], NOISE) is None
    coarse = NoiseModel(sill_mgal=9.0, range_m=35e3, smoothness=0.9, nugget_mgal=0.5, resolution_m=120e3)
    assert check_spectrum(_map(), coarse) is None


def test_a_fitted_structure_leaves_the_noise_as_a_masked_one_does():
    """A low of 40 mGal inflates the noise unless it is left out or fitted; these two agree within 8 %."""
    distance = np.hypot(EASTING - DISC[0], NORTHING[:, None] - DISC[1])
    shape = xr.zeros_like(_map()) - np.exp(-((distance / 30e3) ** 4))
    observed = _map(seed=7) + 40.0 * shape
    observed.attrs["units"] = "mGal"
    few = {"max_points": 300, "seed": 1}
    masked = estimate_noise(observed, exclude=(*DISC[:2], 45e3), **few).roughness(60e3)
    fitted = estimate_noise(observed, template=0.3 * shape, **few).roughness(60e3)
    neither = estimate_noise(observed, **few).roughness(60e3)
    assert fitted == pytest.approx(masked, rel=0.08)
    assert neither > 1.15 * masked


def test_a_structure_of_nothing_changes_nothing():
    observed = _map(seed=8)
    plain = estimate_noise(observed, max_points=200, seed=2)
    assert estimate_noise(observed, template=xr.zeros_like(observed), max_points=200, seed=2) == plain


def test_roughness_runs_from_nugget_to_all_of_the_noise():
    assert NOISE.roughness(0.0) == pytest.approx(0.5)
    assert NOISE.roughness(1e8) == pytest.approx(np.hypot(9.0, 0.5))
    assert NOISE.roughness(20e3) < NOISE.roughness(40e3)
