"""Rings on a sphere: shell theorem, caps on the axis, brute force, the flat limit, tesseroids."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import integrate

from gravbasin.constants import EARTH_RADIUS, GRAVITATIONAL_CONSTANT, SI_TO_MGAL
from gravbasin.errors import InputError
from gravbasin.forward import ring_anomaly, ring_table, tesseroid_anomaly
from gravbasin.forward.bodies import section_of
from gravbasin.forward.flat import flat_kernel
from gravbasin.forward.sphere import sphere_kernel

G = GRAVITATIONAL_CONSTANT * SI_TO_MGAL
R0 = EARTH_RADIUS
WHOLE = np.array([0.0, 5e3, 2e5, 1e6, 9e6, 1.3e7, np.pi * R0])


@pytest.mark.parametrize("height", [0.0, 1.0, 5e3, 1e6])
def test_a_full_shell_is_a_point_mass_from_outside(height):
    depths = np.array([0.0, 300.0, 2e3, 4e4])
    stations = np.concatenate([WHOLE, [1.0, 7e3, 4e6, 1.9e7]])  # on edges, at both poles, between
    kernel = sphere_kernel(stations, WHOLE, depths, height)
    shells = 4 / 3 * np.pi * -np.diff((R0 - depths) ** 3)
    assert_allclose(kernel.sum(axis=2), np.tile(G * shells / (R0 + height) ** 2, (stations.size, 1)), rtol=1e-10)


def test_a_full_shell_pulls_nobody_inside():
    depths = np.array([0.0, 300.0, 2e3])
    kernel = sphere_kernel(np.array([0.0, 5e3, 4e6, np.pi * R0]), WHOLE, depths, -3e3)
    assert np.abs(kernel.sum(axis=(1, 2))).max() < 1e-10 * np.abs(kernel).max()


@pytest.mark.parametrize("height", [0.0, 10.0, 3e3])
def test_a_cap_from_its_axis(height):
    """∫ over depth of the thin cap's own attraction on its axis, integrated over distance by hand."""
    arc, depths, r = 3e4, [0.0, 2e3], R0 + height

    def thin(z):
        big_r = R0 - z
        rim = np.sqrt((r - big_r) ** 2 + 4 * r * big_r * np.sin(arc / (2 * R0)) ** 2)
        return np.pi * big_r / r**2 * (rim - (r * r - big_r * big_r) / rim + 2 * big_r)

    expected = G * integrate.quad(thin, *depths, epsabs=0, epsrel=1e-12)[0]
    kernel = sphere_kernel(np.array([0.0]), np.array([0.0, arc]), np.array(depths), height)
    assert kernel[0, 0, 0] == pytest.approx(expected, rel=1e-11)


@pytest.mark.parametrize(("station", "height"), [(0.0, 2e3), (3.1e4, 2e3), (5.5e4, 500.0), (2e5, 0.0), (8e6, 1e3)])
def test_cells_agree_with_brute_force(station, height):
    """Newton's integral itself, by Gauss and trapezoid rules fine enough for the distance."""
    edges, depths = np.array([2e4, 3e4, 3.4e4]), np.array([4e3, 7e3, 8e3])
    x, w = np.polynomial.legendre.leggauss(24)
    azimuth = 2 * np.pi * np.arange(4000) / 4000
    theta, r = station / R0, R0 + height
    point = r * np.array([np.sin(theta), 0.0, np.cos(theta)])
    expected = np.zeros((2, 2))
    for i, j in np.ndindex(2, 2):
        z = depths[i] + 0.5 * (depths[i + 1] - depths[i]) * (1 + x)
        phi = (edges[j] + 0.5 * (edges[j + 1] - edges[j]) * (1 + x)) / R0
        for depth, weight in zip(z, w * 0.5 * (depths[i + 1] - depths[i]), strict=True):
            big_r, s, c = R0 - depth, np.sin(phi)[:, None], np.cos(phi)[:, None]
            away = [
                big_r * s * np.cos(azimuth) - point[0],
                big_r * s * np.sin(azimuth),
                big_r * c - point[2] + 0 * azimuth,
            ]
            distance = np.sqrt(sum(a * a for a in away))
            down = -(away[0] * point[0] + away[2] * point[2]) / r / distance**3
            ring = down.mean(axis=1) * 2 * np.pi * big_r**2 * s[:, 0] * 0.5 * (edges[j + 1] - edges[j]) / R0
            expected[i, j] += G * weight * (w @ ring)
    got = sphere_kernel(np.array([station]), edges, depths, height)[0]
    assert_allclose(got, expected, rtol=2e-7, atol=1e-13)  # 1e-13: rounding of terms as long as the Earth is wide


