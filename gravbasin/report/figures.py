"""The figures of an assessment, each with its title, caption and a description for those who cannot see it."""

from __future__ import annotations

import dataclasses
from typing import TYPE_CHECKING

from scipy import stats

from gravbasin.forward.motion import is_axisymmetric
from gravbasin.inference.bank import ImpactFamily
from gravbasin.report.canvas import svg
from gravbasin.report.map_figure import map_figure
from gravbasin.report.noise_figure import spectrum_figure
from gravbasin.report.odds_figures import chance_figure, detectability_figure
from gravbasin.report.odds_map_figure import odds_figure
from gravbasin.report.posterior_figure import FEW, posterior_figure
from gravbasin.report.profile_figures import parts_figure, profile_figure
from gravbasin.report.section_figure import section_figure
from gravbasin.report.words import given, number, percent, plus_minus, probability, signed

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from gravbasin.observed import SpectrumCheck
    from gravbasin.runs.assess import Assessment
    from gravbasin.runs.compare import Comparison

__all__ = ["TITLES", "Drawing", "assessment_figures"]

KM = 1000.0

TITLES = {
    "section": "Cross-section",
    "maps": "Maps",
    "profile": "Radial profile",
    "posterior": "Diameter and erosion",
    "parts": "What makes the anomaly",
    "detectability": "Could it be seen?",
    "chance": "How often by chance?",
    "odds": "Odds over the map",
    "spectrum": "Spectrum of the map",
}
"""Every figure an assessment can have, in the order of the page."""


@dataclasses.dataclass(frozen=True, eq=False)
class Drawing:
    """One figure as text.

    Attributes
    ----------
    name : str
        Name of its file, and prefix of every id inside.
    title, caption : str
        What stands above and below it.
    svg : str
        The figure itself.
    """

    name: str
    title: str
    caption: str
    svg: str


def assessment_figures(result: Assessment) -> dict[str, Drawing]:
    """Every figure an assessment has, by name; without a map there are no maps and no chance figure."""
    drawings = [_section(result), _profile(result), _parts(result), _detectability(result)]
    if result.comparison is not None:
        drawings += [_maps(result, result.comparison), _posterior(result, result.comparison)]
        if result.comparison.chance is not None:
            drawings.append(_chance(result.comparison))
        if result.comparison.odds.notnull().any():
            drawings.append(_odds(result, result.comparison))
        trial = result.comparison.noise_trial
        if trial is not None and trial.spectrum is not None:
            drawings.append(_spectrum(result.comparison, trial.spectrum))
    return {drawing.name: drawing for drawing in drawings}


def _drawing(figure: Figure, name: str, caption: str, description: str) -> Drawing:
    title = TITLES[name]
    return Drawing(name, title, caption, svg(figure, name=name, title=title, description=description))


def _rim_radius(result: Assessment) -> float:
    return 0.5 * KM * result.scenario.crater.rim_diameter_km


def _anomaly_in_words(result: Assessment) -> str:
    m = result.verdict["model"]
    centre, peak = signed(m["centre_mgal"]), signed(m["peak_mgal"])
    return f"The modelled anomaly is {centre} mGal at the centre and {peak} at most."


def _section(result: Assessment) -> Drawing:
    return _drawing(
        section_figure(result.modelled.section, result.profile, rim_radius_m=_rim_radius(result)),
        "section",
        "The structure cut through its axis, and mirrored about it: the anomaly it makes, the density contrast to the "
        "intact column, and the units. Thin full contours mark a surplus, dashed ones a deficit; the heavy line is "
        "today's ground.",
        "Cross-section through the axis: anomaly above, density contrast and units below, against distance and depth. "
        + _anomaly_in_words(result),
    )


def _maps(result: Assessment, comparison: Comparison) -> Drawing:
    east, north = (given(c / KM) for c in comparison.rings.centre)
    disc = float(comparison.rings.edges_m[-1])
    return _drawing(
        map_figure(
            comparison.maps, centre_m=comparison.rings.centre, rim_radius_m=_rim_radius(result), disc_radius_m=disc
        ),
        "maps",
        f"Distances from the given centre, easting {east} km and northing {north} km. Full circle: the rim. Dashed "
        f"circle: the disc that was tested, {given(disc / KM)} km in radius. The regional drawn here was fitted "
        "outside the structure and serves the eye only; every number in this report estimates it together with the "
        "structure.",
        "Four maps on the same axes: observed, regional, observed minus regional, and modelled anomaly. "
        + _anomaly_in_words(result),
    )


def _profile(result: Assessment) -> Drawing:
    if result.comparison is None:
        caption = (
            "Anomaly against distance from the centre; the band holds 90 % of the draws from the scatter of size laws "
            "and contrasts. No map was compared, so only the model is drawn."
        )
    else:
        caption = (
            "Ring means against distance from the centre. Line and band: the impact structures within the prior that "
            "fit the map. Dashed: the structure of the scenario itself. Points: the map, its jointly estimated "
            "regional removed. Their errors are correlated: neighbouring rings err together, so a run of points on one "
            "side is no news. The test of the fit counts that."
        )
    return _drawing(
        profile_figure(result.profile, rim_radius_m=_rim_radius(result)),
        "profile",
        caption,
        "Anomaly against distance from the centre. " + _anomaly_in_words(result),
    )


