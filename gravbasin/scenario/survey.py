"""Tables that describe a survey to be planned: where, what a station is worth, what it costs, what is wanted of it."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field, model_validator

from gravbasin.scenario.base import Density, NotNegative, Positive, Probability, Table

__all__ = ["Costs", "StationErrors", "Survey"]

Share = Annotated[float, Field(ge=0, le=1)]
Layout = Literal["square", "staggered", "lines", "radial", "roads"]


class StationErrors(Table):
    """One standard deviation of everything that makes one new station's anomaly err by itself.

    Defaults: a modern meter with satellite positions in flat shield country (ranges from memory: meter
    0.005-0.02, drift 0.01, tide 0.003-0.005, tie 0.01-0.05, height 0.05-0.1 m, terrain 0.05-0.1, rugged ground
    0.3-1 mGal). Old barometric heights err by 3-10 m.
    """

    meter_mgal: NotNegative = Field(0.02, description="reading of the meter, mGal")
    drift_mgal: NotNegative = Field(0.01, description="drift left after loops, mGal")
    tide_mgal: NotNegative = Field(0.005, description="tide left after correction, mGal")
    tie_mgal: NotNegative = Field(0.02, description="tie to the base network, mGal")
    height_m: NotNegative = Field(0.1, description="height of the station, m")
    position_m: NotNegative = Field(3.0, description="northing of the station, m")
    latitude_degrees: float | None = Field(
        None, ge=-90, le=90, description="latitude, degrees; by default from the coordinates, else 45 (the worst)"
    )
    terrain_mgal: NotNegative = Field(0.1, description="terrain correction, mGal")
    slab_density_kg_m3: Density = Field(2670.0, description="density of the Bouguer slab, kg/m³")
    density_kg_m3: NotNegative = Field(100.0, description="uncertainty of that density, kg/m³")
    relief_m: NotNegative = Field(30.0, description="standard deviation of the heights of neighbouring stations, m")


class Costs(Table):
    """The user's own rates; what is not given is not costed.

    Ranges met in practice (from memory): on foot or off road 15-30 stations a day and crew, with a vehicle on roads
    30-80, by helicopter 60-150; repeats 3-5 %.
    """

    stations_per_day: Positive | None = Field(None, description="new stations a crew reads in a day")
    travel_km_per_day: Positive | None = Field(None, description="distance a crew covers in a day while reading, km")
    repeat_share: NotNegative = Field(0.0, description="share of stations read twice")
    day_rate: NotNegative | None = Field(None, description="cost of a crew's day, in the currency")
    station_cost: NotNegative | None = Field(None, description="further cost of every station, in the currency")
    mobilisation: NotNegative | None = Field(None, description="fixed cost of getting there and back, in the currency")
    currency: str = Field("", description="name of the currency, shown in tables")
    budget: Positive | None = Field(None, description="most that may be spent, in the currency")
    most_days: Positive | None = Field(None, description="most days in the field")

    @model_validator(mode="after")
    def _enough_known(self) -> Costs:
        priced = [self.day_rate, self.station_cost, self.mobilisation]
        if self.budget is not None and all(rate is None for rate in priced):
            raise ValueError("budget needs day_rate, station_cost or mobilisation; give your rates or drop the budget")
        if (self.day_rate is not None or self.most_days is not None) and self.stations_per_day is None:
            raise ValueError("day_rate and most_days need stations_per_day; give how many stations a crew reads a day")
        return self


class Survey(Table):
    """A survey to be planned: the area, what it may use, what it shall achieve."""

    area: Path | None = Field(
        None,
        description="polygon in which stations may stand: GeoJSON, or GeoPackage with the gis extra; by default a "
        "square of three diameters about the centre",
    )
    no_go: tuple[Path, ...] = Field((), description="polygons in which no station may stand")
    roads: Path | None = Field(None, description="lines along which the layout 'roads' puts stations")
    existing: Path | None = Field(
        None, description="stations read already: CSV with easting and northing in metres, or points in GeoJSON"
    )
    crs: str | None = Field(
        None, description="coordinate reference system of the survey, as EPSG:32633; by default that of the map"
    )
    centre_easting_km: float | None = Field(
        None, allow_inf_nan=False, description="easting of the structure's centre, km; by default that of the map"
    )
    centre_northing_km: float | None = Field(None, allow_inf_nan=False, description="northing of the centre, km")

    layouts: tuple[Layout, ...] = Field(
        ("square", "staggered", "lines", "radial"), min_length=1, description="layouts to try"
    )
    spacings_km: tuple[Positive, ...] = Field(
        (), description="station spacings to try, km; by default twelve that need about 20 to 1000 stations"
    )
    line_azimuth_degrees: float = Field(90.0, ge=0, lt=180, description="direction of the parallel lines, degrees")
    line_spacing_ratio: float = Field(4.0, ge=1, le=50, description="distance of lines over spacing along them")
    spokes: int = Field(12, ge=3, le=72, description="radial traverses from the centre")

    goal: Literal["detect", "tell apart", "both"] = Field(
        "detect", description="see the structure, tell it from its rivals, or both"
    )
    detection_probability: Probability = Field(0.9, description="detection probability to reach")
    rival_distance: Positive = Field(
        3.3, description="distance to the best rival to reach, standard errors; 3.3 errs in 5 % of choices"
    )
    place: Literal["given", "searched"] = Field(
        "given", description="whether the centre and size are known, or searched for over area and prior diameters"
    )

    errors: StationErrors = StationErrors()
    existing_error_mgal: Positive | None = Field(
        None, description="error of an existing station, mGal; by default that of a new one"
    )
    map_nugget_share: tuple[Share, Share] = Field(
        (0.0, 1.0),
        description="least and largest share of the noise model's nugget that is short geology and meets new stations "
        "too; the rest is error of the old map",
    )
    smoothness_scatter: NotNegative = Field(
        0.25, le=1, description="scatter of ln(smoothness) where the noise is stated; an estimate carries its own"
    )
    costs: Costs = Costs()

    noise_draws: int = Field(6, ge=0, le=100, description="plausible noise models behind every band")
    models: int = Field(600, ge=100, le=20000, description="models drawn of the impact family and of each rival")
    next_best: int = Field(20, ge=0, le=500, description="single places to rank by what they add; 0 for none")
    candidates: int = Field(2000, ge=10, le=10000, description="places among which they are chosen")
    chart_diameters: int = Field(6, ge=0, le=20, description="diameters of the chart against erosion; 0 for no chart")
    geopackage: bool = Field(False, description="write stations.gpkg too (needs the gis extra)")

    @model_validator(mode="after")
    def _together(self) -> Survey:
        if (self.centre_easting_km is None) != (self.centre_northing_km is None):
            raise ValueError("a centre needs centre_easting_km and centre_northing_km; give both or neither")
        if "roads" in self.layouts and self.roads is None:
            raise ValueError("the layout 'roads' needs survey.roads; give a file of lines or drop the layout")
        if len(set(self.layouts)) < len(self.layouts):
            raise ValueError("layouts must differ from each other; name each once")
        if self.map_nugget_share[1] < self.map_nugget_share[0]:
            raise ValueError("map_nugget_share must ascend; give [least, largest]")
        return self
