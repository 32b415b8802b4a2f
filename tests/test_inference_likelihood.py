"""Ring likelihood: closed forms and identities of generalised least squares."""

import numpy as np
import pytest

from gravbasin.errors import CannotFinish
from gravbasin.inference.likelihood import ring_likelihood, shape_scatter


@pytest.fixture
def rng():
    return np.random.default_rng(5)


def _covariance(n):
    x = np.arange(n, dtype=float)
    return 9.0 * np.exp(-np.abs(x[:, None] - x) / 4.0) + 0.3 * np.eye(n)


def test_white_noise_power_is_the_sum_of_squares_less_the_mean():
    """Closed form: with C = s² I and a free constant, SNR² is the template's variance times n over s²."""
    t = np.array([-5.0, -4.0, -2.0, -0.5, 0.0, 0.0])
    likelihood = ring_likelihood(4.0 * np.eye(6), np.ones((6, 1)))
    _, error = likelihood.amplitude(t, t)
    assert error**-2 == pytest.approx(np.sum((t - t.mean()) ** 2) / 4.0, rel=1e-12)


def test_four_times_the_data_halve_the_error_of_white_noise():
    t = np.array([-3.0, 1.0, 2.0, 0.5])
    one = ring_likelihood(np.eye(4), np.zeros((4, 1))).amplitude(t, t)[1]
    four = ring_likelihood(np.eye(16), np.zeros((16, 1))).amplitude(np.tile(t, 4), np.tile(t, 4))[1]
    assert four == pytest.approx(one / 2, rel=1e-12)


def test_matches_the_dense_projector(rng):
    """Against M = C⁻¹ - C⁻¹X(X'C⁻¹X)⁻¹X'C⁻¹ written out."""
    n = 14
    c, x, t, y = _covariance(n), rng.standard_normal((n, 2)), rng.standard_normal(n), rng.standard_normal(n)
    ci = np.linalg.inv(c)
    m = ci - ci @ x @ np.linalg.inv(x.T @ ci @ x) @ x.T @ ci
    likelihood = ring_likelihood(c, x)
    amplitude, error = likelihood.amplitude(t, y)
    assert amplitude == pytest.approx(t @ m @ y / (t @ m @ t), rel=1e-9)
    assert error == pytest.approx((t @ m @ t) ** -0.5, rel=1e-9)
    np.testing.assert_allclose(likelihood.filter(t), m @ t, atol=1e-10)
    assert np.sum(likelihood.whiten(y - t) ** 2) == pytest.approx((y - t) @ m @ (y - t), rel=1e-9)
    log_det = 0.5 * (np.linalg.slogdet(c)[1] + np.linalg.slogdet(x.T @ ci @ x)[1])
    assert likelihood.log_determinant == pytest.approx(log_det, rel=1e-9)


def test_a_template_within_the_regional_is_invisible():
    n = 10
    r = np.linspace(0, 1, n)
    likelihood = ring_likelihood(_covariance(n), np.column_stack([np.ones(n), r**2]))
    assert np.abs(likelihood.whiten(3.0 - 2.0 * r**2)).max() < 1e-12


def test_columns_that_vanish_over_complete_rings_cost_no_degree_of_freedom():
    n = 10
    regional = np.column_stack([np.ones(n), 1e-14 * np.arange(n), 2.0 * np.ones(n)])
    assert ring_likelihood(_covariance(n), regional).dof == n - 1


def test_any_regional_added_to_the_data_changes_nothing(rng):
    n = 12
    x = np.column_stack([np.ones(n), np.linspace(0, 1, n) ** 2])
    likelihood = ring_likelihood(_covariance(n), x)
    t, y = rng.standard_normal(n), rng.standard_normal(n)
    shifted = y + x @ np.array([250.0, -80.0])
    assert likelihood.amplitude(t, shifted)[0] == pytest.approx(likelihood.amplitude(t, y)[0], abs=1e-9)
    np.testing.assert_allclose(
        likelihood.fitted_regional(shifted) - likelihood.fitted_regional(y), shifted - y, atol=1e-8
    )


def test_scatter_of_amplitude_is_no_scatter_of_shape(rng):
    t, area = rng.standard_normal(8), np.linspace(1, 3, 8)
    draws = t[:, None] * rng.uniform(0.5, 2, 40)
    both = np.column_stack([t, draws])
    assert np.abs(shape_scatter(both, area)).max() < 1e-12


def test_a_model_without_scatter_adds_nothing():
    alone = np.ones((5, 1))
    assert not shape_scatter(alone, np.ones(5)).any()


def test_a_singular_covariance_is_refused_in_one_line():
    with pytest.raises(CannotFinish, match="nugget"):
        ring_likelihood(np.ones((4, 4)), np.ones((4, 1)))
