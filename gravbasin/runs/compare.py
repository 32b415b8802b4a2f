"""The observed side of a run: noise, ring means, detectability, misfit, chance."""

from __future__ import annotations

import dataclasses

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin.errors import InputError
from gravbasin.inference.chance import Chance, Stencil, chance_test, local_statistic
from gravbasin.inference.detect import Detectability, detectability, signal_band
from gravbasin.inference.likelihood import Misfit, RingLikelihood, ring_likelihood, shape_scatter, total_scatter
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
from gravbasin.runs.forward_run import Modelled
from gravbasin.scenario import Scenario

__all__ = ["Comparison", "compare_with_map", "detect_without_map", "noise_of"]

Array = NDArray[np.float64]
KM = 1000.0

LEAST_RINGS = 8
LEAST_COVERAGE = 0.5
"""Rings with less of their area on the map say little about a circle and are left out."""

MASK_IN_DIAMETERS = 0.75
"""Radius masked while the noise is estimated: one and a half rim radii (DETECTION practice)."""


@dataclasses.dataclass(frozen=True, eq=False)
class Comparison:
    """The structure against the map.

    Attributes
    ----------
    noise : NoiseModel
        Estimated or stated.
    noise_check : NoiseCheck or None
        How well an estimated noise foretells parts of the map left out.
    rings : RingMeans
        Observed ring means, mGal; rings with little coverage left out.
    template, template_draws : (n_ring,), (n_ring, n_draw) arrays, mGal
        Ring means of the model and of its draws, through the map's sampling and resolution.
    regional : (n_ring,) array, mGal
        Jointly fitted regional, as ring means.
    standard_error : (n_ring,) array, mGal
        Of the observed means under correlated noise.
    detectability, misfit, chance
        Results.
    amplitude, amplitude_error : float
        Best multiple of the model, and its standard error.
    maps : Dataset (northing, easting)
        observed, regional, residual, modelled, mGal; for pictures.
    """

    noise: NoiseModel
    noise_check: NoiseCheck | None
    rings: RingMeans
    template: Array
    template_draws: Array
    regional: Array
    standard_error: Array
    detectability: Detectability
    misfit: Misfit
    amplitude: float
    amplitude_error: float
    chance: Chance | None
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
    assert scenario.observed is not None
    resolution = scenario.observed.resolution_km
    return estimate_noise(
        observed,
        exclude=(*_centre(scenario), MASK_IN_DIAMETERS * _diameter(scenario)),
        regional_order=stated.regional_order,
        resolution_m=KM * resolution if resolution else None,
        max_points=scenario.inference.noise_points,
        seed=scenario.seed,
    )


def compare_with_map(scenario: Scenario, modelled: Modelled, observed: xr.DataArray, noise: NoiseModel) -> Comparison:
    """Everything the map says about the modelled structure."""
    assert scenario.observed is not None
    centre, stated = _centre(scenario), scenario.observed.resolution_km
    resolution = KM * stated if stated else None
    rings = _covered(observed, centre, _ring_edges(scenario, observed))
    easting, northing = observed.easting.values - centre[0], observed.northing.values - centre[1]
    response = ring_response(rings.weights, easting, northing, modelled.radius, resolution=resolution)
    templates = response @ modelled.profiles
    covariances = [rings.covariance(n) for n in _plausible(scenario, noise)]
    regional_columns = rings.weights @ _regional_basis(observed, centre, noise)
    likelihood = ring_likelihood(covariances[0] + shape_scatter(templates, rings.area_m2), regional_columns)
    all_scatter = ring_likelihood(covariances[0] + total_scatter(templates), regional_columns)
    template = templates[:, 0]
    amplitude, amplitude_error = likelihood.amplitude(template, rings.mean)
    shortest = 2 * (resolution or max(rings.spacing_m))
    exclude = (*centre, MASK_IN_DIAMETERS * _diameter(scenario))
    return Comparison(
        noise=noise,
        noise_check=check_noise(observed, noise, exclude=exclude) if noise.n_points else None,
        rings=rings,
        template=template,
        template_draws=templates[:, 1:],
        regional=all_scatter.fitted_regional(rings.mean - template),
        standard_error=np.sqrt(np.diag(covariances[0])),
        detectability=_seen(scenario, modelled, likelihood, covariances, templates, response, shortest),
        misfit=all_scatter.misfit(template, rings.mean),
        amplitude=amplitude,
        amplitude_error=amplitude_error,
        chance=_chance(scenario, modelled, observed, noise, rings, resolution, likelihood, template),
        maps=_maps(observed, noise, modelled, np.hypot(easting, northing[:, None]), exclude),
    )


def detect_without_map(scenario: Scenario, modelled: Modelled, noise: NoiseModel) -> Detectability:
    """Detectability on an even survey with a stated noise, where there is no map."""
    spacing = KM * scenario.inference.station_spacing_km
    reach = max(scenario.inference.outer_radius_in_diameters * _diameter(scenario), LEAST_RINGS * spacing)
    edges = spacing * np.arange(int(np.ceil(reach / spacing)) + 1.0)
    stencils = [
        Stencil.build(edges, (spacing, spacing), n, radius=modelled.radius, profiles=modelled.profiles, resolution=None)
        for n in _plausible(scenario, noise)
    ]
    best = stencils[0]
    return _seen(
        scenario,
        modelled,
        best.likelihood,
        [s.covariance for s in stencils],
        best.templates,
        best.response,
        2 * spacing,
    )


def _plausible(scenario: Scenario, noise: NoiseModel) -> list[NoiseModel]:
    """The best noise model, then others as plausible: level, range, smoothness and nugget are all uncertain."""
    return [noise, *noise.draws(np.random.default_rng([scenario.seed, 2]), scenario.inference.noise_draws)]


def _seen(
    scenario: Scenario,
    modelled: Modelled,
    likelihood: RingLikelihood,
    covariances: list[Array],
    templates: Array,
    response: Array,
    shortest: float,
) -> Detectability:
    functional = likelihood.filter(templates[:, 0]) @ response
    return detectability(
        likelihood,
        covariances,
        templates,
        false_alarm_probability=scenario.inference.false_alarm_probability,
        band_km=signal_band(modelled.radius, modelled.profile, functional, shortest=shortest),
    )


def _diameter(scenario: Scenario) -> float:
    return KM * scenario.crater.rim_diameter_km


def _centre(scenario: Scenario) -> tuple[float, float]:
    assert scenario.observed is not None
    return KM * scenario.observed.centre_easting_km, KM * scenario.observed.centre_northing_km


def _ring_edges(scenario: Scenario, observed: xr.DataArray) -> Array:
    """Rings one grid step wide, out to the tested disc's radius."""
    width = float(max(observed.easting[1] - observed.easting[0], observed.northing[1] - observed.northing[0]))
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


def _chance(
    scenario: Scenario,
    modelled: Modelled,
    observed: xr.DataArray,
    noise: NoiseModel,
    rings: RingMeans,
    resolution: float | None,
    likelihood: RingLikelihood,
    template: Array,
) -> Chance | None:
    if scenario.inference.chance_centres == 0:
        return None
    stencil = Stencil.build(
        rings.edges_m,
        rings.spacing_m,
        noise,
        radius=modelled.radius,
        profiles=modelled.profiles,
        resolution=resolution,
    )
    at_structure = local_statistic(likelihood, template, rings.mean[:, None])
    return chance_test(
        observed,
        stencil,
        float(at_structure[0]),
        centre=_centre(scenario),
        exclude_radius=_diameter(scenario),
        centres=scenario.inference.chance_centres,
        noise=noise,
        seed=scenario.seed,
    )


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
