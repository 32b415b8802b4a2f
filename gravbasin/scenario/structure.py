"""Tables that describe the structure: what was hit, how big, what broke, what happened since."""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path
from typing import Literal

from pydantic import Field, model_validator

from gravbasin.scenario.base import Azimuth, Contrast, Density, NotNegative, Positive, Table

__all__ = [
    "Background",
    "Crater",
    "Damage",
    "Deformation",
    "Dimensions",
    "Event",
    "Fill",
    "History",
    "Layer",
    "RivalBody",
    "Samples",
]


class Crater(Table):
    """The structure as it was when fresh."""

    rim_diameter_km: float = Field(gt=2, le=300, description="final rim-to-rim diameter before erosion, km")
    target_rock: Literal["crystalline", "sedimentary", "mixed"] = Field(
        "crystalline", description="what was hit: crystalline basement, thick sediments, or sediments over basement"
    )
    cover_thickness_km: NotNegative = Field(0.0, description="sediments over the basement at impact, km (mixed only)")
    setting: Literal["land", "marine", "hydrothermal"] = Field(
        "land", description="what sealed its cracks: nothing but age, sea water, or long-lived hot water"
    )
    age_myr: Positive | None = Field(None, description="age of the impact, million years; needed with an erosion rate")
    transient_law: Literal["collapse scaling", "shallow exponent"] = Field(
        "collapse scaling", description="law from rim to transient diameter (see crater_dimensions)"
    )
    depth_law: Literal["paraboloid", "shield"] = Field(
        "paraboloid", description="law of transient depth: from the transient or from the rim diameter"
    )
    uplift_law: Literal["stratigraphic", "early stratigraphic", "shield"] = Field(
        "stratigraphic", description="law of structural uplift; shield gives twice the others"
    )
    melt_coefficient: float = Field(2e-4, ge=1e-6, le=1e-3, description="c of melt volume = c Dtc^3.85, km³")


class Dimensions(Table):
    """Measured or assumed dimensions; a value given here wins over its size law."""

    transient_diameter_km: Positive | None = Field(None, description="diameter of the transient cavity, km")
    transient_depth_km: Positive | None = Field(None, description="depth of the transient cavity, km")
    apparent_depth_km: NotNegative | None = Field(None, description="original ground to the top of the impact fill, km")
    rim_height_km: NotNegative | None = Field(None, description="height of the fresh rim above the ground, km")
    peak_height_km: NotNegative | None = Field(None, description="central peak or peak ring above the fill, km")
    structural_uplift_km: NotNegative | None = Field(None, description="rise of rock below the centre of the floor, km")
    central_uplift_diameter_km: Positive | None = Field(None, description="base of the central uplift, km")
    peak_ring_diameter_km: NotNegative | None = Field(None, description="crest of the peak ring, km; 0 for none")
    melt_volume_km3: NotNegative | None = Field(None, description="volume of the melt sheet, km³")
    melt_diameter_km: Positive | None = Field(None, description="diameter of the melt sheet, km")
    breccia_thickness_km: NotNegative | None = Field(None, description="thickness of the breccia lens, km")
    suevite_thickness_km: NotNegative | None = Field(None, description="melt-bearing top of the breccia lens, km")
    fracture_base_km: Positive | None = Field(None, description="depth below the floor at which fractures end, km")
    moho_uplift_km: NotNegative | None = Field(None, description="rise of the Moho below the centre, km")


class Layer(Table):
    """One layer of the density column before impact."""

    top_km: NotNegative = Field(description="top of the layer below the ground before impact, km")
    density_kg_m3: Density = Field(description="density at the top of the layer, kg/m³")
    gradient_kg_m3_per_km: float = Field(0.0, ge=-100, le=300, description="increase of density with depth, kg/m³/km")
    porosity: float = Field(0.0, ge=0, le=0.7, description="porosity before impact, 0-1; porous rock opens less")


