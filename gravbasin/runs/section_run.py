"""One structure described without a map: section, anomaly by cause, what erosion takes, dimensions with sources."""

from __future__ import annotations

import dataclasses
import json
from collections.abc import Callable
from pathlib import Path
from typing import Any, Literal

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin import labels
from gravbasin.crater import (
    PARTS,
    CraterDimensions,
    CraterModel,
    Mesh,
    crater_model,
    default_mesh,
    density_section,
    erosion_chart,
    section_parts,
    with_samples,
)
from gravbasin.crater.samples import SampleUpdate
from gravbasin.forward.rings import RingTable, ring_table
from gravbasin.runs.forward_run import SPHERE_MATTERS_MGAL, profile_radii
from gravbasin.runs.store import replaced_folder
from gravbasin.scenario import Scenario
from gravbasin.scenario_file import scenario_hash, scenario_toml

__all__ = ["SectionDescription", "describe_section", "dimension_table"]

Array = NDArray[np.float64]
Progress = Callable[[str, int, int], None]
KM = 1000.0

MARK = "section.json"
"""File by which a folder is known to be a description of a section."""

STAGES = ("building the section", "its anomaly", "eroding it", "writing")

STEPS_KM = ((15.0, 1.0), (6.0, 0.5), (0.0, 0.25))
"""Rock between two cuts of the erosion chart, by the least rim diameter: a small crater is gone within a kilometre."""


@dataclasses.dataclass(frozen=True, eq=False)
class SectionDescription:
    """What a structure looks like and what makes its anomaly.

    Attributes
    ----------
    scenario : Scenario
        The question; narrowed by its samples where it has some.
    model : CraterModel
        The structure.
    section, parts : Dataset
        Density section (depth, radius), and its contrast by cause (part, depth, radius).
    profile : Dataset
        modelled (radius) and parts (part, radius), mGal; the parts add up.
    erosion : Dataset
        What each slice of erosion removes: anomaly (erosion, part, radius) below each cut, mGal; largest and centre
        (erosion), mGal; left (erosion) and share (slice) of the fresh anomaly; stripped_volume (slice, stripped_unit),
        km³; time (slice, rate), Myr.
    earth : str
        "flat" or "sphere": what the rings were computed on.
    flat_earth_error : float, mGal
        Largest difference between the two.
    samples : (Dataset, SampleUpdate) or None
        Laboratory samples against what was expected of them, and what they said of the structure.
    """

    scenario: Scenario
    model: CraterModel
    section: xr.Dataset
    parts: xr.Dataset
    profile: xr.Dataset
    erosion: xr.Dataset
    earth: Literal["flat", "sphere"]
    flat_earth_error: float
    samples: tuple[xr.Dataset, SampleUpdate] | None = None

    @property
    def dimensions(self) -> list[dict[str, Any]]:
        """Every dimension of the fresh structure: name, value, unit, origin, source, validity."""
        return dimension_table(self.model.dimensions)

    def as_dict(self) -> dict[str, Any]:
        """What section.json holds."""
        model, profile = self.model, self.profile
        return {
            "schema": 1,
            "name": self.scenario.name,
            "structure": {
                "rim_diameter_km": model.dimensions.rim_diameter_km,
                "target_rock": model.dimensions.target_rock,
                "erosion_km": model.ground.erosion / KM,
                "burial_km": model.ground.cover / KM,
            },
            "dimensions": self.dimensions,
            "anomaly": {
                "largest_mgal": float(_largest(profile.modelled.values)),
                "centre_mgal": float(profile.modelled[0]),
                "centre_by_cause_mgal": dict(zip(PARTS, profile.parts.values[:, 0].tolist(), strict=True)),
                "earth": self.earth,
                "flat_earth_error_mgal": self.flat_earth_error,
            },
            "erosion": _slices(self.erosion),
            **({"samples": dataclasses.asdict(self.samples[1])} if self.samples else {}),
            "provenance": {
                "scenario_sha256": scenario_hash(self.scenario),
                "versions": labels.versions("numpy", "scipy", "xarray"),
            },
        }


