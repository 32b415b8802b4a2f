"""The observed side of a run: noise, ring means, families of bodies, detectability, chance, roundness."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin import labels
from gravbasin.errors import InputError
from gravbasin.inference.bank import Bank
from gravbasin.inference.chance import Chance, Stencil, chance_of, complete_nodes, random_ring_means
from gravbasin.inference.circularity import Circularity, Harmonics, circularity_test
from gravbasin.inference.detect import Detectability, detectability, signal_band
from gravbasin.inference.evidence import Fit, Level, Posterior, fit_level, predictive_fit
from gravbasin.inference.likelihood import RingLikelihood, ring_likelihood, shape_scatter
from gravbasin.inference.odds import log_odds
from gravbasin.inference.response import ring_response
from gravbasin.observed import (
    NoiseCheck,
    NoiseModel,
    RingMeans,
    check_noise,
    estimate_noise,
    fit_regional,
    polynomial_basis,
    ring_means,
)
from gravbasin.runs.families import compare_families, impact_bank
from gravbasin.runs.forward_run import Modelled
from gravbasin.scenario import Scenario

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
    noise, noise_check, level
        Noise model, how well it foretells parts of the map left out (None for a stated one), and how its level varies
        from place to place.
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
    chance : Chance or None
        How often other places do as well.
    circularity : Circularity or None
        Whether the anomaly is round; None where its rings leave the map.
    odds : DataArray (northing, easting)
        Logarithm of the odds of an impact structure against noise at every node with complete rings.
    maps : Dataset (northing, easting)
        observed, regional, residual, modelled, mGal; for pictures.
    """

    noise: NoiseModel
    noise_check: NoiseCheck | None
    level: Level
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
    chance: Chance | None
    circularity: Circularity | None
    odds: xr.DataArray
    maps: xr.Dataset


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
    places = _Places.of(scenario, modelled, observed, noise, rings, bank, likelihoods[0], response)
    progress("weighing rivals")
    posteriors = compare_families(scenario, bank, response, likelihoods, rings.mean, places.level)
    impact = posteriors[0]
    impact_rings = response @ impact.bank.profiles.T
    predicted = impact.quantiles(impact_rings, [0.5, 0.05, 0.95])
    exclude = _mask(scenario)
    return Comparison(
        noise=noise,
        noise_check=check_noise(observed, noise, exclude=exclude) if noise.n_points else None,
        level=places.level,
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
        chance=places.chance,
        circularity=places.circularity,
        odds=places.odds,
        maps=_maps(observed, noise, modelled, np.hypot(easting, northing[:, None]), exclude),
    )


def detect_without_map(scenario: Scenario, modelled: Modelled, noise: NoiseModel) -> Detectability:
    """Detectability on an even survey with a stated noise, where there is no map."""
    spacing = KM * scenario.inference.station_spacing_km
    reach = max(scenario.inference.outer_radius_in_diameters * _diameter(scenario), LEAST_RINGS * spacing)
    edges = spacing * np.arange(int(np.ceil(reach / spacing)) + 1.0)
    stencils = [
        Stencil.build(edges, (spacing, spacing), n, radius=modelled.radius) for n in _plausible(scenario, noise)
    ]
    best = stencils[0]
    templates = best.response @ modelled.profiles
    robust = ring_likelihood(best.covariance + shape_scatter(templates, best.area), best.likelihood.regional)
    return _seen(scenario, modelled, robust, [s.covariance for s in stencils], templates, best.response, 2 * spacing)


@dataclasses.dataclass(frozen=True, eq=False)
class _Places:
    """What other places of the map say: how rough they are, how often they do as well, how round they are."""

    level: Level
    chance: Chance | None
    circularity: Circularity | None
    odds: xr.DataArray

    @classmethod
    def of(
        cls,
        scenario: Scenario,
        modelled: Modelled,
        observed: xr.DataArray,
        noise: NoiseModel,
        rings: RingMeans,
        bank: Bank,
        likelihood: RingLikelihood,
        response: Array,
    ) -> _Places:
        stencil = Stencil.build(
            rings.edges_m, rings.spacing_m, noise, radius=modelled.radius, resolution=_resolution(scenario)
        )
        rows, columns = complete_nodes(observed, stencil.shape)
        data = stencil.ring_means(observed.values, rows, columns)
        away = np.hypot(
            observed.easting.values[columns] - rings.centre[0], observed.northing.values[rows] - rings.centre[1]
        )
        elsewhere = away > _diameter(scenario)
        cell = rings.spacing_m[0] * rings.spacing_m[1]
        independent = elsewhere.sum() * cell / (np.pi * _diameter(scenario) ** 2)
        misfits = np.sum(stencil.likelihood.whiten(data[:, elsewhere]) ** 2, axis=0)
        level = fit_level(misfits, stencil.likelihood.dof, float(independent))
        templates = stencil.response @ bank.profiles.T
        found = log_odds(stencil.likelihood, templates, bank.log_weight, data, level)
        here = log_odds(likelihood, response @ bank.profiles.T, bank.log_weight, rings.mean[:, None], level)
        chance = None
        if scenario.inference.chance_centres:
            chance = chance_of(
                float(here[0]),
                found[elsewhere],
                centres=scenario.inference.chance_centres,
                independent=float(independent),
                seed=scenario.seed,
                fields=lambda count: log_odds(
                    stencil.likelihood,
                    templates,
                    bank.log_weight,
                    random_ring_means(stencil, rings.spacing_m, noise, level, count, scenario.seed),
                    level,
                ),
            )
        harmonics = Harmonics.build(rings.edges_m, rings.spacing_m, noise)
        rng = np.random.default_rng([scenario.seed, 3])
        nodes = rng.choice(np.flatnonzero(elsewhere), min(500, int(elsewhere.sum())), replace=False)
        node = (
            int(np.argmin(np.abs(observed.northing.values - rings.centre[1]))),
            int(np.argmin(np.abs(observed.easting.values - rings.centre[0]))),
        )
        circularity = circularity_test(observed, harmonics, node, (rows[nodes], columns[nodes]))
        return cls(level, chance, circularity, _odds_map(observed, rows, columns, found))


def _odds_map(observed: xr.DataArray, rows: NDArray[np.intp], columns: NDArray[np.intp], found: Array) -> xr.DataArray:
    values = np.full(observed.shape, np.nan)
    values[rows, columns] = found
    return labels.data_array(
        values,
        ("northing", "easting"),
        {"northing": observed.northing.values, "easting": observed.easting.values},
        name="log_odds",
        units="1",
        long_name="natural logarithm of the odds of an impact structure against regional noise, before any prior odds",
    )


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


def _maps(
    observed: xr.DataArray, noise: NoiseModel, modelled: Modelled, distance: Array, exclude: tuple[float, float, float]
) -> xr.Dataset:
    regional = fit_regional(observed, noise, exclude=exclude)
    on_map = np.interp(distance.ravel(), modelled.radius, modelled.profile, right=0.0).reshape(distance.shape)
    model_map = observed.copy(data=on_map)
    model_map.attrs = {"units": "mGal", "long_name": "modelled anomaly on the map's nodes"}
    return xr.Dataset(
        {"observed": observed, "regional": regional.regional, "residual": regional.residual, "modelled": model_map}
    )