class Background(Table):
    """The density column of the target before impact: crustal layers, Moho, mantle."""

    layers: tuple[Layer, ...] = Field(
        (), description="crustal layers from the ground down; by default a column that suits crater.target_rock"
    )
    moho_km: float = Field(35.0, gt=5, le=90, description="depth of the Moho before impact, km")
    mantle_density_kg_m3: Density = Field(3300.0, description="density below the Moho, kg/m³")
    density_scatter_kg_m3: NotNegative = Field(
        0.0, description="standard deviation of one shift of every layer in the draws, kg/m³"
    )
    cover_density_kg_m3: Density = Field(2450.0, description="density of the sedimentary cover (mixed targets), kg/m³")
    cover_porosity: float | None = Field(
        None, ge=0, le=0.7, description="porosity of that cover, 0-1; by default from its density, grains 2700 kg/m³"
    )

    @model_validator(mode="after")
    def _ordered(self) -> Background:
        tops = [layer.top_km for layer in self.layers] or [0.0]
        if tops[0] != 0:
            raise ValueError(f"the first layer must start at 0 km, not {tops[0]:g}; set its top_km to 0")
        if any(b <= a for a, b in pairwise(tops)):
            raise ValueError(f"layers must be listed from the top down, not {tops}; sort them by top_km")
        if tops[-1] >= self.moho_km:
            raise ValueError(f"every layer must start above the Moho ({self.moho_km:g} km); lower moho_km or drop it")
        return self


class Damage(Table):
    """Porosity of the fractured floor and what has closed it since."""

    form: Literal["exponential", "hyperbolic", "pressure"] = Field(
        "exponential", description="how porosity decays below the floor"
    )
    porosity: float = Field(0.08, ge=0, le=0.4, description="fracture porosity at the floor, 0-1")
    porosity_scatter: NotNegative = Field(
        0.3, description="standard deviation of the logarithm of that porosity in the draws"
    )
    decay_km: Positive | None = Field(None, description="decay length, km; by default min(0.12 D, 3 km)")
    closure_pressure_mpa: Positive = Field(200.0, description="pressure of the rock column that closes cracks, MPa")
    pressure_exponent: Positive = Field(1.0, description="exponent n of the pressure form (1 - P/Pc)^n")
    retention: float | None = Field(
        None, gt=0, le=1, description="share of fracture porosity not sealed since; by default from setting and age"
    )
    crossover_porosity: float = Field(
        0.07, gt=0, le=1, description="porosity before impact at which shock closes as much as it opens"
    )
    core_suppression: float | None = Field(
        None,
        ge=0,
        le=1,
        description="share of porosity missing in the core of the uplift; by default from the diameter",
    )
    pore_fluid: Literal["fresh water", "sea water", "dry"] | None = Field(
        None, description="what fills the pores; by default fresh water, sea water where the setting is marine"
    )


class Fill(Table):
    """Rocks within the crater: breccia, melt, and what filled the hollow later."""

    breccia_contrast_kg_m3: Contrast = Field(-270.0, description="breccia minus intact target, kg/m³")
    breccia_retention: float | None = Field(
        None, gt=0, le=1, description="share of the breccia contrast not sealed since; by default from setting and age"
    )
    suevite_contrast_kg_m3: Contrast = Field(-450.0, description="melt-bearing breccia minus intact target, kg/m³")
    melt_contrast_kg_m3: Contrast = Field(-80.0, description="melt rock minus intact target, kg/m³")
    melt_layering_kg_m3: float = Field(
        0.0, ge=0, le=500, description="lower minus upper half of a differentiated melt sheet, kg/m³; 0 for a plain one"
    )
    hollow: Literal["sediment", "water", "air"] = Field(
        "sediment", description="what fills the hollow left above the impact rocks; air counts as corrected terrain"
    )
    sediment_density_kg_m3: Density | None = Field(
        None, description="density of sediment in the hollow, kg/m³; by default 2300, or by age where that is known"
    )
    lithology: Literal["shale", "sand", "chalk", "shaly sand", "platform carbonate"] | None = Field(
        None, description="compact the sediment by this lithology's curve instead of sediment_density_kg_m3"
    )


class Event(Table):
    """One episode after the impact: rock removed or laid down."""

    erode_km: NotNegative | None = Field(None, description="thickness removed, km")
    bury_km: NotNegative | None = Field(None, description="thickness laid down, km")

    @model_validator(mode="after")
    def _one(self) -> Event:
        if (self.erode_km is None) == (self.bury_km is None):
            raise ValueError("an event is either erode_km or bury_km; give exactly one of them")
        return self


