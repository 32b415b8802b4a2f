"""At which erosion level a structure vanishes: signal-to-noise and detection probability as it is worn down."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits

from gravbasin.crater import EROSION_RATES, PARTS, CraterModel, contrast, contrast_parts, crater_model, shared_mesh
from gravbasin.crater.model import ground_of
from gravbasin.forward.rings import ring_table
from gravbasin.inference.bank import BANK_LAYERS, BANK_RINGS, ImpactFamily
from gravbasin.inference.detect import detection_probability
from gravbasin.scenario import Scenario
from gravbasin.survey.merit import filter_of, scatter_root
from gravbasin.survey.sight import Curves, Sight, disc_weights

__all__ = ["CAUSES", "Chart", "Vanishing", "Worn", "chart_of", "vanishing_erosion", "vanishing_of", "worn_structures"]

Array = NDArray[np.float64]
KM = 1000.0

CAUSES = {"shallow fill and fractures": PARTS[:5], "uplifted deep crust": PARTS[5:6], "raised Moho": PARTS[6:]}
"""Causes of the anomaly as erosion takes them: from the top down."""


@dataclasses.dataclass(frozen=True, eq=False)
class Worn:
    """One structure and draws of its scatter, worn ever deeper.

    Attributes
    ----------
    rim_diameter_km : float
    erosion_km : (n_level,) array
        Rock stripped, from 0 down.
    radius : (n_radius,) array, m
    profiles : (n_level, 1 + n_draw, n_radius) array, mGal
        The first is the structure itself. A draw keeps its random numbers at every level.
    causes : (n_level, n_cause, n_radius) array, mGal
        The structure itself by `CAUSES`.
    """

    rim_diameter_km: float
    erosion_km: Array
    radius: Array
    profiles: Array
    causes: Array


@dataclasses.dataclass(frozen=True, eq=False)
class Vanishing:
    """How a structure fades as it is worn down.

    Attributes
    ----------
    median, low, high : float
        Deepest erosion, km, at which the detection probability still reaches the wanted one, over plausible noise and
        scatter of the structure: median and central 90 %. 0 where it is never reached.
    open_ended : float
        Share of cases still seen at the deepest level worked out: where it exceeds 0.05, `high` is a lower bound.
    erosion_km : (n_level,) array
    snr : (3, n_level) array
        Signal-to-noise ratio: median, 5 %, 95 %.
    detection_probability : (n_level,) array
        Averaged over plausible noise and scatter.
    by_cause : (n_cause, n_level) array
        The signal-to-noise ratio of the structure itself under the best noise, split by `CAUSES`; adds up.
    required_snr : float
        Signal-to-noise ratio at which the wanted detection probability is reached.
    rates : dict of float
        m/Myr, to turn erosion into time: published ones, and the scenario's own where it has one.
    """

    median: float
    low: float
    high: float
    open_ended: float
    erosion_km: Array
    snr: Array
    detection_probability: Array
    by_cause: Array
    required_snr: float
    rates: dict[str, float]

    def as_dict(self) -> dict[str, float]:
        """What verdict.json holds."""
        return {"median": self.median, "low": self.low, "high": self.high, "open_ended_share": self.open_ended}


@dataclasses.dataclass(frozen=True, eq=False)
class Chart:
    """Detectability against diameter and erosion.

    Attributes
    ----------
    rim_diameter_km : (n_diameter,) array
    erosion_km : (n_level,) array
    snr : (n_diameter, n_level) array
        Median over plausible noise and scatter.
    detection_probability : (n_diameter, n_level) array
        Averaged over them.
    """

    rim_diameter_km: Array
    erosion_km: Array
    snr: Array
    detection_probability: Array


def worn_structures(
    scenario: Scenario,
    radius: Array,
    *,
    rim_diameter_km: float | None = None,
    erosion_km: Array | None = None,
    levels: int = 16,
    draws: int = 16,
) -> Worn:
    """A scenario's structure worn to a series of levels, forwarded.

    Parameters
    ----------
    scenario : Scenario
        Its history is kept but for the depth of erosion.
    radius : (n_radius,) array, m
        Radii of the profiles.
    rim_diameter_km : float, optional
        Another diameter.
    erosion_km : (n_level,) array, optional
        Levels, ascending; by default from 0 to where nothing is left, finer at the top.
    levels, draws : int
        Number of levels by default, and of draws of the scatter.
    """
    diameter = rim_diameter_km or scenario.crater.rim_diameter_km
    family = ImpactFamily(scenario)
    fresh = crater_model(family.varied(diameter, 0.0))
    if erosion_km is None:
        deepest = min(fresh.base, 0.98 * fresh.column.moho) / KM
        erosion_km = deepest * np.linspace(0.0, 1.0, levels) ** 1.7
    count = draws if scenario.model.scatter else 0
    cases = [family.varied(diameter, float(e)) for e in erosion_km]
    models = [[_drawn(case, j, scenario.seed) for j in range(count + 1)] for case in cases]
    mesh = shared_mesh([m for row in models for m in (row[0], *row[-2:])], layers=BANK_LAYERS, rings=BANK_RINGS)
    table = ring_table(radius, mesh.radius_edges, mesh.depth_edges, height_m=scenario.model.station_height_m)
    profiles, causes = np.empty((len(cases), count + 1, radius.size)), np.empty((len(cases), len(CAUSES), radius.size))
    for i, row in enumerate(models):
        split = contrast_parts(row[0], mesh)
        grouped = [split[[PARTS.index(p) for p in names]].sum(axis=0) for names in CAUSES.values()]
        found = table.anomaly(np.stack([*grouped, *(contrast(model, mesh) for model in row[1:])]))
        causes[i] = found[: len(CAUSES)]
        profiles[i] = np.concatenate([causes[i].sum(axis=0, keepdims=True), found[len(CAUSES) :]])
    return Worn(float(diameter), np.asarray(erosion_km, dtype=float), radius, profiles, causes)


def _drawn(case: Scenario, number: int, seed: int) -> CraterModel:
    """The structure (0) or its draw of that number: the same random numbers at every level and diameter."""
    return crater_model(case, np.random.default_rng([seed, 8, number]) if number else None)


def vanishing_erosion(
    scenario: Scenario, sight: Sight, radius: Array, *, threshold: float | None = None, draws: int = 16
) -> Vanishing:
    """At which erosion level the scenario's structure vanishes for a map or a survey.

    Parameters
    ----------
    scenario : Scenario
        The structure; `inference` sets false-alarm and detection probability.
    sight : Sight
        Of the data in coefficients that are the profile's values at `radius`: `ring_sight`.
    radius : (n_radius,) array, m
    threshold : float, optional
        Of the statistic; by default that of a known place and size.
    draws : int
        Of the scatter.

    Examples
    --------
    In a run that has compared a map::

        sight = ring_sight(response, covariances, regional)
        verdict["detectability"]["vanishing_erosion_km"] = vanishing_erosion(scenario, sight, radius).as_dict()
    """
    # Many small matrices: on a busy machine, threads that wait for each other make them ten times slower.
    with threadpool_limits(1):
        return vanishing_of(scenario, worn_structures(scenario, radius, draws=draws), sight, None, threshold=threshold)


def vanishing_of(
    scenario: Scenario, worn: Worn, sight: Sight, curves: Curves | None, *, threshold: float | None = None
) -> Vanishing:
    """The same for structures worn already; `curves` are those of the sight, None where it works on radii."""
    from scipy import stats

    limits = scenario.inference
    u = float(stats.norm.isf(limits.false_alarm_probability)) if threshold is None else threshold
    required = u + float(stats.norm.ppf(limits.detection_probability))
    table, causes = _tables(worn, sight, curves)
    deepest = last_crossing(worn.erosion_km, table.reshape(len(worn.erosion_km), -1), required)
    median, low, high = np.quantile(deepest, [0.5, 0.05, 0.95])
    flat = table.reshape(len(worn.erosion_km), -1)
    return Vanishing(
        median=float(median),
        low=float(low),
        high=float(high),
        open_ended=float(np.mean(flat[-1] >= required)),
        erosion_km=worn.erosion_km,
        snr=np.quantile(flat, [0.5, 0.05, 0.95], axis=1),
        detection_probability=np.mean(detection_probability(flat, float(stats.norm.sf(u))), axis=1),
        by_cause=causes,
        required_snr=required,
        rates=_rates(scenario),
    )


def _tables(worn: Worn, sight: Sight, curves: Curves | None) -> tuple[Array, Array]:
    """Signal-to-noise ratios (level, noise, 1 + draw), and those of the model by cause under the best noise."""
    levels, draws = worn.profiles.shape[:2]
    table = np.zeros((levels, len(sight.gram), draws))
    causes = np.zeros((len(CAUSES), levels))
    weight = disc_weights(worn.radius)
    for i in range(levels):
        profiles, split = worn.profiles[i].T, worn.causes[i].T
        if curves is not None:
            profiles, split = curves.coefficients(profiles), curves.coefficients(split)
        scatter = scatter_root(profiles, weight if curves is None else np.ones(profiles.shape[0]))
        for j, gram in enumerate(sight.gram):
            response, noise = filter_of(gram, scatter, profiles[:, 0])
            if noise > 0.0:
                table[i, j] = response @ profiles / noise
                if j == 0:
                    causes[:, i] = response @ split / noise
    return table, causes


def last_crossing(levels: Array, values: Array, required: float) -> Array:
    """Deepest level at which a value still reaches what is required, per column; linear between levels.

    Parameters
    ----------
    levels : (n,) array, ascending
    values : (n, m) array
    required : float

    Returns
    -------
    (m,) array
        0 where it is never reached, the last level where it still is at the end.

    Notes
    -----
    The last crossing, not the first: a low that turns into a high with erosion passes through nothing on the way, and
    is seen again.

    Examples
    --------
    >>> last_crossing(np.array([0.0, 1.0, 2.0]), np.array([[4.0], [0.0], [0.0]]), 1.0).tolist()
    [0.75]
    """
    found = np.zeros(values.shape[1])
    for column, track in enumerate(values.T):
        above = np.flatnonzero(track >= required)
        if above.size == 0:
            continue
        at = int(above[-1])
        if at == levels.size - 1:
            found[column] = levels[-1]
            continue
        share = (track[at] - required) / (track[at] - track[at + 1])
        found[column] = levels[at] + share * (levels[at + 1] - levels[at])
    return found


def chart_of(scenario: Scenario, worn: Sequence[Worn], sight: Sight, curves: Curves, *, threshold: float) -> Chart:
    """Detectability of several diameters, all worn to the same levels."""
    from scipy import stats

    tables = [_tables(each, sight, curves)[0].reshape(len(each.erosion_km), -1) for each in worn]
    local = float(stats.norm.sf(threshold))
    return Chart(
        np.array([each.rim_diameter_km for each in worn]),
        worn[0].erosion_km,
        np.stack([np.median(table, axis=1) for table in tables]),
        np.stack([np.mean(detection_probability(table, local), axis=1) for table in tables]),
    )


def _rates(scenario: Scenario) -> dict[str, float]:
    own = scenario.history.erosion_rate_m_per_myr
    if own is None and scenario.crater.age_myr and ground_of(scenario).erosion > 0.0:
        own = ground_of(scenario).erosion / scenario.crater.age_myr
    return {**EROSION_RATES, **({"this scenario": float(own)} if own else {})}
