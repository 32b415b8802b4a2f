"""Layered prisms and their FFT anomaly: mass, exactness, symmetry, potential theory, convergence, refusals."""

import mpmath as mp
import numpy as np
import pytest
import xarray as xr
from numpy.testing import assert_allclose
from scipy import fft

from gravbasin.constants import GRAVITATIONAL_CONSTANT, SI_TO_MGAL
from gravbasin.errors import CannotFinish, GravbasinWarning, InputError
from gravbasin.forward import GridCost, grid_anomaly, harmonica_anomaly, layered_prisms, ring_anomaly
from gravbasin.forward.bodies import prisms_of, section_of
from gravbasin.forward.rectangles import rectangle_potentials
from gravbasin.labels import read_provenance

G = GRAVITATIONAL_CONSTANT * SI_TO_MGAL
SECTION = section_of(
    [[-200.0, -90.0, 0.0], [80.0, -40.0, 0.0], [0.0, 15.0, 0.0]], [0.0, 300.0, 1.1e3, 4e3], [0.0, 3e3, 7e3, 8e3]
)


def random_prisms(seed, layers=7, rows=23, columns=30, step_n=700.0, step_e=450.0):
    rng = np.random.default_rng(seed)
    density = np.where(rng.random((layers, rows, columns)) < 0.3, 0.0, rng.normal(0, 150, (layers, rows, columns)))
    edges = np.concatenate([[0.0], np.cumsum(rng.uniform(50, 900, layers))])
    return prisms_of(density, edges, 4e5 + step_n * np.arange(rows), -7e3 + step_e * np.arange(columns))


def rectangle_by_corners(west, east, south, north, depth):
    """∫∫ dA / distance at 50 digits; corners on the station's own axes have their limits."""
    with mp.workdps(50):
        z, total = mp.mpf(depth), mp.mpf(0)
        for x, x_sign in ((mp.mpf(east), 1), (mp.mpf(west), -1)):
            for y, y_sign in ((mp.mpf(north), 1), (mp.mpf(south), -1)):
                r = mp.sqrt(x * x + y * y + z * z)
                term = x * mp.asinh(y / mp.hypot(x, z)) if x else mp.mpf(0)
                term += y * mp.asinh(x / mp.hypot(y, z)) if y else mp.mpf(0)
                term -= z * mp.atan(x * y / (z * r)) if z else mp.mpf(0)
                total += x_sign * y_sign * term
        return float(total)


def prism_at_50_digits(west, east, south, north, top, bottom, station):
    e, n, h = station
    sides = west - e, east - e, south - n, north - n
    return G * (rectangle_by_corners(*sides, abs(top + h)) - rectangle_by_corners(*sides, abs(bottom + h)))


@pytest.mark.parametrize("depth", [0.0, 1.0, 300.0, -300.0, 40e3])
def test_rectangle_potentials_near_far_and_where_the_series_takes_over(depth):
    step_n, step_e = 500.0, 800.0
    got = rectangle_potentials((130, 90), (step_n, step_e), depth)
    for i, j in [(0, 0), (0, 1), (1, 0), (3, 5), (79, 50), (80, 50), (80, 51), (81, 49), (129, 0), (0, 89), (129, 89)]:
        n, e = i * step_n, j * step_e
        expected = rectangle_by_corners(e - 400.0, e + 400.0, n - 250.0, n + 250.0, abs(depth))
        assert got[i, j] == pytest.approx(expected, rel=4e-12)


@pytest.mark.parametrize("height", [0.0, 1.0, 350.0])
@pytest.mark.parametrize("shape", [(23, 30), (30, 17), (64, 3)])
def test_the_grid_is_the_direct_sum_of_its_prisms(shape, height):
    """Every station, by an independent sum; non-square cells, grids and odd sizes catch swapped axes."""
    prisms = random_prisms(1, 4, *shape)
    grid = grid_anomaly(prisms, height_m=height)
    east, north = np.meshgrid(prisms.easting, prisms.northing)
    direct = harmonica_anomaly(prisms, east.ravel(), north.ravel(), height).values.reshape(shape)
    assert_allclose(grid, direct, atol=1e-10)


def test_stations_at_a_layer_edge_inside_the_stack():
    prisms = random_prisms(2)
    height = -float(prisms.depth_edges[3])
    grid = grid_anomaly(prisms, height_m=height)
    above, below = (grid_anomaly(prisms, height_m=height + d) for d in (1e-6, -1e-6))
    assert_allclose(grid, 0.5 * (above + below), atol=1e-7)
    assert float(np.abs(above - below).max()) < 1e-4


