"""The report of a planned survey: recommendation, cautions, figures, cost table, assumptions."""

from __future__ import annotations

import json
import math
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np

from gravbasin.crater.model import ground_of
from gravbasin.report.canvas import svg
from gravbasin.report.figures import Drawing
from gravbasin.report.html import XML, template
from gravbasin.report.plan_figures import (
    chart_figure,
    gain_figure,
    merit_figure,
    stations_figure,
    vanishing_figure,
)
from gravbasin.report.tables import Row
from gravbasin.report.words import given, number, probability, signed
from gravbasin.runs.plan_run import CAUTIONS
from gravbasin.scenario import StationErrors
from gravbasin.survey.recommend import affordable, goal, meets, reached
from gravbasin.survey.vanish import CAUSES

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from gravbasin.runs.plan_run import Planned
    from gravbasin.survey.plan import Cell

__all__ = ["TITLES", "CostRow", "cost_rows", "plan_report"]

KM = 1000.0

TITLES = {
    "stations": "Where to stand",
    "merit": "What each spacing buys",
    "vanishing": "At which erosion it vanishes",
    "chart": "Diameter and erosion",
    "gain": "Single places",
}


class CostRow(NamedTuple):
    """One layout at one spacing."""

    layout: str
    spacing: str
    stations: str
    line_km: str
    days: str
    cost: str
    detection: str
    distance: str
    odds: str
    erosion: str
    verdict: str


def plan_report(result: Planned) -> tuple[str, dict[str, str]]:
    """The report and its figures.

    Parameters
    ----------
    result : Planned

    Returns
    -------
    html : str
        One self-contained page.
    figures : dict of str
        Each figure as a file's text (SVG) by name.
    """
    drawings = {drawing.name: drawing for drawing in _drawings(result)}
    facts = json.loads(result.table.attrs["provenance"])
    page = template("plan.html.j2").render(
        name=result.scenario.name,
        note=result.scenario.note,
        recommendation=result.recommendation,
        goal=goal(result.prepared.quest),
        cautions=CAUTIONS,
        rules=result.rules_judged,
        floor=_floor(result),
        costs=cost_rows(result),
        currency=result.survey.costs.currency,
        rates=_rates(result),
        errors=_error_rows(result),
        assumptions=_assumptions(result),
        rival=_rival(result),
        coordinates=_coordinates(result),
        titles=TITLES,
        drawings=drawings,
        missing={
            "chart": "The chart was switched off (survey.chart_diameters = 0).",
            "gain": "No single places were ranked (survey.next_best = 0, or none is free).",
        },
        provenance=[
            ("scenario, SHA-256", facts["scenario"]),
            ("seed", facts["seed"]),
            *((f"version of {name}", version) for name, version in facts["versions"].items()),
        ],
    )
    return page, {name: XML + drawing.svg for name, drawing in drawings.items()}


def _drawing(figure: Figure, name: str, caption: str, description: str) -> Drawing:
    return Drawing(name, TITLES[name], caption, svg(figure, name=name, title=TITLES[name], description=description))


def _chosen(result: Planned) -> tuple[str, float] | None:
    told = result.recommendation
    return (told.layout, told.spacing_m) if told.layout is not None and told.spacing_m is not None else None


def _drawings(result: Planned) -> list[Drawing]:
    quest, survey, told = result.prepared.quest, result.survey, result.recommendation
    curves = quest.stakes.curves
    rim = 0.5 * KM * result.scenario.crater.rim_diameter_km
    stations = _drawing(
        stations_figure(result.stations, quest.site, curves.radius, result.prepared.profile, rim_radius_m=rim),
        "stations",
        "Stations on the modelled anomaly. Circle: the rim. Black outline: the area; hatched: no-go; dashed: roads or "
        "tracks. Stars: the single places that would add most beyond "
        f"{'the existing stations' if len(quest.site.existing) else 'the stations shown'}.",
        f"Map of {len(result.stations.kind)} stations. {told.statement}",
    )
    seen, distance = reached(quest, result.ceiling)
    searched = survey.place == "searched"
    merit = _drawing(
        merit_figure(
            result.table, result.rules, target=survey.detection_probability, distance=survey.rival_distance,
            ceiling=(seen, distance), searched=searched, chosen=_chosen(result),
        ),
        "merit",
        "Above: detection probability, averaged over plausible noise and the scatter of the structure. Below: distance "
        "to the nearest body of any rival family, the rival free to take its best form. Bands, drawn for the first "
        "layout: from the plausible noise that hides most to the one that hides least. Ring: the recommendation. Lines "
        "come from stations at given places, so neighbours may be luckier than each other.",
        told.statement,
    )  # fmt: skip
    drawings = [stations, merit, _vanishing(result)]
    if result.chart is not None:
        ground = ground_of(result.scenario)
        drawings.append(
            _drawing(
                chart_figure(
                    result.chart, probability=result.scenario.inference.detection_probability,
                    today=(result.scenario.crater.rim_diameter_km, ground.erosion / KM),
                ),
                "chart",
                "Detection probability of structures of other sizes and other depths of erosion by the same stations, "
                "averaged over plausible noise and scatter. Wider ones reach beyond the area, so it does them less "
                "than justice.",
                "Chart of detection probability against rim diameter and erosion.",
            )
        )  # fmt: skip
    if result.ranking is not None:
        drawings.append(_gain(result))
    return drawings


