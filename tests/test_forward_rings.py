"""Flat rings: closed forms, identities, exact points at 50 digits, random cylinders, errors."""

import mpmath as mp
import numpy as np
import pytest
from numpy.testing import assert_allclose

from gravbasin.constants import GRAVITATIONAL_CONSTANT, SI_TO_MGAL
from gravbasin.errors import InputError
from gravbasin.forward import closed_forms as exact
from gravbasin.forward import ring_anomaly, ring_table
from gravbasin.forward.bodies import revolution_section, section_of
from gravbasin.forward.elliptic import cel
from gravbasin.forward.flat import disc_potential
from gravbasin.labels import read_provenance

G = GRAVITATIONAL_CONSTANT * SI_TO_MGAL


def graded_edges(rng, cells, reach):
    return np.concatenate([[0.0], np.cumsum(rng.uniform(0.2, 1.0, cells))]) * reach / cells


def disc_by_quadrature(r, a, h):
    """The disc as a pile of circles, each with the potential 2πρ/agm(farthest, nearest), at 50 digits."""
    with mp.workdps(50):
        r, a, h = mp.mpf(r), mp.mpf(a), mp.mpf(h)

        def circle(x):
            nearest = mp.hypot(x - r, h)
            return 2 * mp.pi * x / mp.agm(mp.hypot(x + r, h), nearest) if nearest else mp.mpf(0)

        return float(mp.quad(circle, [0, *([r] if 0 < r < a else []), a]))


@pytest.mark.parametrize("kc", [1.0, 0.3, 1e-4, 1e-9])
@pytest.mark.parametrize("p", [30.0, 1.0, 1e-3, 1e-14])
def test_the_elliptic_integral_has_all_its_digits(kc, p):
    with mp.workdps(50):
        m, n = 1 - mp.mpf(kc) ** 2, 1 - mp.mpf(p)
        third = mp.ellippi(n, m) if n else mp.ellipe(m) / (1 - m)
        expected = m / n * mp.ellipk(m) + (1 - m / n) * third if n else mp.ellipe(m)
        assert abs(cel(kc, p, 1.0, kc**2) / expected - 1) < 2e-15


@pytest.mark.parametrize(
    ("r", "a", "h"),
    [
        (0.0, 1e3, 0.0),  # on the disc, at its centre
        (500.0, 1e3, 0.0),  # on the disc
        (1e3, 1e3, 0.0),  # on its rim
        (1e3, 1e3, 250.0),  # above its rim
        (1e3 + 1e-6, 1e3, 1e-6),  # a hair off its rim
        (7e3, 1e3, 3e3),  # outside
        (2e4, 1e3, 10.0),  # far: the series
    ],
)
def test_disc_potential_at_special_points(r, a, h):
    assert_allclose(
        disc_potential(r, a, h), disc_by_quadrature(r, a, h), rtol=3e-15 * max(1.0, (r**2 + h**2) / a**2), atol=0
    )  # terms of the distance's size cancel


def test_disc_potential_is_continuous_where_the_series_takes_over():
    a, angle = 100.0, np.linspace(0.0, np.pi / 2, 9)
    near, far = (disc_potential(x * a * np.sin(angle), a, x * a * np.cos(angle)) for x in (11.999999, 12.000001))
    assert_allclose(near, far, rtol=3e-7)  # 2e-7 is the true change between the two distances
    assert_allclose(far[0], 2 * np.pi * a * a / (np.hypot(12.000001 * a, a) + 12.000001 * a), rtol=1e-14)


def test_a_disc_of_no_size_attracts_nothing_even_where_it_lies():
    assert disc_potential(0.0, 0.0, 0.0) == pytest.approx(0.0, abs=1e-25)
    assert disc_potential(5.0, 0.0, 2.0) == 0.0


def test_random_cylinders_agree_with_carlson_and_with_quadrature():
    rng = np.random.default_rng(3)
    radius, top = 10 ** rng.uniform(2, 4.5, 1000), 10 ** rng.uniform(0, 4, 1000)
    bottom, offset = top + 10 ** rng.uniform(1, 4, 1000), 10 ** rng.uniform(1, 4.3, 1000)
    ours = G * (disc_potential(offset, radius, top) - disc_potential(offset, radius, bottom))
    theirs = np.array([exact.cylinder_off_axis(1.0, *c) for c in zip(radius, top, bottom, offset, strict=True)])
    scale = G * disc_potential(offset, radius, top)  # what rounding acts on, before the two ends are subtracted
    assert np.max(np.abs(ours - theirs) / scale) < 1e-11
    for i in range(0, 1000, 250):
        by_quad = G * (
            disc_by_quadrature(offset[i], radius[i], top[i]) - disc_by_quadrature(offset[i], radius[i], bottom[i])
        )
        assert_allclose(ours[i], by_quad, rtol=1e-11)


