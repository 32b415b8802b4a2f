"""Rules of thumb for the spacing of stations, beside the computed answer."""

from __future__ import annotations

import dataclasses

import numpy as np

from gravbasin.crater import contrast, crater_model, default_mesh
from gravbasin.scenario import Scenario
from gravbasin.survey.plan import Cell, Quest
from gravbasin.survey.recommend import meets, reached

__all__ = ["Rule", "judge_rules", "rules_of", "source_depth"]

KM = 1000.0


@dataclasses.dataclass(frozen=True)
class Rule:
    """One rule of thumb.

    Attributes
    ----------
    name : str
        What it says.
    spacing_m : float
        The widest spacing it allows here.
    source : str
        Where it comes from.
    short : str
        A few words for a figure.
    """

    name: str
    spacing_m: float
    source: str
    short: str


def source_depth(scenario: Scenario) -> float:
    """Mean depth of the structure's contrast below today's ground, m, weighted by mass without its sign."""
    model = crater_model(scenario)
    mesh = default_mesh(model)
    mass = np.abs(contrast(model, mesh)) * np.diff(mesh.depth_edges)[:, None] * np.diff(mesh.radius_edges**2)
    return float(np.sum(mass * mesh.depth[:, None]) / np.sum(mass)) if mass.any() else float("nan")


def rules_of(scenario: Scenario) -> tuple[Rule, ...]:
    """The rules a planner will have heard of, worked out for this structure."""
    depth = source_depth(scenario)
    return (
        Rule("no wider than the depth of the source", depth, "common practice", "source depth"),
        Rule("no wider than twice that depth", 2.0 * depth, "Reid 1980, from memory", "twice the source depth"),
    )


def judge_rules(quest: Quest, cells: dict[tuple[str, float], Cell], rules: tuple[Rule, ...]) -> list[str]:
    """Where each rule agrees with the computed answer for an even grid, and where it misleads: one sentence each."""
    layout = next((name for name in ("square", "staggered") if any(key[0] == name for key in cells)), None)
    if layout is None:
        return ["The rules speak of even grids, and none was tried."]
    tried = {spacing: cell for (name, spacing), cell in cells.items() if name == layout}
    good = [spacing for spacing, cell in tried.items() if meets(quest, *reached(quest, cell))]
    return [_judged(rule, max(good, default=None), min(tried), layout) for rule in rules]


def _judged(rule: Rule, needed: float | None, finest: float, layout: str) -> str:
    """One rule against the widest spacing that meets the goal."""
    asked = rule.spacing_m / KM
    start = f"A spacing {rule.name} ({rule.source}) would be {asked:.2g} km here"
    if needed is None:
        return f"{start}; no {layout} grid down to {finest / KM:g} km meets the goal, so it promises too much."
    found = f"the widest {layout} grid that meets the goal has {needed / KM:g} km"
    ratio = needed / rule.spacing_m
    if 0.8 <= ratio <= 1.25:
        return f"{start}, and it agrees: {found}."
    if ratio > 1.0:
        return f"{start}; {found}, so for this goal the rule asks for {ratio**2:.2g} times the stations needed."
    return f"{start}; {found}, so the rule misleads: a survey by it would miss the goal."
