"""The four maps: observed, regional, residual, modelled."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr
from cmcrameri import cm
from matplotlib.patches import Circle
from matplotlib.ticker import MaxNLocator

from gravbasin.report.canvas import INK, SMALL, TEXT, blank_figure, bouguer_note, round_limit, tidy

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["AXIS_LABELS", "draw_circle", "extent_of", "map_figure"]

KM = 1000.0
LEFT, GAP, BAR, TOP, BOTTOM = 0.7, 0.25, 0.14, 0.35, 0.85
"""Inches: margins about and between the panels, width of a colour bar."""

WIDEST, TALLEST = 3.0, 3.6


def map_figure(maps: xr.Dataset, *, centre_m: tuple[float, float], rim_radius_m: float, disc_radius_m: float) -> Figure:
    """Observed, regional, residual and modelled anomaly on the same axes.

    Parameters
    ----------
    maps : Dataset (northing, easting)
        observed, regional, residual, modelled, mGal.
    centre_m : (easting, northing), m
        Centre of the structure; axes count from it.
    rim_radius_m, disc_radius_m : float
        Rim, and the disc that was tested.

    Notes
    -----
    Observed and regional share one colour scale, residual and modelled another that is symmetric about zero.
    """
    east, north = ((maps[name].values - c) / KM for name, c in zip(("easting", "northing"), centre_m, strict=True))
    extent = extent_of(east), extent_of(north)
    wide, tall = _panel_size(np.ptp(extent[0]), np.ptp(extent[1]))
    total = 2 * (TOP + tall) + BOTTOM
    across = LEFT + 2 * wide + GAP + 0.12 + BAR + 0.75
    figure = blank_figure(total, across)
    level = np.concatenate([maps.observed.values.ravel(), maps.regional.values.ravel()])
    limit = round_limit(np.concatenate([maps.residual.values.ravel(), maps.modelled.values.ravel()]))
    scales: list[dict[str, Any]] = [
        {"cmap": cm.batlow, "vmin": float(np.nanmin(level)), "vmax": float(np.nanmax(level))},
        {"cmap": cm.vik, "vmin": -limit, "vmax": limit},
    ]
    for row, names in enumerate((("observed", "regional"), ("residual", "modelled"))):
        bottom = total - (row + 1) * (TOP + tall)
        for column, name in enumerate(names):
            left = LEFT + column * (wide + GAP)
            axes = figure.add_axes((left / across, bottom / total, wide / across, tall / total))
            mesh = _panel(axes, maps[name], (east, north), scales[row])
            draw_circle(axes, rim_radius_m / KM, "solid")
            draw_circle(axes, disc_radius_m / KM, (0, (4, 3)))
            axes.set(xlim=extent[0], ylim=extent[1], aspect="equal")
            axes.tick_params(labelbottom=row == 1, labelleft=column == 0)
            x, y = AXIS_LABELS[0] if row == 1 else "", AXIS_LABELS[1] if column == 0 else ""
            tidy(axes, x=x, y=y, title=TITLES[name])
        left = LEFT + 2 * wide + GAP + 0.12
        bar = figure.add_axes((left / across, bottom / total, BAR / across, tall / total))
        figure.colorbar(mesh, cax=bar)
        bar.tick_params(labelsize=SMALL, width=0.7, length=3)
        bar.set_ylabel("mGal", fontsize=TEXT)
    bouguer_note(figure, LEFT / across)
    return figure


AXIS_LABELS = ("east of the centre (km)", "north of the centre (km)")
TITLES = {
    "observed": "Observed",
    "regional": "Regional (for display)",
    "residual": "Observed minus regional",
    "modelled": "Modelled",
}


def extent_of(axis: np.ndarray) -> tuple[float, float]:
    """Ends of an even axis, half a step beyond its nodes."""
    half = 0.5 * (axis[1] - axis[0])
    return float(axis[0] - half), float(axis[-1] + half)


def _panel_size(width: float, height: float) -> tuple[float, float]:
    wide = min(WIDEST, TALLEST * width / height)
    return wide, wide * height / width


def _panel(axes: Axes, values: xr.DataArray, at: tuple[np.ndarray, np.ndarray], scale: dict[str, Any]) -> Any:
    axes.set_facecolor("#e4e4e4")  # where there are no data
    mesh = axes.pcolormesh(*at, values.values, shading="nearest", rasterized=True, **scale)
    levels = MaxNLocator(8).tick_values(scale["vmin"], scale["vmax"])
    negative = "dashed" if scale["vmin"] == -scale["vmax"] else "solid"  # a level has no sign worth a dash
    inside = [v for v in levels if np.nanmin(values) < v < np.nanmax(values)]
    if inside:
        lines = axes.contour(
            *at, values.values, levels=inside, colors=INK, linewidths=0.5, negative_linestyles=negative
        )
        lines.set_rasterized(True)
    return mesh


def draw_circle(axes: Axes, radius: float, style: Any) -> None:
    """A circle about the origin that stands out on light and dark."""
    axes.add_patch(Circle((0, 0), radius, fill=False, edgecolor="white", linewidth=2.4))
    axes.add_patch(Circle((0, 0), radius, fill=False, edgecolor=INK, linewidth=1.2, linestyle=style))
