"""The chance test: calibrated on random fields, fair in its choice of centres."""

import numpy as np
import pytest
from scipy import stats

from gravbasin.inference.chance import Stencil, chance_of, complete_nodes, random_ring_means
from gravbasin.inference.level import Level, Roughness
from gravbasin.inference.odds import log_odds
from gravbasin.observed import NoiseModel, ring_means, simulate_noise

NOISE = NoiseModel(sill_mgal=6.0, range_m=30e3, smoothness=0.8, nugget_mgal=0.5)
STEP = (4000.0, 4500.0)  # northing, easting: not square
EASTING, NORTHING = 3e5 + STEP[1] * np.arange(70), 1e5 + STEP[0] * np.arange(60)
EDGES = 4500.0 * np.arange(11.0)
RADIUS = np.linspace(0, 60e3, 121)
PROFILE = -8.0 * np.exp(-((RADIUS / 14e3) ** 4))
AMPLITUDES = np.linspace(0.3, 3.0, 40)


@pytest.fixture(scope="module")
def stencil():
    return Stencil.build(EDGES, STEP, NOISE, radius=RADIUS)


@pytest.fixture(scope="module")
def field():
    return simulate_noise(NOISE, EASTING, NORTHING, seed=4)


def _odds(stencil, data):
    templates = np.outer(stencil.response @ PROFILE, AMPLITUDES)
    return log_odds(stencil.likelihood, templates, data, Level())


def test_ring_means_about_nodes_match_those_of_the_map(stencil, field):
    rows, columns = np.array([20, 31]), np.array([25, 40])
    centres = [(EASTING[c], NORTHING[r]) for r, c in zip(rows, columns, strict=True)]
    expected = np.column_stack([ring_means(field, centre, EDGES).mean for centre in centres])
    np.testing.assert_allclose(stencil.ring_means(field.values, rows, columns), expected, atol=1e-12)


def test_covariance_matches_random_fields(stencil):
    """2,000 fields: each variance within 4 standard errors, sqrt(2/2000) of itself."""
    data = random_ring_means(stencil, STEP, NOISE, np.ones(2000), seed=3)
    np.testing.assert_allclose(data.var(axis=1), np.diag(stencil.covariance), rtol=4 * np.sqrt(2 / 2000))


def test_random_fields_carry_their_local_level(stencil):
    level = Level(1.5, 6.0)
    variance, _ = Roughness(level.scale, level.dof).draw(np.random.default_rng(5), 1500)
    data = random_ring_means(stencil, STEP, NOISE, variance, seed=5)
    ratio = np.sum(stencil.likelihood.whiten(data) ** 2, axis=0) / stencil.likelihood.dof / level.scale
    assert stats.kstest(ratio, stats.f(stencil.likelihood.dof, level.dof).cdf).pvalue > 1e-3


def test_an_implanted_structure_beats_chance_and_bare_noise_does_not(stencil, field):
    row, column = 28, 36
    distance = np.hypot(EASTING - EASTING[column], NORTHING[:, None] - NORTHING[row])
    planted = field + np.interp(distance, RADIUS, 2.0 * PROFILE)
    p = {}
    for name, grid in (("bare", field), ("planted", planted)):
        rows, columns = complete_nodes(grid, stencil.shape)
        found = _odds(stencil, stencil.ring_means(grid.values, rows, columns))
        here = found[(rows == row) & (columns == column)][0]
        away = np.hypot(EASTING[columns] - EASTING[column], NORTHING[rows] - NORTHING[row]) > 28e3
        chance = chance_of(here, found[away], centres=800, independent=9.0, seed=1, fields=np.zeros)
        assert chance.source == "map"
        p[name] = chance.p_value
    assert p["planted"] < 0.02
    assert p["bare"] > 0.05


def test_false_alarms_are_nominal_on_random_fields(stencil):
    """The rank p-value of noise against noise is uniform: 600 places against 600, Kolmogorov-Smirnov at 0.1 %."""
    variance, _ = Roughness().draw(np.random.default_rng(8), 1200)
    data = random_ring_means(stencil, STEP, NOISE, variance, seed=8)
    found = _odds(stencil, data)
    tried, null = found[:600], found[600:]
    p = [chance_of(t, null, centres=600, independent=600, seed=1, fields=np.zeros).p_value for t in tried]
    assert stats.kstest(p, "uniform").pvalue > 1e-3


def test_centres_keep_off_gaps_and_edges(stencil, field):
    holed = field.copy()
    holed[10, 15] = np.nan
    rows, columns = complete_nodes(holed, stencil.shape)
    half = stencil.half
    assert not ((np.abs(rows - 10) <= half[0]) & (np.abs(columns - 15) <= half[1])).any()
    assert rows.min() >= half[0]
    assert columns.max() < EASTING.size - half[1]
    assert np.isfinite(stencil.ring_means(holed.values, rows, columns)).all()
    assert complete_nodes(field[:10, :12], stencil.shape)[0].size == 0


def test_small_maps_fall_back_on_random_fields():
    chance = chance_of(50.0, np.zeros(20), centres=300, independent=2.0, seed=2, fields=np.zeros)
    assert (chance.source, chance.centres) == ("random fields", 300)
    assert chance.p_value == pytest.approx(1 / 301)


def test_the_error_counts_independent_places_only():
    null = np.linspace(-3, 3, 1000)
    few = chance_of(1.5, null, centres=1000, independent=8.0, seed=1, fields=np.zeros)
    many = chance_of(1.5, null, centres=1000, independent=1e6, seed=1, fields=np.zeros)
    assert few.p_value == many.p_value
    assert few.standard_error > 5 * many.standard_error