def _posterior(result: Assessment, comparison: Comparison) -> Drawing:
    posterior, fit = comparison.posteriors[0], result.verdict["fit"]
    own = {key: result.verdict["model"][key] for key in ("rim_diameter_km", "erosion_km")}
    ranges = ImpactFamily(result.scenario).ranges
    dots = " Rings: the models behind it, larger where they weigh more." if posterior.effective_size < FEW else ""
    spans = " and ".join(f"{given(ranges[key].low)} to {given(ranges[key].high)} km" for key in own)
    d, e = fit["rim_diameter_km"], fit["erosion_km"]
    return _drawing(
        posterior_figure(posterior, ranges, own),
        "posterior",
        f"What the map leaves of diameter and erosion together, if it is an impact structure; contrasts and "
        f"size laws vary along, so the spread holds what they leave open.{dots} At the sides: each "
        f"alone, its median and 90 % interval, and dashed what was thought before (from {spans}). Cross and lines: the "
        "scenario.",
        f"Joint posterior of rim diameter, {number(d['low'])} to {number(d['high'])} km, and erosion, "
        f"{number(e['low'], 2)} to {number(e['high'], 2)} km at 90 %.",
    )


def _odds(result: Assessment, comparison: Comparison) -> Drawing:
    largest = float(comparison.odds.max())
    numbers = " Numbers: the candidates below." if result.candidates else ""
    return _drawing(
        odds_figure(
            comparison.odds,
            centre_m=comparison.rings.centre,
            rim_radius_m=_rim_radius(result),
            candidates=[(found.easting, found.northing) for found in result.candidates],
        ),
        "odds",
        "At every place, how much better impact structures of the prior, centred there, explain the rings about it "
        "than regional noise does: natural logarithm of the odds, before any prior odds. 3 is odds of 20 to 1; grey: "
        "noise does better. Circle: the rim of the structure. Blank: the rings leave the map. Other bodies raise the "
        f"odds too, here and elsewhere.{numbers}",
        f"Map of the logarithm of the odds of an impact structure against regional noise, {signed(largest)} at most.",
    )


def _parts(result: Assessment) -> Drawing:
    centre = result.profile.parts.isel(radius=0)
    round_one = is_axisymmetric(result.scenario.deformation)
    bent = "" if round_one else " Drawn before the scenario's deformation, which is no cause of its own."
    listed = ", ".join(f"{name} {signed(float(centre.sel(part=name)))} mGal" for name in centre.part.values)
    return _drawing(
        parts_figure(result.profile, rim_radius_m=_rim_radius(result)),
        "parts",
        "The modelled anomaly split by cause; the causes add up to the heavy line. A cause without any contrast left "
        f"today (worn away, or never there) has no line.{bent}",
        f"Modelled anomaly by cause, against distance. At the centre: {listed}.",
    )


def _spectrum(comparison: Comparison, spectrum: SpectrumCheck) -> Drawing:
    ratio = spectrum.ratio
    return _drawing(
        spectrum_figure(spectrum, signal_km=comparison.detectability.band_km),
        "spectrum",
        "Power of the map over that of its noise model, by wavelength. The band holds 90 % of maps simulated from the "
        "model, gaps, mask and regional treated alike. Heavy bar at the foot: the wavelengths that carry the signal; "
        "there the points matter most.",
        f"Power over the model's against wavelength, from {number(min(ratio), 2)} to {number(max(ratio), 2)}.",
    )


def _detectability(result: Assessment) -> Drawing:
    d = result.verdict["detectability"]
    threshold = float(stats.norm.isf(d["false_alarm_probability"]))
    return _drawing(
        detectability_figure(
            snr=d["snr"],
            snr_low=d["snr_low"],
            snr_high=d["snr_high"],
            threshold=threshold,
            false_alarm=d["false_alarm_probability"],
            detected=d["detection_probability"],
        ),
        "detectability",
        "A filter made for this structure returns one number. Dashed: what noise alone gives. Full line: what noise "
        "and the structure give. The bar holds 90 % of the expected values over plausible noise and the scatter of "
        "the structure. This is for a place, size and sign known beforehand; a search over a map needs more.",
        f"Two bell curves: noise alone about 0, with the structure about {number(d['snr'], 2)}; the threshold is at "
        f"{number(threshold)}. Detection probability {probability(d['detection_probability'])}.",
    )


def _chance(comparison: Comparison) -> Drawing:
    chance = comparison.chance
    assert chance is not None
    share = percent(chance.p_value, chance.standard_error)
    if chance.source == "map":
        where = f"{chance.centres} other centres on this map, which overlap: about {chance.independent:.0f} "
        where += "structures of this size fit side by side, and the error counts those"
    else:
        where = f"{chance.centres} random fields of the noise model, because the map has too little room for others"
    return _drawing(
        chance_figure(
            chance.null,
            chance.statistic,
            p_value=chance.p_value,
            standard_error=chance.standard_error,
            source=chance.source,
        ),
        "chance",
        f"The same statistic at {where}. Hatched: those that do as well as the structure, {share}. The centre and the "
        "size were given, not searched for.",
        f"Histogram of the statistic elsewhere; the structure has {plus_minus(chance.statistic, 0.1)}; "
        f"{share} do as well.",
    )
