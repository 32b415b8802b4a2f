"""Circular candidates anywhere on a map, ranked, with the search charged for."""

from __future__ import annotations

import dataclasses

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

from gravbasin.inference.chance import complete_nodes
from gravbasin.observed import NoiseModel, simulate_noise
from gravbasin.runs.places import Places

__all__ = ["Candidate", "candidate_table", "search_map"]

Array = NDArray[np.float64]

MOST_CANDIDATES = 10
FIELDS = 99
"""Random maps behind the search-wide probability: the smallest it can be is 0.01."""

MODELS = 300
"""Models of the bank used on random maps, and for the same statistic on the real one."""


@dataclasses.dataclass(frozen=True)
class Candidate:
    """A place where an impact structure is likelier than its surroundings.

    Attributes
    ----------
    easting, northing : float, m
        Node of the map.
    log_odds : float
        Natural logarithm of the odds against regional noise.
    search_p_value : float
        Share of random maps of the same noise whose best place does as well: the search over the map is charged for.
    """

    easting: float
    northing: float
    log_odds: float
    search_p_value: float


def search_map(
    observed: xr.DataArray, places: Places, noise: NoiseModel, *, diameter: float, seed: int
) -> list[Candidate]:
    """The most likely places, at least one diameter (m) apart, best first."""
    rows, columns = complete_nodes(observed, places.stencil.shape)
    east, north = observed.easting.values[columns], observed.northing.values[rows]
    values = places.odds.values[rows, columns]
    few = dataclasses.replace(places, templates=places.templates[:, :MODELS])
    best = _largest_by_map(observed, few, noise, (rows, columns), seed)
    found: list[Candidate] = []
    free = np.ones(values.size, dtype=bool)
    while free.any() and len(found) < MOST_CANDIDATES:
        i = int(np.argmax(np.where(free, values, -np.inf)))
        if values[i] <= 0.0:
            break
        node = rows[[i]], columns[[i]]
        here = few.log_odds(places.stencil.ring_means(observed.values, *node), places.level_at(*node))[0]
        p = (1 + int(np.sum(best >= here))) / (1 + best.size)
        found.append(Candidate(float(east[i]), float(north[i]), float(values[i]), float(p)))
        free &= np.hypot(east - east[i], north - north[i]) > diameter
    return found


def candidate_table(candidates: list[Candidate]) -> pd.DataFrame:
    """Rank, easting_km, northing_km, log_odds, search_p_value: the table written to candidates.csv."""
    return pd.DataFrame(
        {
            "rank": range(1, len(candidates) + 1),
            "easting_km": [c.easting / 1e3 for c in candidates],
            "northing_km": [c.northing / 1e3 for c in candidates],
            "log_odds": [c.log_odds for c in candidates],
            "search_p_value": [c.search_p_value for c in candidates],
        }
    )


def _largest_by_map(
    observed: xr.DataArray,
    few: Places,
    noise: NoiseModel,
    nodes: tuple[NDArray[np.intp], NDArray[np.intp]],
    seed: int,
) -> Array:
    """Largest log odds on random maps of the noise, each place with a local level as varied as on the real one.

    Levels are drawn apart for overlapping places, which makes the largest value larger: the charge errs on the safe
    side.
    """
    rng = np.random.default_rng([seed, 8])
    largest = np.empty(FIELDS)
    for i in range(FIELDS):
        field = simulate_noise(noise, observed.easting.values, observed.northing.values, seed=rng).values
        variance, level = few.roughness.draw(rng, nodes[0].size)
        largest[i] = few.log_odds(few.stencil.ring_means(field, *nodes) * np.sqrt(variance), level).max()
    return largest
