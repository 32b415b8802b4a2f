"""Detection probabilities, filters and the wavelengths they live on."""

import numpy as np
import pytest
from scipy import special

from gravbasin.inference.detect import detectability, detection_probability, required_snr, signal_band
from gravbasin.inference.likelihood import ring_likelihood


@pytest.mark.parametrize(
    ("probability", "snr"),
    # Thresholds of a known-sign filter at a false-alarm probability of 1e-3: normal quantiles, common practice.
    [(0.5, 3.09), (0.9, 4.37), (0.99, 5.42)],
)
def test_required_signal_to_noise(probability, snr):
    assert required_snr(probability, 1e-3) == pytest.approx(snr, abs=0.005)
    assert detection_probability(required_snr(probability, 1e-3), 1e-3) == pytest.approx(probability, rel=1e-12)


def test_monte_carlo_detections_match_the_computed_probability():
    """20,000 simulated maps; tolerance four binomial standard errors (fails once in 16,000 seeds)."""
    rng, n, pfa = np.random.default_rng(3), 12, 0.01
    x = np.arange(n, dtype=float)
    c = 4.0 * np.exp(-np.abs(x[:, None] - x) / 3.0) + 0.2 * np.eye(n)
    t = -4.0 * np.exp(-((x / 4.0) ** 2))
    likelihood = ring_likelihood(c, np.ones((n, 1)))
    seen = detectability(likelihood, [c], t[:, None], false_alarm_probability=pfa, band_km=(1.0, 2.0))
    w = likelihood.filter(t)
    noise = np.linalg.cholesky(c) @ rng.standard_normal((n, 20000))
    threshold = required_snr(0.5, pfa)
    for truth, expected in ((t, seen.detection_probability), (0 * t, pfa)):
        rate = np.mean(w @ (truth[:, None] + noise) / np.sqrt(w @ c @ w) > threshold)
        assert abs(rate - expected) < 4 * np.sqrt(expected * (1 - expected) / 20000)


def test_rougher_noise_widens_the_band_downwards():
    n = 10
    c, t = np.eye(n), np.linspace(-5, 0, n)
    likelihood = ring_likelihood(c, np.ones((n, 1)))
    sure = detectability(likelihood, [c], t[:, None], false_alarm_probability=1e-3, band_km=(1.0, 2.0))
    doubt = detectability(likelihood, [c, 4 * c], t[:, None], false_alarm_probability=1e-3, band_km=(1.0, 2.0))
    assert doubt.snr == sure.snr
    assert doubt.snr_low < sure.snr / 1.5
    assert doubt.detection_probability < sure.detection_probability


def test_band_of_a_gaussian_in_white_noise():
    """t = exp(-r²/2s²) filtered by itself: the share of SNR² below k is 1 - exp(-k²s²), so the band is closed form."""
    s, dr = 8e3, 100.0
    radius = dr * np.arange(1200)
    t = np.exp(-(radius**2) / (2 * s**2))
    functional = t * 2 * np.pi * radius * dr
    short, long = signal_band(radius, t, functional, shortest=2e3)
    k = np.sqrt(-np.log([0.1, 0.9])) / s
    np.testing.assert_allclose([short, long], 2e-3 * np.pi / k, rtol=0.01)


def test_band_of_nothing_is_not_a_number():
    radius = np.linspace(0, 1e4, 50)
    assert np.isnan(signal_band(radius, 0 * radius, special.j0(radius), shortest=2e3)).all()
