"""The report of a section: one structure, its anomaly by cause, what erosion takes, every size with its source."""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import xarray as xr

from gravbasin.forward.motion import is_axisymmetric
from gravbasin.report.canvas import svg
from gravbasin.report.erosion_figure import erosion_figure, slices_shown
from gravbasin.report.figures import TITLES, Drawing
from gravbasin.report.html import XML, provenance_rows, template
from gravbasin.report.profile_figures import parts_figure
from gravbasin.report.samples_figure import samples_figure
from gravbasin.report.section_figure import section_figure
from gravbasin.report.tables import Row, dimension_rows
from gravbasin.report.words import given, number, signed
from gravbasin.scenario import Scenario

if TYPE_CHECKING:
    from gravbasin.crater.samples import SampleUpdate
    from gravbasin.runs.section_run import SectionDescription

__all__ = ["SliceRow", "section_lines", "section_report", "slice_rows"]

KM = 1000.0

LEAST_POROSITY = 0.001
"""Porosity below which there is nothing to draw."""

EROSION = "What erosion takes"
SAMPLES = "Laboratory samples"


def section_report(described: SectionDescription) -> tuple[str, dict[str, str]]:
    """The report of a section and its figures.

    Parameters
    ----------
    described : SectionDescription
        From `describe_section`.

    Returns
    -------
    html : str
        One self-contained page, like that of an assessment.
    figures : dict of str
        Each figure as a file's text (SVG) by name.
    """
    drawn = [_section(described), _parts(described), _erosion(described)]
    drawn += [_samples(*described.samples)] if described.samples else []
    drawings = {drawing.name: drawing for drawing in drawn}
    dimensions = described.model.dimensions
    page = template("section.html.j2").render(
        name=described.scenario.name,
        note=described.scenario.note,
        numbers=_numbers(described),
        remarks=_remarks(described.scenario),
        titles=TITLES | {"erosion": EROSION, "samples": SAMPLES},
        drawings=drawings,
        missing={},
        slices=slice_rows(described),
        pace=_pace(described.erosion),
        samples=_said(described.samples[1]) if described.samples else [],
        dimensions=dimension_rows(dimensions),
        target=dimensions.target_rock,
        provenance=provenance_rows(described.as_dict()["provenance"]),
    )
    return page, {name: XML + drawing.svg for name, drawing in drawings.items()}


def _section(described: SectionDescription) -> Drawing:
    porous = float(described.section.porosity.max()) >= LEAST_POROSITY
    figure = section_figure(described.section, described.profile, rim_radius_m=_rim_radius(described), porosity=porous)
    caption = (
        "The structure cut through its axis, and mirrored about it: the anomaly it makes, the density contrast to the "
        f"intact column, {'the porosity, ' if porous else ''}and the units. Thin full contours of the contrast mark a "
        "surplus, dashed ones a deficit; the heavy line is today's ground. "
        + ("" if porous else "No porosity is drawn: pores are closed or sealed to below 0.1 %.")
    )
    words = "Cross-section through the axis: anomaly, density contrast, porosity and units. " + _anomaly(described)
    text = svg(figure, name="section", title=TITLES["section"], description=words)
    return Drawing("section", TITLES["section"], caption, text)


def _parts(described: SectionDescription) -> Drawing:
    centre = described.profile.parts.isel(radius=0)
    listed = ", ".join(f"{name} {signed(float(centre.sel(part=name)))} mGal" for name in centre.part.values)
    caption = (
        "The modelled anomaly split by cause; the causes add up to the heavy line. A cause without any contrast left "
        "today (worn away, or never there) has no line."
    )
    text = svg(
        parts_figure(described.profile, rim_radius_m=_rim_radius(described)),
        name="parts",
        title=TITLES["parts"],
        description=f"Modelled anomaly by cause, against distance. At the centre: {listed}.",
    )
    return Drawing("parts", TITLES["parts"], caption, text)


def _erosion(described: SectionDescription) -> Drawing:
    today = described.model.ground.erosion
    worn = f" The heavy line is the {given(today / KM)} km of the scenario." if today > 0 else ""
    caption = (
        "The same structure fresh, then cut ever deeper, each time seen from its own ground and never buried. Left: "
        "what rock each slice holds within the rim. Middle: how much of the fresh anomaly goes with it, every piece of "
        "ground counting alike; white bars below 0: rock that had masked the anomaly. All slices add up to 100 %. "
        f"Right: what is left below the cut.{worn}"
    )
    rows = slice_rows(described)
    first = f"The first slice, {rows[0].slice} km, carries {rows[0].carried} % of the fresh anomaly."
    text = svg(
        erosion_figure(described.erosion, today_m=today),
        name="erosion",
        title=EROSION,
        description=f"Rock, share of the anomaly and anomaly left, against erosion. {first}",
    )
    return Drawing("erosion", EROSION, caption, text)


def _samples(compared: xr.Dataset, update: SampleUpdate) -> Drawing:
    caption = (
        "Each sample where it lies along the line of best fit through all: measured, and the range its minerals allow "
        "with the pores it has. Band and dashed line: density of unfractured target at today's ground, by these "
        "samples and before them. Crosses lie so far from what was expected of them that they were set aside."
    )
    words = f"{update.used} samples used, {update.outliers} set aside, {update.in_fill} on crater fill."
    text = svg(samples_figure(compared, update), name="samples", title=SAMPLES, description=words)
    return Drawing("samples", SAMPLES, caption, text)


