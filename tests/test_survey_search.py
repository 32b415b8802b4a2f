"""Charge for searching, ranking of single places, distance to rivals: against brute force and simulation."""

import dataclasses

import numpy as np
import pytest
from scipy import fft, stats
from test_survey_sight import CURVES, MODEL, NOISE, RADIUS, dense_gram, scattered

from gravbasin.observed import NoiseModel
from gravbasin.survey.greedy import next_best
from gravbasin.survey.merit import Stakes, nearest_rival, robust_gram, worth
from gravbasin.survey.search import global_false_alarm, search_charge
from gravbasin.survey.sight import Plane, Stations, station_sight

SCATTER = np.array([[1.5e4], [-2e4], [1e4]])


def stakes(rivals=2, scatter=SCATTER, seed=5):
    rng = np.random.default_rng(seed)
    bodies = MODEL[:, None] * rng.uniform(0.5, 1.5, 7) + rng.normal(0.0, 2e4, (3, 7))
    names = ("plug", "dome")[:rivals]
    return Stakes(
        curves=CURVES,
        model=MODEL,
        draws=MODEL[:, None] * np.array([0.8, 1.0, 1.2]),
        scatter=scatter,
        impacts=MODEL[:, None] * rng.uniform(0.4, 1.6, 50),
        erosion=rng.uniform(0.0, 3.0, 50),
        rivals={name: bodies[:, i::2] for i, name in enumerate(names)},
        stretch={name: np.tile([[0.5], [2.0]], (1, bodies[:, i::2].shape[1])) for i, name in enumerate(names)},
        deviates=rng.standard_normal((3, 200)),
    )


@pytest.mark.parametrize("existing", [4, 30])
@pytest.mark.parametrize("tell_apart", [False, True])
def test_ranking_is_exactly_what_dense_matrices_give(existing, tell_apart):
    """Gain of the first choice, and that no other candidate gains more, by inverting everything anew."""
    first, candidates = scattered(existing, seed=1), scattered(25, seed=2, error=0.2)
    goal = stakes()
    found = next_best(first, candidates, goal, NOISE, count=6, tell_apart=tell_apart)
    assert len(set(found.chosen.tolist())) == 6

    def gram(extra):
        error = np.concatenate([first.error, candidates.error[extra]])
        joined = Stations(np.concatenate([first.place, candidates.place[extra]]), error)
        return dense_gram(joined, NOISE, SCATTER)

    aim = MODEL
    if tell_apart:
        size, vectors = np.linalg.eigh(gram([]))
        root = (vectors * np.sqrt(np.maximum(size, 0))).T
        aim = MODEL - min((nearest_rival(root, MODEL, goal, name) for name in goal.rivals), key=lambda p: p[0])[1]
    value = np.array([aim @ gram([c]) @ aim for c in range(25)])
    before = aim @ gram([]) @ aim
    assert found.chosen[0] == np.argmax(value)
    np.testing.assert_allclose(found.gain[0], value.max() - before, rtol=3e-3)
    for number in range(1, 6):
        taken = found.chosen[:number].tolist()
        value = np.array([-1.0 if c in taken else aim @ gram([*taken, c]) @ aim for c in range(25)])
        np.testing.assert_allclose(found.gain[number], value.max() - aim @ gram(taken) @ aim, rtol=3e-3, atol=1e-4)
        np.testing.assert_allclose(value[found.chosen[number]], value.max(), rtol=1e-4)


def test_ranking_reports_the_signal_to_noise_of_the_stations_chosen():
    first, candidates, goal = scattered(12, seed=1), scattered(40, seed=2), stakes(rivals=0)
    found = next_best(first, candidates, goal, NOISE, count=5)
    joined = Stations(
        np.concatenate([first.place, candidates.place[found.chosen]]),
        np.concatenate([first.error, candidates.error[found.chosen]]),
    )
    gram = station_sight(joined, CURVES, [NOISE]).gram[0]
    expected = np.sqrt(MODEL @ robust_gram(gram, SCATTER) @ MODEL)
    np.testing.assert_allclose(found.snr[-1], expected, rtol=1e-3)
    np.testing.assert_allclose(np.diff(found.snr**2), found.gain, rtol=1e-6)
    assert np.isnan(found.rival_distance).all()


def test_ranking_starts_from_nothing_and_ends_with_the_candidates():
    none = Stations(np.zeros((0, 2)), np.zeros(0))
    candidates = scattered(9, seed=2)
    found = next_best(none, candidates, stakes(), NOISE, count=50)
    assert sorted(found.chosen.tolist()) == list(range(9))
    assert found.snr[0] == 0.0
    full = robust_gram(station_sight(candidates, CURVES, [NOISE]).gram[0], SCATTER)
    np.testing.assert_allclose(np.sum(found.gain), MODEL @ full @ MODEL, rtol=1e-2)


def test_nearest_rival_is_the_nearest_within_its_stretch():
    """Against a fine scan of every body's multiples."""
    goal = stakes()
    root = np.linalg.cholesky(dense_gram(scattered(40), NOISE)).T
    for name, bank in goal.rivals.items():
        distance, rival = nearest_rival(root, MODEL, goal, name)
        scan = [np.linalg.norm(root @ (MODEL - a * body)) for body in bank.T for a in np.linspace(0.5, 2.0, 3001)]
        np.testing.assert_allclose(distance, min(scan), rtol=1e-4)
        np.testing.assert_allclose(np.linalg.norm(root @ (MODEL - rival)), distance, rtol=1e-8)


