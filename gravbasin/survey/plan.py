"""Layouts against spacings: the merit, effort and cost of each, as one labelled table."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy import stats
from threadpoolctl import threadpool_limits

from gravbasin.inference.detect import detection_probability, signal_band
from gravbasin.observed import NoiseModel
from gravbasin.scenario import Scenario, Survey
from gravbasin.survey.costs import Effort, effort
from gravbasin.survey.layouts import Site, layout_stations
from gravbasin.survey.merit import Merit, Stakes, filter_of, worth
from gravbasin.survey.search import search_charge
from gravbasin.survey.sight import Plane, Stations, station_sight

__all__ = ["Cell", "Quest", "aliased_geology", "default_spacings", "evaluate", "new_stations", "sweep", "table"]

Array = NDArray[np.float64]
KM = 1000.0
BAND = (0.5, 0.05, 0.95)


@dataclasses.dataclass(frozen=True, eq=False)
class Quest:
    """Everything a layout is judged by.

    Attributes
    ----------
    scenario : Scenario
    survey : Survey
    site : Site
    stakes : Stakes
    plane : Plane
    noises : tuple of NoiseModel
        The best one first; the nugget of each is what short geology adds.
    station_error, existing_error : float, mGal
    diameter_range : float
        Natural logarithm of largest over smallest diameter of the prior.
    """

    scenario: Scenario
    survey: Survey
    site: Site
    stakes: Stakes
    plane: Plane
    noises: tuple[NoiseModel, ...]
    station_error: float
    existing_error: float
    diameter_range: float


@dataclasses.dataclass(frozen=True, eq=False)
class Cell:
    """One layout at one spacing: its new stations in the order of reading, effort, merit, thresholds.

    `threshold` and `searched_threshold` are those of the statistic for a known and for a searched place; `trials` what
    the search amounts to; `band_km` the wavelengths that carry the signal.
    """

    points: Array
    effort: Effort
    merit: Merit
    threshold: float
    searched_threshold: float
    trials: float
    band_km: tuple[float, float]

    def detection(self, place: str) -> Array:
        """Detection probability over noise models and draws, (n_noise, 1 + n_draw), for "given" or "searched"."""
        u = self.threshold if place == "given" else self.searched_threshold
        return detection_probability(self.merit.snr, float(stats.norm.sf(u)))


def default_spacings(area: float, *, fewest: int = 20, most: int = 1000, count: int = 12) -> Array:
    """Spacings, m, of square grids with the most to the fewest stations on an area in m², to two digits."""
    raw = np.sqrt(area / np.geomspace(most, fewest, count))
    digits = 10.0 ** (np.floor(np.log10(raw)) - 1)
    return np.unique(np.round(raw / digits) * digits)


def new_stations(quest: Quest, layout: str, spacing: float) -> Array:
    """New stations of one layout, (n, 2) m, in the order of reading."""
    survey = quest.survey
    return layout_stations(
        quest.site, layout, spacing, line_azimuth=survey.line_azimuth_degrees, line_ratio=survey.line_spacing_ratio,
        spokes=survey.spokes,
    )  # fmt: skip


def stations_of(quest: Quest, points: Array) -> Stations:
    """Existing and new stations together, about the structure's centre."""
    places = np.concatenate([quest.site.existing, points]) - quest.site.centre
    error = np.concatenate(
        [np.full(len(quest.site.existing), quest.existing_error), np.full(len(points), quest.station_error)]
    )
    return Stations(places, error)


def evaluate(quest: Quest, points: Array) -> Cell:
    """Judge a set of new stations, together with the existing ones."""
    stakes, limits = quest.stakes, quest.scenario.inference
    stations = stations_of(quest, points)
    sight = station_sight(stations, stakes.curves, quest.noises)
    merit = worth(sight, stakes)
    spacing = float(np.sqrt(quest.site.size / max(len(stations.place), 1)))
    charge = search_charge(
        quest.plane, stakes.curves, quest.noises[0], stakes.model, stakes.scatter,
        spacing=spacing, error=quest.station_error, area=quest.site.size, diameter_range=quest.diameter_range,
        false_alarm_probability=limits.false_alarm_probability,
    )  # fmt: skip
    response, _ = filter_of(sight.gram[0], stakes.scatter, stakes.model)
    curves = stakes.curves
    band = signal_band(
        curves.radius, curves.shapes @ stakes.model, curves.weight * (curves.shapes @ response), shortest=2 * spacing
    )
    return Cell(
        points,
        effort(points, quest.survey.costs),
        merit,
        float(stats.norm.isf(limits.false_alarm_probability)),
        charge.threshold,
        charge.trials,
        band,
    )


def sweep(
    quest: Quest, spacings: Array, *, progress: Callable[[str], None] = lambda stage: None
) -> dict[tuple[str, float], Cell]:
    """Every layout at every spacing, m; cells without room for a new station are left out."""
    cells: dict[tuple[str, float], Cell] = {}
    with threadpool_limits(1):  # hundreds of small matrices: waiting threads would cost more than they give
        for layout in quest.survey.layouts:
            progress(f"judging layouts: {layout}")
            for spacing in spacings:
                points = new_stations(quest, layout, float(spacing))
                if len(points):
                    cells[layout, float(spacing)] = evaluate(quest, points)
    return cells


