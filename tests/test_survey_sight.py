"""What stations tell: closed forms, dense matrices, Monte Carlo, and the ceiling no survey beats."""

import numpy as np
import pytest
from scipy import stats

from gravbasin.errors import CannotFinish
from gravbasin.inference.detect import detection_probability
from gravbasin.observed import NoiseModel, polynomial_basis
from gravbasin.survey.merit import filter_of, robust_gram, scatter_root, signal_to_noise
from gravbasin.survey.sight import Plane, Stations, disc_weights, profile_curves, ring_sight, spline_at, station_sight

RADIUS = np.concatenate([np.linspace(0.0, 30e3, 61), np.geomspace(30e3, 160e3, 25)[1:]])
WIDTHS = np.array([6e3, 9e3, 13e3])
BELLS = np.exp(-((RADIUS[:, None] / WIDTHS) ** 2)) * np.array([-8.0, -6.0, -3.0])
CURVES = profile_curves(RADIUS, BELLS, tolerance_mgal=1e-9)
MODEL = CURVES.coefficients(BELLS[:, 0])
NOISE = NoiseModel(sill_mgal=4.0, range_m=25e3, smoothness=0.8, nugget_mgal=0.1, regional_order=1)
ALMOST_WHITE = NoiseModel(sill_mgal=1e-5, range_m=1.0, smoothness=0.5, regional_order=0)


def scattered(count, seed=3, error=0.3):
    rng = np.random.default_rng(seed)
    return Stations(rng.uniform([-45e3, -30e3], [50e3, 38e3], (count, 2)), np.full(count, error))


def template(stations, coefficients=MODEL):
    return CURVES.at(stations.distance) @ coefficients


def dense_gram(stations, noise, scatter=None):
    """R'MR with explicit inverses, nothing shared with the code under test but the covariance function."""
    place = stations.place
    away = np.hypot(*(place[:, None] - place[None]).transpose(2, 0, 1))
    c = noise.covariance(away) + np.diag(noise.nugget_mgal**2 + stations.error**2)
    r = CURVES.at(stations.distance)
    if scatter is not None:
        c = c + r @ scatter @ scatter.T @ r.T
    x = polynomial_basis(place[:, 0], place[:, 1], noise.regional_order)
    inverse = np.linalg.inv(c)
    m = inverse - inverse @ x @ np.linalg.inv(x.T @ inverse @ x) @ x.T @ inverse
    return r.T @ m @ r


def test_curves_give_every_profile_and_an_orthonormal_frame():
    assert CURVES.error_mgal < 1e-9
    np.testing.assert_allclose(CURVES.shapes @ CURVES.coefficients(BELLS), BELLS, atol=1e-9)
    product = CURVES.shapes.T @ (disc_weights(RADIUS)[:, None] * CURVES.shapes)
    np.testing.assert_allclose(product, np.eye(len(product)), atol=1e-9)
    fewer = profile_curves(RADIUS, BELLS, tolerance_mgal=0.5)
    assert fewer.shapes.shape[1] < 3
    assert fewer.error_mgal < 0.5


def test_curves_at_stations_are_smooth_and_end():
    distance = np.array([0.0, 3.3e3, 12.7e3, 161e3])
    expected = np.append(np.exp(-((distance[:3] / 6e3) ** 2)) * -8.0, 0.0)
    np.testing.assert_allclose(spline_at(RADIUS, BELLS, distance)[:, 0], expected, atol=2e-3)


def test_in_white_noise_signal_to_noise_grows_as_the_root_of_the_station_count():
    once = scattered(25)
    t = template(once)
    found = []
    for copies in (1, 4, 16):
        many = Stations(np.tile(once.place, (copies, 1)), np.tile(once.error, copies))
        sight = station_sight(many, CURVES, [ALMOST_WHITE])
        found.append(signal_to_noise(sight, np.zeros((3, 0)), MODEL[:, None])[0, 0])
    np.testing.assert_allclose(found[0], np.sqrt(np.sum((t - t.mean()) ** 2)) / 0.3, rtol=1e-6)
    np.testing.assert_allclose([found[1] / found[0], found[2] / found[0]], [2.0, 4.0], rtol=1e-6)


