"""Deformed structures through the modelled side of a run."""

import warnings

import numpy as np
import pytest

import gravbasin as gb
from gravbasin.runs.forward_run import model_anomaly

SMALL = {
    "crater": {"rim_diameter_km": 30.0},
    "history": {"erosion_km": 1.5},
    "model": {"layers": 30, "rings": 60, "draws": 20, "grid_step_km": 1.0},
}


@pytest.fixture(scope="module")
def plain():
    return model_anomaly(gb.Scenario(**SMALL))


def test_a_missing_sector_takes_its_share_of_the_mean(plain):
    third = model_anomaly(gb.Scenario(**SMALL, deformation={"missing_from_degrees": 0, "missing_to_degrees": 120}))
    np.testing.assert_allclose(third.profile, plain.profile * 2 / 3, rtol=1e-6, atol=1e-9)
    # draws are bent one by one, on cells of their own
    np.testing.assert_allclose(third.draws, plain.draws * 2 / 3, atol=0.01 * np.abs(plain.draws).max())


def test_a_missing_sector_is_missing_where_it_should_be(plain):
    """Gone between north and east: the anomaly there is weaker than in the south-west."""
    grid = model_anomaly(gb.Scenario(**SMALL, deformation={"missing_from_degrees": 0, "missing_to_degrees": 90})).grid
    north_east = float(grid.sel(easting=6e3, northing=6e3, method="nearest"))
    south_west = float(grid.sel(easting=-6e3, northing=-6e3, method="nearest"))
    assert abs(north_east) < 0.5 * abs(south_west)


def test_a_tilt_brings_down_rock_from_above_without_a_warning(plain):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        tilted = model_anomaly(gb.Scenario(**SMALL, deformation={"tilt_degrees": 4.0, "tilt_azimuth_degrees": 90.0}))
    line = tilted.grid.sel(northing=0.0, method="nearest")
    east, west = line.sel(easting=9e3, method="nearest"), line.sel(easting=-9e3, method="nearest")
    assert abs(float(east)) > 1.5 * abs(float(west))  # the side that sank keeps more of its fill


def test_means_over_circles_agree_with_the_grid():
    from gravbasin.observed import ring_means

    deformed = model_anomaly(gb.Scenario(**SMALL, deformation={"stretch_ratio": 1.4, "stretch_azimuth_degrees": 30.0}))
    rings = ring_means(deformed.grid, (0.0, 0.0), np.arange(0.0, 16e3, 3e3))
    expected = np.interp(rings.radius_m, deformed.radius, deformed.profile)
    assert np.abs(rings.mean - expected).max() < 0.03 * np.abs(expected).max()
