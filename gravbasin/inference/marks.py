"""Marks of shape that published work names, each measured on the ring means with its error under correlated noise.

They are for the reader: none of them enters the evidence, because the likelihood holds the whole profile already and
counting a mark again would count the same data twice.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from gravbasin.inference.contrasts import CONFIDENCE, fieller
from gravbasin.inference.evidence import Posterior
from gravbasin.inference.level import Level
from gravbasin.inference.likelihood import RingLikelihood
from gravbasin.inference.shape import DRAWS, SEEN, ShapeProfile
from gravbasin.observed import RingMeans

__all__ = ["Mark", "shape_marks"]

Array = NDArray[np.float64]
Range = tuple[float, float, float]

LEAST_FOR_DIP = 6
"""Rings within the rim for the wall dip. With six or seven the place of the wall between two rings moves the ratio of
bends by an eighth, with ten by a thirtieth (tested): families are measured on the same rings, so it matters only
beside the value 1."""

CENTRE, ANNULUS = 0.2, (0.3, 0.9)
"""Radius of the central high, about a tenth of the diameter (common practice), and where the low around it may lie."""

VAGUE = 0.25
"""Error in rim radii from which the gradient ring has no place: any radius of the zone would do (0.35 is uniform)."""

DIP, HIGH, FLOOR, STRENGTH, RING = (
    "wall dip",
    "central high",
    "bowl or flat floor",
    "edge gradient",
    "radius of the steepest gradient",
)
UNITS = {DIP: "1", HIGH: "mGal", FLOOR: "1", STRENGTH: "mGal/km", RING: "rim radii"}
NULLS: dict[str, float | None] = {DIP: 1.0, HIGH: 0.0, FLOOR: 0.0, STRENGTH: 0.0, RING: None}
TELLS = {
    DIP: "outer over inner bend, above 1 where the walls dip inwards (crater, basin), below 1 where outwards (granite)",
    HIGH: "centre minus the low around it, above 0 where denser rock rises in the middle",
    FLOOR: "0 for a flat floor, 1 for a parabolic bowl, below 0 where the middle is raised",
    STRENGTH: "how fast the anomaly ends at its edge",
    RING: "1 where the anomaly ends at the rim",
}


@dataclasses.dataclass(frozen=True, kw_only=True)
class Mark:
    """One mark; every number is None where it cannot be measured, and `meaning` says why.

    Attributes
    ----------
    name, unit : str
    meaning : str
        One plain sentence.
    value, standard_error : float
    low, high : float
        90 % confidence limits, which need not lie evenly about the value.
    null : float or None
        Value of a body without the mark; None where there is no such body.
    z, p_value : float or None
        Standardised distance from the null and its two-sided tail.
    expected_impact, expected_best_rival : (median, low, high) or None
        What weighted draws of the posterior banks give, noise-free, central 90 %. They were weighted by the same ring
        means, so they lie closer to the value than the priors would.
    best_rival : str or None
        The rival meant.
    """

    name: str
    unit: str
    meaning: str
    value: float | None = None
    standard_error: float | None = None
    low: float | None = None
    high: float | None = None
    null: float | None = None
    z: float | None = None
    p_value: float | None = None
    expected_impact: Range | None = None
    expected_best_rival: Range | None = None
    best_rival: str | None = None


def shape_marks(
    rings: RingMeans,
    likelihoods: Sequence[RingLikelihood],
    posteriors: Sequence[Posterior],
    response: Array,
    *,
    rim_radius_m: float,
    level: Level,
    seed: int = 0,
) -> tuple[Mark, ...]:
    """Wall dip, central high, floor, and the gradient ring of an anomaly, with what each family predicts.

    Parameters
    ----------
    rings : RingMeans
        Observed ring means, regional included.
    likelihoods : sequence of RingLikelihood
        Under plausible noise models, the best first.
    posteriors : sequence of Posterior
        The impact family first, then its rivals; one without any anomaly (noise alone) does not count.
    response : (n_ring, n_radius) array
        From the banks' profiles to ring means.
    rim_radius_m : float
        Radius of the rim.
    level : Level
        Prior of the local noise level.
    seed : int
        Of the random errors for the radius of the gradient ring.

    Returns
    -------
    tuple of Mark
        Always five, in a fixed order, measurable or not. Reported only, never part of the evidence.

    Notes
    -----
    The regional is fitted jointly with the mean profiles of the impact family and its best rival and removed from
    data and models alike. Where to measure is read from the mean of both families, moved towards the data only as far
    as the noise allows: choosing the largest of several noisy values would overstate every mark. At the radii so
    chosen the marks are linear contrasts of the ring means, or ratios of two, with errors by exact linear propagation
    (ratios: Fieller's limits); models, free of noise, are measured at their own extrema. The radius of the steepest
    gradient is found on the data and its error simulated.

    Wall dip: Bott (1962), ratio of the extrema of the second horizontal derivative over the edge. About a centre a
    vertical wall gives a little more than 1 (tested), so compare with the families before comparing with 1.
    """
    profile = ShapeProfile.of(rings, likelihoods, posteriors, response, rim_radius_m, level)
    reason = profile.hopeless()
    if reason:
        return tuple(_missing(name, reason) for name in TELLS)
    return (
        _wall_dip(profile),
        _central_high(profile),
        _floor(profile),
        _edge_gradient(profile),
        _gradient_ring(profile, np.random.default_rng([seed, 8])),
    )


def _missing(name: str, reason: str) -> Mark:
    """A mark that cannot be measured."""
    return Mark(name=name, unit=UNITS[name], meaning=f"not measurable: {reason}")


def _linear(profile: ShapeProfile, name: str, contrast: Array, predicted: Sequence[Array] | None = None) -> Mark:
    """A mark that is one contrast of the ring means; families give the same contrast unless `predicted`."""
    value, scale = float(contrast @ profile.data), np.sqrt(profile.noise.between(contrast, contrast))
    reach = profile.noise.quantile * scale
    return _mark(
        profile,
        name,
        value,
        scale * profile.noise.inflation,
        (value - reach, value + reach),
        value / scale,
        predicted or [contrast @ d for d in profile.draws],
    )


def _ratio(
    profile: ShapeProfile, name: str, top: Array, bottom: Array, part: str, predicted: Sequence[tuple[Array, Array]]
) -> Mark:
    """A mark that is the ratio of two contrasts, of which the lower, some `part`, must stand out by itself."""
    above, below = float(top @ profile.data), float(bottom @ profile.data)
    between = profile.noise.between
    scales = between(top, top), between(bottom, bottom), between(top, bottom)
    if below < SEEN * np.sqrt(scales[1]):
        z = below / np.sqrt(scales[1])
        return _missing(name, f"{part} stands out by {z:.1f} standard errors, of {SEEN:g} needed")
    value, null = above / below, NULLS[name] or 0.0
    error = np.sqrt(max(scales[0] - 2.0 * value * scales[2] + value**2 * scales[1], 0.0)) / below
    # Its sign aside, the distance of the ratio from the null is that of a plain contrast, and exactly t.
    z = (above - null * below) / np.sqrt(scales[0] - 2.0 * null * scales[2] + null**2 * scales[1])
    expected = [upper / np.where(lower > 0.0, lower, np.nan) for upper, lower in predicted]
    limits = fieller(above, below, scales, profile.noise.quantile)
    return _mark(profile, name, value, error * profile.noise.inflation, limits, float(z), expected)


def _mark(
    profile: ShapeProfile,
    name: str,
    value: float,
    error: float,
    limits: tuple[float, float],
    z: float | None,
    predicted: Sequence[Array],
) -> Mark:
    expected = {family: _central(values) for family, values in zip(profile.names, predicted, strict=True)}
    return Mark(
        name=name,
        unit=UNITS[name],
        meaning=_meaning(name, limits, expected),
        value=value,
        standard_error=float(error),
        low=float(limits[0]),
        high=float(limits[1]),
        null=NULLS[name],
        z=z,
        p_value=None if z is None else profile.noise.p_value(z),
        expected_impact=expected[profile.names[0]],
        expected_best_rival=expected[profile.names[1]] if len(profile.names) > 1 else None,
        best_rival=profile.names[1] if len(profile.names) > 1 else None,
    )


def _central(values: Array) -> Range | None:
    """Median and central 90 %, or None where one model in twenty or more has no such mark."""
    good = values[np.isfinite(values)]
    if good.size <= 0.95 * values.size:
        return None
    tail = 0.5 - 0.5 * CONFIDENCE
    median, low, high = np.quantile(good, [0.5, tail, 1.0 - tail])
    return float(median), float(low), float(high)


def _meaning(name: str, limits: tuple[float, float], expected: dict[str, Range | None]) -> str:
    """The sentence: what the mark tells, and which families agree with it (their 90 % ranges overlap)."""
    known = {family: span for family, span in expected.items() if span is not None}
    agree = [family for family, (_, low, high) in known.items() if low <= limits[1] and high >= limits[0]]
    against = [family for family in known if family not in agree]
    tells = TELLS[name]
    if not against:
        return f"{tells}; as expected of {' and of '.join(agree)}" if agree else tells
    if agree:
        return f"{tells}; as expected of {agree[0]} but not of {against[0]}"
    return f"{tells}; not as expected of {' nor of '.join(against)}"


def _wall_dip(profile: ShapeProfile) -> Mark:
    count = int(np.sum(profile.radius < 1.0))
    if count < LEAST_FOR_DIP:
        return _missing(DIP, f"only {count} rings lie within the rim, of {LEAST_FOR_DIP} needed")

    def pair(profiles: Array) -> tuple[Array, Array]:
        every, (outer, inner) = np.arange(profiles.shape[1]), profile.bends(profiles)
        bend = profile.bend @ profiles
        return bend[outer, every], -bend[inner, every]

    (outer,), (inner,) = profile.bends(profile.reference[:, None])
    return _ratio(
        profile, DIP, profile.bend[outer], -profile.bend[inner], "the inner bend", [pair(d) for d in profile.draws]
    )


def _central_high(profile: ShapeProfile) -> Mark:
    radius, low = profile.radius, profile.draws[0].mean(axis=1)
    zone = np.flatnonzero((radius >= ANNULUS[0]) & (radius <= ANNULUS[1]))
    lowest = int(zone[np.argmin(low[zone])])
    # A family whose profile only rises outwards has no annulus: half-way out is then as good as any.
    place = radius[lowest] if lowest > zone[0] else 0.5
    around = np.abs(radius - place) <= max(0.15, 0.51 * profile.width)
    centre = (radius <= CENTRE) | (np.arange(radius.size) == 0)
    if (around & centre).any():
        return _missing(HIGH, "the rings are too wide to part the centre from its surroundings")
    return _linear(profile, HIGH, profile.mean_over(centre) - profile.mean_over(around))


def _floor(profile: ShapeProfile) -> Mark:
    radius = profile.radius
    inner = radius <= 0.5 + 0.5 * profile.width
    if inner.sum() < 3:
        return _missing(FLOOR, f"{inner.sum()} rings lie in the inner half, of 3 needed")
    fit = np.zeros((2, radius.size))
    fit[:, inner] = np.linalg.pinv(np.stack([np.ones(int(inner.sum())), radius[inner] ** 2], axis=1))
    drop, depth = -profile.sign * fit[1], profile.sign * fit[0]
    return _ratio(
        profile, FLOOR, drop, depth, "the middle of the anomaly", [(drop @ d, depth @ d) for d in profile.draws]
    )


def _edge_gradient(profile: ShapeProfile) -> Mark:
    (edge,) = profile.steepest(profile.reference[:, None])
    fall = profile.fall / (profile.rim / 1000.0)
    predicted = [(fall @ d)[profile.steepest(d), np.arange(d.shape[1])] for d in profile.draws]
    return _linear(profile, STRENGTH, fall[edge], predicted)


def _gradient_ring(profile: ShapeProfile, rng: np.random.Generator) -> Mark:
    def place(profiles: Array) -> Array:
        return np.asarray(profile.at[profile.steepest(profiles)])

    reference = profile.reference[:, None]
    wrong = place(reference + profile.noise.draws(DRAWS, rng)) - place(reference)
    error = float(np.std(wrong))
    if error > VAGUE:
        return _missing(RING, f"noise alone moves it by {error:.2g} rim radii, of {VAGUE:g} allowed")
    (value,) = place(profile.data[:, None])
    early, late = np.quantile(wrong, [0.5 - 0.5 * CONFIDENCE, 0.5 + 0.5 * CONFIDENCE])
    return _mark(
        profile, RING, float(value), error, (value - late, value - early), None, [place(d) for d in profile.draws]
    )