def test_infinite_radius_is_the_slab():
    table = ring_table([0.0, 3e3], [0.0, 1e10], [500.0, 2500.0])
    assert_allclose(table.anomaly([[-250.0]]), exact.slab(-250.0, 2000.0), rtol=3e-7)  # the slab lacks depth / radius
    axis = ring_table([0.0], [0.0, 1e7], [0.0, 1e3]).anomaly([[100.0]])
    assert_allclose(axis, exact.cylinder_axis(100.0, 1e7, 0.0, 1e3), rtol=1e-10)


def test_stations_at_every_edge_and_level():
    """Stations on ring edges, and at the heights of layer edges, above, between and below the layers."""
    edges, depths = [0.0, 1e3, 2.5e3], [0.0, 400.0, 1e3]
    contrast = np.array([[10.0, -20.0], [30.0, 40.0]])
    for height in (0.0, -400.0, -700.0):
        got = ring_table(edges, edges, depths, height_m=height).anomaly(contrast)
        for r, value in zip(edges, got, strict=True):
            discs = np.array([[disc_by_quadrature(r, a, abs(z + height)) if a else 0.0 for a in edges] for z in depths])
            assert value == pytest.approx(-G * np.sum(np.diff(np.diff(discs, axis=0), axis=1) * contrast), abs=1e-14)


def test_annuli_add_up_to_the_cylinder():
    rng = np.random.default_rng(4)
    edges, depths = graded_edges(rng, 40, 12e3), graded_edges(rng, 25, 6e3)
    stations = np.concatenate([[0.0], edges[5:30:7], rng.uniform(0, 30e3, 6)])
    parts = ring_table(stations, edges, depths).anomaly(np.full((25, 40), -130.0))
    whole = ring_table(stations, edges[[0, -1]], depths[[0, -1]]).anomaly([[-130.0]])
    assert_allclose(parts, whole, rtol=1e-13)


def test_eroded_is_uneroded_less_the_slab_removed():
    """Strip the top layers and lower the stations: the same as subtracting those layers' own attraction."""
    rng = np.random.default_rng(5)
    edges, depths = graded_edges(rng, 15, 20e3), graded_edges(rng, 10, 5e3)
    contrast, stations = rng.normal(0, 200, (10, 15)), np.linspace(0, 25e3, 11)
    removed = np.where(np.arange(10)[:, None] < 3, contrast, 0.0)
    new_ground = ring_table(stations, edges, depths, height_m=-depths[3])
    eroded = ring_table(stations, edges, depths[3:] - depths[3]).anomaly(contrast[3:])
    assert_allclose(
        new_ground.anomaly(contrast) - new_ground.anomaly(removed), eroded, atol=1e-12 * np.abs(eroded).max()
    )


def test_an_eroded_paraboloid_is_a_smaller_paraboloid():
    """Why a bowl alone cannot tell erosion from size: stripping e leaves radius a√(1 − e/h) and depth h − e."""

    def bowl(radius, depth, layers):
        rings = np.concatenate([np.linspace(0.0, 8e3, 60), [9e3, 10e3, 11e3]])
        outline = lambda z: radius * np.sqrt(np.maximum(1 - z / depth, 0.0))  # noqa: E731 - one formula, used once
        return revolution_section(outline, layers, rings, contrast=lambda z: np.full_like(z, -200.0))

    layers, stations = np.linspace(0.0, 2e3, 41), np.linspace(0.0, 15e3, 9)
    large = bowl(1e4, 2e3, layers).isel(depth=slice(15, None), depth_edges=slice(15, None))
    eroded = ring_anomaly(large, stations, height_m=-layers[15])
    small = ring_anomaly(
        bowl(1e4 * np.sqrt(1 - layers[15] / 2e3), 2e3 - layers[15], layers[15:] - layers[15]), stations
    )
    assert_allclose(eroded, small, rtol=1e-10)


def test_attraction_scales_with_size():
    rng = np.random.default_rng(6)
    edges, depths, stations = graded_edges(rng, 9, 8e3), graded_edges(rng, 7, 3e3), np.linspace(0, 2e4, 8)
    contrast = rng.normal(0, 100, (7, 9))
    small = ring_table(stations, edges, depths, height_m=3.0).anomaly(contrast)
    large = ring_table(7.3 * stations, 7.3 * edges, 7.3 * depths, height_m=21.9).anomaly(contrast)
    assert_allclose(large, 7.3 * small, atol=1e-12 * np.abs(large).max())


def test_far_away_is_the_point_mass_with_all_its_digits():
    """At 1000 radii the closed form alone would be off in the fifth digit."""
    edges, depths, r = [0.0, 300.0, 1e3], [100.0, 900.0], 1e6
    got = ring_table([r], edges, depths).anomaly([[50.0, 20.0]])[0]
    mass = np.pi * 800.0 * (50.0 * 300.0**2 + 20.0 * (1e3**2 - 300.0**2))
    assert got == pytest.approx(G * mass * 500.0 / r**3, rel=3e-6)  # 1e-6 is the body's own size