def test_the_attraction_is_continuous_through_edges():
    """Stations lie on top of cells, on ring edges and beside them; a kink or jump there would be a wrong limit."""
    edges, depths = np.array([0.0, 1e3, 3e3]), np.array([0.0, 200.0, 1e3])
    for r in edges[1:]:
        below, on, above = sphere_kernel(np.array([r - 1e-3, r, r + 1e-3]), edges, depths, 0.0)
        assert_allclose(on, 0.5 * (below + above), atol=1e-6 * np.abs(on).max())
        assert_allclose(above, below, atol=1e-4 * np.abs(on).max())


def test_a_huge_sphere_is_flat():
    edges, depths = np.array([0.0, 1e3, 8e3, 20e3]), np.array([0.0, 500.0, 3e3, 12e3])
    stations = np.array([0.0, 1e3, 5e3, 15e3, 40e3])
    flat = flat_kernel(stations, edges, depths, 30.0)
    errors = [
        np.abs(sphere_kernel(stations, edges, depths, 30.0, earth_radius=r) - flat).max() for r in (1e9, 1e10, 1e11)
    ]
    assert errors[0] < 1e-4 * np.abs(flat).max()
    assert_allclose(np.log10(np.divide(errors[:-1], errors[1:])), 1.0, atol=0.02)  # first order in 1/R


def test_flat_ground_underestimates_wide_shallow_structures():
    """About 0.7 % of the peak per 100 km of radius; the sign turns round for a deep narrow body."""
    for radius, share in ((50e3, 0.0035), (100e3, 0.0074), (150e3, 0.011)):
        section = section_of([[-100.0]], [500.0, 3e3], [0.0, radius])
        flat, round_ = (ring_anomaly(section, np.linspace(0, radius, 30), earth=e) for e in ("flat", "sphere"))
        assert abs(flat[0]) < abs(round_[0])
        assert float(np.abs(flat - round_).max() / np.abs(flat).max()) == pytest.approx(share, rel=0.08)
    deep = section_of([[100.0]], [10e3, 35e3], [0.0, 5e3])
    assert ring_anomaly(deep, [0.0], earth="flat")[0] > ring_anomaly(deep, [0.0], earth="sphere")[0]


def test_tesseroids_agree_to_their_own_accuracy():
    section = section_of([[-100.0, -60.0], [0.0, 20.0]], [500.0, 3e3, 8e3], [0.0, 40e3, 90e3])
    stations = [0.0, 20e3, 45e3, 80e3, 130e3]
    rings = ring_anomaly(section, stations, height_m=1e3, earth="sphere")
    tesseroids = tesseroid_anomaly(section, stations, 1e3)
    assert float(np.abs(rings - tesseroids).max()) < 1e-3 * float(np.abs(rings).max())
    with pytest.raises(InputError, match="height_m"):
        tesseroid_anomaly(section, stations, -1.0)


def test_the_table_takes_the_spherical_kernel():
    edges, depths = [0.0, 5e3], [0.0, 1e3]
    table = ring_table([2e3], edges, depths, height_m=2.0, earth="sphere")
    assert_allclose(table.kernel, sphere_kernel(np.array([2e3]), np.array(edges), np.array(depths), 2.0), rtol=0)
