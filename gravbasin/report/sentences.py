"""What numbers of a verdict mean, in plain sentences with the threshold behind each."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from scipy import stats

from gravbasin.crater import Range
from gravbasin.report.posterior_figure import FEW
from gravbasin.report.words import given, number, plus_minus, probability
from gravbasin.runs.verdict import RIDGE

if TYPE_CHECKING:
    from gravbasin.scenario import Scenario

__all__ = [
    "identifiability",
    "local_level",
    "meaning",
    "noise_check",
    "noise_mask",
    "noise_origin",
    "noise_spectrum",
    "roundness",
]

Verdict = Mapping[str, Any]

MASK_MATTERS = 0.15
"""Difference of noise with the structure left out and fitted, above which a reader is warned (common practice)."""

LITTLE = 0.7
"""Share of the prior's width from which an interval says little that was not put in."""


def meaning(scenario: Scenario, verdict: Verdict) -> str:
    """What the verdict's word stands for, with the threshold behind it."""
    rules = scenario.inference
    least, p, lead = given(rules.detection_probability), given(rules.consistent_p_value), given(rules.separation)
    fits = f"Impact structures within the prior explain the map up to noise (posterior predictive p at least {p})"
    words = {
        "consistent": f"{fits}, and lead every rival by at least {lead} in twice the logarithm of the evidence.",
        "consistent, not separable from rivals": f"{fits}, but a rival explains it about as well: the lead in twice "
        f"the logarithm of the evidence is below {lead}.",
        "inconsistent": "Even the impact structures that come nearest differ from the map more than noise explains "
        f"(posterior predictive p below {p}).",
        "below detectability": f"The detection probability is below the {least} that the scenario asks for"
        + (
            f", and more than {given(100 * rules.chance_p_value)} % of other places do as well. "
            if "chance" in verdict
            else ". "
        )
        + "A map like this could not show such a structure, so it speaks neither for it nor against it.",
        "detectable, no map compared": f"The detection probability is at least the {least} that the scenario asks for. "
        "Whether the structure is there was not asked: the scenario has no map.",
    }
    return words.get(verdict["verdict"], "")


def identifiability(verdict: Verdict, prior: Mapping[str, Range]) -> str:
    """Whether diameter and erosion trade against each other, and whether the map narrowed them at all."""
    fit = verdict["fit"]
    return " ".join([*_trade(fit), *_narrowed(fit, prior), *_rough(fit["effective_models"])])


def _trade(fit: Verdict) -> list[str]:
    r = fit["diameter_erosion_correlation"]
    if r is None:
        return ["Too few models explain the map to say whether diameter and erosion trade against each other."]
    shown = f"(posterior correlation {_two_decimals(r)})"
    like = "wider structure more worn" if r > 0 else "wider structure less worn"
    if abs(r) >= RIDGE:
        return [f"Diameter and erosion trade against each other {shown}: a {like} fits as well, so the map fixes a "
                "combination of the two and neither alone."]  # fmt: skip
    if abs(r) >= 0.5 * RIDGE:
        return [f"Diameter and erosion trade against each other in part {shown}: a {like} fits nearly as well."]
    return [f"Diameter and erosion hardly trade against each other here {shown}."]


def _two_decimals(value: float) -> str:
    return f"{value:+.2f}".replace("-", "−")


def _narrowed(fit: Verdict, prior: Mapping[str, Range]) -> list[str]:
    said = []
    for name, words in (("rim_diameter_km", "diameter"), ("erosion_km", "erosion")):
        low, high, bound = fit[name]["low"], fit[name]["high"], prior[name]
        kept = bound.share(Range(low, high, bound.logarithmic)) / 0.9
        span = f"the prior's {given(bound.low)} to {given(bound.high)} km"
        if kept >= LITTLE:
            said.append(f"The map says little of the {words}: its interval is about as wide as {span}.")
        else:
            said.append(f"The map narrows the {words} to {number(100 * kept, 2)} % of {span}.")
    return said


def _rough(effective: float) -> list[str]:
    if effective >= FEW:
        return []
    return [f"The posterior is worth {effective:.0f} equally weighted models, fewer than {FEW:.0f}: intervals and the "
            "correlation are rough, and the intervals likely too narrow."]  # fmt: skip


