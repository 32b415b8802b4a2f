"""One scenario from file to verdict: model, map, comparison, plain sentence."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from threadpoolctl import threadpool_limits

from gravbasin import labels
from gravbasin.crater import PARTS
from gravbasin.crater.rivals import rivals_of
from gravbasin.crater.samples import with_samples
from gravbasin.errors import InputError
from gravbasin.inference.detect import Detectability
from gravbasin.runs.compare import Comparison, compare_with_map, detect_without_map, noise_of
from gravbasin.runs.families import NOISE_ALONE
from gravbasin.runs.forward_run import Modelled, model_anomaly
from gravbasin.runs.scenario_map import scenario_map
from gravbasin.runs.search import Candidate, candidate_table, search_map
from gravbasin.runs.store import write_run
from gravbasin.runs.verdict import verdict_of
from gravbasin.scenario import Scenario

__all__ = ["Assessment", "assess"]

Progress = Callable[[str, int, int], None]
STAGES = (
    "reading the map",
    "building the section and its anomaly",
    "estimating the noise",
    "drawing impact structures",
    "searching the map for chance circles",
    "weighing rivals",
    "charging for the search",
    "writing",
)


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
    candidates : tuple of Candidate
        Circular candidates over the whole map, best first; empty unless searched for.
    verdict : dict
        See DEVELOPERS.md for the fields.
    profile : Dataset
        Radial profiles: modelled with band and parts (radius), observed ring means (ring_radius), mGal.
    """

    scenario: Scenario
    modelled: Modelled
    noise_detectability: Detectability
    comparison: Comparison | None
    candidates: tuple[Candidate, ...]
    verdict: dict[str, Any]
    profile: xr.Dataset


def assess(
    scenario: Scenario,
    out_dir: str | Path | None = None,
    *,
    search: bool = False,
    progress: Progress | None = None,
) -> Assessment:
    """Answer a scenario, and write the run folder when `out_dir` is given.

    Parameters
    ----------
    scenario : Scenario
        From `load_scenario`.
    out_dir : path, optional
        Run folder to write; replaced as a whole, or left as it was.
    search : bool
        Also rank circular candidates over the whole map.
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

    def stage(name: str) -> None:
        tell(name, STAGES.index(name), len(STAGES))

    _check_odds(scenario)
    if search and scenario.observed is None:
        raise InputError("--search", "(no map)", "needs an observed map", "give observed.path")
    with threadpool_limits(1):  # as fast on an idle machine; 30 s, not 45, with one core of two busy
        result = _answer(scenario, search, stage)
    if out_dir is not None:
        stage("writing")
        write_run(result, Path(out_dir))
    return result


def _answer(scenario: Scenario, search: bool, stage: Callable[[str], None]) -> Assessment:
    if scenario.samples is not None:
        scenario = with_samples(scenario)[0]
    stage("reading the map")
    observed = scenario_map(scenario)
    stage("building the section and its anomaly")
    modelled = model_anomaly(scenario, farthest=_farthest(scenario, observed))
    stage("estimating the noise")
    noise = noise_of(scenario, observed)
    comparison = None
    if observed is None:
        seen, vanishing = detect_without_map(scenario, modelled, noise)
    else:
        comparison = compare_with_map(scenario, modelled, observed, noise, progress=stage)
        seen, vanishing = comparison.detectability, comparison.vanishing
    candidates: list[Candidate] = []
    if search and observed is not None and comparison is not None:
        stage("charging for the search")
        diameter = 1e3 * scenario.crater.rim_diameter_km
        candidates = search_map(observed, comparison.places, noise, diameter=diameter, seed=scenario.seed)
    verdict = verdict_of(scenario, modelled, noise.as_dict(), seen, vanishing, comparison, observed)
    if search:
        verdict["search"] = candidate_table(candidates).to_dict("records")
    return Assessment(scenario, modelled, seen, comparison, tuple(candidates), verdict, _profile(modelled, comparison))


def _check_odds(scenario: Scenario) -> None:
    """Odds for a body that is never weighed would be dropped without a word."""
    known = [rival.name for rival in rivals_of(scenario)] + [NOISE_ALONE]
    for name, odds in scenario.prior.odds.items():
        if name not in known:
            raise InputError(f"prior.odds.{name}", odds, "names no rival", f"choose from: {', '.join(known)}")


def _farthest(scenario: Scenario, observed: xr.DataArray | None) -> float:
    if observed is None or scenario.observed is None:
        return 0.0
    east = np.abs(observed.easting.values[[0, -1]] - 1e3 * scenario.observed.centre_easting_km).max()
    north = np.abs(observed.northing.values[[0, -1]] - 1e3 * scenario.observed.centre_northing_km).max()
    return float(np.hypot(east, north))


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
        "fitted": (comparison.predicted[0], "mGal", "posterior median of the impact family, ring means"),
        "fitted_low": (comparison.predicted[1], "mGal", "5 % of that posterior"),
        "fitted_high": (comparison.predicted[2], "mGal", "95 % of that posterior"),
        "coverage": (rings.coverage, "1", "share of the ring with data"),
    }
    radius = xr.Variable("ring_radius", rings.radius_m, {"units": "m", "long_name": "mean radius of the ring"})
    return {
        name: labels.data_array(values, ("ring_radius",), {}, name=name, units=units, long_name=text).assign_coords(
            ring_radius=radius
        )
        for name, (values, units, text) in columns.items()
    }
