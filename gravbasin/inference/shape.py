"""The profile whose shape is judged: ring means without their regional, two families beside it, derivatives."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import special

from gravbasin.inference.contrasts import Noise, adapted, cleaning, derivatives, equal_draws, ring_noise
from gravbasin.inference.evidence import Posterior
from gravbasin.inference.level import Level
from gravbasin.inference.likelihood import RingLikelihood
from gravbasin.observed import RingMeans

__all__ = ["DRAWS", "SEEN", "ShapeProfile"]

Array = NDArray[np.float64]

SEEN = 2.0
"""Scales by which the anomaly, and the lower part of a ratio, must stand out for a mark to be measurable. Above the
1.8 of a 90 % interval, so that the limits of a ratio are finite."""

DRAWS = 1000
"""Models of each posterior that a mark is predicted from, and random errors for the one mark that is not linear."""

EDGE, BENDS = (0.4, 1.6), (0.25, 2.0)
"""Where the edge of the structure and the bends on its two sides are looked for, rim radii."""

LEAST_INSIDE, LEAST_REACH = 4, 1.5
"""Rings within the rim, and rim radii that the rings must reach, for there to be a shape."""

WINDOW = (2.5, 0.35)
"""Half width of the window for derivatives: at least so many rings, and at least so many rim radii (judgement: narrow
enough to part the two bends, wide enough to average the crust's roughness)."""

DISCREPANCY = (0.2, 0.25)
"""How wrong the families' profiles may be when the edge is looked for: share of their peak, and over how many rim
radii (judgement). Where noise is larger the families say where the edge is, where it is smaller the data do."""


@dataclasses.dataclass(frozen=True, eq=False)
class ShapeProfile:
    """Cleaned ring means with their errors, draws of the two families, and the operators that the marks share.

    `sign` is that of the anomaly: oriented by it, every structure is a rise that ends outwards. Lengths in rim radii.
    `fall` and `bend` are the outward fall and the second derivative of the oriented profile at the radii `at`, as
    contrasts of ring means; `reference` is the profile on which the edge is looked for.
    """

    radius: Array
    width: float
    area: Array
    rim: float
    sign: float
    data: Array
    noise: Noise
    draws: tuple[Array, ...]
    names: tuple[str, ...]
    at: Array
    fall: Array
    bend: Array
    reference: Array
    z: float

    @classmethod
    def of(
        cls,
        rings: RingMeans,
        likelihoods: Sequence[RingLikelihood],
        posteriors: Sequence[Posterior],
        response: Array,
        rim: float,
        level: Level,
    ) -> ShapeProfile:
        """The profile under the impact family, the first, and the rival of highest evidence that has a body."""
        impact, *others = posteriors
        bodies = [p for p in others if p.bank.profiles.any()]
        families = [impact, *([max(bodies, key=lambda p: p.log_evidence)] if bodies else [])]
        draws = [equal_draws(p, response, DRAWS) for p in families]
        share = special.softmax([p.log_evidence for p in families])
        means = np.stack([d.mean(axis=1) for d in draws], axis=1)
        clean = cleaning(likelihoods[0], means)
        residuals = rings.mean[:, None] - np.concatenate(draws, axis=1)
        noise = ring_noise(likelihoods, clean, residuals, np.repeat(share / DRAWS, DRAWS), level)
        data, reference = clean @ rings.mean, clean @ means @ share
        matched = likelihoods[0].filter(reference)
        scale = np.sqrt(noise.between(matched, matched))
        radius, width = rings.radius_m / rim, float(np.diff(rings.edges_m).max()) / rim
        sign = -1.0 if (rings.area_m2 * (radius < 1.0)) @ reference < 0.0 else 1.0
        at = np.arange(BENDS[0], min(BENDS[1], radius[-1] - 0.5 * width), width / 8.0)
        first, second = derivatives(radius, at, max(WINDOW[0] * width, WINDOW[1]))
        kernel = np.exp(-0.5 * ((radius[:, None] - radius) / DISCREPANCY[1]) ** 2)
        discrepancy = (DISCREPANCY[0] * np.abs(reference).max()) ** 2 * kernel
        return cls(
            radius=radius,
            width=width,
            area=rings.area_m2,
            rim=rim,
            sign=sign,
            data=data,
            noise=noise,
            draws=tuple(clean @ d for d in draws),
            names=tuple(p.name for p in families),
            at=at,
            fall=-sign * first,
            bend=sign * second,
            reference=adapted(reference, data, noise, discrepancy),
            z=float(matched @ data / scale) if scale > 0.0 else 0.0,
        )

    def hopeless(self) -> str:
        """Why no mark can be measured, or nothing.

        The anomaly stands out against a template that was itself fitted, so this is no detection, only a floor.
        """
        count, reach = int(np.sum(self.radius < 1.0)), self.radius[-1]
        if count < LEAST_INSIDE:
            return f"only {count} rings lie within the rim, of {LEAST_INSIDE} needed"
        if reach < LEAST_REACH:
            return f"the rings end at {reach:.2g} rim radii, of {LEAST_REACH:g} needed"
        if self.z < SEEN:
            return f"the anomaly stands out by {self.z:.1f} standard errors, of {SEEN:g} needed"
        return ""

    def steepest(self, profiles: Array) -> NDArray[np.intp]:
        """Index into `at` of the edge: where each profile, (n_ring, n), falls fastest."""
        zone = (self.at >= EDGE[0]) & (self.at <= EDGE[1])
        return np.asarray(np.argmax(np.where(zone[:, None], self.fall @ profiles, -np.inf), axis=0))

    def bends(self, profiles: Array) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
        """Indices into `at` of the outer and the inner bend of each profile, (n_ring, n), about its edge."""
        bend, edge = self.bend @ profiles, self.at[self.steepest(profiles)]
        outside = self.at[:, None] > edge
        outer = np.argmax(np.where(outside, bend, -np.inf), axis=0)
        return np.asarray(outer), np.asarray(np.argmin(np.where(outside, np.inf, bend), axis=0))

    def mean_over(self, rings: NDArray[np.bool_]) -> Array:
        """The mean over some rings as a contrast."""
        return self.area * rings / (self.area @ rings)
