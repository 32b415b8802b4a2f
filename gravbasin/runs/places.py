"""What other places of the map say: how rough they are, how often they do as well, how round they are."""

from __future__ import annotations

import dataclasses

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin import labels
from gravbasin.inference.bank import Bank
from gravbasin.inference.chance import Chance, Stencil, chance_of, complete_nodes, random_ring_means
from gravbasin.inference.circularity import Circularity, circularity_test
from gravbasin.inference.harmonics import Harmonics
from gravbasin.inference.level import Level, Roughness, fit_roughness
from gravbasin.inference.likelihood import RingLikelihood
from gravbasin.inference.odds import log_odds
from gravbasin.observed import NoiseModel, RingMeans

__all__ = ["Places", "places_of"]

Array = NDArray[np.float64]

ROUNDNESS_PLACES = 500
"""Other places the roundness of the anomaly is compared with."""


@dataclasses.dataclass(frozen=True, eq=False)
class Places:
    """The impact family held against every node of the map that has complete rings.

    Attributes
    ----------
    stencil : Stencil
        Rings about a node.
    templates : (n_ring, n_model) array, mGal
        Ring means of the impact bank through the stencil.
    roughness : Roughness
        How the noise level varies from place to place.
    texture : (n_northing, n_easting) array
        Power of azimuthal harmonics about every node, NaN where rings leave the map or meet gaps.
    level : Level
        The noise level at the structure, as far as the texture there tells.
    chance : Chance or None
        How often other places do as well as the structure.
    circularity : Circularity or None
        Whether the anomaly is round; None where its rings leave the map.
    odds : DataArray (northing, easting)
        Logarithm of the odds of an impact structure against noise; NaN where rings leave the map or meet gaps.
    """

    stencil: Stencil
    templates: Array
    roughness: Roughness
    texture: Array
    level: Level
    chance: Chance | None
    circularity: Circularity | None
    odds: xr.DataArray

    def log_odds(self, data: Array, level: Level) -> Array:
        """The statistic for ring means, (n_ring, n_place) mGal, about places of this noise level."""
        return log_odds(self.stencil.likelihood, self.templates, data, level)

    def level_at(self, rows: NDArray[np.intp], columns: NDArray[np.intp]) -> Level:
        """The noise level at nodes with complete rings."""
        return self.roughness.at(self.texture[rows, columns])


def places_of(
    observed: xr.DataArray,
    rings: RingMeans,
    noise: NoiseModel,
    bank: Bank,
    likelihood: RingLikelihood,
    response: Array,
    *,
    profile: tuple[Array, Array],
    diameter: float,
    resolution: float | None,
    centres: int,
    seed: int,
) -> Places:
    """Search the whole map with the impact family's bank.

    Parameters
    ----------
    observed : DataArray (northing, easting), mGal
        The map.
    rings : RingMeans
        Of the structure: their edges are used everywhere.
    noise : NoiseModel
        Its best noise model.
    bank : Bank
        Impact structures drawn from the prior.
    likelihood, response
        Of the structure's own rings, which may be incomplete or off the nodes.
    profile : (radius, anomaly), m and mGal
        Of the scenario's structure: elongation is measured against it.
    diameter : float, m
        Places nearer to the structure than this are no chance.
    resolution : float or None, m
        Of the map, where stated.
    centres : int
        Other places to rank the structure among; 0 to leave the chance test out.
    seed : int
        Of the choice of places.
    """
    stencil = Stencil.build(rings.edges_m, rings.spacing_m, noise, radius=bank.radius, resolution=resolution)
    rows, columns = complete_nodes(observed, stencil.shape)
    data = stencil.ring_means(observed.values, rows, columns)
    east, north = observed.easting.values, observed.northing.values
    elsewhere = np.hypot(east[columns] - rings.centre[0], north[rows] - rings.centre[1]) > diameter
    independent = float(elsewhere.sum() * rings.spacing_m[0] * rings.spacing_m[1] / (np.pi * diameter**2))
    misfits = np.sum(stencil.likelihood.whiten(data[:, elsewhere]) ** 2, axis=0)
    node = (int(np.argmin(np.abs(north - rings.centre[1]))), int(np.argmin(np.abs(east - rings.centre[0]))))
    texture = np.full(observed.shape, np.nan)
    harmonics = Harmonics.build(rings.edges_m, rings.spacing_m, noise, resolution=resolution)
    texture[rows, columns] = there = harmonics.texture(observed.values)[rows, columns]
    roughness = fit_roughness(misfits, stencil.likelihood.dof, there[elsewhere], independent)
    level = roughness.at_one(float(texture[node]))
    templates = stencil.response @ bank.profiles.T
    found = log_odds(stencil.likelihood, templates, data, roughness.at(there))
    places = Places(
        stencil, templates, roughness, texture, level, None, None, _odds_map(observed, rows, columns, found)
    )
    here = log_odds(likelihood, response @ bank.profiles.T, rings.mean[:, None], level)
    chance = None
    if centres:
        chance = chance_of(
            float(here[0]),
            found[elsewhere],
            centres=centres,
            independent=independent,
            seed=seed,
            fields=lambda n: _on_random_fields(places, rings.spacing_m, noise, n, seed),
        )
    picked = np.random.default_rng([seed, 3]).choice(
        np.flatnonzero(elsewhere), min(ROUNDNESS_PLACES, int(elsewhere.sum())), replace=False
    )
    others = (rows[picked], columns[picked])
    circularity = circularity_test(observed, harmonics, node, others, level=roughness.anywhere, profile=profile)
    return dataclasses.replace(places, chance=chance, circularity=circularity)


def _on_random_fields(places: Places, spacing: tuple[float, float], noise: NoiseModel, count: int, seed: int) -> Array:
    variance, level = places.roughness.draw(np.random.default_rng([seed, 13]), count)
    return places.log_odds(random_ring_means(places.stencil, spacing, noise, variance, seed), level)


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