def test_harmonica_at_faces_edges_and_corners_of_prisms():
    prisms = random_prisms(3, 2, 2, 3)
    e, n, step_e, step_n = float(prisms.easting[1]), float(prisms.northing[0]), 450.0, 700.0
    points = [
        (e, n, 0.0),
        (e - 225, n, 0.0),
        (e - 225, n - 350, 0.0),
        (e - 225, n + 350, 0.0),
        (e, n, 5.0),
        (e + 9e3, n, 2.0),
    ]
    got = harmonica_anomaly(prisms, *np.transpose(points))
    for point, value in zip(points, got.values, strict=True):
        expected = 0.0
        for k, i, j in np.ndindex(2, 2, 3):
            east, north = float(prisms.easting[j]), float(prisms.northing[i])
            top, bottom = prisms.depth_edges.values[k : k + 2]
            box = (east - step_e / 2, east + step_e / 2, north - step_n / 2, north + step_n / 2, top, bottom)
            expected += float(prisms.density_contrast[k, i, j]) * prism_at_50_digits(*box, point)
        assert value == pytest.approx(expected, abs=1e-11)
    null = int((prisms.density_contrast == 0).sum())
    assert read_provenance(got)["null_prisms"] == null > 0


def test_harmonica_in_chunks_is_harmonica_at_once(monkeypatch):
    prisms = random_prisms(4)
    whole = harmonica_anomaly(prisms, [0.0, 100.0], 4.02e5, 3.0)
    monkeypatch.setattr("gravbasin.forward.reference._CHUNK", 117)
    assert_allclose(harmonica_anomaly(prisms, [0.0, 100.0], 4.02e5, 3.0), whole, atol=1e-12)


def test_prisms_keep_the_mass_of_every_layer():
    east, north = np.arange(-12e3, 9e3, 300.0), np.arange(-9e3, 11e3, 450.0)
    prisms = layered_prisms(SECTION, east, north, centre=(-1e3, 1.2e3))
    mass = prisms.density_contrast.sum(("northing", "easting")) * 300.0 * 450.0
    rings = SECTION.density_contrast.values @ (np.pi * np.diff(SECTION.radius_edges.values**2))
    assert_allclose(mass, rings, rtol=1e-12)
    assert prisms.density_contrast.dims == ("layer", "northing", "easting")
    assert_allclose(prisms.depth_edges, SECTION.depth_edges)
    inside = prisms.density_contrast.sel(easting=-900.0, northing=1.35e3, method="nearest")
    assert_allclose(inside, SECTION.density_contrast[:, 0], rtol=1e-12)


def test_mirrored_models_have_mirrored_anomalies():
    """One axis at a time, on a grid that is symmetric in neither."""
    east, north = np.arange(-14e3, 11e3, 500.0), np.arange(-10e3, 13e3, 400.0)
    grid = grid_anomaly(layered_prisms(SECTION, east, north, centre=(-2e3, 1e3)))
    east_flip = grid_anomaly(layered_prisms(SECTION, -east[::-1], north, centre=(2e3, 1e3)))
    north_flip = grid_anomaly(layered_prisms(SECTION, east, -north[::-1], centre=(-2e3, -1e3)))
    assert_allclose(east_flip, grid[:, ::-1], atol=1e-11)
    assert_allclose(north_flip, grid[::-1], atol=1e-11)
    highest = grid_anomaly(layered_prisms(np.abs(SECTION), east, north, centre=(-2e3, 1e3)))
    highest = highest.isel(highest.argmax(...))
    assert abs(float(highest.easting) + 2e3) <= 1e3
    assert abs(float(highest.northing) - 1e3) <= 1e3


def test_excess_mass_is_positive_and_the_grid_is_linear():
    a, b = random_prisms(5), random_prisms(6).assign_coords(depth_edges=random_prisms(5).depth_edges)
    both = grid_anomaly(2.0 * a + b)
    assert_allclose(both, 2.0 * grid_anomaly(a) + grid_anomaly(b), atol=1e-11)
    assert (grid_anomaly(np.abs(a)) > 0).all()


def test_continuing_upward_is_computing_higher():
    axis = np.arange(-64e3, 64e3, 500.0)
    prisms = layered_prisms(SECTION, axis, axis[:-20], centre=(500.0, -3e3))
    low, high = grid_anomaly(prisms, height_m=500.0), grid_anomaly(prisms, height_m=2500.0)
    shape = [2 * n for n in low.shape]
    k = 2 * np.pi * np.hypot(fft.fftfreq(shape[0], 500.0)[:, None], fft.rfftfreq(shape[1], 500.0))
    up = fft.irfft2(fft.rfft2(low.values, shape) * np.exp(-2e3 * k), shape)[: low.shape[0], : low.shape[1]]
    inner = (slice(60, -60), slice(60, -60))
    assert np.abs(up - high.values)[inner].max() < 0.005 * float(np.abs(high).max())


def test_finer_cells_converge_on_the_rings():
    """Once cells are smaller than the depth of the top, area-weighted cells are right to second order."""
    section = section_of([[-100.0, 0.0]], [2e3, 4.5e3], [0.0, 20e3, 22e3])
    errors = []
    for step in (2000.0, 1000.0, 500.0):
        axis = np.arange(-24e3, 24.1e3, step)
        grid = grid_anomaly(layered_prisms(section, axis, axis), height_m=0.0)
        some = np.random.default_rng(11).integers(0, axis.size, (2, 300))
        rings = ring_anomaly(section, np.hypot(axis[some[0]], axis[some[1]])).values
        errors.append(np.abs(grid.values[some[0], some[1]] - rings).max() / np.abs(rings).max())
    orders = np.log2(np.divide(errors[:-1], errors[1:]))
    assert ((orders > 1.7) & (orders < 2.5)).all()
    assert errors[-1] < 0.001


