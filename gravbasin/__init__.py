"""gravbasin: could an eroded or buried impact structure make this gravity anomaly, and could it be seen at all?

The public names below are loaded when first used, so that importing the package stays quick.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from gravbasin.crater import crater_dimensions, density_section, section_parts
    from gravbasin.errors import CannotFinish, GravbasinError, GravbasinWarning, InputError
    from gravbasin.forward.layers import grid_anomaly, layered_prisms
    from gravbasin.forward.reference import harmonica_anomaly
    from gravbasin.forward.rings import ring_anomaly
    from gravbasin.observed import estimate_noise, radial_profile, read_grid, simulate_noise
    from gravbasin.runs.assess import assess
    from gravbasin.runs.plan_run import plan_survey
    from gravbasin.runs.sweep import sweep
    from gravbasin.scenario import Scenario
    from gravbasin.scenario_file import load_scenario

_HOMES = {
    "CannotFinish": "errors",
    "GravbasinError": "errors",
    "GravbasinWarning": "errors",
    "InputError": "errors",
    "Scenario": "scenario",
    "assess": "runs.assess",
    "crater_dimensions": "crater",
    "density_section": "crater",
    "estimate_noise": "observed",
    "grid_anomaly": "forward.layers",
    "harmonica_anomaly": "forward.reference",
    "layered_prisms": "forward.layers",
    "load_scenario": "scenario_file",
    "plan_survey": "runs.plan_run",
    "radial_profile": "observed",
    "read_grid": "observed",
    "ring_anomaly": "forward.rings",
    "section_parts": "crater",
    "simulate_noise": "observed",
    "sweep": "runs.sweep",
}

__all__ = [
    "CannotFinish",
    "GravbasinError",
    "GravbasinWarning",
    "InputError",
    "Scenario",
    "assess",
    "crater_dimensions",
    "density_section",
    "estimate_noise",
    "grid_anomaly",
    "harmonica_anomaly",
    "layered_prisms",
    "load_scenario",
    "plan_survey",
    "radial_profile",
    "read_grid",
    "ring_anomaly",
    "section_parts",
    "simulate_noise",
    "sweep",
]


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        value = getattr(import_module(f"gravbasin.{_HOMES[name]}"), name)
        globals()[name] = value
        return value
    raise AttributeError(f"module 'gravbasin' has no attribute '{name}'")


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
