"""From numbers to words: the verdict, its plain sentence, and everything verdict.json holds."""

from __future__ import annotations

import dataclasses
import math
from typing import Any

import numpy as np
import xarray as xr

from gravbasin import labels
from gravbasin.inference.detect import Detectability, required_snr
from gravbasin.runs.compare import Comparison
from gravbasin.runs.families import NOISE_ALONE, probabilities
from gravbasin.runs.forward_run import Modelled
from gravbasin.scenario import Scenario
from gravbasin.scenario_file import scenario_hash
from gravbasin.survey.vanish import Vanishing

__all__ = ["CAUTIONS", "verdict_of"]

SCHEMA = 1

CAUTIONS = (
    "Gravity alone never proves an impact: confirmation needs shock-metamorphic or meteoritic evidence.",
    "Gravity is not unique: other bodies and other combinations of size, depth and density fit the same map.",
    "Field safety, land access and drilling are matters for licensed practice and local rules.",
)
"""Cautions that stand beside every verdict."""

RIDGE = 0.8
"""Posterior correlation above which two parameters are said to trade against each other."""


def verdict_of(
    scenario: Scenario,
    modelled: Modelled,
    noise: dict[str, Any],
    seen: Detectability,
    vanishing: Vanishing,
    comparison: Comparison | None,
    observed: xr.DataArray | None,
) -> dict[str, Any]:
    """The dict written to verdict.json; DEVELOPERS.md lists its keys."""
    word = _word(scenario, seen, comparison)
    verdict: dict[str, Any] = {
        "schema": SCHEMA,
        "verdict": word,
        "statement": _statement(scenario, modelled, seen, comparison, word),
        "cautions": list(CAUTIONS),
        "model": {
            "rim_diameter_km": scenario.crater.rim_diameter_km,
            "erosion_km": modelled.model.ground.erosion / 1e3,
            "burial_km": modelled.model.ground.cover / 1e3,
            "peak_mgal": modelled.peak,
            "centre_mgal": float(modelled.profile[0]),
            "half_width_km": modelled.half_width / 1e3,
            "excess_mass_kg": modelled.mass_deficit(),
            "earth": modelled.earth,
        },
        "audit": modelled.audit.as_dict(),
        "noise": noise,
        "detectability": {
            "snr": seen.snr,
            "snr_low": seen.snr_low,
            "snr_high": seen.snr_high,
            "required_snr": required_snr(scenario.inference.detection_probability, seen.false_alarm_probability),
            "detection_probability": seen.detection_probability,
            "false_alarm_probability": seen.false_alarm_probability,
            "wavelengths_km": list(seen.band_km),
            "vanishing_erosion_km": vanishing.as_dict(),
        },
    }
    if comparison is not None:
        verdict |= _map_results(scenario, comparison)
    facts: dict[str, Any] = {
        "scenario_sha256": scenario_hash(scenario),
        "seed": scenario.seed,
        "versions": labels.versions("harmonica", "numpy", "scipy", "xarray"),
    }
    if observed is not None:
        facts["map"] = labels.read_provenance(observed)
    verdict["provenance"] = facts
    return dict(_plain(verdict))


def _map_results(scenario: Scenario, comparison: Comparison) -> dict[str, Any]:
    impact, fit, trial = comparison.posteriors[0], comparison.fit, comparison.noise_trial
    results: dict[str, Any] = {
        "fit": {
            "chi2": fit.chi2,
            "dof": fit.dof,
            "p_value": fit.p_value,
            "amplitude": comparison.amplitude,
            "amplitude_standard_error": comparison.amplitude_error,
            "rings": int(comparison.rings.mean.size),
            "outer_radius_km": float(comparison.rings.edges_m[-1]) / 1e3,
            "effective_models": impact.effective_size,
            "diameter_erosion_correlation": impact.correlation("rim_diameter_km", "erosion_km"),
        }
        | {
            name: dict(zip(("median", "low", "high"), impact.interval(name), strict=True))
            for name in ("rim_diameter_km", "erosion_km", "moho_uplift_km", "excess_mass_kg")
        },
        "rivals": _rival_table(scenario, comparison),
        "marks": [dataclasses.asdict(mark) for mark in comparison.marks],
        "local_noise_level": {
            "anywhere": dataclasses.asdict(comparison.places.roughness.anywhere),
            "here": dataclasses.asdict(comparison.level),
            "texture_weight": comparison.places.roughness.weight,
        },
    }
    chance, circularity = comparison.chance, comparison.circularity
    if chance is not None:
        results["chance"] = {
            "statistic": chance.statistic,
            "centres": chance.centres,
            "p_value": chance.p_value,
            "standard_error": chance.standard_error,
            "source": chance.source,
            "independent_places": chance.independent,
        }
    if circularity is not None:
        results["circularity"] = dataclasses.asdict(circularity)
    if trial is not None:
        results["noise_check"] = trial.as_dict()
    return results


