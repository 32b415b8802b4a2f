"""The tables of an assessment's report: rows of quantity, value and what it means."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from typing import Any, NamedTuple

from gravbasin.crater import CraterDimensions, Rival
from gravbasin.report.words import given, number, percent, plus_minus, probability, signed
from gravbasin.runs.section_run import dimension_table

__all__ = [
    "Row",
    "audit_rows",
    "candidate_rows",
    "dimension_rows",
    "key_numbers",
    "mark_rows",
    "noise_rows",
    "rival_rows",
]

Verdict = Mapping[str, Any]


class Row(NamedTuple):
    """One line of a table."""

    quantity: str
    value: str
    meaning: str = ""


def mark_rows(verdict: Verdict) -> list[Row]:
    """Marks of shape that published work names: value with its 90 % limits, and what the families would show."""
    rows = []
    for mark in verdict.get("marks", []):
        unit = "" if mark["unit"] == "1" else f" {mark['unit']}"
        value = "not measurable"
        if mark["value"] is not None:
            value = f"{number(mark['value'], 2)}{unit}{_limits(mark, unit)}"
        rows.append(Row(mark["name"], value, mark["meaning"].removeprefix("not measurable: ")))
    return rows


def _limits(mark: Mapping[str, Any], unit: str) -> str:
    if mark["low"] is None or mark["high"] is None:
        return ""
    return f" ({number(mark['low'], 2)} to {number(mark['high'], 2)}{unit})"


def key_numbers(verdict: Verdict) -> dict[str, list[Row]]:
    """The main results by theme; themes that the run has no results for are left out."""
    themes = {"Structure": _structure, "Anomaly": _anomaly, "Detectability": _detectability}
    themes |= {"Fit to the map": _fit} if "fit" in verdict else {}
    themes |= {"Chance": _chance} if "chance" in verdict else {}
    return {theme: rows(verdict) for theme, rows in themes.items()}


def _structure(verdict: Verdict) -> list[Row]:
    m = verdict["model"]
    return [
        Row("rim diameter when fresh", f"{given(m['rim_diameter_km'])} km"),
        Row("erosion", f"{given(m['erosion_km'])} km", "rock stripped below the ground before impact"),
        Row("burial", f"{given(m['burial_km'])} km", "sediment over the worn surface today"),
        Row("excess mass", f"{number(m['excess_mass_kg'])} kg", "negative: a deficit to the intact column"),
    ]


def _anomaly(verdict: Verdict) -> list[Row]:
    m = verdict["model"]
    half_width = m["half_width_km"]
    reach = "not reached" if half_width is None else f"{number(half_width)} km"
    return [
        Row("largest", f"{signed(m['peak_mgal'])} mGal"),
        Row("at the centre", f"{signed(m['centre_mgal'])} mGal"),
        Row("half-width", reach, "radius at which it has fallen to half of the largest"),
        Row("computed on", {"flat": "a flat Earth", "sphere": "a spherical Earth"}.get(m["earth"], m["earth"])),
    ]


def _detectability(verdict: Verdict) -> list[Row]:
    d = verdict["detectability"]
    short, long = d["wavelengths_km"]
    return [
        Row(
            "signal-to-noise ratio",
            f"{number(d['snr'], 2)} ({number(d['snr_low'], 2)} to {number(d['snr_high'], 2)})",
            "in brackets 5–95 % over plausible noise and the structure's scatter",
        ),
        Row("ratio needed", number(d["required_snr"], 2), "for the detection probability the scenario asks"),
        Row("detection probability", probability(d["detection_probability"]), "mean over the same scatter"),
        Row("false alarm probability", given(d["false_alarm_probability"]), "accepted; known place, one trial"),
        Row(
            "wavelengths that carry it",
            f"{number(short, 2)} to {number(long, 2)} km",
            "if shorter than the map resolves, the noise model makes the detection, not the map",
        ),
        _vanishing(d["vanishing_erosion_km"]),
    ]


def _vanishing(level: Mapping[str, Any]) -> Row:
    beyond = " or more" if level["open_ended_share"] > 0.05 else ""
    value = f"{number(level['median'], 2)} km ({number(level['low'], 2)} to {number(level['high'], 2)}{beyond})"
    meaning = "deepest erosion at which it would still be seen here; in brackets 5–95 %, 0 where it never is"
    return Row("erosion level at which it vanishes", value, meaning)


def _fit(verdict: Verdict) -> list[Row]:
    f = verdict["fit"]
    moho = [("rise of the Moho", "moho_uplift_km", "km")] if f["moho_uplift_km"]["high"] > 0 else []
    intervals = [
        ("rim diameter", "rim_diameter_km", "km"),
        ("erosion", "erosion_km", "km"),
        *moho,
        ("excess mass", "excess_mass_kg", "kg"),
    ]
    return [
        Row(
            "p-value of the fit",
            probability(f["p_value"]),
            "how often maps drawn from the fitted structures would lie as far from them",
        ),
        Row(
            "misfit of the best one",
            f"χ² = {number(f['chi2'])} for {f['dof']} degrees of freedom",
            "typical noise, regional free",
        ),
        *(
            Row(f"{words}, fitted", _interval(f[key], unit), "median, and 90 % interval")
            for words, key, unit in intervals
        ),
        Row(
            "best multiple of the scenario's model",
            plus_minus(f["amplitude"], f["amplitude_standard_error"]),
            "1 if that model has the right size, 0 if there is nothing",
        ),
        Row("models it is worth", f"{f['effective_models']:.0f}", "equally weighted; intervals are rough below 50"),
        Row("rings compared", f"{f['rings']}, to {given(f['outer_radius_km'])} km from the centre"),
    ]


def _interval(values: Mapping[str, float], unit: str) -> str:
    """Median and interval to the digits that the interval allows."""
    width = values["high"] - values["low"]
    largest = max(abs(v) for v in values.values())
    digits = 2 if width <= 0 else min(max(2, 2 + math.floor(math.log10(largest / width))), 5)
    median, low, high = (number(values[key], digits) for key in ("median", "low", "high"))
    return f"{median} {unit} ({low} to {high})"


def _chance(verdict: Verdict) -> list[Row]:
    c = verdict["chance"]
    source = {"map": "other centres on this map", "random fields": "random fields of the noise model"}
    rows = [
        Row("share that does as well", percent(c["p_value"], c["standard_error"]), "false alarms of this very test"),
        Row("tried", f"{c['centres']} {source.get(c['source'], c['source'])}"),
        Row("statistic at the structure", signed(c["statistic"]), "natural log of the odds, impact against noise"),
    ]
    if c["source"] == "map":
        rows.append(
            Row(
                "independent places",
                f"about {c['independent_places']:.0f}",
                "that fit side by side",
            )
        )
    return rows


class RivalRow(NamedTuple):
    """One explanation of the map among others."""

    name: str
    log_evidence: str
    prior_odds: str
    probability: str
    effective: str
    tells: str


IMPACT_TELLS = "high gradients at the rim, a central high or ring; shocked rocks prove it"
NOISE_TELLS = "no body: a chance shape of the crust"


def rival_rows(verdict: Verdict, rivals: Iterable[Rival]) -> list[RivalRow]:
    """Every explanation that was weighed, the best first; the verdict lists the impact first and noise last."""
    tells = {rival.name: rival.tells or "added by the scenario" for rival in rivals}
    rows = verdict["rivals"]
    best = max(row["log_evidence"] for row in rows)
    impact, noise = rows[0]["name"], rows[-1]["name"]
    tells |= {impact: IMPACT_TELLS, noise: NOISE_TELLS}
    return [
        RivalRow(
            row["name"],
            _log_evidence(row["log_evidence"] - best, row["standard_error"]),
            given(row["prior_odds"]),
            probability(row["probability"]),
            f"{row['effective_models']:.0f}" if row["name"] != noise else "exact",
            tells[row["name"]],
        )
        for row in sorted(rows, key=lambda row: -row["probability"])
    ]


class CandidateRow(NamedTuple):
    """One place that a search over the map found."""

    rank: str
    easting: str
    northing: str
    log_odds: str
    chance: str


def candidate_rows(verdict: Verdict) -> list[CandidateRow]:
    """What a search over the whole map found, best first; empty where none was made."""
    return [
        CandidateRow(
            str(row["rank"]),
            f"{row['easting_km']:.1f}",
            f"{row['northing_km']:.1f}",
            signed(row["log_odds"]),
            number(row["search_p_value"], 2),
        )
        for row in verdict.get("search", ())
    ]


def _log_evidence(value: float, error: float) -> str:
    """To a tenth, which is finer than evidence is ever worth; errors below that are left out."""
    return signed(value) + (f" ± {number(error, 1)}" if error >= 0.05 else "")


_DIMENSIONS = {
    "rim_diameter_km": "rim diameter",
    "transient_diameter_km": "transient cavity, diameter",
    "transient_depth_km": "transient cavity, depth",
    "apparent_depth_km": "original ground to top of the impact fill",
    "rim_height_km": "height of the rim",
    "peak_height_km": "central peak or ring above the fill",
    "structural_uplift_km": "structural uplift below the centre",
    "central_uplift_diameter_km": "base of the central uplift, diameter",
    "peak_ring_diameter_km": "crest of the peak ring, diameter",
    "melt_volume_km3": "melt, volume",
    "melt_diameter_km": "melt sheet, diameter",
    "melt_thickness_km": "melt sheet, mean thickness",
    "breccia_thickness_km": "breccia lens, thickness",
    "suevite_thickness_km": "suevite, thickness",
    "fracture_base_km": "base of fractures below the floor",
    "moho_uplift_km": "rise of the Moho",
}


class DimensionRow(NamedTuple):
    """One dimension of the fresh structure."""

    quantity: str
    value: str
    unit: str
    origin: str
    source: str
    note: str


def dimension_rows(dimensions: CraterDimensions) -> list[DimensionRow]:
    """Every dimension with where it comes from: given, law, drawn, or derived from the others."""
    return [
        DimensionRow(
            _DIMENSIONS.get(row["name"], row["name"].rpartition("_")[0].replace("_", " ")),
            given(row["value"]) if row["origin"] == "given" else number(row["value"]),
            {"km3": "km³"}.get(row["unit"], row["unit"]),
            row["origin"],
            row["source"],
            row["validity"],
        )
        for row in dimension_table(dimensions)
    ]


def noise_rows(verdict: Verdict) -> list[Row]:
    """The noise model, with errors where it was estimated."""
    n = verdict["noise"]
    errors = n.get("relative_errors", {})

    def value(name: str, key: str, unit: str) -> str:
        if name not in errors:
            return f"{given(n[key])} {unit}".strip()
        return f"{number(n[key])} {unit}".strip() + f", within ±{number(100 * errors[name], 2)} %"

    return [
        Row("model", n["model"].replace("matern", "Matérn") + " field plus nugget"),
        Row("standard deviation", value("sill", "sill_mgal", "mGal"), "of the correlated part: the geology"),
        Row("correlation range", value("range", "range_km", "km"), "how far one place knows of another"),
        Row("smoothness", value("smoothness", "smoothness", ""), "the map's spectrum falls as k to the −(2ν + 2)"),
        Row("nugget", value("nugget", "nugget_mgal", "mGal"), "differs from node to node"),
        Row("regional", ("constant", "plane", "quadratic surface")[n["regional_order"]], "fitted with the structure"),
    ]


_AUDIT = {
    "reference": ("reference engine", "an independent code, run on the same prisms"),
    "stations": ("stations", "points, picked at random, at which it was run"),
    "max_abs_difference_mgal": ("largest difference to it", "error of the fast engine: rounding only, if it is right"),
    "discretisation_error_mgal": ("discretisation", "change with a finer section, or with squares instead of rings"),
    "flat_earth_error_mgal": ("flat Earth", "difference between a flat and a spherical Earth for this structure"),
}


def audit_rows(verdict: Verdict) -> list[Row]:
    """Every number of the audit and what it means."""
    rows = []
    for key, value in verdict["audit"].items():
        quantity, meaning = _AUDIT.get(key, (key.removesuffix("_mgal").replace("_", " "), ""))
        unit = " mGal" if key.endswith("_mgal") else ""
        rows.append(Row(quantity, str(value) if isinstance(value, (str, int)) else number(value, 2) + unit, meaning))
    return rows
