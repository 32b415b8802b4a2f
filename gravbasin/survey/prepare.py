"""From a scenario to everything a layout is judged by: place, plausible noise, models and their rivals."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gravbasin.crater.model import ground_of
from gravbasin.crater.priors import Range
from gravbasin.crater.rivals import Rival, rivals_of
from gravbasin.errors import InputError
from gravbasin.inference.bank import Bank, ImpactFamily, build_bank
from gravbasin.observed import NoiseModel
from gravbasin.scenario import Scenario, Survey
from gravbasin.survey.errors import error_terms, station_error
from gravbasin.survey.layouts import Site, square_area
from gravbasin.survey.merit import SIMULATIONS, Stakes, robust_gram, scatter_root
from gravbasin.survey.plan import Quest
from gravbasin.survey.shapes import projected_crs, read_points, read_shapes
from gravbasin.survey.sight import Plane, disc_weights, profile_curves
from gravbasin.survey.vanish import Worn, worn_structures

__all__ = ["Prepared", "degrees", "plausible_noises", "prepare", "site_of"]

Array = NDArray[np.float64]
KM = 1000.0

STRUCTURE_DRAWS = 32
NEAREST = 25
"""Bodies of each family, nearest to the structure, about which more are drawn."""


@dataclasses.dataclass(frozen=True, eq=False)
class Prepared:
    """A quest, and the structures behind its vanishing level and chart.

    Attributes
    ----------
    quest : Quest
    worn : Worn
        The scenario's structure worn ever deeper.
    chart : tuple of Worn
        Other diameters, to the same levels.
    profile : (n_radius,) array, mGal
        The scenario's structure at the radii of the curves.
    """

    quest: Quest
    worn: Worn
    chart: tuple[Worn, ...]
    profile: Array


def site_of(scenario: Scenario, survey: Survey, map_crs: str | None) -> Site:
    """The survey's place, files read and brought into one system.

    Parameters
    ----------
    scenario, survey : Scenario, Survey
    map_crs : str or None
        Reference system of the observed map, where it has one.

    Raises
    ------
    InputError
        A missing centre, a file that cannot be used, degrees without a system, a system that differs from the map's.
    """
    name = survey.crs or map_crs
    crs = projected_crs(name, where="survey.crs" if survey.crs else "observed.crs_wkt") if name else None
    if survey.crs and map_crs and crs != projected_crs(map_crs, where="observed.crs_wkt"):
        raise InputError(
            "survey.crs", survey.crs, "differs from that of the observed map", "leave it out, or project the map"
        )
    if survey.centre_easting_km is not None and survey.centre_northing_km is not None:
        centre = KM * np.array([survey.centre_easting_km, survey.centre_northing_km])
    elif scenario.observed is not None:
        centre = KM * np.array([scenario.observed.centre_easting_km, scenario.observed.centre_northing_km])
    elif survey.area is not None or survey.existing is not None or survey.roads is not None:
        raise InputError(
            "survey.centre_easting_km", "(missing)", "is needed with survey.area, existing or roads",
            "give the centre of the structure in the survey's coordinates, in kilometres",
        )  # fmt: skip
    else:
        centre = np.zeros(2)
    if survey.area is not None:
        area = read_shapes(survey.area, "polygon", crs=crs, what="survey.area").polygons
    else:
        area = square_area(centre, 1.5 * KM * scenario.crater.rim_diameter_km)
    no_go = [p for path in survey.no_go for p in read_shapes(path, "polygon", crs=crs, what="survey.no_go").polygons]
    roads = read_shapes(survey.roads, "line", crs=crs, what="survey.roads").lines if survey.roads else ()
    existing = read_points(survey.existing, crs=crs, what="survey.existing") if survey.existing else np.zeros((0, 2))
    return Site(centre, area, tuple(no_go), roads, existing, crs)


def degrees(points: Array, crs: Any) -> Array | None:
    """Longitude and latitude of points, (n, 2), or None where the reference system is not known."""
    if crs is None:
        return None
    from pyproj import Transformer

    moved = Transformer.from_crs(crs, "OGC:CRS84", always_xy=True).transform(*points.T)
    return np.stack(moved, axis=1)


def plausible_noises(survey: Survey, noise: NoiseModel, seed: int) -> tuple[NoiseModel, ...]:
    """The best noise model for new stations, then others as plausible.

    Notes
    -----
    Smoothness and nugget cannot be told apart from coarse data, but the gain of closer stations hangs on them; so each
    draw has its own smoothness (from the estimate, or scattered about a stated one) and its own share of the nugget
    that is geology, not error of the old map.
    """
    rng = np.random.default_rng([seed, 9])
    low, high = survey.map_nugget_share
    middle = 0.5 * (low + high)
    best = dataclasses.replace(noise, nugget_mgal=float(noise.nugget_mgal * np.sqrt(middle)))
    found = [best]
    for drawn in noise.draws(rng, survey.noise_draws):
        share, shift = rng.uniform(low, high), rng.standard_normal()
        rougher = survey.smoothness_scatter * shift if noise.posterior is None else 0.0
        found.append(
            dataclasses.replace(
                drawn,
                nugget_mgal=float(drawn.nugget_mgal * np.sqrt(share)),
                smoothness=float(np.clip(drawn.smoothness * np.exp(rougher), 0.3, 5.0)),
            )
        )
    return tuple(found)


def prepare(
    scenario: Scenario, survey: Survey, site: Site, noise: NoiseModel,
    *, progress: Callable[[str], None] = lambda stage: None,
) -> Prepared:  # fmt: skip
    """Everything a layout is judged by.

    Parameters
    ----------
    scenario, survey, site
    noise : NoiseModel
        Stated, or estimated from the map.
    progress : callable
        Told of every stage.
    """
    family = ImpactFamily(scenario)
    sizes = family.ranges["rim_diameter_km"]
    radius = _radii(KM * sizes.high, site)
    progress("drawing structures and rivals")
    own = worn_structures(
        scenario, radius, erosion_km=np.array([ground_of(scenario).erosion / KM]), draws=STRUCTURE_DRAWS
    )
    templates = own.profiles[0].T
    height, seed = scenario.model.station_height_m, scenario.seed
    impacts = build_bank(family, radius, models=2 * survey.models, height=height, rng=np.random.default_rng([seed, 10]))
    noises = plausible_noises(survey, noise, seed)
    plane = Plane.of(radius)
    banks = _rival_banks(scenario, survey, plane.gram([noises[0]]).gram[0], radius, templates)
    progress("wearing structures down")
    worn = worn_structures(scenario, radius)
    diameters = np.geomspace(sizes.low, sizes.high, survey.chart_diameters)
    chart = tuple(
        worn_structures(scenario, radius, rim_diameter_km=float(d), erosion_km=worn.erosion_km, draws=12)
        for d in diameters
    )
    everything = [templates, impacts.profiles.T, *(b.profiles.T for b, _ in banks.values())]
    everything += [w.profiles.reshape(-1, radius.size).T for w in (worn, *chart)]
    everything.append(worn.causes.reshape(-1, radius.size).T)
    curves = profile_curves(radius, np.concatenate(everything, axis=1))
    held = curves.coefficients(templates)
    stakes = Stakes(
        curves=curves,
        model=held[:, 0],
        draws=held[:, 1:],
        scatter=scatter_root(held, np.ones(len(held))),
        impacts=curves.coefficients(impacts.profiles.T),
        erosion=impacts.parameters["erosion_km"],
        rivals={name: curves.coefficients(bank.profiles.T) for name, (bank, _) in banks.items()},
        stretch={name: limits for name, (_, limits) in banks.items()},
        deviates=np.random.default_rng([seed, 11]).standard_normal((len(held), SIMULATIONS)),
    )
    searched = float(np.log(sizes.high / sizes.low))
    quest = Quest(scenario, survey, site, stakes, plane.through(curves), noises, *_errors(survey, site), searched)
    return Prepared(quest, worn, chart, templates[:, 0])


def _radii(widest: float, site: Site) -> Array:
    """Radii of profiles, m: even across the widest structure, then growing past the farthest corner."""
    low, high = site.bounds
    corners = np.array([[x, y] for x in (low[0], high[0]) for y in (low[1], high[1])])
    places = np.concatenate([corners, site.existing]) - site.centre
    near = np.linspace(0.0, 0.8 * widest, 141)
    far = max(3.0 * widest, 1.1 * float(np.hypot(*places.T).max()))
    return np.concatenate([near, np.geomspace(near[-1], far, 35)[1:]])


def _errors(survey: Survey, site: Site) -> tuple[float, float]:
    place = degrees(site.centre[None, :], site.crs)
    new = station_error(error_terms(survey.errors, latitude=None if place is None else float(place[0, 1])))
    return new, survey.existing_error_mgal or new


def _rival_banks(
    scenario: Scenario, survey: Survey, gram: Array, radius: Array, templates: Array
) -> dict[str, tuple[Bank, Array]]:
    """Rivals drawn from their priors, and more of them where they come nearest to the structure."""
    robust = robust_gram(gram, scatter_root(templates, disc_weights(radius)))
    found = {}
    for number, rival in enumerate(rivals_of(scenario)):
        rng = np.random.default_rng([scenario.seed, 12, number])
        height = scenario.model.station_height_m
        first = build_bank(rival, radius, models=survey.models, height=height, rng=rng)
        near = _nearest(first, _limits(first, rival), templates[:, 0], robust)
        again = build_bank(
            rival, radius, models=survey.models // 2, height=height, rng=rng, ranges=_around(rival, first, near)
        )
        both = Bank(
            rival.name,
            {name: np.concatenate([first.parameters[name], again.parameters[name]]) for name in first.parameters},
            radius,
            np.concatenate([first.profiles, again.profiles]),
            np.concatenate([first.latent, again.latent]),
        )
        found[rival.name] = (both, _limits(both, rival))
    return found


def _limits(bank: Bank, rival: Rival) -> Array:
    """Least and largest multiple of every body that the prior of its density contrast allows, (2, n)."""
    if "contrast_kg_m3" not in rival.ranges:
        return np.ones((2, bank.size))
    prior, contrast = rival.ranges["contrast_kg_m3"], bank.parameters["contrast_kg_m3"]
    return np.sort(np.stack([prior.low / contrast, prior.high / contrast]), axis=0)


def _nearest(bank: Bank, limits: Array, model: Array, gram: Array) -> NDArray[np.intp]:
    """Bodies nearest to the structure, each at its best multiple, seen by an endless survey (its G on the radii)."""
    bodies = bank.profiles.T
    white = gram @ bodies
    along, power = model @ white, np.maximum(np.sum(bodies * white, axis=0), 1e-300)
    multiple = np.clip(along / power, *limits)
    return np.argsort(multiple**2 * power - 2.0 * multiple * along)[:NEAREST]


def _around(rival: Rival, bank: Bank, near: NDArray[np.intp]) -> Mapping[str, Range]:
    """Ranges that hold the nearest bodies, with a tenth of the prior to either side."""
    found = {}
    for name, prior in rival.ranges.items():
        values, margin = bank.parameters[name][near], 0.1 * (prior.high - prior.low)
        low, high = max(prior.low, float(values.min()) - margin), min(prior.high, float(values.max()) + margin)
        found[name] = Range(low, high, prior.logarithmic) if high > low else prior
    return found