def test_expected_odds_of_two_known_shapes_follow_their_distance():
    """One impact against one rival: the log-likelihood ratio has mean d²/2 and variance d² (its error: 4.5 s.e.)."""
    sight = station_sight(scattered(40), CURVES, [NOISE])
    gram, count, d2 = sight.gram[0], 4000, 4.0
    model, aside = 20.0 * MODEL, np.array([3e4, -1e4, 2e4])
    rival = model - aside * np.sqrt(d2 / (aside @ gram @ aside))
    assert model @ gram @ model > d2 + 40  # so the best other explanation is the rival, not noise
    goal = dataclasses.replace(
        stakes(scatter=np.zeros((3, 0))),
        model=model,
        draws=np.zeros((3, 0)),
        impacts=model[:, None],
        erosion=np.ones(1),
        rivals={"plug": rival[:, None]},
        stretch={"plug": np.ones((2, 1))},
        deviates=np.random.default_rng(4).standard_normal((3, count)),
    )
    merit = worth(sight, goal)
    np.testing.assert_allclose(merit.rival_distance, [np.sqrt(d2)], rtol=1e-6)
    assert abs(merit.log_odds.mean() - 0.5 * d2) < 4.5 * np.sqrt(d2 / count)
    assert abs(merit.log_odds.var() / d2 - 1.0) < 4.5 * np.sqrt(2.0 / count)
    assert merit.best_rival == "plug"


def test_an_unseen_structure_leaves_the_erosion_as_wide_as_its_prior():
    goal = stakes()
    blind = Stations(scattered(40).place, np.full(40, 1e6))
    told = worth(station_sight(blind, CURVES, [NOISE]), goal)
    order = np.sort(goal.erosion)
    assert told.erosion_width.min() > 0.9 * (order[47] - order[2])
    assert told.effective > 45


def test_false_alarms_of_a_search_by_simulation():
    """2,000 periodic fields, searched everywhere: the expected Euler characteristic holds the rate (3.5 s.e.) and is
    within a factor of two of it."""
    step, count, k_filter = 2e3, 64, 2.2e-4
    rng = np.random.default_rng(3)
    k = 2 * np.pi * np.hypot(fft.fftfreq(count, step)[:, None], fft.fftfreq(count, step))
    gain = k * np.exp(-((k / k_filter) ** 2))
    gain /= np.sqrt(np.mean(gain**2))
    white = rng.standard_normal((2000, count, count))
    output = fft.ifft2(fft.fft2(white) * gain).real
    assert abs(output.std() - 1.0) < 0.01
    per_metre = np.sqrt(0.5 * np.sum(gain**2 * k**2) / np.sum(gain**2))
    side = count * step * per_metre
    threshold = 4.0
    rate = np.mean(output.max(axis=(1, 2)) > threshold)
    expected = side**2 * threshold * np.exp(-0.5 * threshold**2) / (2 * np.pi) ** 1.5  # a torus has no edge terms
    error = np.sqrt(expected / 2000)
    assert rate < expected + 3.5 * error
    assert rate > 0.5 * expected
    assert global_false_alarm(threshold, side, 0.0) > expected


def test_charge_grows_with_area_and_sizes_and_vanishes_without_them():
    plane = Plane.of(RADIUS).through(CURVES)
    common = {"spacing": 3e3, "error": 0.3, "false_alarm_probability": 1e-3}

    def charge(area, sizes):
        return search_charge(plane, CURVES, NOISE, MODEL, SCATTER, area=area, diameter_range=sizes, **common)

    tiny, small, wide, sized = charge(1.0, 0.0), charge(1e9, 0.0), charge(1e10, 0.0), charge(1e10, 1.0)
    assert abs(tiny.threshold - stats.norm.isf(1e-3)) < 1e-3
    assert tiny.threshold < small.threshold < wide.threshold < sized.threshold < 7.0
    assert sized.trials == pytest.approx(1e-3 / stats.norm.sf(sized.threshold))
    assert 0.3 < sized.position_km < 15.0


def test_position_scale_of_the_charge_against_shifted_templates():
    """1/√λ from the spectrum against correlations of whitened templates of neighbouring centres on a dense grid."""
    noise = NoiseModel(sill_mgal=3.0, range_m=15e3, smoothness=1.0, regional_order=0)
    plane, spacing, error = Plane.of(RADIUS).through(CURVES), 3e3, 0.5
    found = search_charge(
        plane,
        CURVES,
        noise,
        MODEL,
        np.zeros((3, 0)),
        spacing=spacing,
        error=error,
        area=1e9,
        diameter_range=0.0,
        false_alarm_probability=1e-3,
    )
    axis = np.arange(-42e3, 43e3, spacing)
    place = np.stack([a.ravel() for a in np.meshgrid(axis, axis)], axis=1)
    away = np.hypot(*(place[:, None] - place[None]).transpose(2, 0, 1))
    root = np.linalg.cholesky(noise.covariance(away) + error**2 * np.eye(len(place)))
    shift = 400.0
    distances = [np.hypot(place[:, 0] - x, place[:, 1]) for x in (-shift / 2, shift / 2)]
    pair = np.stack([CURVES.at(distance) @ MODEL for distance in distances], axis=1)
    white = np.linalg.solve(root, pair)
    correlation = white[:, 0] @ white[:, 1] / np.linalg.norm(white[:, 0]) / np.linalg.norm(white[:, 1])
    scale = shift / np.sqrt(2.0 * (1.0 - correlation))
    assert found.position_km == pytest.approx(scale / 1e3, rel=0.1)
