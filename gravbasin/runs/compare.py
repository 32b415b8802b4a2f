"""The observed side of a run: noise, ring means, families of bodies, detectability, chance, roundness."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin.errors import InputError
from gravbasin.forward.motion import is_axisymmetric
from gravbasin.inference.chance import Chance, Stencil
from gravbasin.inference.circularity import Circularity
from gravbasin.inference.detect import Detectability, detectability, signal_band
from gravbasin.inference.evidence import Fit, Posterior, predictive_fit
from gravbasin.inference.level import Level
from gravbasin.inference.likelihood import RingLikelihood, ring_likelihood, shape_scatter
from gravbasin.inference.marks import Mark, shape_marks
from gravbasin.inference.response import ring_response
from gravbasin.observed import (
    NoiseModel,
    RingMeans,
    estimate_noise,
    fit_regional,
    polynomial_basis,
    ring_means,
)
from gravbasin.runs.families import compare_families, impact_bank
from gravbasin.runs.forward_run import Modelled
from gravbasin.runs.noise_trial import NoiseTrial, try_noise
from gravbasin.runs.places import Places, places_of
from gravbasin.scenario import Scenario
from gravbasin.survey.sight import ring_sight
from gravbasin.survey.vanish import Vanishing, vanishing_erosion

__all__ = ["Comparison", "compare_with_map", "detect_without_map", "noise_of"]

Array = NDArray[np.float64]
KM = 1000.0

LEAST_RINGS = 8
LEAST_COVERAGE = 0.5
"""Rings with less of their area on the map say little about a circle and are left out."""

MASK_IN_DIAMETERS = 0.75
"""Radius masked while the noise is estimated: one and a half rim radii (common practice)."""


@dataclasses.dataclass(frozen=True, eq=False)
class Comparison:
    """The structure against the map.

    Attributes
    ----------
    noise, noise_trial
        Noise model, and how it stood its trial (None for a stated one).
    rings : RingMeans
        Observed ring means, mGal; rings with little coverage left out.
    template, template_draws : (n_ring,), (n_ring, n_draw) arrays, mGal
        Ring means of the scenario's model and of its draws, through the map's sampling and resolution.
    predicted : (3, n_ring) array, mGal
        Median, 5 % and 95 % of the posterior of the impact family, as ring means.
    regional : (n_ring,) array, mGal
        Regional fitted jointly with the posterior median, as ring means.
    standard_error : (n_ring,) array, mGal
        Of the observed means under correlated noise.
    detectability : Detectability
        Of the scenario's model.
    amplitude, amplitude_error : float
        Best multiple of the scenario's model, and its standard error.
    posteriors : tuple of Posterior
        The impact family first, then its rivals; the last is regional noise alone.
    fit : Fit
        How well the impact family agrees with the map.
    marks : tuple of Mark
        Wall dip, central high and the like, for the reader: the evidence holds the profile already.
    places : Places
        What other places of the map say.
    vanishing : Vanishing
        At which erosion level the scenario's structure falls below detection on this map.
    maps : Dataset (northing, easting)
        observed, regional, residual, modelled, mGal; for pictures.
    """

    noise: NoiseModel
    noise_trial: NoiseTrial | None
    rings: RingMeans
    template: Array
    template_draws: Array
    predicted: Array
    regional: Array
    standard_error: Array
    detectability: Detectability
    amplitude: float
    amplitude_error: float
    posteriors: tuple[Posterior, ...]
    fit: Fit
    marks: tuple[Mark, ...]
    places: Places
    vanishing: Vanishing
    maps: xr.Dataset

    @property
    def level(self) -> Level:
        """How the noise level varies from place to place."""
        return self.places.level

    @property
    def chance(self) -> Chance | None:
        """How often other places do as well."""
        return self.places.chance

    @property
    def circularity(self) -> Circularity | None:
        """Whether the anomaly is round; None where its rings leave the map."""
        return self.places.circularity

    @property
    def odds(self) -> xr.DataArray:
        """Logarithm of the odds of an impact structure against noise at every node with complete rings."""
        return self.places.odds


def noise_of(scenario: Scenario, observed: xr.DataArray | None) -> NoiseModel:
    """The stated noise, or that of the map outside the structure."""
    stated = scenario.noise
    if stated.sill_mgal and stated.range_km and stated.smoothness and stated.nugget_mgal is not None:
        return NoiseModel(
            sill_mgal=stated.sill_mgal,
            range_m=KM * stated.range_km,
            smoothness=stated.smoothness,
            nugget_mgal=stated.nugget_mgal,
            regional_order=stated.regional_order,
        )
    if observed is None:
        raise InputError(
            "noise",
            "(missing)",
            "is needed where there is no observed map",
            "state noise.sill_mgal, range_km, smoothness and nugget_mgal, or give observed.path",
        )
    return estimate_noise(
        observed,
        exclude=_mask(scenario),
        regional_order=stated.regional_order,
        resolution_m=_resolution(scenario),
        max_points=scenario.inference.noise_points,
        seed=scenario.seed,
    )


def compare_with_map(
    scenario: Scenario,
    modelled: Modelled,
    observed: xr.DataArray,
    noise: NoiseModel,
    *,
    progress: Callable[[str], None] = lambda stage: None,
) -> Comparison:
    """Everything the map says about the scenario's structure, its family and their rivals."""
    centre = _centre(scenario)
    rings = _covered(observed, centre, _ring_edges(scenario, observed))
    easting, northing = observed.easting.values - centre[0], observed.northing.values - centre[1]
    response = ring_response(rings.weights, easting, northing, modelled.radius, resolution=_resolution(scenario))
    covariances = [rings.covariance(n) for n in _plausible(scenario, noise)]
    regional = rings.weights @ _regional_basis(observed, centre, noise)
    likelihoods = [ring_likelihood(covariance, regional) for covariance in covariances]
    templates = response @ modelled.profiles
    robust = ring_likelihood(covariances[0] + shape_scatter(templates, rings.area_m2), regional)
    amplitude, amplitude_error = robust.amplitude(templates[:, 0], rings.mean)

    progress("drawing impact structures")
    bank = impact_bank(scenario, modelled.radius)
    progress("searching the map for chance circles")
    places = places_of(
        observed,
        rings,
        noise,
        bank,
        likelihoods[0],
        response,
        profile=(modelled.radius, modelled.profile),
        diameter=_diameter(scenario),
        resolution=_resolution(scenario),
        centres=scenario.inference.chance_centres,
        seed=scenario.seed,
    )
    progress("weighing rivals")
    posteriors = compare_families(scenario, bank, response, likelihoods, rings.mean, places.level)
    impact = posteriors[0]
    impact_rings = response @ impact.bank.profiles.T
    marks = shape_marks(
        rings,
        likelihoods,
        posteriors,
        response,
        rim_radius_m=0.5 * KM * impact.interval("rim_diameter_km")[0],
        level=places.level,
        seed=scenario.seed,
    )
    predicted = impact.quantiles(impact_rings, [0.5, 0.05, 0.95])
    exclude = _mask(scenario)
    maps = _maps(observed, noise, _on_map(scenario, modelled, observed), exclude)
    return Comparison(
        noise=noise,
        noise_trial=try_noise(
            observed, noise, maps.modelled, exclude=exclude, diameter=_diameter(scenario), seed=scenario.seed
        )
        if noise.n_points
        else None,
        rings=rings,
        template=templates[:, 0],
        template_draws=templates[:, 1:],
        predicted=predicted,
        regional=likelihoods[0].fitted_regional(rings.mean - predicted[0]),
        standard_error=np.sqrt(np.diag(covariances[0])),
        detectability=_seen(
            scenario, modelled, robust, covariances, templates, response, 2 * (_resolution(scenario) or _step(observed))
        ),
        amplitude=amplitude,
        amplitude_error=amplitude_error,
        posteriors=posteriors,
        fit=predictive_fit(likelihoods[0], impact_rings, rings.mean, impact.weights, places.level),
        marks=marks,
        places=places,
        vanishing=vanishing_erosion(scenario, ring_sight(response, covariances, regional), modelled.radius),
        maps=maps,
    )


