"""Radial profiles: observed against modelled, and the modelled anomaly by cause."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr

from gravbasin.report.canvas import (
    BAND,
    FAINT,
    INK,
    MODEL,
    QUIET,
    SMALL,
    TEXT,
    blank_figure,
    bouguer_note,
    mark_rim,
    spread,
    tidy,
)
from gravbasin.report.words import signed

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["parts_figure", "profile_figure"]

KM = 1000.0

_LOOK: dict[str, tuple[str, Any]] = {
    "sediment in the hollow": ("#8a6400", "-"),
    "suevite": ("#a0306a", (0, (3, 1))),
    "melt": ("#7d2e1f", "--"),
    "breccia": ("#5b3a78", "-."),
    "fractures": ("#1f6f8b", ":"),
    "crustal uplift": ("#3c7a3c", (0, (6, 2, 1, 2, 1, 2))),
    "Moho uplift": ("#555555", (0, (8, 3))),
}
"""Colour and dash of every cause; the dashes alone tell them apart in grey."""


def profile_figure(profile: xr.Dataset, *, rim_radius_m: float) -> Figure:
    """Anomaly against distance: the model with its band or, where a map was compared, what the map left of the family.

    Parameters
    ----------
    profile : Dataset
        modelled, modelled_low, modelled_high (radius); with a map also observed, standard_error, regional, fitted,
        fitted_low, fitted_high, modelled_rings (ring_radius); mGal.
    rim_radius_m : float
        Rim of the structure; the upper axis counts in it.
    """
    figure = blank_figure(4.3)
    axes = figure.add_axes((0.09, 0.19, 0.88, 0.68))
    compared = "observed" in profile
    reach = float(profile.ring_radius[-1]) * 1.02 if compared else 3.0 * rim_radius_m
    axes.axhline(0.0, color=FAINT, linewidth=0.9, zorder=0)
    if compared:
        _rings(axes, profile)
    else:
        _model(axes, profile, reach)
    tidy(axes, x="distance from the centre (km)", y="anomaly (mGal)")
    axes.set_xlim(0, reach / KM)
    mark_rim(axes, rim_radius_m / KM)

    def in_rims(km: Any) -> Any:
        return km * KM / rim_radius_m

    def in_km(rims: Any) -> Any:
        return rims * rim_radius_m / KM

    upper = axes.secondary_xaxis("top", functions=(in_rims, in_km))
    upper.set_xlabel("distance in rim radii", fontsize=TEXT)
    upper.tick_params(labelsize=SMALL, width=0.7, length=3, color=QUIET)
    upper.spines["top"].set(color=QUIET, linewidth=0.7)
    axes.legend(fontsize=SMALL, frameon=False, loc="best")
    bouguer_note(figure, 0.09)
    return figure


def _model(axes: Axes, profile: xr.Dataset, reach: float) -> None:
    radius = profile.radius.values
    x = np.append(radius[radius < reach], reach) / KM

    def model(name: str) -> np.ndarray:
        return np.interp(x, radius / KM, profile[name].values)

    low, high = model("modelled_low"), model("modelled_high")
    axes.fill_between(x, low, high, color=BAND, linewidth=0, label="5–95 % of the model's scatter")
    axes.plot(x, model("modelled"), color=MODEL, linewidth=1.8, label="modelled")


def _rings(axes: Axes, profile: xr.Dataset) -> None:
    """All as ring means through the map's sampling, so that like is compared with like."""
    at = profile.ring_radius.values / KM
    axes.fill_between(
        at, profile.fitted_low, profile.fitted_high, color=BAND, linewidth=0, label="impact structures that fit, 5–95 %"
    )
    axes.plot(at, profile.fitted, color=MODEL, linewidth=1.8, label="their median")
    axes.plot(
        at,
        profile.modelled_rings,
        color=INK,
        linewidth=0.9,
        linestyle=(0, (5, 2)),
        label="the scenario's own structure",
    )
    axes.errorbar(
        at,
        profile.observed - profile.regional,
        profile.standard_error,
        color=INK,
        fmt="o",
        markersize=3.5,
        elinewidth=0.9,
        capsize=2,
        label="observed minus regional, ± 1 standard error",
    )


def parts_figure(profile: xr.Dataset, *, rim_radius_m: float) -> Figure:
    """The modelled anomaly split by cause, each line labelled where it meets the axis, and their sum.

    Parameters
    ----------
    profile : Dataset
        parts (part, radius), mGal.
    rim_radius_m : float
        Rim of the structure.
    """
    figure = blank_figure(4.6)
    axes = figure.add_axes((0.30, 0.18, 0.62, 0.74))
    radius = profile.radius.values / KM
    shown = radius <= 1.6 * rim_radius_m / KM
    lines = [
        (str(name), values[shown], *_LOOK[str(name)], 1.5)
        for name, values in zip(profile.part.values, profile.parts.values, strict=True)
        if np.any(values)
    ]
    lines.append(("all together", profile.parts.values.sum(axis=0)[shown], INK, "-", 2.6))
    axes.axhline(0.0, color=FAINT, linewidth=0.9, zorder=0)
    for _, values, colour, dash, width in lines:
        axes.plot(radius[shown], values, color=colour, linestyle=dash, linewidth=width)
    tidy(axes, x="distance from the centre (km)", y="anomaly (mGal)")
    axes.yaxis.tick_right()
    axes.yaxis.set_label_position("right")
    axes.spines["right"].set(visible=True, color=QUIET, linewidth=0.7)
    axes.set_xlim(0, radius[shown][-1])
    low, high = axes.get_ylim()
    axes.annotate(
        "at the centre (mGal)", (-0.07, 1.05), xycoords="axes fraction", ha="right", fontsize=SMALL, color=QUIET
    )
    starts = np.array([values[0] for _, values, *_ in lines])
    places = spread(starts, 0.055 * (high - low))
    for (name, values, colour, _, width), place in zip(lines, places, strict=True):
        _label(axes, f"{name} {signed(float(values[0]))}", (values[0], place), colour, width > 2)
    mark_rim(axes, rim_radius_m / KM)
    bouguer_note(figure, 0.02)
    return figure


def _label(axes: Axes, text: str, heights: tuple[float, float], colour: str, bold: bool) -> None:
    """A label left of the axis with a thin line from where its curve starts."""
    start, place = heights
    across = axes.get_yaxis_transform()
    axes.plot([0.0, -0.03, -0.06], [start, place, place], color=colour, linewidth=0.7, transform=across, clip_on=False)
    axes.text(
        -0.07,
        place,
        text,
        color=colour,
        fontsize=TEXT,
        ha="right",
        va="center",
        transform=across,
        fontweight="bold" if bold else "normal",
    )
