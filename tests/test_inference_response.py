"""From a radial profile to what a map's rings show of it."""

import numpy as np
import pytest
from scipy import sparse

from gravbasin.discs import ring_fractions
from gravbasin.inference.response import low_pass, ring_response

STEP = (2000.0, 2500.0)  # northing, easting: not square
EASTING, NORTHING = STEP[1] * np.arange(-30, 31), STEP[0] * np.arange(-34, 35)
DISTANCE = np.hypot(EASTING, NORTHING[:, None])
RADIUS = np.linspace(0.0, 400e3, 900)


@pytest.fixture(scope="module")
def weights():
    share = ring_fractions(EASTING, NORTHING, np.arange(0.0, 41e3, 4e3)).T.tocsr()
    return sparse.csr_array(sparse.diags_array(1.0 / np.asarray(share.sum(axis=1)).ravel()) @ share)


def test_a_constant_stays_a_constant(weights):
    plain = ring_response(weights, EASTING, NORTHING, RADIUS) @ np.ones(RADIUS.size)
    smooth = ring_response(weights, EASTING, NORTHING, RADIUS, resolution=9e3) @ np.ones(RADIUS.size)
    np.testing.assert_allclose(plain, 1.0, atol=1e-12)
    np.testing.assert_allclose(smooth, 1.0, atol=1e-12)


def test_equals_ring_means_of_the_filtered_map(weights):
    """Filtering the rings is filtering the map: the transform is symmetric."""
    profile = -9.0 * np.exp(-((RADIUS / 15e3) ** 2))
    grid = np.interp(DISTANCE, RADIUS, profile)
    smooth = low_pass(np.pad(grid, 40), STEP, 6e3)[40:-40, 40:-40]
    expected = weights @ smooth.ravel()
    obtained = ring_response(weights, EASTING, NORTHING, RADIUS, resolution=6e3) @ profile
    np.testing.assert_allclose(obtained, expected, atol=2e-3)


def test_low_pass_keeps_long_waves_and_removes_short_ones():
    x = STEP[1] * np.arange(128)
    long, short = np.cos(2 * np.pi * x / x.size / STEP[1] * 4), np.cos(2 * np.pi * x / x.size / STEP[1] * 50)
    grid = np.tile(long + short, (64, 1))
    # Wavelengths 80 km and 6.4 km; the cut at twice 12 km lies between them.
    np.testing.assert_allclose(low_pass(grid, STEP, 12e3), np.tile(long, (64, 1)), atol=1e-12)


def test_nothing_beyond_the_last_radius(weights):
    near = np.linspace(0.0, 10e3, 30)
    response = ring_response(weights, EASTING, NORTHING, near)
    assert not response[-1].any()
