"""Tempered posteriors against a closed form and against brute force."""

from typing import ClassVar

import numpy as np
import pytest
from scipy import stats

from gravbasin.crater.cells import Mesh
from gravbasin.crater.priors import Range
from gravbasin.forward.rings import ring_table
from gravbasin.inference.bank import build_bank
from gravbasin.inference.evidence import evidence
from gravbasin.inference.latent import LatentStream, main_parameters
from gravbasin.inference.level import Level
from gravbasin.inference.likelihood import ring_likelihood
from gravbasin.inference.refine import refined

N = 10
RADIUS = np.linspace(0.0, 30e3, N)
CELLS = Mesh(np.array([0.0, 1000.0]), np.array([0.0, 10e3, 20e3]))


class TwoDiscs:
    """Two rings of rock whose contrasts are standard normals times 100 kg/m³: a linear, Gaussian family."""

    name = "two discs"
    ranges: ClassVar = {"nothing": Range(0.0, 1.0)}
    extras = 2

    def mesh(self, ranges, /):
        return CELLS

    def draw(self, main, mesh, rng):
        first, second = 100.0 * rng.standard_normal(), 100.0 * rng.standard_normal()
        return np.array([[first, second]]), {"first": first, "second": second}


@pytest.fixture(scope="module")
def case():
    """Data far out in the prior's tail and precise: hardly a prior draw comes near."""
    columns = 100.0 * ring_table(RADIUS, CELLS.radius_edges, CELLS.depth_edges, height_m=1.0).kernel[:, 0, :]
    covariance = 0.05**2 * np.eye(N)
    data = columns @ np.array([2.2, -1.9]) + np.random.default_rng(2).normal(0, 0.05, N)
    return columns, covariance, data


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_matches_the_linear_gaussian_closed_form(case, seed):
    columns, covariance, data = case
    level = Level(1.0, 1e7)
    likelihood = ring_likelihood(covariance, np.zeros((N, 1)))
    bank = build_bank(TwoDiscs(), RADIUS, models=2000, height=1.0, rng=np.random.default_rng(seed))
    first = evidence([likelihood], bank.profiles.T, data, bank, level)
    assert first.effective_size < 20
    found = refined(
        TwoDiscs(), first, np.eye(N), [likelihood], data, level, height=1.0, rng=np.random.default_rng(seed)
    )
    exact = stats.multivariate_normal(np.zeros(N), covariance + columns @ columns.T).logpdf(data)
    assert abs(found.log_evidence - exact) < 4 * found.standard_error
    assert found.standard_error < 0.2
    precision = np.eye(2) + columns.T @ np.linalg.solve(covariance, columns)
    mean = np.linalg.solve(precision, columns.T @ np.linalg.solve(covariance, data))
    spread = np.sqrt(np.diag(np.linalg.inv(precision)))
    for k, name in enumerate(("first", "second")):
        median, low, high = found.interval(name)
        assert abs(median / 100 - mean[k]) < 0.4 * spread[k]
        assert (high - low) / 100 == pytest.approx(2 * 1.645 * spread[k], rel=0.25)
    assert found.effective_size > 300


def test_enough_models_are_left_alone(case):
    data = case[2]
    likelihood = ring_likelihood(100.0 * np.eye(N), np.zeros((N, 1)))
    bank = build_bank(TwoDiscs(), RADIUS, models=500, height=1.0, rng=np.random.default_rng(1))
    first = evidence([likelihood], bank.profiles.T, data, bank, Level())
    assert refined(TwoDiscs(), first, np.eye(N), [likelihood], data, Level(), height=1.0, rng=None) is first


def test_a_latent_stream_hands_out_its_values_in_order():
    stream = LatentStream(np.array([0.3, 0.0, -1.0]))
    assert stream.standard_normal() == 0.3
    assert stream.uniform(2.0, 4.0) == pytest.approx(3.0)
    assert (stream.standard_normal(), stream.standard_normal(), stream.used) == (-1.0, 0.0, 4)


def test_main_parameters_follow_their_priors():
    latent = np.random.default_rng(3).standard_normal((4000, 3))
    found = main_parameters(latent, {"a": Range(1.0, 9.0), "b": Range(1.0, 100.0, logarithmic=True)})
    assert stats.kstest(found["a"], stats.uniform(1, 8).cdf).pvalue > 1e-3
    assert stats.kstest(np.log(found["b"]), stats.uniform(0, np.log(100)).cdf).pvalue > 1e-3