def detect_without_map(scenario: Scenario, modelled: Modelled, noise: NoiseModel) -> tuple[Detectability, Vanishing]:
    """Detectability, and the erosion at which it ends, on an even survey with a stated noise where there is no map."""
    spacing = KM * scenario.inference.station_spacing_km
    reach = max(scenario.inference.outer_radius_in_diameters * _diameter(scenario), LEAST_RINGS * spacing)
    edges = spacing * np.arange(int(np.ceil(reach / spacing)) + 1.0)
    stencils = [
        Stencil.build(edges, (spacing, spacing), n, radius=modelled.radius) for n in _plausible(scenario, noise)
    ]
    best = stencils[0]
    templates = best.response @ modelled.profiles
    robust = ring_likelihood(best.covariance + shape_scatter(templates, best.area), best.likelihood.regional)
    covariances = [s.covariance for s in stencils]
    seen = _seen(scenario, modelled, robust, covariances, templates, best.response, 2 * spacing)
    sight = ring_sight(best.response, covariances, best.likelihood.regional)
    return seen, vanishing_erosion(scenario, sight, modelled.radius)


def _plausible(scenario: Scenario, noise: NoiseModel) -> list[NoiseModel]:
    """The best noise model, then others as plausible: level, range, smoothness and nugget are all uncertain."""
    return [noise, *noise.draws(np.random.default_rng([scenario.seed, 2]), scenario.inference.noise_draws)]


