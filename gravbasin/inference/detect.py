"""Could it be seen: signal-to-noise, detection probability, and the wavelengths that supply them."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import special, stats

from gravbasin.inference.likelihood import RingLikelihood
from gravbasin.observed import NoiseModel

__all__ = ["Detectability", "detectability", "detection_probability", "required_snr", "signal_band"]

Array = NDArray[np.float64]


def detection_probability(snr: Array | float, false_alarm_probability: float) -> Array:
    """Probability that a matched filter at a known place, of known shape and sign, passes its threshold.

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
        Wavelengths between which the central 80 % of SNR² lies. A band shorter than the map's resolution means
        that the smoothness of the noise model, not the map, makes the detection.
    """

    snr: float
    snr_low: float
    snr_high: float
    detection_probability: float
    false_alarm_probability: float
    band_km: tuple[float, float]


def detectability(
    likelihoods: Sequence[RingLikelihood],
    templates: Array,
    *,
    false_alarm_probability: float,
    band_km: tuple[float, float],
) -> Detectability:
    """Detectability of a structure over noise models and draws of its scatter.

    Parameters
    ----------
    likelihoods : sequence of RingLikelihood
        The first under the best noise model, the others under plausible ones.
    templates : (n_ring, n_draw) array, mGal
        Ring means of the model; the first column is the model itself, the others draws of its scatter.
    false_alarm_probability : float
        Accepted probability of a false alarm.
    band_km : (float, float)
        From `signal_band`.
    """
    table = np.array([likelihood.snr(templates) for likelihood in likelihoods])
    low, high = np.quantile(table, [0.05, 0.95])
    probability = float(np.mean(detection_probability(table, false_alarm_probability)))
    return Detectability(float(table[0, 0]), float(low), float(high), probability, false_alarm_probability, band_km)


def signal_band(
    radius: Array, profile: Array, noise: NoiseModel, *, cell_area: float, resolution: float, share: float = 0.8
) -> tuple[float, float]:
    """Wavelengths (km, short and long) between which the central share of SNR² lies.

    Parameters
    ----------
    radius, profile : (n,) arrays, m and mGal
        The modelled anomaly.
    noise : NoiseModel
        Its spectrum, plus the nugget spread over `cell_area` (m²), is the noise.
    resolution : float, m
        Half the shortest wavelength the map holds.

    Notes
    -----
    SNR² = (1/2π) ∫ |T(k)|²/P(k) k dk with T the Hankel transform of the profile; regional left out.
    """
    k = np.linspace(0.0, np.pi / resolution, 401)[1:]
    transform = 2 * np.pi * np.trapezoid(special.j0(np.outer(k, radius)) * profile * radius, radius, axis=1)
    density = transform**2 / (noise.spectrum(k) + noise.nugget_mgal**2 * cell_area) * k
    total = np.cumsum(density)
    if total[-1] == 0.0:
        return (float("nan"), float("nan"))
    edges = np.interp([0.5 - share / 2, 0.5 + share / 2], total / total[-1], k)
    return float(2e-3 * np.pi / edges[1]), float(2e-3 * np.pi / edges[0])