def describe_section(
    scenario: Scenario, out_dir: str | Path | None = None, *, progress: Progress | None = None
) -> SectionDescription:
    """Describe a scenario's structure, and write a folder when `out_dir` is given.

    Parameters
    ----------
    scenario : Scenario
        From `load_scenario`; an observed map is not looked at.
    out_dir : path, optional
        Folder to write: section.json, section.nc, parts.nc, profile.nc, erosion.nc, report.html, figures, the scenario
        as resolved, and samples.nc where there are some. It is replaced as a whole, or left as it was.
    progress : callable, optional
        Called with (stage, number, count) as the work goes on.

    Returns
    -------
    SectionDescription

    Raises
    ------
    InputError
        A scenario that breaks a rule, or a folder that holds something else.
    CannotFinish
        A folder that cannot be written.

    Examples
    --------
    >>> described = describe_section(Scenario(crater={"rim_diameter_km": 20.0}, model={"layers": 20, "rings": 40}))
    >>> described.dimensions[1]["name"], described.dimensions[1]["origin"]
    ('transient_diameter_km', 'law')
    """

    def stage(name: str) -> None:
        if progress is not None:
            progress(name, STAGES.index(name), len(STAGES))

    stage("building the section")
    samples = None
    if scenario.samples is not None:
        scenario, compared, update = with_samples(scenario)
        samples = compared, update
    model = crater_model(scenario)
    mesh = default_mesh(model, layers=scenario.model.layers, rings=scenario.model.rings)
    section, parts = density_section(scenario, mesh=mesh), section_parts(scenario, mesh=mesh)
    stage("its anomaly")
    radius = profile_radii(KM * scenario.crater.rim_diameter_km, 0.0)
    height = scenario.model.station_height_m
    earth, error = _earth(radius, mesh, section.density_contrast.values, height)
    table = ring_table(radius, mesh.radius_edges, mesh.depth_edges, height_m=height, earth=earth)
    profile = _profile(table, parts)
    stage("eroding it")
    erosion = _eroded(scenario, radius[::2])
    described = SectionDescription(scenario, model, section, parts, profile, erosion, earth, error, samples)
    if out_dir is not None:
        stage("writing")
        _write(described, Path(out_dir))
    return described


def _earth(radius: Array, mesh: Mesh, contrast: Array, height: float) -> tuple[Literal["flat", "sphere"], float]:
    """Which Earth to compute on, and the largest difference between the two at every twentieth station, mGal."""
    flat, sphere = (
        ring_table(radius[::20], mesh.radius_edges, mesh.depth_edges, height_m=height, earth=earth).anomaly(contrast)
        for earth in ("flat", "sphere")
    )
    error = float(np.abs(flat - sphere).max())
    return ("sphere" if error > SPHERE_MATTERS_MGAL else "flat"), error


def _profile(table: RingTable, parts: xr.Dataset) -> xr.Dataset:
    values = table.anomaly(parts.density_contrast.values)
    coords = {"radius": table.radius}
    whole = labels.data_array(
        values.sum(axis=0), ("radius",), coords, name="modelled", units="mGal", long_name="modelled anomaly"
    )
    split = labels.data_array(
        values, ("part", "radius"), coords, name="parts", units="mGal", long_name="modelled anomaly by cause"
    )
    attrs = {"title": "anomaly of a section by cause", "provenance": parts.attrs["provenance"]}
    return xr.Dataset({"modelled": whole, "parts": split.assign_coords(part=list(PARTS))}, attrs=attrs)


def _eroded(scenario: Scenario, radius: Array) -> xr.Dataset:
    """The chart of cuts with the anomaly below each, and the share of the fresh anomaly that each slice carried."""
    step = next(step for least, step in STEPS_KM if scenario.crater.rim_diameter_km >= least)
    chart = erosion_chart(scenario, step_km=step)
    height = scenario.model.station_height_m
    cuts = chart.density_contrast.values
    mesh = Mesh(chart.depth_edges.values, chart.radius_edges.values)
    earth, _ = _earth(radius, mesh, cuts[0].sum(axis=0), height)
    table = ring_table(radius, mesh.radius_edges, mesh.depth_edges, height_m=height, earth=earth)
    # All cuts in one product: many small ones cost far more where other work keeps the cores busy.
    anomaly = table.anomaly(cuts.reshape(-1, *cuts.shape[2:])).reshape(*cuts.shape[:2], -1)
    whole = anomaly.sum(axis=1)
    left = _left(radius, whole)
    new = {
        "anomaly": (("erosion", "part", "radius"), anomaly, "mGal", "anomaly below each cut, by cause"),
        "largest": (("erosion",), _largest(whole), "mGal", "largest anomaly below each cut, with its sign"),
        "centre": (("erosion",), whole[:, 0], "mGal", "anomaly at the centre below each cut"),
        "left": (("erosion",), left, "1", "share of the fresh anomaly left below each cut"),
        "share": (("slice",), -np.diff(left), "1", "share of the fresh anomaly that each slice carried"),
    }
    return (
        chart.drop_dims(("depth", "depth_edges", "radius_edges", "radius"))
        .assign_coords(radius=labels.coordinate("radius", radius))
        .assign({name: (dims, v, {"units": units, "long_name": text}) for name, (dims, v, units, text) in new.items()})
    )


