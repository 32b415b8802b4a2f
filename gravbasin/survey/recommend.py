"""Which layout to take, in one plain sentence, or why none will do."""

from __future__ import annotations

import dataclasses
import math
from typing import Any

import numpy as np

from gravbasin.errors import InputError
from gravbasin.survey.costs import Effort
from gravbasin.survey.merit import Merit
from gravbasin.survey.plan import Cell, Quest

__all__ = ["NAMES", "Recommendation", "affordable", "goal", "meets", "reached", "recommend"]

KM = 1000.0

SHARE_OF_NOISE = 0.2
"""Quantile of the distance to the nearest rival that must reach the goal: it does for four noise models in five."""


@dataclasses.dataclass(frozen=True)
class Recommendation:
    """What to do.

    Attributes
    ----------
    outcome : str
        "found", "existing stations suffice", "beyond the budget", "beyond the spacings tried" or "no survey can".
    layout, spacing_m : str, float or None
        The layout to take; where none meets the goal, the one that comes nearest within budget.
    statement : str
        One or two plain sentences.
    """

    outcome: str
    layout: str | None
    spacing_m: float | None
    statement: str


def meets(quest: Quest, detection: float, distance: float) -> bool:
    """Whether a mean detection probability and a distance to the nearest rival reach the survey's goal."""
    seen = detection >= quest.survey.detection_probability
    apart = distance >= quest.survey.rival_distance
    return {"detect": seen, "tell apart": apart, "both": seen and apart}[quest.survey.goal]


def reached(quest: Quest, cell: Cell) -> tuple[float, float]:
    """Mean detection probability for the survey's place, and the distance that four noise models in five reach."""
    return float(cell.detection(quest.survey.place).mean()), _distance(cell.merit)


def _distance(merit: Merit) -> float:
    return float(np.quantile(merit.rival_distance, SHARE_OF_NOISE))


def recommend(
    quest: Quest, cells: dict[tuple[str, float], Cell], ceiling: Cell, existing: Cell | None
) -> Recommendation:
    """The cheapest layout that meets the goal within the budget, or a plain reason why there is none.

    Parameters
    ----------
    quest : Quest
    cells : dict of Cell by (layout, spacing)
    ceiling : Cell
        An endless survey without station errors, each threshold as for the finest cell.
    existing : Cell, optional
        The existing stations alone.

    Raises
    ------
    InputError
        There is no room for a new station, and the existing ones do not meet the goal.
    """
    if existing is not None and meets(quest, *reached(quest, existing)):
        count = len(quest.site.existing)
        text = f"The {count} existing stations already meet the goal ({_merit(quest, existing)}): no new one is needed."
        return Recommendation("existing stations suffice", None, None, text)
    if not cells:
        raise InputError(
            "survey.area", f"{quest.site.size / KM**2:.3g} km²",
            "has no room for a single new station at any spacing beside the existing ones",
            "widen it, shrink survey.no_go, or use narrower survey.spacings_km",
        )  # fmt: skip
    good = {key: cell for key, cell in cells.items() if _meets_closer_too(quest, cells, key)}
    within = {key: cell for key, cell in good.items() if affordable(quest, cell.effort)}
    if within:
        key = min(within, key=lambda k: _price(within[k].effort))
        text = f"Cheapest that meets the goal: {_named(quest, key, within[key])}."
        return Recommendation("found", *key, text)
    paid = {key: cell for key, cell in cells.items() if affordable(quest, cell.effort)}
    nearest = _nearest(quest, paid or cells)
    place = _within(quest) if paid else ", though no layout tried is within the budget"
    best = f"Nearest to it{place}: {_named(quest, nearest, cells[nearest])}."
    if good:
        key = min(good, key=lambda k: _price(good[k].effort))
        text = f"The goal is beyond the budget: the cheapest that meets it is {_named(quest, key, good[key])}. {best}"
        return Recommendation("beyond the budget", *nearest, text)
    if not meets(quest, *reached(quest, ceiling)):
        text = (
            f"No survey can meet the goal ({goal(quest)}): even an endless one without station errors reaches "
            f"{_merit(quest, ceiling)}, because the geology around it is as rough as that. {best}"
        )
        return Recommendation("no survey can", *nearest, text)
    finest = min(spacing for _, spacing in cells) / KM
    text = (
        f"No layout down to {finest:g} km meets the goal ({goal(quest)}), though the geology alone would allow "
        f"{_merit(quest, ceiling)}: a wider area, finer spacing or better stations might. {best}"
    )
    return Recommendation("beyond the spacings tried", *nearest, text)