def roundness(verdict: Verdict) -> str:
    """How round the anomaly is, in words."""
    c = verdict.get("circularity")
    if c is None:
        return "Not tested: the rings about the centre leave the map or meet empty nodes."
    shapes = ("off its centre", "elongated", "three-cornered", "four-cornered")
    strongest = max(range(len(c["order_power"])), key=lambda i: c["order_power"][i])
    result = (
        f"What varies with direction has {number(c['ratio'], 2)} times the power that noise gives a round anomaly; "
        f"noise alone is as uneven with probability {probability(c['p_value'])}."
    )
    if c["p_value"] < 0.05:
        return (
            f"{result} The anomaly is less round than the noise explains, most of all {shapes[strongest]}: tilt, "
            "uneven erosion or a neighbouring body may have bent it, or it is no circle."
        )
    return f"{result} Nothing speaks against a round anomaly.{_elongation(c)}"


def _elongation(circularity: Mapping[str, Any]) -> str:
    """How long it is for its width, where that was measured."""
    value, error = circularity.get("elongation"), circularity.get("elongation_error")
    if value is None or error is None:
        return ""
    return f" Elongation, long axis over short less one: {number(value, 2)} ± {number(error, 2)}."


def noise_origin(verdict: Verdict) -> str:
    """Where the noise model comes from."""
    noise = verdict["noise"]
    if "n_points" not in noise:
        return "Stated in the scenario."
    return f"Estimated from {noise['n_points']} nodes of the map outside the structure."


def noise_check(verdict: Verdict) -> str:
    """How the noise model stood its test."""
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


def noise_spectrum(verdict: Verdict) -> str:
    """How the map's spectrum and grain compare with maps simulated from the model."""
    spectrum = (verdict.get("noise_check") or {}).get("spectrum")
    if spectrum is None:
        return ""
    ratio = spectrum["ratio"]
    worst = max(range(len(ratio)), key=lambda i: abs(math.log(ratio[i])))
    near, times = number(spectrum["wavelength_km"][worst], 2), number(ratio[worst], 2)
    told = f"Power by wavelength is that of maps simulated from the model (p = {probability(spectrum['p_value'])})."
    if spectrum["p_value"] < 0.05:
        told = (
            f"Power by wavelength is not that of maps simulated from the model (p = "
            f"{probability(spectrum['p_value'])}): near {near} km the map has {times} times as much."
        )
    chance = f"p = {probability(spectrum['grain_p_value'])}"
    if spectrum["grain_p_value"] >= 0.05:
        return f"{told} The map has no grain beyond what chance gives ({chance})."
    return (
        f"{told} The map has a grain: smoothest along azimuth {spectrum['grain_azimuth_deg']:.0f}°, with "
        f"{number(spectrum['grain_ratio'], 2)} times the power across it ({chance}). "
        "Signal-to-noise ratios and evidence take noise as alike in all directions; the chance test, made on the map "
        "itself, does not."
    )


def noise_mask(verdict: Verdict) -> str:
    """Whether leaving the structure out and fitting it give the same noise."""
    rough = (verdict.get("noise_check") or {}).get("roughness_mgal")
    if rough is None:
        return ""
    out, fitted = rough["structure_left_out"], rough["structure_fitted"]
    told = (
        f"Over the structure's diameter the map varies by {number(out, 2)} mGal with the structure left out, which is "
        f"what is used, and by {number(fitted, 2)} mGal where a multiple of the modelled one is fitted instead."
    )
    if abs(fitted / out - 1.0) <= MASK_MATTERS:
        return told
    return (
        f"{told} They differ by more than {100 * MASK_MATTERS:.0f} %: the surroundings of the structure are "
        f"{'rougher' if fitted > out else 'smoother'} than the rest of the map, or it is not what was modelled. Take "
        "signal-to-noise ratios with as much doubt."
    )


def local_level(verdict: Verdict) -> str:
    """How the noise level differs from place to place, and here: the variance is an inverse gamma about the model's."""
    level = verdict.get("local_noise_level")
    if level is None:
        return ""
    told = (
        f"Crust is rougher in one place than in another: the standard deviation is taken to lie "
        f"{_between(level['anywhere'])} times the model's at nine places in ten. "
    )
    if level["here"] != level["anywhere"]:
        told += (
            f"The texture of the map about the centre (azimuthal harmonics of orders 3 to 6, worth "
            f"{number(level['texture_weight'], 2)} degrees of freedom by the map's own record) puts it here "
            f"{_between(level['here'])} times. "
        )
    return told + "Evidence and chance are averaged over that."


def _between(level: dict[str, float]) -> str:
    tail = stats.chi2.ppf([0.95, 0.05], level["dof"])
    low, high = (level["dof"] * level["scale"] / tail) ** 0.5
    return f"between {number(low, 2)} and {number(high, 2)}"