def _left(radius: Array, whole: Array) -> Array:
    """Share of the fresh anomaly in each cut: its projection on the fresh one, every piece of ground counting alike.

    A linear measure, so that the shares of all slices add up; negative where the anomaly has turned its sign.
    """
    ground = radius * np.gradient(radius)
    size = float(ground @ whole[0] ** 2)
    return whole @ (ground * whole[0]) / size if size > 0 else np.full(len(whole), np.nan)


def _largest(values: Array) -> Array:
    """The value that is largest by size along the last axis, with its sign."""
    at = np.abs(values).argmax(axis=-1)
    return np.asarray(np.take_along_axis(values, np.expand_dims(at, -1), axis=-1)[..., 0])


def dimension_table(dimensions: CraterDimensions) -> list[dict[str, Any]]:
    """Every dimension with where it comes from: given, law, drawn, or derived from the others.

    Returns
    -------
    list of dict
        name (with its unit), value, unit, origin, source, and validity: a remark where a law was stretched or met a
        physical limit, else empty.
    """
    rows = []
    for field in dataclasses.fields(dimensions):
        name, value = field.name, getattr(dimensions, field.name)
        if not isinstance(value, float):
            continue
        fallback = ("given", "scenario") if name == "rim_diameter_km" else ("derived", "from the others")
        rows.append(
            {
                "name": name,
                "value": value,
                "unit": name.rpartition("_")[2],
                "origin": dimensions.origin.get(name, fallback[0]),
                "source": dimensions.source.get(name, fallback[1]),
                "validity": dimensions.validity.get(name, ""),
            }
        )
    return rows


def _slices(erosion: xr.Dataset) -> list[dict[str, Any]]:
    cuts = erosion.erosion.values / KM
    return [
        {
            "from_km": float(cuts[i]),
            "to_km": float(cuts[i + 1]),
            "share": None if np.isnan(erosion.share[i]) else float(erosion.share[i]),
            "largest_left_mgal": float(erosion.largest[i + 1]),
            "centre_left_mgal": float(erosion.centre[i + 1]),
            "volume_km3": dict(
                zip(erosion.stripped_unit.values.tolist(), erosion.stripped_volume.values[i].tolist(), strict=True)
            ),
            "time_myr": dict(zip(erosion.rate.values.tolist(), erosion.time.values[i].tolist(), strict=True)),
        }
        for i in range(erosion.sizes["slice"])
    ]


def _write(described: SectionDescription, folder: Path) -> None:
    from gravbasin.report.section_page import section_report

    with replaced_folder(folder, mark=MARK) as fresh:
        for name in ("section", "parts", "profile", "erosion"):
            getattr(described, name).to_netcdf(fresh / f"{name}.nc", engine="h5netcdf")
        if described.samples:
            described.samples[0].to_netcdf(fresh / "samples.nc", engine="h5netcdf")
        (fresh / "scenario.toml").write_text(scenario_toml(described.scenario), encoding="utf-8")
        report, figures = section_report(described)
        (fresh / "figures").mkdir()
        for name, svg in figures.items():
            (fresh / "figures" / f"{name}.svg").write_text(svg, encoding="utf-8")
        (fresh / "report.html").write_text(report, encoding="utf-8")
        text = json.dumps(described.as_dict(), indent=1, ensure_ascii=False)
        (fresh / MARK).write_text(text + "\n", encoding="utf-8")
