"""Tables that describe the map and how it is judged."""

from __future__ import annotations

from pathlib import Path
from typing import Literal

from pydantic import Field, model_validator

from gravbasin.scenario.base import NotNegative, Positive, Probability, Table

__all__ = ["Inference", "Model", "Noise", "Observed", "Prior"]


class Observed(Table):
    """The map under test."""

    path: Path = Field(description="grid file: netCDF, CSV x,y,value, or GeoTIFF")
    variable: str | None = Field(None, description="netCDF variable, when the file holds several")
    units: str | None = Field(None, description="units of the values, when the file does not say")
    nan: Literal["refuse", "skip"] = Field("refuse", description="what to do with empty nodes")
    centre_easting_km: float = Field(0.0, description="easting of the structure's centre in the map's coordinates, km")
    centre_northing_km: float = Field(0.0, description="northing of the centre, km")
    resolution_km: Positive | None = Field(
        None,
        description="half the shortest wavelength the map holds, km, where it is smoother than its grid: the model is "
        "smoothed alike; left out, the model is not smoothed and noise rests on nodes two steps apart",
    )


class Noise(Table):
    """Geological noise: estimated from the map unless every value of a stated model is given."""

    sill_mgal: Positive | None = Field(None, description="standard deviation of the correlated part, mGal")
    range_km: Positive | None = Field(None, description="correlation range L of the Matérn model, km")
    smoothness: float | None = Field(None, ge=0.1, le=5, description="smoothness nu of the Matérn model")
    nugget_mgal: NotNegative | None = Field(None, description="standard deviation of the uncorrelated part, mGal")
    regional_order: Literal[0, 1, 2] = Field(1, description="order of the polynomial regional")

    @model_validator(mode="after")
    def _whole(self) -> Noise:
        given = [self.sill_mgal, self.range_km, self.smoothness, self.nugget_mgal]
        if any(v is None for v in given) and any(v is not None for v in given):
            raise ValueError("a stated noise needs sill_mgal, range_km, smoothness and nugget_mgal together; give all")
        return self

    @property
    def stated(self) -> bool:
        """Whether the scenario states the noise instead of leaving it to the map."""
        return self.sill_mgal is not None


class Model(Table):
    """Resolution of the model; the defaults pass the audit for complex craters."""

    layers: int = Field(80, ge=20, le=400, description="layers of the section")
    rings: int = Field(160, ge=40, le=800, description="rings of the section")
    grid_step_km: Positive | None = Field(
        None, description="step of the modelled grid; by default 1/80 of the diameter"
    )
    station_height_m: float = Field(1.0, ge=0.0, le=10000, description="height of the stations above today's ground, m")
    draws: int = Field(200, ge=20, le=20000, description="draws of the size-law scatter behind every band")
    scatter: bool = Field(True, description="let size laws and contrasts vary by their published scatter in the draws")


class Prior(Table):
    """What is thought possible before the map is looked at."""

    rim_diameter_km: tuple[Positive, Positive] | None = Field(
        None, description="least and largest rim diameter, km; by default 0.6 and 1.6 times crater.rim_diameter_km"
    )
    erosion_km: tuple[NotNegative, NotNegative] | None = Field(
        None, description="least and largest erosion, km; by default 0 and twice the scenario's plus 2 km"
    )
    models: int = Field(3000, ge=200, le=200000, description="models drawn for each kind of body")
    odds: dict[str, Positive] = Field(
        default_factory=dict, description="prior odds of a rival against an impact by its name; 1 where not given"
    )

    @model_validator(mode="after")
    def _ascending(self) -> Prior:
        for name in ("rim_diameter_km", "erosion_km"):
            bounds = getattr(self, name)
            if bounds is not None and bounds[1] <= bounds[0]:
                raise ValueError(f"{name} must ascend, not {list(bounds)}; give [least, largest]")
        return self


class Inference(Table):
    """Thresholds of the verdict and effort of the random parts."""

    false_alarm_probability: Probability = Field(0.001, description="accepted probability of a false alarm")
    detection_probability: Probability = Field(0.5, description="least probability of detection to call it visible")
    consistent_p_value: Probability = Field(0.05, description="a misfit less probable than this is inconsistent")
    chance_p_value: Probability = Field(0.05, description="share of other places below which a circle stands out")
    separation: float = Field(
        6.0, ge=0, description="twice the log evidence by which an impact must lead every rival to be separable"
    )
    outer_radius_in_diameters: float = Field(1.5, ge=0.75, le=4, description="radius of the tested disc, diameters")
    station_spacing_km: Positive = Field(5.0, description="station spacing assumed where there is no map, km")
    chance_centres: int = Field(1000, ge=0, le=100000, description="other centres tried on the map")
    noise_points: int = Field(700, ge=100, le=4000, description="map nodes used to estimate the noise")
    noise_draws: int = Field(24, ge=0, le=1000, description="plausible noise models behind the detectability band")
