"""The chance test: calibrated on random fields, fair in its choice of centres."""

import numpy as np
import pytest
from scipy import stats

from gravbasin.inference.chance import Stencil, chance_test, local_statistic
from gravbasin.observed import NoiseModel, simulate_noise

NOISE = NoiseModel(sill_mgal=6.0, range_m=30e3, smoothness=0.8, nugget_mgal=0.5)
STEP = 4000.0
EASTING, NORTHING = 3e5 + STEP * np.arange(70), 1e5 + STEP * np.arange(60)
EDGES = STEP * np.arange(11.0)
RADIUS = np.linspace(0, 60e3, 121)
PROFILE = -8.0 * np.exp(-((RADIUS / 14e3) ** 4))


@pytest.fixture(scope="module")
def stencil():
    return Stencil.build(EDGES, (STEP, STEP), NOISE, radius=RADIUS, profiles=PROFILE[:, None], resolution=None)


@pytest.fixture(scope="module")
def field():
    return simulate_noise(NOISE, EASTING, NORTHING, seed=4)


def test_statistic_is_students_t_on_noise(stencil):
    """1,000 independent fields; Kolmogorov-Smirnov at 0.1 %."""
    half = STEP * np.arange(-(stencil.shape[1] // 2), stencil.shape[1] // 2 + 1.0)
    fields = simulate_noise(NOISE, half, half, seed=9, n=1000).values.reshape(1000, -1)
    t = local_statistic(stencil.likelihood, stencil.templates[:, 0], stencil.weights @ fields.T)
    assert stats.kstest(t, stats.t(stencil.likelihood.dof - 1).cdf).pvalue > 1e-3


def test_ring_means_about_nodes_match_those_of_the_map(stencil, field):
    from gravbasin.observed import ring_means

    rows, columns = np.array([20, 31]), np.array([25, 40])
    centres = [(EASTING[c], NORTHING[r]) for r, c in zip(rows, columns, strict=True)]
    expected = np.column_stack([ring_means(field, centre, EDGES).mean for centre in centres])
    np.testing.assert_allclose(stencil.ring_means(field.values, rows, columns), expected, atol=1e-12)


def test_an_implanted_structure_beats_chance_and_bare_noise_does_not(stencil, field):
    centre = (EASTING[36], NORTHING[28])
    distance = np.hypot(EASTING - centre[0], NORTHING[:, None] - centre[1])
    bare = stencil.ring_means(field.values, np.array([28]), np.array([36]))
    planted = field + np.interp(distance, RADIUS, 2.5 * PROFILE)
    seen = stencil.ring_means(planted.values, np.array([28]), np.array([36]))
    p = {}
    for name, data, grid in (("bare", bare, field), ("planted", seen, planted)):
        t = float(local_statistic(stencil.likelihood, stencil.templates[:, 0], data)[0])
        p[name] = chance_test(
            grid, stencil, t, centre=centre, exclude_radius=28e3, centres=800, noise=NOISE, seed=1
        ).p_value
    assert p["planted"] < 0.02
    assert p["bare"] > 0.05


def test_centres_keep_away_from_the_structure_and_from_gaps(stencil, field):
    from gravbasin.inference.chance import _other_centres

    holed = field.copy()
    holed[10, 15] = np.nan
    centre = (EASTING[36], NORTHING[28])
    rows, columns = _other_centres(holed, stencil, centre, 40e3)
    assert np.hypot(EASTING[columns] - centre[0], NORTHING[rows] - centre[1]).min() > 40e3
    half = stencil.half
    inside = (np.abs(rows - 10) <= half[0]) & (np.abs(columns - 15) <= half[1])
    assert not inside.any()
    assert rows.min() >= half[0]
    assert columns.max() < EASTING.size - half[1]


def test_small_maps_fall_back_on_random_fields(stencil, field):
    small = field[:24, :23]
    chance = chance_test(
        small, stencil, 50.0, centre=(EASTING[11], NORTHING[12]), exclude_radius=40e3, centres=300, noise=NOISE, seed=2
    )
    assert (chance.source, chance.centres) == ("random fields", 300)
    assert chance.p_value == pytest.approx(1 / 301)


def test_the_same_seed_gives_the_same_centres(stencil, field):
    arguments = {"centre": (EASTING[36], NORTHING[28]), "exclude_radius": 28e3, "centres": 250, "noise": NOISE}
    a = chance_test(field, stencil, 1.0, seed=3, **arguments)
    b = chance_test(field, stencil, 1.0, seed=3, **arguments)
    np.testing.assert_array_equal(a.null, b.null)
