"""One scenario from file to verdict: model, map, comparison, plain sentence."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from gravbasin import labels
from gravbasin.crater import PARTS
from gravbasin.inference.detect import Detectability, required_snr
from gravbasin.observed import read_grid
from gravbasin.runs.compare import Comparison, compare_with_map, detect_without_map, noise_of
from gravbasin.runs.forward_run import Modelled, model_anomaly
from gravbasin.runs.store import write_run
from gravbasin.scenario import Scenario
from gravbasin.scenario_file import scenario_hash

__all__ = ["CAUTIONS", "Assessment", "assess"]

SCHEMA = 1

CAUTIONS = (
    "Gravity alone never proves an impact: confirmation needs shock-metamorphic or meteoritic evidence.",
    "Gravity is not unique: other bodies and other combinations of size, depth and density fit the same map.",
    "Field safety, land access and drilling are matters for licensed practice and local rules.",
)
"""Cautions that stand beside every verdict."""

Progress = Callable[[str, int, int], None]
STAGES = ("reading the map", "building the section and its anomaly", "estimating the noise", "comparing", "writing")


@dataclasses.dataclass(frozen=True, eq=False)
class Assessment:
    """Everything one run found; the report draws it, `verdict` is what verdict.json holds.

    Attributes
    ----------
    scenario : Scenario
        The question, defaults filled in.
    modelled : Modelled
        Section, anomaly, scatter, audit.
    noise_detectability : Detectability
        From the map, or on a stated survey where there is no map.
    comparison : Comparison or None
        None where the scenario has no observed map.
    verdict : dict
        See DEVELOPERS.md for the fields.
    profile : Dataset
        Radial profiles: modelled with band and parts (radius), observed ring means (ring_radius), mGal.
    """

    scenario: Scenario
    modelled: Modelled
    noise_detectability: Detectability
    comparison: Comparison | None
    verdict: dict[str, Any]
    profile: xr.Dataset


def assess(scenario: Scenario, out_dir: str | Path | None = None, *, progress: Progress | None = None) -> Assessment:
    """Answer a scenario, and write the run folder when `out_dir` is given.

    Parameters
    ----------
    scenario : Scenario
        From `load_scenario`.
    out_dir : path, optional
        Run folder to write; replaced as a whole, or left as it was.
    progress : callable, optional
        Called with (stage, number, count) as the work goes on.

    Returns
    -------
    Assessment

    Raises
    ------
    InputError
        A map or a scenario that breaks a rule.
    CannotFinish
        Not enough memory, or a folder that cannot be written.
    """
    tell = progress or (lambda stage, number, count: None)

    def stage(number: int) -> None:
        tell(STAGES[number], number, len(STAGES))

    stage(0)
    observed = _read(scenario)
    stage(1)
    modelled = model_anomaly(scenario, farthest=_farthest(scenario, observed))
    stage(2)
    noise = noise_of(scenario, observed)
    stage(3)
    comparison = None if observed is None else compare_with_map(scenario, modelled, observed, noise)
    seen = comparison.detectability if comparison else detect_without_map(scenario, modelled, noise)
    verdict = _verdict(scenario, modelled, noise.as_dict(), seen, comparison, observed)
    result = Assessment(scenario, modelled, seen, comparison, verdict, _profile(modelled, comparison))
    if out_dir is not None:
        stage(4)
        write_run(result, Path(out_dir))
    return result


def _read(scenario: Scenario) -> xr.DataArray | None:
    given = scenario.observed
    if given is None:
        return None
    return read_grid(given.path, variable=given.variable, nan=given.nan, units=given.units)


def _farthest(scenario: Scenario, observed: xr.DataArray | None) -> float:
    if observed is None or scenario.observed is None:
        return 0.0
    east = np.abs(observed.easting.values[[0, -1]] - 1e3 * scenario.observed.centre_easting_km).max()
    north = np.abs(observed.northing.values[[0, -1]] - 1e3 * scenario.observed.centre_northing_km).max()
    return float(np.hypot(east, north))


def _verdict(
    scenario: Scenario,
    modelled: Modelled,
    noise: dict[str, Any],
    seen: Detectability,
    comparison: Comparison | None,
    observed: xr.DataArray | None,
) -> dict[str, Any]:
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
        },
    }
    if comparison is not None:
        verdict |= _map_results(comparison)
    facts = {
        "scenario_sha256": scenario_hash(scenario),
        "seed": scenario.seed,
        "versions": labels.versions("harmonica", "numpy", "scipy", "xarray"),
    }
    if observed is not None:
        facts["map"] = labels.read_provenance(observed)
    verdict["provenance"] = facts
    return _plain(verdict)


def _map_results(comparison: Comparison) -> dict[str, Any]:
    misfit, chance, check = comparison.misfit, comparison.chance, comparison.noise_check
    results: dict[str, Any] = {
        "fit": {
            "chi2": misfit.chi2,
            "dof": misfit.dof,
            "p_value": misfit.p_value,
            "amplitude": comparison.amplitude,
            "amplitude_standard_error": comparison.amplitude_error,
            "rings": int(comparison.rings.mean.size),
            "outer_radius_km": float(comparison.rings.edges_m[-1]) / 1e3,
        }
    }
    if chance is not None:
        results["chance"] = {
            "statistic": chance.statistic,
            "centres": chance.centres,
            "p_value": chance.p_value,
            "standard_error": chance.standard_error,
            "source": chance.source,
            "independent_places": chance.independent,
        }
    if check is not None:
        results["noise_check"] = dataclasses.asdict(check)
    return results


def _word(scenario: Scenario, seen: Detectability, comparison: Comparison | None) -> str:
    if seen.detection_probability < scenario.inference.detection_probability:
        return "below detectability"
    if comparison is None:
        return "detectable, no map compared"
    return "consistent" if comparison.misfit.p_value >= scenario.inference.consistent_p_value else "inconsistent"


def _statement(
    scenario: Scenario, modelled: Modelled, seen: Detectability, comparison: Comparison | None, word: str
) -> str:
    erosion, cover = modelled.model.ground.erosion / 1e3, modelled.model.ground.cover / 1e3
    buried = f" and buried under {cover:.2g} km" if cover else ""
    body = f"a {scenario.crater.rim_diameter_km:g} km structure eroded by {erosion:.3g} km{buried}"
    signal = f"{modelled.peak:+.1f} mGal at most, signal-to-noise {seen.snr:.1f}"
    odds = f"detected with probability {seen.detection_probability:.2f}"
    if word == "below detectability":
        return f"Here {body} would be lost in the regional noise ({signal}; {odds}): the map can say little about it."
    if comparison is None:
        return f"With the stated noise {body} would stand out ({signal}; {odds}); no map was compared."
    p = comparison.misfit.p_value
    by_chance = ""
    if comparison.chance is not None:
        by_chance = f"; {_share(comparison.chance.p_value)} of other places do as well"
    fits = "could make this anomaly" if word == "consistent" else "does not make this anomaly"
    return f"{body[0].upper()}{body[1:]} {fits} ({signal}; misfit p = {p:.2g}{by_chance})."


def _share(p: float) -> str:
    return f"{100 * p:.2g} %"


def _profile(modelled: Modelled, comparison: Comparison | None) -> xr.Dataset:
    spread = modelled.draws if modelled.draws.size else modelled.profile[None, :]
    low, high = np.quantile(spread, [0.05, 0.95], axis=0)
    coords = {"radius": modelled.radius}
    columns = {
        "modelled": (modelled.profile, "modelled anomaly"),
        "modelled_low": (low, "5 % of the model's scatter"),
        "modelled_high": (high, "95 % of the model's scatter"),
    }
    data: dict[str, xr.DataArray] = {
        name: labels.data_array(values, ("radius",), coords, name=name, units="mGal", long_name=text)
        for name, (values, text) in columns.items()
    }
    data["parts"] = labels.data_array(
        modelled.parts, ("part", "radius"), coords, name="parts", units="mGal", long_name="modelled anomaly by cause"
    ).assign_coords(part=list(PARTS))
    if comparison is not None:
        data |= _ring_columns(comparison)
    return xr.Dataset(data, attrs={"title": "radial profiles", "provenance": modelled.grid.attrs["provenance"]})


def _ring_columns(comparison: Comparison) -> dict[str, xr.DataArray]:
    rings = comparison.rings
    columns = {
        "observed": (rings.mean, "mGal", "observed ring mean, regional included"),
        "standard_error": (comparison.standard_error, "mGal", "standard error under correlated noise"),
        "regional": (comparison.regional, "mGal", "jointly estimated regional, ring means"),
        "modelled_rings": (comparison.template, "mGal", "modelled ring mean through the map's sampling"),
        "coverage": (rings.coverage, "1", "share of the ring with data"),
    }
    radius = xr.Variable("ring_radius", rings.radius_m, {"units": "m", "long_name": "mean radius of the ring"})
    return {
        name: labels.data_array(values, ("ring_radius",), {}, name=name, units=units, long_name=text).assign_coords(
            ring_radius=radius
        )
        for name, (values, units, text) in columns.items()
    }


def _plain(value: Any) -> Any:
    """Numbers as JSON holds them: numpy scalars become plain ones, not-a-number becomes null."""
    if isinstance(value, dict):
        return {k: _plain(v) for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(v) for v in value]
    if isinstance(value, (float, np.floating)):
        return float(value) if math.isfinite(value) else None
    return value.item() if isinstance(value, np.generic) else value
