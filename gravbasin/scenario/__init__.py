"""The scenario file as frozen models: every field with its unit, bounds, default and one sentence.

Kilometres in the file, the unit in every name; conversion to SI happens once, at the doors of `crater` and `observed`.
"""

from __future__ import annotations

from pydantic import Field, model_validator

from gravbasin.scenario.analysis import Inference, Model, Noise, Observed, Prior
from gravbasin.scenario.base import Table
from gravbasin.scenario.structure import (
    Background,
    Crater,
    Damage,
    Deformation,
    Dimensions,
    Event,
    Fill,
    History,
    Layer,
    RivalBody,
    Samples,
)
from gravbasin.scenario.survey import Costs, StationErrors, Survey
from gravbasin.scenario.sweep import Sweep, SweptField

__all__ = [
    "Background",
    "Costs",
    "Crater",
    "Damage",
    "Deformation",
    "Dimensions",
    "Event",
    "Fill",
    "History",
    "Inference",
    "Layer",
    "Model",
    "Noise",
    "Observed",
    "Prior",
    "RivalBody",
    "Samples",
    "Scenario",
    "StationErrors",
    "Survey",
    "Sweep",
    "SweptField",
]


class Scenario(Table):
    """One question to gravbasin: a structure, its history, a map, thresholds."""

    name: str = Field("unnamed structure", min_length=1, description="name shown in the report")
    note: str = Field("", description="a sentence for the report's head")
    seed: int = Field(1, ge=0, description="seed of everything random")
    crater: Crater
    dimensions: Dimensions = Dimensions()
    background: Background = Background()
    damage: Damage = Damage()
    fill: Fill = Fill()
    history: History = History()
    deformation: Deformation = Deformation()
    samples: Samples | None = None
    rivals: tuple[RivalBody, ...] = ()
    observed: Observed | None = None
    noise: Noise = Noise()
    model: Model = Model()
    prior: Prior = Prior()
    inference: Inference = Inference()
    sweep: Sweep | None = None
    survey: Survey | None = None

    @model_validator(mode="after")
    def _together(self) -> Scenario:
        if self.history.erosion_rate_m_per_myr and self.crater.age_myr is None:
            raise ValueError("history.erosion_rate_m_per_myr needs crater.age_myr; give the age or erosion_km")
        if self.crater.target_rock == "mixed" and self.crater.cover_thickness_km == 0:
            raise ValueError("crater.target_rock = 'mixed' needs crater.cover_thickness_km greater than 0; give it")
        if self.crater.target_rock != "mixed" and self.crater.cover_thickness_km > 0:
            raise ValueError("crater.cover_thickness_km applies to mixed targets only; set target_rock = 'mixed'")
        if self.crater.cover_thickness_km >= self.background.moho_km:
            raise ValueError("crater.cover_thickness_km must be less than background.moho_km; give a thinner cover")
        return self
