"""What it costs not to know centre and size beforehand: the charge for searching."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
from numpy.typing import NDArray
from scipy import optimize, stats

from gravbasin.observed import NoiseModel
from gravbasin.survey.merit import robust_gram
from gravbasin.survey.sight import Curves, Plane

__all__ = ["SearchCharge", "global_false_alarm", "search_charge"]

Array = NDArray[np.float64]


@dataclasses.dataclass(frozen=True)
class SearchCharge:
    """Threshold of a search over centres and diameters.

    Attributes
    ----------
    threshold : float
        Statistic that noise alone passes anywhere with the accepted probability.
    local_probability : float
        Probability that noise passes it at one place and size.
    trials : float
        How many independent trials the search amounts to: accepted over local probability.
    position_km : float
        Distance over which the filter's output stays alike, 1/√λ.
    size_share : float
        Relative change of diameter over which it does.
    """

    threshold: float
    local_probability: float
    trials: float
    position_km: float
    size_share: float


def search_charge(
    plane: Plane,
    curves: Curves,
    noise: NoiseModel,
    model: Array,
    scatter: Array,
    *,
    spacing: float,
    error: float,
    area: float,
    diameter_range: float,
    false_alarm_probability: float,
) -> SearchCharge:
    """The charge for an unknown centre and diameter.

    Parameters
    ----------
    plane, curves : Plane, Curves
    noise : NoiseModel
    model : (n_mode,) array
        Coefficients of the structure.
    scatter : (n_mode, n_scatter) array
        Root of its scatter of shape.
    spacing : float, m
        Of the stations.
    error : float, mGal
        Of one station.
    area : float, m²
        Searched for the centre.
    diameter_range : float
        Natural logarithm of largest over smallest diameter searched; 0 for a known one.
    false_alarm_probability : float
        Accepted anywhere in the search.

    Notes
    -----
    The filter's output under noise is a smooth Gaussian field over (x, y, ln D). How fast it varies, λ = var(dZ/dx),
    follows from the spectrum of the whitened template: λ_x = ⟨k²⟩/2, and from its change as it is stretched. The chance
    that it passes a threshold anywhere is the expected Euler characteristic of the part above it (Adler & Taylor 2007,
    Worsley 1995, from memory). Where the output varies within a station spacing this charges a little too much:
    thresholds by simulation were lower by 0.1 to 0.4.
    """
    gram = plane.gram([noise], spacing=spacing, error=error).gram[0]
    response = robust_gram(gram, scatter) @ model
    kept = plane.wavenumber <= np.pi / spacing
    # What the filter correlates with: the model less the part that the scatter of shape may explain.
    template = plane.transform @ (model - scatter @ (scatter.T @ response))
    k = plane.wavenumber
    power = kept * k * template**2 / plane.density(noise, spacing=spacing, error=error)
    per_metre = math.sqrt(0.5 * float(power @ k**2) / max(float(power.sum()), 1e-300))
    robust = robust_gram(gram, scatter)
    own = float(model @ robust @ model)
    profile = curves.shapes @ model
    stretched = curves.coefficients(-curves.radius * np.gradient(profile, curves.radius))
    across = float(stretched @ robust @ model)
    per_size = math.sqrt(max(float(stretched @ robust @ stretched) - across**2 / own, 0.0) / own) if own > 0 else 0.0
    side = math.sqrt(area) * per_metre
    threshold = _threshold(side, diameter_range * per_size, false_alarm_probability)
    local = float(stats.norm.sf(threshold))
    return SearchCharge(
        threshold,
        local,
        false_alarm_probability / local,
        1.0 / per_metre / 1000.0 if per_metre else math.inf,
        1.0 / per_size if per_size else math.inf,
    )


def global_false_alarm(threshold: Array | float, side: float, sizes: float) -> Array:
    """Chance that a unit Gaussian field passes a threshold anywhere in a box of side × side × sizes.

    Lengths are in units of 1/√λ along each axis; the expected Euler characteristic Σ L_d ρ_d.

    Examples
    --------
    >>> round(float(global_false_alarm(3.0902323, 0.0, 0.0)), 6)  # one place, one size: no charge
    0.001
    """
    u = np.asarray(threshold, dtype=float)
    bell = np.exp(-0.5 * u**2)
    lengths = (2.0 * side + sizes, side**2 + 2.0 * side * sizes, side**2 * sizes)
    two_pi = 2.0 * np.pi
    densities = (bell / two_pi, u * bell / two_pi**1.5, (u**2 - 1.0) * bell / two_pi**2)
    return np.asarray(stats.norm.sf(u) + sum(a * b for a, b in zip(lengths, densities, strict=True)))


def _threshold(side: float, sizes: float, probability: float) -> float:
    def excess(u: float) -> float:
        return math.log(max(float(global_false_alarm(u, side, sizes)), 1e-300)) - math.log(probability)

    low = float(stats.norm.isf(probability))
    if excess(low) <= 0.0:
        return low
    # Above 1 every density falls, so the last crossing is the threshold.
    return float(optimize.brentq(excess, max(low, 1.0), 40.0))