def _seen(
    scenario: Scenario,
    modelled: Modelled,
    robust: RingLikelihood,
    covariances: list[Array],
    templates: Array,
    response: Array,
    shortest: float,
) -> Detectability:
    functional = robust.filter(templates[:, 0]) @ response
    return detectability(
        robust,
        covariances,
        templates,
        false_alarm_probability=scenario.inference.false_alarm_probability,
        band_km=signal_band(modelled.radius, modelled.profile, functional, shortest=shortest),
    )


def _diameter(scenario: Scenario) -> float:
    return KM * scenario.crater.rim_diameter_km


def _resolution(scenario: Scenario) -> float | None:
    stated = scenario.observed.resolution_km if scenario.observed else None
    return KM * stated if stated else None


def _centre(scenario: Scenario) -> tuple[float, float]:
    assert scenario.observed is not None
    return KM * scenario.observed.centre_easting_km, KM * scenario.observed.centre_northing_km


def _mask(scenario: Scenario) -> tuple[float, float, float]:
    return (*_centre(scenario), MASK_IN_DIAMETERS * _diameter(scenario))


def _step(observed: xr.DataArray) -> float:
    return float(max(observed.easting[1] - observed.easting[0], observed.northing[1] - observed.northing[0]))


def _ring_edges(scenario: Scenario, observed: xr.DataArray) -> Array:
    """Rings one grid step wide, out to the tested disc's radius."""
    width = _step(observed)
    reach = max(scenario.inference.outer_radius_in_diameters * _diameter(scenario), LEAST_RINGS * width)
    return width * np.arange(int(np.ceil(reach / width)) + 1.0)


def _covered(observed: xr.DataArray, centre: tuple[float, float], edges: Array) -> RingMeans:
    rings = ring_means(observed, centre, edges)
    good = rings.coverage >= LEAST_COVERAGE
    # Keep a whole disc: from the centre to the first ring that is mostly off the map.
    count = int(np.argmin(good)) if not good.all() else good.size
    if count < LEAST_RINGS:
        raise InputError(
            "observed",
            f"{count} rings with data about the centre",
            f"must give at least {LEAST_RINGS}",
            "use a wider map, or check observed.centre_easting_km and centre_northing_km",
        )
    return ring_means(observed, centre, edges[: count + 1]) if count < good.size else rings


def _regional_basis(observed: xr.DataArray, centre: tuple[float, float], noise: NoiseModel) -> Array:
    east, north = np.meshgrid(observed.easting.values, observed.northing.values)
    scale = 0.5 * float(observed.easting[-1] - observed.easting[0])
    return polynomial_basis(east, north, noise.regional_order, centre=centre, scale=scale)


def _on_map(scenario: Scenario, modelled: Modelled, observed: xr.DataArray) -> Array:
    """The scenario's structure on the map's nodes, mGal: its profile turned about the centre, or its deformed grid."""
    if not is_axisymmetric(scenario.deformation):
        nodes = {"northing": observed.northing.values, "easting": observed.easting.values}
        return np.asarray(modelled.grid.interp(nodes, kwargs={"fill_value": 0.0}).values)
    east, north = _centre(scenario)
    distance = np.hypot(observed.easting.values - east, observed.northing.values[:, None] - north)
    return np.interp(distance, modelled.radius, modelled.profile, right=0.0)


def _maps(observed: xr.DataArray, noise: NoiseModel, on_map: Array, exclude: tuple[float, float, float]) -> xr.Dataset:
    regional = fit_regional(observed, noise, exclude=exclude)
    model_map = observed.copy(data=on_map)
    model_map.attrs = {"units": "mGal", "long_name": "modelled anomaly on the map's nodes"}
    return xr.Dataset(
        {"observed": observed, "regional": regional.regional, "residual": regional.residual, "modelled": model_map}
    )
