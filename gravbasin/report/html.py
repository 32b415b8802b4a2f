"""The report of an assessment: one page that asks nothing of the outside."""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING, Any

from gravbasin.crater import rivals_of
from gravbasin.forward.motion import is_axisymmetric
from gravbasin.inference.bank import ImpactFamily
from gravbasin.report import sentences
from gravbasin.report.figures import TITLES, assessment_figures
from gravbasin.report.tables import (
    audit_rows,
    candidate_rows,
    dimension_rows,
    key_numbers,
    mark_rows,
    noise_rows,
    rival_rows,
)

if TYPE_CHECKING:
    from jinja2 import Template

    from gravbasin.runs.assess import Assessment

__all__ = ["XML", "assessment_report", "provenance_rows", "template"]

XML = '<?xml version="1.0" encoding="UTF-8"?>\n'


def assessment_report(result: Assessment) -> tuple[str, dict[str, str]]:
    """The report and its figures.

    Parameters
    ----------
    result : Assessment
        What a run found.

    Returns
    -------
    html : str
        One self-contained page: styles and figures inside, no script, no request.
    figures : dict of str
        Each figure as a file's text (SVG) by name. The same result gives the same text.
    """
    drawings = assessment_figures(result)
    scenario, verdict = result.scenario, result.verdict
    compared = "fit" in verdict
    page = template("assessment.html.j2").render(
        name=scenario.name,
        note=scenario.note,
        verdict=verdict,
        cautions=verdict["cautions"],
        meaning=sentences.meaning(scenario, verdict),
        deformed=not is_axisymmetric(scenario.deformation),
        numbers=key_numbers(verdict),
        rivals=rival_rows(verdict, rivals_of(scenario)) if compared else [],
        identifiability=sentences.identifiability(verdict, ImpactFamily(scenario).ranges) if compared else "",
        roundness=sentences.roundness(verdict) if compared else "",
        marks=mark_rows(verdict),
        candidates=candidate_rows(verdict),
        titles=TITLES,
        drawings=drawings,
        missing=_missing(result),
        dimensions=dimension_rows(result.modelled.model.dimensions),
        target=result.modelled.model.dimensions.target_rock,
        noise=noise_rows(verdict),
        noise_origin=sentences.noise_origin(verdict),
        noise_check=sentences.noise_check(verdict),
        noise_spectrum=sentences.noise_spectrum(verdict),
        noise_mask=sentences.noise_mask(verdict),
        local_level=sentences.local_level(verdict),
        audit=audit_rows(verdict),
        provenance=provenance_rows(verdict["provenance"]),
    )
    return page, {name: XML + drawing.svg for name, drawing in drawings.items()}


@cache
def template(name: str) -> Template:
    """A page to be filled: strict about names, safe with any text."""
    from jinja2 import Environment, PackageLoader, StrictUndefined

    environment = Environment(
        loader=PackageLoader("gravbasin.report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    return environment.get_template(name)


def _missing(result: Assessment) -> dict[str, str]:
    """For every figure a reader may look for in vain, why it is not there."""
    if result.comparison is None:
        return {
            "maps": "The scenario has no observed map, so no maps are drawn and nothing was fitted.",
            "posterior": "Without a map nothing was fitted.",
            "chance": "Without a map there are no other places to try.",
            "odds": "Without a map there are no places to compare.",
        }
    return {
        "chance": "The chance test was switched off (inference.chance_centres = 0).",
        "odds": "The rings about any other place leave the map, so there is nothing to compare with. A wider map, or a "
        "smaller inference.outer_radius_in_diameters, makes room.",
    }


def provenance_rows(facts: dict[str, Any]) -> list[tuple[str, str]]:
    """What makes a run repeatable, as label and value."""
    rows = [("scenario, SHA-256", str(facts["scenario_sha256"]))]
    rows += [("seed", str(facts["seed"]))] if "seed" in facts else []
    rows += [(f"version of {name}", str(version)) for name, version in facts["versions"].items()]
    labels = {"file": "file", "variable": "variable", "sha256": "SHA-256", "nan_count": "empty nodes"}
    known = facts.get("map", {})
    return rows + [(f"map, {label}", str(known[key])) for key, label in labels.items() if known.get(key) is not None]