def _vanishing(result: Planned) -> Drawing:
    v = result.vanishing
    limit = result.scenario.inference.detection_probability
    ground = ground_of(result.scenario)
    open_end = " The upper end is open: some are still seen at the deepest level." if v.open_ended > 0.05 else ""
    return _drawing(
        vanishing_figure(v, list(CAUSES), today_km=ground.erosion / KM),
        "vanishing",
        f"Above: detection probability against erosion for the recommended stations; it falls to {given(limit)} at "
        f"{number(v.median, 2)} km (broken line), between {number(v.low, 2)} and {number(v.high, 2)} km for 90 % of "
        f"plausible noise and scatter (grey).{open_end} Below: what the signal is made of. Where causes pull against "
        "each other, one lies below zero and their sum is the black line.",
        f"The structure vanishes at {number(v.median, 2)} km of erosion, {number(v.low, 2)} to {number(v.high, 2)}.",
    )


def _gain(result: Planned) -> Drawing:
    ranking = result.ranking
    assert ranking is not None
    beyond = "the existing stations" if len(result.prepared.quest.site.existing) else "the recommended layout"
    total = float(ranking.gain.sum())
    half = int(np.searchsorted(np.cumsum(ranking.gain), 0.5 * total)) + 1
    first = "first" if half == 1 else f"first {half}"
    return _drawing(
        gain_figure(ranking.snr, ranking.rival_distance, beyond=beyond),
        "gain",
        f"Single places, each the best beyond {beyond} and those before it, under the best noise model. Half of the "
        f"gain of all {ranking.gain.size} comes with the {first}. Chosen one by one, which need not be the best set.",
        f"Signal-to-noise ratio from {ranking.snr[0]:.2g} to {ranking.snr[-1]:.2g} with {ranking.gain.size} stations.",
    )


def cost_rows(result: Planned) -> list[CostRow]:
    """Every cell of the sweep, cheapest layouts first within each layout."""
    quest = result.prepared.quest
    rows = []
    for (layout, spacing), cell in sorted(
        result.cells.items(), key=lambda item: (result.survey.layouts.index(item[0][0]), -item[0][1])
    ):
        seen, distance = reached(quest, cell)
        good, paid = meets(quest, seen, distance), affordable(quest, cell.effort)
        if (layout, spacing) == _chosen(result):
            word = "recommended" if result.recommendation.outcome == "found" else "nearest to the goal"
        else:
            word = ("meets the goal" if good else "misses") + ("" if paid else ", beyond the budget")
        rows.append(_cost_row(layout, spacing, cell, seen, word))
    return rows


def _cost_row(layout: str, spacing: float, cell: Cell, seen: float, word: str) -> CostRow:
    effort, merit = cell.effort, cell.merit

    def money(value: float) -> str:
        return "not costed" if math.isnan(value) else f"{value:,.0f}".replace(",", " ")

    return CostRow(
        layout=layout,
        spacing=f"{spacing / KM:g}",
        stations=str(effort.stations),
        line_km=f"{effort.line_km:.0f}",
        days="not costed" if math.isnan(effort.days) else f"{effort.days:.0f}",
        cost=money(effort.cost),
        detection=probability(seen),
        distance=f"{float(np.median(merit.rival_distance)):.1f}",
        odds=signed(float(merit.log_odds.mean())),
        erosion=number(float(merit.erosion_width.mean()), 2),
        verdict=word,
    )


def _floor(result: Planned) -> str:
    """What more stations cannot beat."""
    quest = result.prepared.quest
    chosen = _chosen(result)
    cell = result.cells[chosen] if chosen else result.existing
    assert cell is not None
    low, high = np.quantile(result.ceiling.merit.snr, [0.05, 0.95])
    reach = float(np.median(cell.merit.snr))
    ceiling = float(np.median(result.ceiling.merit.snr))
    share = reach / max(ceiling, 1e-9)
    seen, _ = reached(quest, result.ceiling)
    band = f"{number(float(low), 2)} to {number(float(high), 2)}"
    return (
        "Geology is correlated from station to station, so more stations do not average it away. Even an endless "
        f"survey without station errors would have a signal-to-noise ratio of {number(ceiling, 2)} ({band}) and see "
        f"the structure with probability {probability(seen)}; these stations have {100 * share:.0f} % of that ratio. "
        "Geology shorter than twice the spacing, which a grid mistakes for longer waves, is "
        f"{_aliased(result)} mGal a station, beside a station error of {number(quest.station_error, 2)} mGal."
    )


def _aliased(result: Planned) -> str:
    chosen = _chosen(result)
    if chosen is None:
        return "not known for scattered stations,"
    return number(float(result.table.aliased_geology.sel(layout=chosen[0], spacing=chosen[1])), 2)


