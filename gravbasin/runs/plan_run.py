"""A survey planned from a scenario: noise, layouts, recommendation, next best stations, vanishing level, files."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits

from gravbasin import labels
from gravbasin.errors import InputError
from gravbasin.observed import NoiseModel
from gravbasin.runs.compare import noise_of
from gravbasin.runs.scenario_map import scenario_map
from gravbasin.runs.store import replaced_folder
from gravbasin.scenario import Scenario, Survey
from gravbasin.scenario_file import scenario_hash, scenario_toml
from gravbasin.survey.costs import Effort, check_budget
from gravbasin.survey.errors import ErrorTerm, error_terms
from gravbasin.survey.greedy import Ranking, next_best
from gravbasin.survey.layouts import layout_stations
from gravbasin.survey.merit import worth
from gravbasin.survey.plan import Cell, Quest, default_spacings, evaluate, stations_of, sweep, table
from gravbasin.survey.prepare import Prepared, degrees, prepare, site_of
from gravbasin.survey.recommend import Recommendation, recommend
from gravbasin.survey.rules import Rule, judge_rules, rules_of
from gravbasin.survey.sight import MOST_STATIONS, Stations, station_sight
from gravbasin.survey.station_files import StationTable, stations_csv, stations_geojson, write_geopackage
from gravbasin.survey.vanish import Chart, Vanishing, chart_of, vanishing_of

__all__ = ["CAUTIONS", "STAGES", "Planned", "plan", "plan_survey"]

Array = NDArray[np.float64]
KM = 1000.0
MARK = "plan.nc"

CAUTIONS = (
    "Field safety, land access and permits are matters for licensed practice and local rules; a plan is no permission.",
    "Gravity alone never proves an impact: confirmation needs shock-metamorphic or meteoritic evidence.",
    "A survey that cannot see a structure does not show that there is none.",
)
"""Cautions that stand beside every recommendation."""

STAGES = (
    "reading the map and the survey's files",
    "estimating the noise",
    "drawing structures and rivals",
    "wearing structures down",
    "judging layouts",
    "ranking single places",
    "writing",
)

Progress = Callable[[str, int, int], None]


@dataclasses.dataclass(frozen=True, eq=False)
class Planned:
    """A planned survey; the report draws it.

    Attributes
    ----------
    scenario, survey : Scenario, Survey
    prepared : Prepared
        What layouts were judged by.
    noise : NoiseModel
        Stated, or estimated from the map.
    table : Dataset (layout, spacing)
        Merit, effort and cost.
    cells : dict of Cell by (layout, spacing)
    existing : Cell or None
        The existing stations alone.
    ceiling : Cell
        An endless survey without station errors: what the geology itself allows.
    recommendation : Recommendation
    stations : StationTable
        Existing, new (of the recommended layout) and next best.
    ranking : Ranking or None
        Next best single places.
    vanishing : Vanishing
        For the recommended stations.
    chart : Chart or None
    rules : tuple of Rule
    rules_judged : list of str
    error_terms : tuple of ErrorTerm
    """

    scenario: Scenario
    survey: Survey
    prepared: Prepared
    noise: NoiseModel
    table: xr.Dataset
    cells: dict[tuple[str, float], Cell]
    existing: Cell | None
    ceiling: Cell
    recommendation: Recommendation
    stations: StationTable
    ranking: Ranking | None
    vanishing: Vanishing
    chart: Chart | None
    rules: tuple[Rule, ...]
    rules_judged: list[str]
    error_terms: tuple[ErrorTerm, ...]


def plan_survey(scenario: Scenario) -> xr.Dataset:
    """Merit, effort and cost of every layout at every spacing of a scenario's survey.

    Parameters
    ----------
    scenario : Scenario
        With a `[survey]` table, or its defaults: four layouts and twelve spacings on a square of three diameters.

    Returns
    -------
    Dataset (layout, spacing)
        Spacing in metres; the recommendation in the attributes `outcome` and `statement`.

    Raises
    ------
    InputError
        No room for a station, a budget below one day, degrees without a reference system, no noise.

    Examples
    --------
    >>> from gravbasin import Scenario
    >>> noise = {"sill_mgal": 4.0, "range_km": 25.0, "smoothness": 1.0, "nugget_mgal": 0.2}
    >>> survey = {"layouts": ["square"], "spacings_km": [8.0], "models": 100, "next_best": 0, "chart_diameters": 0}
    >>> question = Scenario(crater={"rim_diameter_km": 20.0}, noise=noise, survey=survey)
    >>> int(plan_survey(question).stations[0, 0])
    49
    """
    return plan(scenario).table


def plan(scenario: Scenario, out_dir: str | Path | None = None, *, progress: Progress | None = None) -> Planned:
    """Plan a survey, and write its folder when `out_dir` is given.

    Parameters
    ----------
    scenario : Scenario
    out_dir : path, optional
        Folder to write; replaced as a whole, or left as it was.
    progress : callable, optional
        Called with (stage, number, count).

    Raises
    ------
    InputError, CannotFinish
        As `plan_survey`; and for a folder that cannot be written.
    """
    tell = progress or (lambda stage, number, count: None)

    def stage(name: str) -> None:
        number = next(i for i, known in enumerate(STAGES) if name.startswith(known))
        tell(name, number, len(STAGES))

    survey = scenario.survey or Survey()
    check_budget(survey.costs)
    # Hundreds of small matrices: on a busy machine, threads that wait for each other make them 20 times slower.
    with threadpool_limits(1):
        result = _planned(scenario, survey, stage)
    if out_dir is not None:
        stage("writing")
        _write(result, Path(out_dir))
    return result


def _planned(scenario: Scenario, survey: Survey, stage: Callable[[str], None]) -> Planned:
    stage("reading the map and the survey's files")
    observed = scenario_map(scenario, centred=False)
    site = site_of(scenario, survey, observed.attrs.get("crs_wkt") if observed is not None else None)
    if survey.geopackage and site.crs is None:
        raise InputError(
            "survey.geopackage", True, "needs the survey's reference system", "state survey.crs, as EPSG:32633"
        )
    spacings = KM * np.unique(survey.spacings_km) if survey.spacings_km else default_spacings(site.size)
    _check_room(survey, site, spacings)
    stage("estimating the noise")
    noise = noise_of(scenario, observed)
    prepared = prepare(scenario, survey, site, noise, progress=stage)
    return _judged(scenario, survey, prepared, noise, spacings, stage)


def _check_room(survey: Survey, site: Any, spacings: Array) -> None:
    """Refuse, before any work, an area without room for a station or a spacing that needs too many."""
    counts = {
        (layout, float(spacing)): len(
            layout_stations(
                site, layout, float(spacing), line_azimuth=survey.line_azimuth_degrees,
                line_ratio=survey.line_spacing_ratio, spokes=survey.spokes,
            )
        )
        for layout in survey.layouts
        for spacing in spacings
    }  # fmt: skip
    if not any(counts.values()) and not len(site.existing):
        raise InputError(
            "survey.area", f"{site.size / KM**2:.3g} km²", "has no room for a single new station at any spacing",
            "widen it, shrink survey.no_go, or use narrower survey.spacings_km",
        )  # fmt: skip
    (layout, spacing), most = max(counts.items(), key=lambda item: item[1])
    most += len(site.existing)
    if most > MOST_STATIONS:
        raise InputError(
            "survey.spacings_km", spacing / KM, f"needs {most} stations ({layout}), of {MOST_STATIONS} at most",
            "widen the spacing or shrink the area",
        )  # fmt: skip


def _judged(
    scenario: Scenario, survey: Survey, prepared: Prepared, noise: NoiseModel, spacings: Array,
    stage: Callable[[str], None],
) -> Planned:  # fmt: skip
    quest = prepared.quest
    cells = sweep(quest, spacings, progress=stage)
    nothing = np.zeros((0, 2))
    existing = evaluate(quest, nothing) if len(quest.site.existing) else None
    finest = cells[min(cells, key=lambda key: key[1])] if cells else existing
    assert finest is not None  # an area without room is refused unless stations exist
    ceiling = _ceiling(quest, finest)
    recommendation = recommend(quest, cells, ceiling, existing)
    taken = recommendation.layout is not None and recommendation.spacing_m is not None
    chosen = cells[str(recommendation.layout), float(recommendation.spacing_m or 0.0)] if taken else existing
    assert chosen is not None  # without a layout the existing stations suffice
    stage("ranking single places")
    ranking, places = _ranked(quest, chosen, float(spacings.min()))
    best, gain = (places[ranking.chosen], ranking.gain) if ranking else (nothing, np.zeros(0))
    radius = quest.stakes.curves.radius
    stations = StationTable.of(quest.site, chosen.points, best, gain, radius, prepared.profile)
    sight = station_sight(stations_of(quest, chosen.points), quest.stakes.curves, quest.noises)
    threshold = chosen.threshold if survey.place == "given" else chosen.searched_threshold
    rules = rules_of(scenario)
    facts = labels.provenance(
        scenario=scenario_hash(scenario), seed=scenario.seed, versions=labels.versions("numpy", "scipy", "xarray"),
        noise=noise.as_dict(), station_error_mgal=quest.station_error, existing_stations=len(quest.site.existing),
        noise_models=len(quest.noises), curves=int(quest.stakes.curves.shapes.shape[1]),
        curves_error_mgal=quest.stakes.curves.error_mgal,
    )  # fmt: skip
    attrs = {
        "outcome": recommendation.outcome, "statement": recommendation.statement,
        "recommended_layout": recommendation.layout or "", "recommended_spacing_m": recommendation.spacing_m or np.nan,
        "currency": survey.costs.currency, "provenance": facts,
    }  # fmt: skip
    place = degrees(quest.site.centre[None, :], quest.site.crs)
    return Planned(
        scenario=scenario,
        survey=survey,
        prepared=prepared,
        noise=noise,
        table=table(quest, cells, spacings, **attrs),
        cells=cells,
        existing=existing,
        ceiling=ceiling,
        recommendation=recommendation,
        stations=stations,
        ranking=ranking,
        vanishing=vanishing_of(scenario, prepared.worn, sight, quest.stakes.curves, threshold=threshold),
        chart=chart_of(scenario, prepared.chart, sight, quest.stakes.curves, threshold=threshold)
        if prepared.chart
        else None,
        rules=rules,
        rules_judged=judge_rules(quest, cells, rules),
        error_terms=error_terms(survey.errors, latitude=None if place is None else float(place[0, 1])),
    )


def _ceiling(quest: Quest, finest: Cell) -> Cell:
    """An endless survey without station errors; its thresholds are those of the closest layout tried."""
    return dataclasses.replace(
        finest,
        points=np.zeros((0, 2)),
        effort=Effort(0, np.nan, np.nan, np.nan),
        merit=worth(quest.plane.gram(quest.noises), quest.stakes),
    )


def _ranked(quest: Quest, chosen: Cell, finest: float) -> tuple[Ranking | None, Array]:
    """Next best single places among an even grid of candidates (or along the roads, where only those are allowed).

    Beyond the existing stations where there are any, else beyond the layout chosen: from nothing, choosing one by one
    stays on a single line, because no second line pays before the regional across it is known.
    """
    survey, site = quest.survey, quest.site
    if survey.next_best == 0:
        return None, np.zeros((0, 2))
    only_roads = survey.layouts == ("roads",)
    spacing = float(np.sqrt(site.size / survey.candidates))
    places = layout_stations(site, "roads", finest) if only_roads else layout_stations(site, "square", spacing)
    if len(places) == 0:
        return None, places
    candidates = Stations(places - site.centre, np.full(len(places), quest.station_error))
    first = stations_of(quest, np.zeros((0, 2)) if len(site.existing) else chosen.points)
    tell_apart = survey.goal == "tell apart"
    ranking = next_best(first, candidates, quest.stakes, quest.noises[0], count=survey.next_best, tell_apart=tell_apart)
    return ranking, places


def _write(result: Planned, folder: Path) -> None:
    from gravbasin.report.plan_page import plan_report

    with replaced_folder(folder, mark=MARK) as fresh:
        result.table.to_netcdf(fresh / MARK, engine="h5netcdf")
        flat = result.table.to_dataframe().reset_index()
        flat.to_csv(fresh / "plan.csv", index=False, float_format="%.6g")
        (fresh / "stations.csv").write_text(stations_csv(result.stations), encoding="utf-8")
        places = stations_geojson(result.stations)
        if places is not None:
            (fresh / "stations.geojson").write_text(places, encoding="utf-8")
        if result.survey.geopackage:
            write_geopackage(result.stations, result.prepared.quest.site.crs, fresh / "stations.gpkg")
        (fresh / "scenario.toml").write_text(scenario_toml(result.scenario), encoding="utf-8")
        page, figures = plan_report(result)
        (fresh / "figures").mkdir()
        for name, svg in figures.items():
            (fresh / "figures" / f"{name}.svg").write_text(svg, encoding="utf-8")
        (fresh / "report.html").write_text(page, encoding="utf-8")