def test_one_station_tells_nothing_and_two_tell_their_difference():
    noise = NoiseModel(sill_mgal=3.0, range_m=20e3, smoothness=0.5, nugget_mgal=0.2, regional_order=0)
    one = Stations(np.array([[2e3, 1e3]]), np.array([0.3]))
    assert not station_sight(one, CURVES, [noise]).gram.any()
    two = Stations(np.array([[2e3, 1e3], [-1e3, 9e3]]), np.array([0.3, 0.1]))
    apart = np.hypot(3e3, 8e3)
    variance = 2 * 9.0 * (1 - np.exp(-apart / 20e3)) + 2 * 0.04 + 0.09 + 0.01  # exponential: smoothness one half
    gram = station_sight(two, CURVES, [noise]).gram[0]
    difference = np.diff(template(two))[0]
    np.testing.assert_allclose(MODEL @ gram @ MODEL, difference**2 / variance, rtol=1e-6)


def test_under_infinite_correlation_only_differences_of_shape_help():
    """Noise that is one unknown constant is all regional: how strong it is no longer matters."""
    stations = scattered(30)
    t = template(stations)
    expected = np.sum((t - t.mean()) ** 2) / 0.3**2
    for sill in (1.0, 30.0):
        noise = NoiseModel(sill_mgal=sill, range_m=1e15, smoothness=0.5, regional_order=0)
        gram = station_sight(stations, CURVES, [noise]).gram[0]
        np.testing.assert_allclose(MODEL @ gram @ MODEL, expected, rtol=1e-5)


@pytest.mark.parametrize(("order", "power"), [(0, 0), (1, 0), (2, 2)])
def test_a_template_within_the_regional_is_never_seen(order, power):
    profile = (RADIUS / 50e3) ** power
    curves = profile_curves(RADIUS, np.column_stack([profile, BELLS[:, 0]]), tolerance_mgal=1e-9)
    noise = NoiseModel(sill_mgal=4.0, range_m=25e3, smoothness=0.8, regional_order=order)
    gram = station_sight(scattered(40), curves, [noise]).gram[0]
    hidden, bell = curves.coefficients(profile), curves.coefficients(BELLS[:, 0])
    assert hidden @ gram @ hidden < 1e-6 * (bell @ gram @ bell)


@pytest.mark.parametrize("order", [0, 1, 2])
def test_gram_equals_a_dense_matrix_computation(order):
    noise = NoiseModel(sill_mgal=4.0, range_m=25e3, smoothness=0.8, nugget_mgal=0.1, regional_order=order)
    stations = scattered(60)
    np.testing.assert_allclose(
        station_sight(stations, CURVES, [noise]).gram[0], dense_gram(stations, noise), rtol=1e-4, atol=1e-12
    )


def test_scatter_of_shape_counts_as_noise_exactly():
    stations = scattered(60)
    scatter = np.random.default_rng(1).standard_normal((3, 2)) * 4e3
    gram = station_sight(stations, CURVES, [NOISE]).gram[0]
    np.testing.assert_allclose(robust_gram(gram, scatter), dense_gram(stations, NOISE, scatter), rtol=2e-4)


def test_scatter_of_amplitude_alone_hides_nothing():
    templates = MODEL[:, None] * np.array([1.0, 0.4, 1.7])
    assert scatter_root(templates, np.ones(3)).shape[1] == 0 or np.abs(scatter_root(templates, np.ones(3))).max() < 1e-6


def test_more_stations_never_tell_less():
    stations = scattered(80)
    half = Stations(stations.place[:40], stations.error[:40])
    gain = np.subtract(*(station_sight(s, CURVES, [NOISE]).gram[0] for s in (stations, half)))
    assert np.linalg.eigvalsh(gain).min() > -1e-9 * np.linalg.eigvalsh(gain).max()


@pytest.mark.parametrize("smoothness", [0.5, 1.0, 1.6])
def test_no_survey_beats_the_ceiling_and_dense_ones_come_near(smoothness):
    noise = NoiseModel(sill_mgal=4.0, range_m=25e3, smoothness=smoothness, regional_order=0)
    ceiling = Plane.of(RADIUS).through(CURVES).gram([noise]).gram[0]
    axis = np.arange(-52.5e3, 53e3, 3.5e3)
    grid = np.stack([a.ravel() for a in np.meshgrid(axis, axis)], axis=1)
    told = station_sight(Stations(grid, np.full(len(grid), 0.01)), CURVES, [noise]).gram[0]
    assert np.linalg.eigvalsh(ceiling - told).min() > -1e-4 * np.linalg.eigvalsh(ceiling).max()
    share = (MODEL @ told @ MODEL) / (MODEL @ ceiling @ MODEL)
    assert 0.6 < share < 1.0