def test_rings_are_within_half_a_percent_of_fine_harmonica_prisms():
    section = section_of([[-100.0, -60.0, 0.0], [40.0, -30.0, 0.0]], [400.0, 1e3, 2.4e3], [0.0, 2e3, 5e3, 5.5e3])
    axis = np.arange(-5.6e3, 5.61e3, 100.0)
    points = np.array([[0.0, 0.0], [1e3, -300.0], [1.4e3, 1.4e3], [-4.9e3, 800.0], [3e3, 5e3], [-2e3, 9e3]]).T
    direct = harmonica_anomaly(layered_prisms(section, axis, axis), *points, 0.0)
    rings = ring_anomaly(section, np.hypot(*points))
    assert np.abs(direct.values - rings.values).max() < 0.005 * float(np.abs(rings).max())


def test_units_names_and_provenance():
    prisms = layered_prisms(SECTION, np.arange(-9e3, 10e3, 1e3), np.arange(-10e3, 11e3, 1e3))
    grid = grid_anomaly(prisms, height_m=3.0)
    assert grid.dims == ("northing", "easting")
    assert (grid.attrs["units"], prisms.density_contrast.attrs["units"]) == ("mGal", "kg m-3")
    assert grid.easting.attrs["units"] == "m"
    facts = read_provenance(grid)
    assert (facts["engine"], facts["height_m"], facts["prisms"]["centre_m"]) == ("layers", 3.0, [0.0, 0.0])
    shuffled = prisms.transpose("easting", "layer", "northing", ...)
    assert_allclose(grid_anomaly(shuffled, height_m=3.0), grid, atol=0)


def test_a_section_cut_at_its_rim_and_a_grid_cut_short_are_named():
    axis = np.arange(-9e3, 9.1e3, 1e3)
    with pytest.warns(GravbasinWarning, match="still 40 % of its peak at its rim"):
        layered_prisms(section_of([[100.0, 40.0]], [0.0, 1e3], [0.0, 4e3, 6e3]), axis, axis)
    with pytest.warns(GravbasinWarning, match=r"reaches 5.5 km .* out to 7 km"):
        layered_prisms(SECTION, axis[4:-2], axis)
    with pytest.warns(GravbasinWarning, match=r"reaches 6.5 km"):
        layered_prisms(SECTION, axis, axis, centre=(0.0, 3e3))
    layered_prisms(SECTION * 0.0, axis[:4], axis)  # nothing to lose, nothing to say


AXIS = np.arange(-9e3, 9.1e3, 1e3)


@pytest.mark.parametrize(
    ("easting", "words"),
    [
        (np.arange(20.0, 30.0, 0.1), "degrees"),
        (np.array([0.0, 1e3, 3e3]), "even"),
        (AXIS[::-1], "ascending"),
        (np.where(AXIS == 0.0, np.nan, AXIS), "finite"),
        (AXIS[:1], "two values"),
        (np.zeros((3, 3)), "one-dimensional"),
    ],
)
def test_bad_grids_are_refused(easting, words):
    with pytest.raises(InputError, match=words) as caught:
        layered_prisms(SECTION, easting, AXIS)
    assert "easting_m" in str(caught.value)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda p: p.drop_vars("depth_edges"), "without depth_edges"),
        (lambda p: p.isel(layer=slice(2)), "must fit"),
        (lambda p: p * np.nan, "finite"),
        (lambda p: p.isel(layer=0), "dimensions"),
    ],
)
def test_bad_prisms_are_refused(change, words):
    with pytest.raises(InputError, match=words):
        grid_anomaly(change(random_prisms(8)))
    with pytest.raises(InputError, match="height_m"):
        grid_anomaly(random_prisms(8), height_m=np.nan)
    with pytest.raises(InputError, match="one length"):
        harmonica_anomaly(random_prisms(8), [0.0, 1.0], [0.0, 1.0, 2.0], 1.0)


def test_what_would_not_fit_is_refused_before_it_is_tried():
    cost = GridCost(60, 400, 400)
    assert cost.prisms == 9_600_000
    assert cost.pairs == 9_600_000 * 160_000
    with pytest.raises(CannotFinish, match=r"grid_anomaly: needs .* above the limit of 1e-05 GiB") as caught:
        grid_anomaly(random_prisms(9), memory_limit_gib=1e-5)
    assert "\n" not in str(caught.value)
    with pytest.raises(CannotFinish, match="layered_prisms"):
        layered_prisms(SECTION, np.arange(-1e6, 1e6, 100.0), np.arange(-1e6, 1e6, 100.0))


def test_the_cost_of_memory_is_what_is_used():
    import tracemalloc

    prisms = xr.Dataset.copy(random_prisms(10, 3, 300, 280))
    tracemalloc.start()
    grid_anomaly(prisms)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert 0.7 < peak / GridCost(3, 300, 280).convolution_bytes < 1.1