class History(Table):
    """What happened after the impact: erosion, burial, or a list of both in order."""

    erosion_km: NotNegative | None = Field(None, description="rock stripped below the ground before impact, km")
    erosion_rate_m_per_myr: Positive | None = Field(
        None, description="mean erosion rate, m/Myr, used with crater.age_myr instead of erosion_km"
    )
    burial_km: NotNegative = Field(0.0, description="sediment laid over the eroded surface, km")
    events: tuple[Event, ...] = Field((), description="episodes in order, instead of erosion_km and burial_km")
    cover_density_kg_m3: Density = Field(2400.0, description="density of the burying sediment, kg/m³")
    rebound_elastic_thickness_km: float | None = Field(
        None, gt=0, le=200, description="elastic thickness of a plate that rebounds, km; by default no rebound"
    )
    eroded_radius_km: Positive = Field(250.0, description="radius of the region that was eroded (rebound only), km")

    @model_validator(mode="after")
    def _one_way(self) -> History:
        if self.events and (self.erosion_km is not None or self.erosion_rate_m_per_myr or self.burial_km):
            raise ValueError("events replace erosion_km, erosion_rate_m_per_myr and burial_km; give one or the other")
        if self.erosion_km is not None and self.erosion_rate_m_per_myr:
            raise ValueError("erosion_km and erosion_rate_m_per_myr exclude each other; keep one")
        return self


class Deformation(Table):
    """What bent, cut or half buried the structure after it formed; nothing by default.

    Azimuths run clockwise from north. Stretch comes first, then uneven erosion, then tilt, all about the centre at
    today's ground; the missing sector and the edge of the cover are drawn on today's map.
    """

    tilt_degrees: float = Field(0.0, ge=0, le=20, description="tilt of the whole block about its centre, degrees")
    tilt_azimuth_degrees: Azimuth = Field(0.0, description="direction in which the tilted block dips down, degrees")
    stretch_ratio: float = Field(
        1.0, ge=1, le=4, description="long over short axis of a circle drawn before the stretch; areas are kept"
    )
    stretch_azimuth_degrees: Azimuth = Field(0.0, description="direction of the long axis, degrees")
    erosion_slope_m_per_km: float = Field(
        0.0, ge=0, le=200, description="growth of the erosion across the structure, its own where the centre is, m/km"
    )
    erosion_slope_azimuth_degrees: Azimuth = Field(0.0, description="direction in which the erosion deepens, degrees")
    missing_from_degrees: Azimuth | None = Field(
        None, description="a sector without contrast begins at this azimuth and runs clockwise, degrees"
    )
    missing_to_degrees: Azimuth | None = Field(None, description="azimuth at which that sector ends, degrees")
    cover_thickness_km: NotNegative = Field(
        0.0, description="younger sediment over one side only, the structure lowered beneath it as much, km"
    )
    cover_edge_km: float = Field(
        0.0, allow_inf_nan=False, description="distance from the centre to the straight edge of that cover, km"
    )
    cover_azimuth_degrees: Azimuth = Field(0.0, description="direction from the centre to the covered side, degrees")
    cover_contrast_kg_m3: Contrast | None = Field(
        None, description="density of that cover minus that of the rock beside it, kg/m³; needed with a thickness"
    )

    @model_validator(mode="after")
    def _whole(self) -> Deformation:
        sector = (self.missing_from_degrees, self.missing_to_degrees)
        if (sector[0] is None) != (sector[1] is None):
            raise ValueError("a missing sector needs missing_from_degrees and missing_to_degrees; give both")
        if sector[0] is not None and sector[1] is not None and (sector[1] - sector[0]) % 360.0 == 0.0:
            raise ValueError("a missing sector must be more than nothing and less than everything; change one azimuth")
        if (self.cover_thickness_km > 0) != (self.cover_contrast_kg_m3 is not None):
            raise ValueError("a one-sided cover needs cover_thickness_km and cover_contrast_kg_m3; give both")
        return self


class Samples(Table):
    """Laboratory samples that narrow the target's density and the porosity of its fractures."""

    path: Path = Field(description="CSV table of densities, porosities, velocities, positions, minerals")
    centre_easting_km: float = Field(0.0, description="easting of the centre in the table's coordinates, km")
    centre_northing_km: float = Field(0.0, description="northing of the centre, km")
    outlier_scores: Positive = Field(3.5, description="robust standard scores beyond which a sample is set aside")


class RivalBody(Table):
    """A body other than an impact structure that could make the anomaly; it joins the rivals known already."""

    name: str = Field(min_length=1, description="name shown in tables; that of a known rival replaces it")
    shape: Literal["plug", "ring complex", "diapir", "basin", "dome"] = Field(
        description="plug with straight walls, ring complex, salt diapir, bowl-shaped basin, or dome"
    )
    ranges: dict[str, tuple[float, float]] = Field(
        default_factory=dict, description="least and largest value of the shape's parameters; the rest as usual"
    )

    @model_validator(mode="after")
    def _ascending(self) -> RivalBody:
        for name, (low, high) in self.ranges.items():
            if not (low < high and abs(low) < float("inf") and abs(high) < float("inf")):
                raise ValueError(f"range of {name} must ascend, not {[low, high]}; give [least, largest]")
        return self