def test_endless_even_survey_agrees_with_a_wide_dense_one():
    """Stations with errors on a grid far wider than the anomaly: the spectrum's G, to the grid's aliasing."""
    spacing, error = 5e3, 1.0
    noise = NoiseModel(sill_mgal=2.0, range_m=12e3, smoothness=1.5, regional_order=0)
    axis = np.arange(-95e3, 96e3, spacing)
    grid = np.stack([a.ravel() for a in np.meshgrid(axis, axis)], axis=1)
    told = station_sight(Stations(grid, np.full(len(grid), error)), CURVES, [noise]).gram[0]
    endless = Plane.of(RADIUS).through(CURVES).gram([noise], spacing=spacing, error=error).gram[0]
    np.testing.assert_allclose(MODEL @ told @ MODEL, MODEL @ endless @ MODEL, rtol=0.03)


def test_detection_and_false_alarm_rates_by_simulation():
    """40,000 simulated surveys: both rates within 4.5 standard errors (chance of failing 1 in 70,000 each)."""
    rng = np.random.default_rng(8)
    stations, scatter = scattered(50), np.array([[1.5e4], [-2e4], [1e4]])
    place = stations.place
    away = np.hypot(*(place[:, None] - place[None]).transpose(2, 0, 1))
    c = NOISE.covariance(away) + np.diag(NOISE.nugget_mgal**2 + stations.error**2)
    x = polynomial_basis(place[:, 0], place[:, 1], 1)
    r = CURVES.at(stations.distance)
    robust = np.linalg.inv(c + r @ scatter @ scatter.T @ r.T)
    m = robust - robust @ x @ np.linalg.inv(x.T @ robust @ x) @ x.T @ robust
    w = m @ template(stations)
    noise = np.linalg.cholesky(c) @ rng.standard_normal((50, 40_000))
    regional = x @ rng.normal(0.0, 50.0, (3, 40_000))
    gram = station_sight(stations, CURVES, [NOISE]).gram[0]
    response, sigma = filter_of(gram, scatter, MODEL)
    np.testing.assert_allclose(sigma, np.sqrt(w @ c @ w), rtol=1e-4)
    snr = float(response @ MODEL) / sigma
    factor, pfa = 1.8 / snr, 0.02  # a fainter structure, so that the rate is neither 0 nor 1
    statistic = w @ (noise + regional) / sigma
    threshold = stats.norm.isf(pfa)
    for shift, expected in ((0.0, pfa), (factor, float(detection_probability(1.8, pfa)))):
        rate = np.mean(statistic + w @ template(stations) * shift / sigma > threshold)
        assert abs(rate - expected) < 4.5 * np.sqrt(expected * (1 - expected) / 40_000)


def test_rings_and_their_likelihood_agree():
    rng = np.random.default_rng(2)
    response = rng.random((12, RADIUS.size))
    a = rng.standard_normal((12, 20))
    covariance, regional = a @ a.T, np.ones((12, 1))
    inverse = np.linalg.inv(covariance)
    m = inverse - inverse @ regional @ regional.T @ inverse / (regional.T @ inverse @ regional)
    found = ring_sight(response, [covariance, 4.0 * covariance], regional).gram
    np.testing.assert_allclose(found[0], response.T @ m @ response, rtol=1e-8, atol=1e-9)
    np.testing.assert_allclose(found[1], found[0] / 4.0, rtol=1e-8, atol=1e-9)


def test_too_many_stations_and_a_singular_covariance_are_refused():
    with pytest.raises(CannotFinish, match="4001 stations are more than the 4000"):
        station_sight(Stations(np.zeros((4001, 2)), np.ones(4001)), CURVES, [NOISE])
    twice = Stations(np.zeros((5, 2)), np.zeros(5))
    with pytest.raises(CannotFinish, match="give them some error"):
        station_sight(twice, CURVES, [NoiseModel(sill_mgal=1.0, range_m=1e4, smoothness=0.5)])
