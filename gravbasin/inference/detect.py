"""Could it be seen: signal-to-noise, detection probability, and the wavelengths that supply them."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import special, stats

from gravbasin.inference.likelihood import RingLikelihood

__all__ = ["Detectability", "detectability", "detection_probability", "required_snr", "signal_band"]

Array = NDArray[np.float64]


def detection_probability(snr: Array | float, false_alarm_probability: float) -> Array:
    """Probability that a filter at a known place, for a known shape and sign, passes its threshold.

    Pd = Phi(SNR - z(1 - Pfa)): Neyman-Pearson for a Gaussian statistic (Kay 1998, from memory).

    Examples
    --------
    >>> round(float(detection_probability(4.37, 0.001)), 2)
    0.9
    """
    return np.asarray(stats.norm.cdf(np.asarray(snr) - stats.norm.isf(false_alarm_probability)))


def required_snr(probability: float, false_alarm_probability: float) -> float:
    """Signal-to-noise ratio at which the detection probability is reached."""
    return float(stats.norm.isf(false_alarm_probability) + stats.norm.ppf(probability))


@dataclasses.dataclass(frozen=True)
class Detectability:
    """How well the modelled anomaly stands out of the noise.

    Attributes
    ----------
    snr : float
        Signal-to-noise ratio of the model under the best noise model.
    snr_low, snr_high : float
        5 % and 95 % over plausible noise models and the scatter of the structure.
    detection_probability : float
        Averaged over the same scatter.
    false_alarm_probability : float
        At which it is stated.
    band_km : (float, float)
        Wavelengths between which the central 80 % of the filter's signal lies.
    """

    snr: float
    snr_low: float
    snr_high: float
    detection_probability: float
    false_alarm_probability: float
    band_km: tuple[float, float]


def detectability(
    likelihood: RingLikelihood,
    noise_covariances: Sequence[Array],
    templates: Array,
    *,
    false_alarm_probability: float,
    band_km: tuple[float, float],
) -> Detectability:
    """Detectability of a structure over noise models and draws of its scatter.

    Parameters
    ----------
    likelihood : RingLikelihood
        Of the ring means under noise and shape scatter: it makes the filter.
    noise_covariances : sequence of (n_ring, n_ring) arrays, mGal²
        Noise alone, the first under the best noise model, the others under plausible ones.
    templates : (n_ring, 1 + n_draw) array, mGal
        Ring means of the model, then of draws of its scatter.
    false_alarm_probability : float
        Accepted probability of a false alarm.
    band_km : (float, float)
        From `signal_band`.

    Notes
    -----
    The filter w is built once, for the model. Its response to a draw is w'y, its noise sqrt(w'Cw): a draw of another
    shape, or a noise rougher than supposed, is seen as badly as it would be.
    """
    w = likelihood.filter(templates[:, 0])
    noise = np.array([np.sqrt(w @ covariance @ w) for covariance in noise_covariances])
    table = (w @ templates)[None, :] / noise[:, None]
    low, high = np.quantile(table, [0.05, 0.95])
    probability = float(np.mean(detection_probability(table, false_alarm_probability)))
    return Detectability(float(table[0, 0]), float(low), float(high), probability, false_alarm_probability, band_km)


def signal_band(
    radius: Array, profile: Array, response_to_profile: Array, *, shortest: float, share: float = 0.8
) -> tuple[float, float]:
    """Wavelengths (km, short and long) between which the central share of a filter's signal lies.

    Parameters
    ----------
    radius, profile : (n,) arrays, m and mGal
        The modelled anomaly.
    response_to_profile : (n,) array
        The filter as a functional of the profile: its signal is `response_to_profile @ profile`.
    shortest : float, m
        Shortest wavelength to consider, twice the map's resolution.

    Notes
    -----
    The profile is split by its Hankel transform, t(r) = (1/2π) ∫ T(k) J0(kr) k dk, and each part sent through the
    filter.
    """
    edges = np.linspace(0.0, 2 * np.pi / shortest, 601)
    k = 0.5 * (edges[1:] + edges[:-1])
    bessel = special.j0(np.outer(k, radius))
    transform = 2 * np.pi * np.trapezoid(bessel * profile * radius, radius, axis=1)
    density = transform * k * (bessel @ response_to_profile)
    total = np.concatenate([[0.0], np.maximum.accumulate(np.cumsum(density))])
    if not total[-1] > 0.0:
        return (float("nan"), float("nan"))
    low, high = np.interp([0.5 - share / 2, 0.5 + share / 2], total / total[-1], edges)
    return float(2e-3 * np.pi / high), float(2e-3 * np.pi / low)