def _rival(result: Planned) -> str:
    chosen = _chosen(result)
    cell = result.cells[chosen] if chosen else result.existing
    assert cell is not None
    distance = float(np.median(cell.merit.rival_distance))
    before = float(np.ptp(np.quantile(result.prepared.quest.stakes.erosion, [0.05, 0.95])))
    wrong = float(np.mean([0.5 * math.erfc(0.5 * d / math.sqrt(2.0)) for d in cell.merit.rival_distance]))
    return (
        f"Being seen is not being told apart. With these stations the nearest rival, the {cell.merit.best_rival}, lies "
        f"{number(distance, 2)} standard errors away: taking whichever fits better errs with probability "
        f"{probability(wrong)}. The 90 % interval of the erosion is expected to be "
        f"{number(float(cell.merit.erosion_width.mean()), 2)} km wide; that of the prior is {number(before, 2)} km."
    )


def _error_rows(result: Planned) -> list[Row]:
    rows = [Row(t.name, f"{t.error_mgal:.3f} mGal", t.reason) for t in result.error_terms]
    return [*rows, Row("all together", f"{result.prepared.quest.station_error:.3f} mGal", "squares added")]


def _rates(result: Planned) -> str:
    costs = result.survey.costs
    stated = {
        "stations a day": costs.stations_per_day, "km a day": costs.travel_km_per_day,
        "a day": costs.day_rate, "a station": costs.station_cost, "to get there and back": costs.mobilisation,
        "budget": costs.budget, "days at most": costs.most_days,
    }  # fmt: skip
    known = [f"{value:g} {name}" for name, value in stated.items() if value is not None]
    if not known:
        return (
            "No rates were given, so nothing is costed and “cheapest” means fewest stations. Ranges met in practice "
            "(from memory): 15–30 stations a day and crew on foot, 30–80 by vehicle on roads, 60–150 by helicopter."
        )
    return f"Days and cost follow from your own rates alone: {'; '.join(known)}; {costs.repeat_share:.0%} read twice."


def _assumptions(result: Planned) -> list[str]:
    quest, survey, noise = result.prepared.quest, result.survey, result.noise
    low, high = survey.map_nugget_share
    source = f"estimated from {noise.n_points} nodes of the map" if noise.n_points else "stated in the scenario"
    smooth = "" if noise.n_points else f", its smoothness scattered by {survey.smoothness_scatter:.0%}"
    area = "given" if survey.area else "a square of three diameters about the centre, an assumption"
    return [
        f"Noise {source}{smooth}: {number(noise.sill_mgal)} mGal over {number(noise.range_m / KM)} km, smoothness "
        f"{number(noise.smoothness, 2)}. Smoothness and nugget cannot be told apart from coarse data and closer "
        f"stations gain by them, so every number is averaged over {len(quest.noises)} plausible models.",
        f"Between {low:.0%} and {high:.0%} of the noise model's nugget ({number(noise.nugget_mgal, 2)} mGal) counts as "
        "short geology that new stations meet too, the rest as error of the old map (survey.map_nugget_share).",
        f"The area is {area}: {number(quest.site.size / KM**2)} km². The map's own nodes are not counted as data, "
        "because they are interpolated from stations whose places they do not tell.",
        "Distances are straight lines from station to station; real ways are longer. Stations where nobody can stand "
        "must be moved, which costs little as long as they stay within a quarter of the spacing.",
        "Centre and size count as known."
        if survey.place == "given"
        else "Centre and size count as searched for over "
        f"the area and the prior's diameters: {number(result.ceiling.trials, 2)} trials at the closest spacing.",
        "Details of shape that the scatter of the size laws blurs count as noise, so a sharply modelled rim proves "
        "nothing.",
        *(
            [f"Error terms left at their defaults are assumptions too: {', '.join(_defaults(result))}."]
            if _defaults(result)
            else []
        ),
    ]


def _defaults(result: Planned) -> list[str]:
    errors, usual = result.survey.errors, StationErrors()
    same = [name for name in type(errors).model_fields if getattr(errors, name) == getattr(usual, name)]
    return [_ERROR_NAMES[name] for name in same if name in _ERROR_NAMES]


_ERROR_NAMES = {
    "meter_mgal": "meter", "drift_mgal": "drift", "tide_mgal": "tide", "tie_mgal": "tie", "height_m": "height",
    "position_m": "position", "terrain_mgal": "terrain", "density_kg_m3": "slab density", "relief_m": "relief",
}  # fmt: skip


def _coordinates(result: Planned) -> str:
    crs: Any = result.prepared.quest.site.crs
    if crs is None:
        return (
            "The survey's reference system is not known (survey.crs), so stations.csv holds eastings and northings "
            "only, without degrees, and no stations.geojson was written."
        )
    name = "the map's own system" if crs.name.lower() in ("unknown", "") else crs.name
    return f"stations.csv holds eastings and northings in {name} and degrees; stations.geojson is in degrees."
