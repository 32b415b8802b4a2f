"""The report of an assessment: one page that asks nothing of the outside."""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING, Any

from gravbasin.report.figures import assessment_figures
from gravbasin.report.tables import audit_rows, dimension_rows, key_numbers, noise_rows
from gravbasin.report.words import given, number, plus_minus, probability

if TYPE_CHECKING:
    from jinja2 import Template

    from gravbasin.runs.assess import Assessment

__all__ = ["assessment_report"]

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
    page = _template().render(
        name=result.scenario.name,
        note=result.scenario.note,
        verdict=result.verdict,
        meaning=_meaning(result),
        numbers=key_numbers(result.verdict),
        drawings=drawings,
        missing=_missing(result),
        dimensions=dimension_rows(result.modelled.model.dimensions),
        target=result.modelled.model.dimensions.target_rock,
        noise=noise_rows(result.verdict),
        noise_origin=_noise_origin(result.verdict),
        noise_check=_noise_check(result.verdict),
        audit=audit_rows(result.verdict),
        provenance=_provenance(result.verdict["provenance"]),
    )
    return page, {name: XML + drawing.svg for name, drawing in drawings.items()}


@cache
def _template() -> Template:
    from jinja2 import Environment, PackageLoader, StrictUndefined

    environment = Environment(
        loader=PackageLoader("gravbasin.report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    return environment.get_template("assessment.html.j2")


def _meaning(result: Assessment) -> str:
    """What the verdict's word stands for, with the threshold behind it."""
    rules = result.scenario.inference
    least, p = given(rules.detection_probability), given(rules.consistent_p_value)
    words = {
        "consistent": f"The map differs from this structure no more than noise and the model's own scatter explain "
        f"(misfit p at least {p}).",
        "inconsistent": f"The map differs from this structure more than noise and the model's own scatter explain "
        f"(misfit p below {p}).",
        "below detectability": f"The detection probability is below the {least} that the scenario asks for: a map like "
        "this could not show such a structure, so it speaks neither for it nor against it.",
        "detectable, no map compared": f"The detection probability is at least the {least} that the scenario asks for. "
        "Whether the structure is there was not asked: the scenario has no map.",
    }
    return words.get(result.verdict["verdict"], "")


def _missing(result: Assessment) -> dict[str, str]:
    """For every figure a reader may look for in vain, why it is not there."""
    if result.comparison is None:
        return {
            "maps": "The scenario has no observed map, so no maps are drawn and nothing was fitted.",
            "chance": "Without a map there are no other places to try.",
        }
    return {"chance": "The chance test was switched off (inference.chance_centres = 0)."}


def _noise_origin(verdict: dict[str, Any]) -> str:
    noise = verdict["noise"]
    if "n_points" not in noise:
        return "Stated in the scenario."
    return f"Estimated from {noise['n_points']} nodes of the map outside the structure."


def _noise_check(verdict: dict[str, Any]) -> str:
    """How the noise model stood its test, in words."""
    check = verdict.get("noise_check")
    if check is None:
        return "A stated noise is taken at its word: it was not checked against a map."
    outcome = (
        f"Each of {check['n_blocks']} blocks of the map was predicted from all the others: squared errors are "
        f"{plus_minus(check['ratio'], check['standard_error'])} times what the model expects (1 if it holds), "
        f"p = {probability(check['p_value'])}; in the worst block {number(check['worst_block'], 2)} times."
    )
    if check["p_value"] >= 0.05:
        return f"{outcome} The model describes the map."
    if check["ratio"] > 1:
        return f"{outcome} The map is rougher than the model: signal-to-noise and misfit are probably overstated."
    return f"{outcome} The map is quieter than the model: signal-to-noise and misfit are probably understated."


def _provenance(facts: dict[str, Any]) -> list[tuple[str, str]]:
    rows = [("scenario, SHA-256", str(facts["scenario_sha256"])), ("seed", str(facts["seed"]))]
    rows += [(f"version of {name}", str(version)) for name, version in facts["versions"].items()]
    labels = {"file": "file", "variable": "variable", "sha256": "SHA-256", "nan_count": "empty nodes"}
    known = facts.get("map", {})
    return rows + [(f"map, {label}", str(known[key])) for key, label in labels.items() if known.get(key) is not None]