def test_excess_mass_pulls_down_and_flux_gives_the_mass():
    edges, depths = np.array([0.0, 2e3, 5e3]), np.array([300.0, 1e3, 4e3])
    contrast = np.array([[100.0, 20.0], [5.0, 60.0]])
    nodes, weights = np.polynomial.legendre.leggauss(240)
    t, w = 0.25 * np.pi * (nodes + 1), 0.25 * np.pi * weights  # r = L tan t brings infinity in
    r = 4e3 * np.tan(t)
    g = ring_table(r, edges, depths).anomaly(contrast)
    assert (g > 0).all()
    flux = np.sum(w * g * 2 * np.pi * r * 4e3 / np.cos(t) ** 2)
    mass = np.diff(depths) @ contrast @ (np.pi * np.diff(edges**2))
    assert flux == pytest.approx(2 * np.pi * G * mass, rel=1e-6)


def test_many_models_are_the_models_one_by_one():
    rng = np.random.default_rng(7)
    table = ring_table(np.linspace(0, 2e4, 12), graded_edges(rng, 8, 1e4), graded_edges(rng, 6, 4e3))
    models = rng.normal(0, 100, (5, 6, 8))
    assert_allclose(table.anomaly(models), [table.anomaly(m) for m in models], rtol=1e-12, atol=1e-14)
    assert table.anomaly(models).shape == (5, 12)


def test_equal_content_finds_the_cached_table_and_cannot_change_it():
    first = ring_table([1e3, 2e3], np.array([0.0, 5e3]), [0.0, 1e3])
    assert ring_table(np.array([1e3, 2e3]), [0, 5000], (0.0, 1e3)) is first
    assert ring_table([1e3, 2e3], [0.0, 5e3], [0.0, 1e3], height_m=1.0) is not first
    with pytest.raises(ValueError, match="read-only"):
        first.kernel[0, 0, 0] = 1.0


def test_the_anomaly_says_what_it_is():
    section = section_of([[-100.0, -50.0]], [0.0, 2e3], [0.0, 1e4, 1.2e4])
    swapped = section.transpose("radius", "depth", ...)
    for earth in ("flat", "sphere"):
        profile = ring_anomaly(section, [0.0, 5e3], height_m=2.0, earth=earth)
        assert profile.dims == ("radius",)
        assert profile.attrs["units"] == "mGal"
        assert profile.attrs["long_name"]
        facts = read_provenance(profile)
        assert (facts["engine"], facts["earth"], facts["height_m"]) == ("rings", earth, 2.0)
        assert facts["G"] == GRAVITATIONAL_CONSTANT
        assert_allclose(ring_anomaly(swapped, [0.0, 5e3], height_m=2.0, earth=earth), profile, rtol=0)


GOOD = section_of([[-100.0]], [0.0, 2e3], [0.0, 1e4])


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: ring_anomaly(GOOD.drop_vars("radius_edges"), [0.0]), "radius_edges"),
        (lambda: ring_anomaly(GOOD.drop_vars("density_contrast"), [0.0]), "density_contrast"),
        (lambda: ring_anomaly(GOOD * np.nan, [0.0]), "1 cells not finite"),
        (lambda: ring_anomaly(GOOD, [-1.0]), "negative"),
        (lambda: ring_anomaly(GOOD, [np.nan]), "finite"),
        (lambda: ring_anomaly(GOOD, []), "empty"),
        (lambda: ring_anomaly(GOOD, [0.0], height_m=np.inf), "height_m"),
        (lambda: ring_anomaly(GOOD, [0.0], earth="cube"), "flat or sphere"),
        (lambda: ring_anomaly(GOOD, [3e7], earth="sphere"), "antipode"),
        (
            lambda: ring_anomaly(GOOD.assign_coords(depth_edges=[0.0, 7e6]), [0.0], earth="sphere"),
            "centre of the Earth",
        ),
        (lambda: ring_anomaly(GOOD.assign_coords(radius_edges=[-1.0, 1e4]), [0.0]), "negative"),
        (lambda: ring_anomaly(GOOD.assign_coords(depth_edges=[2e3, 0.0]), [0.0]), "ascending"),
        (lambda: ring_anomaly(section_of([[1.0]], [0.0, 1.0], [0.0, 1.0]).isel(depth=[0, 0]), [0.0]), "must fit"),
        (lambda: ring_table([0.0], [0.0, 1.0], [0.0, 1.0]).anomaly([1.0]), "must end in"),
        (lambda: ring_table([0.0], [0.0, 1.0], [0.0, 1.0]).anomaly([[np.nan]]), "finite"),
    ],
)
def test_bad_input_is_refused_in_one_line(call, words):
    with pytest.raises(InputError, match=words) as caught:
        call()
    assert "\n" not in str(caught.value)