def _meets_closer_too(quest: Quest, cells: dict[tuple[str, float], Cell], key: tuple[str, float]) -> bool:
    """Whether a cell meets the goal, and so does the next closer spacing: one may do well by lucky places alone."""
    closer = [spacing for layout, spacing in cells if layout == key[0] and spacing < key[1]]
    tried = [key, (key[0], max(closer))] if closer else [key]
    return all(meets(quest, *reached(quest, cells[each])) for each in tried)


def goal(quest: Quest) -> str:
    """The goal in words."""
    s = quest.survey
    seen = f"detection probability {s.detection_probability:g}"
    apart = f"{s.rival_distance:g} standard errors to the nearest rival"
    return {"detect": seen, "tell apart": apart, "both": f"{seen} and {apart}"}[s.goal]


def affordable(quest: Quest, effort: Effort) -> bool:
    """Whether an effort stays within the budget and the days."""
    costs = quest.survey.costs
    return (costs.budget is None or effort.cost <= costs.budget) and (
        costs.most_days is None or effort.days <= costs.most_days
    )


def _within(quest: Quest) -> str:
    costs = quest.survey.costs
    return " within the budget" if costs.budget is not None or costs.most_days is not None else ""


def _price(effort: Effort) -> tuple[float, ...]:
    """What "cheapest" means: cost where rates are known, then days, then stations."""
    known = [effort.cost, effort.days]
    return (*(0.0 if math.isnan(value) else value for value in known), float(effort.stations), effort.line_km)


def _nearest(quest: Quest, cells: dict[tuple[str, float], Cell]) -> tuple[str, float]:
    """The cell that comes nearest to the goal, by the merit that falls short most."""
    s = quest.survey

    def shortfall(key: tuple[str, float]) -> float:
        detection, distance = reached(quest, cells[key])
        seen, apart = detection / s.detection_probability, distance / s.rival_distance
        return {"detect": seen, "tell apart": apart, "both": min(seen, apart)}[s.goal]

    return max(cells, key=shortfall)


def _merit(quest: Quest, cell: Cell) -> str:
    detection, distance = reached(quest, cell)
    seen = f"detection probability {_probability(detection)}"
    apart = f"{distance:.1f} standard errors to the nearest rival ({cell.merit.best_rival})"
    return {"detect": seen, "tell apart": apart, "both": f"{seen}, {apart}"}[quest.survey.goal]


def _probability(value: float) -> str:
    return "above 0.999" if value > 0.999 else f"{value:.2g}" if value < 0.95 else f"{value:.3g}"


NAMES = {
    "square": "square grid",
    "staggered": "staggered grid",
    "lines": "parallel lines",
    "radial": "radial traverses",
    "roads": "stations along the roads",
}


def _named(quest: Quest, key: tuple[str, float], cell: Cell) -> str:
    effort, costs = cell.effort, quest.survey.costs
    parts: list[Any] = [f"{effort.stations} stations", f"{effort.line_km:.0f} line-km"]
    if not math.isnan(effort.days):
        parts.append(f"{effort.days:.0f} day{'' if effort.days == 1 else 's'}")
    if not math.isnan(effort.cost):
        parts.append(f"{effort.cost:,.0f} {costs.currency}".strip().replace(",", " "))
    return f"{NAMES[key[0]]} at {key[1] / KM:g} km ({', '.join(parts)}; {_merit(quest, cell)})"
