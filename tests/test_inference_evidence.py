"""Evidence and posterior against closed forms, and calibrated on simulated maps."""

import numpy as np
import pytest
from scipy import stats

from gravbasin.crater.priors import Range
from gravbasin.inference.bank import Bank
from gravbasin.inference.evidence import (
    evidence,
    log_likelihood,
    predictive_fit,
    weighted_quantile,
)
from gravbasin.inference.level import Level
from gravbasin.inference.likelihood import ring_likelihood
from gravbasin.inference.odds import log_odds

N = 12
X = np.arange(N, dtype=float)
COVARIANCE = 6.0 * np.exp(-np.abs(X[:, None] - X) / 4.0) + 0.3 * np.eye(N)
SHAPE = -np.exp(-((X / 4.0) ** 2))
FREE = ring_likelihood(COVARIANCE, np.zeros((N, 1)))  # no regional
NEARLY_GAUSSIAN = Level(1.0, 1e7)


def _bank(amplitude):
    return Bank("bodies", {"amplitude": amplitude}, X, amplitude[:, None] * SHAPE, np.zeros((amplitude.size, 1)))


def test_one_model_is_a_multivariate_students_t():
    rng = np.random.default_rng(1)
    data, level = rng.standard_normal((N, 5)) * 3, Level(1.4, 7.0)
    expected = stats.multivariate_t(SHAPE * 5, level.scale * COVARIANCE, df=level.dof).logpdf(data.T)
    np.testing.assert_allclose(log_likelihood(FREE, 5 * SHAPE[:, None], data, level)[:, 0], expected, rtol=1e-10)


def test_a_normal_amplitude_has_its_closed_form_evidence():
    """Mean over amplitudes ~ N(0, s²) tends to N(y; 0, C + s² tt'); 40,000 draws, within four of its own errors."""
    rng = np.random.default_rng(2)
    bank = _bank(4.0 * rng.standard_normal(40000))
    data = 3.0 * SHAPE + np.linalg.cholesky(COVARIANCE) @ rng.standard_normal(N)
    found = evidence([FREE], bank.profiles.T, data, bank, NEARLY_GAUSSIAN)
    exact = stats.multivariate_normal(np.zeros(N), COVARIANCE + 16.0 * np.outer(SHAPE, SHAPE)).logpdf(data)
    assert abs(found.log_evidence - exact) < 4 * found.standard_error + 1e-3
    precision = 1 / 16.0 + SHAPE @ np.linalg.solve(COVARIANCE, SHAPE)
    mean = SHAPE @ np.linalg.solve(COVARIANCE, data) / precision
    median, low, high = found.interval("amplitude")
    assert median == pytest.approx(mean, abs=4 / np.sqrt(precision * found.effective_size))
    assert high - low == pytest.approx(2 * 1.645 / np.sqrt(precision), rel=0.05)


def test_a_regional_in_the_data_does_not_move_the_odds():
    rng = np.random.default_rng(3)
    regional = np.column_stack([np.ones(N), X**2 / 100])
    likelihood = ring_likelihood(COVARIANCE, regional)
    templates, data = np.outer(SHAPE, [2.0, 6.0, 9.0]), rng.standard_normal((N, 3))
    plain = log_odds(likelihood, templates, data, Level())
    shifted = log_odds(likelihood, templates, data + regional @ [[70.0], [-9.0]], Level())
    np.testing.assert_allclose(plain, shifted, atol=1e-8)


def test_odds_in_blocks_are_the_odds_at_once(monkeypatch):
    rng = np.random.default_rng(4)
    templates, data = rng.standard_normal((N, 40)), rng.standard_normal((N, 30))
    whole = log_odds(FREE, templates, data, Level())
    monkeypatch.setattr("gravbasin.inference.odds.BLOCK", 90)
    np.testing.assert_allclose(log_odds(FREE, templates, data, Level()), whole, rtol=1e-13)


def test_ranks_of_the_truth_are_uniform():
    """Simulation-based calibration (Talts et al. 2018): 600 maps, local level drawn too; chi-square at 0.1 %."""
    rng = np.random.default_rng(6)
    level = Level(1.0, 8.0)
    prior = Range(1.0, 15.0, logarithmic=True)
    bank = _bank(prior.draw(rng, 3000))
    factor = np.linalg.cholesky(COVARIANCE)
    ranks = []
    for _ in range(600):
        truth = prior.draw(rng, 1)[0]
        roughness = np.sqrt(level.scale * level.dof / rng.chisquare(level.dof))
        data = truth * SHAPE + roughness * factor @ rng.standard_normal(N)
        found = evidence([FREE], bank.profiles.T, data, bank, level)
        ranks.append(found.weights[bank.parameters["amplitude"] < truth].sum())
    counts = np.histogram(ranks, bins=12, range=(0, 1))[0]
    assert stats.chisquare(counts).pvalue > 1e-3


def test_a_level_for_each_place_is_the_level_of_that_place_alone():
    rng = np.random.default_rng(5)
    data, templates = rng.standard_normal((N, 4)) * 3, rng.standard_normal((N, 6))
    scale = np.array([0.4, 1.0, 2.5, 1.7])
    together = log_odds(FREE, templates, data, Level(scale, 9.0))
    apart = [log_odds(FREE, templates, data[:, [i]], Level(scale[i], 9.0))[0] for i in range(4)]
    np.testing.assert_allclose(together, apart, rtol=1e-12)


def test_weighted_quantiles_of_equal_weights_are_plain_ones():
    values = np.random.default_rng(8).standard_normal(2001)
    found = weighted_quantile(values, np.full(2001, 1 / 2001), [0.05, 0.5, 0.95])
    np.testing.assert_allclose(found, np.quantile(values, [0.05, 0.5, 0.95]), atol=0.01)


def test_predictive_fit_is_uniform_for_true_models_and_small_for_false_ones():
    """800 maps with their own roughness; Kolmogorov-Smirnov at 0.1 %."""
    rng = np.random.default_rng(9)
    level, factor = Level(1.3, 9.0), np.linalg.cholesky(COVARIANCE)
    likelihood = ring_likelihood(COVARIANCE, np.ones((N, 1)))
    template, alone = 6.0 * SHAPE[:, None], np.ones(1)
    p = []
    for _ in range(800):
        roughness = np.sqrt(level.scale * level.dof / rng.chisquare(level.dof))
        data = template[:, 0] + roughness * factor @ rng.standard_normal(N) + 40.0
        p.append(predictive_fit(likelihood, template, data, alone, level).p_value)
    assert stats.kstest(p, "uniform").pvalue > 1e-3
    wrong = 30.0 * np.where(X == 5, 1.0, 0.0)
    assert predictive_fit(likelihood, template, wrong, alone, level).p_value < 1e-3