def _rival_table(scenario: Scenario, comparison: Comparison) -> list[dict[str, Any]]:
    shares = probabilities(scenario, comparison.posteriors)
    return [
        {
            "name": posterior.name,
            "log_evidence": posterior.log_evidence,
            "standard_error": posterior.standard_error,
            "effective_models": posterior.effective_size,
            "prior_odds": scenario.prior.odds.get(posterior.name, 1.0),
            "probability": float(share),
        }
        for posterior, share in zip(comparison.posteriors, shares, strict=True)
    ]


def _word(scenario: Scenario, seen: Detectability, comparison: Comparison | None) -> str:
    limits = scenario.inference
    expected = seen.detection_probability >= limits.detection_probability
    if comparison is None:
        return "detectable, no map compared" if expected else "below detectability"
    stands_out = comparison.chance is not None and comparison.chance.p_value <= limits.chance_p_value
    if not expected and not stands_out:
        return "below detectability"
    if comparison.fit.p_value < limits.consistent_p_value:
        return "inconsistent"
    return "consistent" if _separable(scenario, comparison) else "consistent, not separable from rivals"


def _separable(scenario: Scenario, comparison: Comparison) -> bool:
    impact, *others = comparison.posteriors
    gap = 2 * (impact.log_evidence - max(p.log_evidence for p in others))
    return gap >= scenario.inference.separation


def _statement(
    scenario: Scenario, modelled: Modelled, seen: Detectability, comparison: Comparison | None, word: str
) -> str:
    erosion, cover = modelled.model.ground.erosion / 1e3, modelled.model.ground.cover / 1e3
    buried = f" and buried under {cover:.2g} km" if cover else ""
    body = f"a {scenario.crater.rim_diameter_km:g} km structure eroded by {erosion:.3g} km{buried}"
    seen_with = f"detection probability {seen.detection_probability:.2f}"
    if comparison is None:
        fate = "would stand out" if word != "below detectability" else "would be lost"
        return f"In the stated noise {body} {fate} ({_mgal(modelled.peak)} at most, {seen_with}); no map was compared."
    by_chance = _by_chance(comparison)
    if word == "below detectability":
        return (
            f"Here {body} would be lost in the regional noise ({_mgal(modelled.peak)} at most, {seen_with}), and "
            f"the map shows nothing unusual{by_chance}: it can say little about such a structure."
        )
    if word == "inconsistent":
        return f"No impact structure within the prior fits this map (misfit p {_p(comparison.fit.p_value)}){by_chance}."
    d = comparison.posteriors[0].interval("rim_diameter_km")
    e = comparison.posteriors[0].interval("erosion_km")
    size = f"{d[1]:.0f} to {d[2]:.0f} km across and eroded by {e[1]:.1f} to {e[2]:.1f} km (90 %)"
    return f"An impact structure {size} could make this anomaly{_against(scenario, comparison)}{by_chance}."


def _against(scenario: Scenario, comparison: Comparison) -> str:
    shares = probabilities(scenario, comparison.posteriors)
    best = 1 + int(np.argmax(shares[1:]))
    name = comparison.posteriors[best].name
    body = name if name == NOISE_ALONE else f"a {name}"
    odds = f"probability {_share(shares[best])} against {_share(shares[0])}"
    if _separable(scenario, comparison):
        return f"; the best rival, {body}, fits worse ({odds})"
    return f"; so could {body} ({odds})"


def _share(value: float) -> str:
    return "below 0.001" if value < 1e-3 else "above 0.999" if value > 0.999 else f"{value:.2g}"


def _by_chance(comparison: Comparison) -> str:
    chance = comparison.chance
    if chance is None:
        return ""
    places = "other places on the map" if chance.source == "map" else "random fields"
    return f"; {_percent(chance.p_value, 2)} ± {_percent(chance.standard_error, 1)} % of {places} do as well"


def _percent(share: float, digits: int) -> str:
    """A share in per cent, to so many digits and never with a power of ten.

    Examples
    --------
    >>> _percent(0.17, 1), _percent(0.0009, 2), _percent(1.0, 2), _percent(0.4955, 2)
    ('20', '0.09', '100', '50')
    """
    return f"{float(f'{100 * share:.{digits}g}'):g}"


def _mgal(value: float) -> str:
    return f"{value:+.1f} mGal".replace("-", "−")


def _p(value: float) -> str:
    return "below 0.0001" if value < 1e-4 else f"= {value:.2g}"


def _plain(value: Any) -> Any:
    """Numbers as JSON holds them: numpy scalars become plain ones, not-a-number becomes null."""
    if isinstance(value, dict):
        return {k: _plain(v) for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(v) for v in value]
    if isinstance(value, (float, np.floating)):
        return float(value) if math.isfinite(value) else None
    return value.item() if isinstance(value, np.generic) else value