def _said(update: SampleUpdate) -> list[Row]:
    density = f"{number(update.density, 4)} ± {number(update.density_sd, 2)} kg/m³"
    low, high = (update.porosity * np.exp(sign * 1.645 * update.porosity_scatter) for sign in (-1, 1))
    return [
        Row("target at today's ground", density, f"unfractured; {number(update.prior_density, 4)} before the samples"),
        Row(
            "fracture porosity at the floor", number(update.porosity, 2), f"90 %: {number(low, 2)} to {number(high, 2)}"
        ),
        Row("samples used", f"{update.used}", "of target rock, measured, not set aside"),
        Row("set aside as outliers", f"{update.outliers}", "look at them: another rock, an error, or a dyke"),
        Row("on crater fill", f"{update.in_fill}", "say nothing of the target"),
    ]


def _rim_radius(described: SectionDescription) -> float:
    return 0.5 * KM * described.model.dimensions.rim_diameter_km


def _anomaly(described: SectionDescription) -> str:
    found = described.as_dict()["anomaly"]
    return f"{signed(found['centre_mgal'])} mGal at the centre and {signed(found['largest_mgal'])} at most."


def _numbers(described: SectionDescription) -> list[Row]:
    facts = described.as_dict()
    structure, anomaly = facts["structure"], facts["anomaly"]
    earth = {"flat": "a flat Earth", "sphere": "a spherical Earth"}[anomaly["earth"]]
    return [
        Row("rim diameter when fresh", f"{given(structure['rim_diameter_km'])} km"),
        Row("erosion", f"{given(structure['erosion_km'])} km", "rock stripped below the ground before impact"),
        Row("burial", f"{given(structure['burial_km'])} km", "sediment over the worn surface today"),
        Row("largest anomaly", f"{signed(anomaly['largest_mgal'])} mGal", "today, with its sign"),
        Row("at the centre", f"{signed(anomaly['centre_mgal'])} mGal"),
        Row("computed on", earth, f"a flat one errs by up to {number(anomaly['flat_earth_error_mgal'], 2)} mGal"),
    ]


def _remarks(scenario: Scenario) -> list[str]:
    """What a reader could take the section for, and it is not."""
    remarks = []
    if not is_axisymmetric(scenario.deformation):
        remarks.append(
            "The scenario bends or cuts the structure ([deformation]). A section is round: what is shown is the "
            "structure before that."
        )
    if scenario.samples is not None:
        remarks.append("Target density and fracture porosity are narrowed by the laboratory samples of the scenario.")
    return remarks


class SliceRow(NamedTuple):
    """One slice of erosion."""

    slice: str
    rock: str
    carried: str
    largest: str
    centre: str


def slice_rows(described: SectionDescription) -> list[SliceRow]:
    """The slices worth showing: what they hold, what share of the fresh anomaly they carried, what is left."""
    erosion = described.erosion
    cuts = erosion.erosion.values / KM
    rows = []
    for i in range(slices_shown(erosion, described.model.ground.erosion)):
        share = 100 * float(erosion.share[i])
        rows.append(
            SliceRow(
                f"{given(cuts[i])}–{given(cuts[i + 1])}",
                _rock(erosion.isel(slice=i)),
                signed(share, 0 if abs(share) >= 10 else 1).removeprefix("+"),
                signed(float(erosion.largest[i + 1])),
                signed(float(erosion.centre[i + 1])),
            )
        )
    return rows


def _rock(one: xr.Dataset) -> str:
    """Units of a slice, the largest first; those under a hundredth are left out."""
    shares = one.stripped_volume.values / one.stripped_volume.values.sum()
    order = [i for i in np.argsort(-shares) if shares[i] >= 0.01]
    return ", ".join(f"{one.stripped_unit.values[i]} {100 * shares[i]:.0f} %" for i in order)


def _pace(erosion: xr.Dataset) -> str:
    """How long a slice takes at each stated rate."""
    thickness = float(erosion.erosion[1]) / KM
    times = ", ".join(
        f"{given(float(erosion.time[0].sel(rate=name)))} at {given(float(value))} m/Myr ({name})"
        for name, value in zip(erosion.rate.values, erosion.rate_value.values, strict=True)
    )
    return f"To strip {given(thickness)} km takes, in million years: {times}."


def section_lines(described: SectionDescription) -> list[str]:
    """The same in short, for a terminal."""
    found = described.as_dict()["anomaly"]
    causes = ", ".join(f"{name} {signed(value)}" for name, value in found["centre_by_cause_mgal"].items() if value)
    rows = dimension_rows(described.model.dimensions)
    wide = max(len(row.quantity) for row in rows)
    return [
        described.scenario.name,
        f"anomaly   {signed(found['largest_mgal'])} mGal at most, {signed(found['centre_mgal'])} at the centre",
        f"causes    {causes} (mGal at the centre)",
        "",
        *(f"{row.quantity:<{wide}}  {row.value:>8} {row.unit:<3}  {row.origin:<7}  {row.source}" for row in rows),
        "",
        *(f"{row.slice:>9} km  {row.carried:>4} % of the fresh anomaly: {row.rock}" for row in slice_rows(described)),
    ]