def aliased_geology(noise: NoiseModel, spacing: float) -> float:
    """Geology shorter than twice the spacing, which a grid takes for longer waves, mGal root mean square.

    σ (1 + (πl/Δ)²)^(−ν/2) with l = L/√(2ν): the spectrum's integral beyond the wavenumber π/Δ.

    Examples
    --------
    >>> craton = NoiseModel(sill_mgal=17.7, range_m=40e3, smoothness=1.0)
    >>> round(aliased_geology(craton, 4e3), 2)
    0.8
    """
    scale = noise.range_m / np.sqrt(2.0 * noise.smoothness)
    return float(noise.sill_mgal * (1.0 + (np.pi * scale / spacing) ** 2) ** (-0.5 * noise.smoothness))


_COLUMNS: dict[str, tuple[str, str]] = {
    "stations": ("1", "new stations"),
    "line_kilometres": ("km", "straight lines from station to station in the order of reading"),
    "days": ("1", "whole days in the field at the user's rates"),
    "cost": ("1", "cost at the user's rates, in the user's currency"),
    "snr": ("1", "signal-to-noise ratio, median over plausible noise and scatter of the structure"),
    "snr_low": ("1", "5 % of it"),
    "snr_high": ("1", "95 % of it"),
    "detection_probability": ("1", "detection probability, place and size known, mean over the same"),
    "detection_low": ("1", "mean over the structure under the noise that hides it most"),
    "detection_high": ("1", "mean over the structure under the noise that hides it least"),
    "detection_probability_searched": ("1", "the same when centre and diameter are searched for"),
    "threshold_searched": ("1", "statistic that noise alone passes anywhere with the accepted probability"),
    "search_trials": ("1", "independent trials that the search amounts to"),
    "rival_distance": ("1", "distance to the nearest rival in standard errors, median over plausible noise"),
    "rival_distance_low": ("1", "5 % of it"),
    "rival_distance_high": ("1", "95 % of it"),
    "wrong_choice_probability": ("1", "probability that the nearest rival fits better, Φ(−d/2)"),
    "log_odds": ("1", "expected natural logarithm of the odds against the best other explanation"),
    "log_odds_low": ("1", "5 % over simulated data"),
    "log_odds_high": ("1", "95 % over simulated data"),
    "erosion_width": ("km", "expected width of the 90 % interval of the erosion"),
    "erosion_width_effective": ("1", "equally weighted models behind that width; below 20 it is rough"),
    "aliased_geology": ("mGal", "geology too short for the spacing, root mean square"),
    "wavelength_short": ("km", "the central 80 % of the signal lies at wavelengths above"),
    "wavelength_long": ("km", "and below"),
}


def numbers(quest: Quest, cell: Cell, spacing: float) -> dict[str, float]:
    """Every column of one cell."""
    merit = cell.merit
    snr, known = np.quantile(merit.snr, BAND), cell.detection("given")
    odds = merit.log_odds
    distance = np.quantile(merit.rival_distance, BAND)
    aliased = aliased_geology(quest.noises[0], spacing)
    return {
        "stations": cell.effort.stations,
        "line_kilometres": cell.effort.line_km,
        "days": cell.effort.days,
        "cost": cell.effort.cost,
        "snr": snr[0],
        "snr_low": snr[1],
        "snr_high": snr[2],
        "detection_probability": known.mean(),
        "detection_low": known.mean(axis=1).min(),
        "detection_high": known.mean(axis=1).max(),
        "detection_probability_searched": cell.detection("searched").mean(),
        "threshold_searched": cell.searched_threshold,
        "search_trials": cell.trials,
        "rival_distance": distance[0],
        "rival_distance_low": distance[1],
        "rival_distance_high": distance[2],
        "wrong_choice_probability": float(np.mean(stats.norm.sf(0.5 * merit.rival_distance))),
        "log_odds": odds.mean(),
        "log_odds_low": np.quantile(odds, 0.05),
        "log_odds_high": np.quantile(odds, 0.95),
        "erosion_width": merit.erosion_width.mean(),
        "erosion_width_effective": merit.effective,
        "aliased_geology": aliased,
        "wavelength_short": cell.band_km[0],
        "wavelength_long": cell.band_km[1],
    }


def table(quest: Quest, cells: dict[tuple[str, float], Cell], spacings: Array, **attrs: Any) -> xr.Dataset:
    """The sweep as a Dataset (layout, spacing), spacing in metres; NaN where a layout has no room for a station."""
    layouts: list[str] = list(quest.survey.layouts)
    filled = {name: np.full((len(layouts), len(spacings)), np.nan) for name in _COLUMNS}
    rival = np.full((len(layouts), len(spacings)), "", dtype=object)
    for i, layout in enumerate(layouts):
        for j, spacing in enumerate(spacings):
            cell = cells.get((layout, float(spacing)))
            if cell is None:
                continue
            rival[i, j] = cell.merit.best_rival
            for name, value in numbers(quest, cell, float(spacing)).items():
                filled[name][i, j] = value
    data: dict[str, Any] = {
        name: (("layout", "spacing"), filled[name], {"units": units, "long_name": text})
        for name, (units, text) in _COLUMNS.items()
    }
    data["best_rival"] = (
        ("layout", "spacing"), rival.astype(str), {"long_name": "nearest rival under the best noise model"}
    )  # fmt: skip
    coords = {
        "layout": layouts,
        "spacing": (
            "spacing", np.asarray(spacings, dtype=float), {"units": "m", "long_name": "station spacing along rows"}
        ),
    }  # fmt: skip
    return xr.Dataset(data, coords=coords, attrs={"title": "layouts and spacings of a planned survey", **attrs})
