"""The map of odds: how an impact structure would fare against regional noise at every place."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import xarray as xr
from cmcrameri import cm
from matplotlib.colors import BoundaryNorm, ListedColormap
from matplotlib.patches import Rectangle
from matplotlib.patheffects import withStroke

from gravbasin.report.canvas import FAINT, INK, SMALL, TEXT, Array, blank_figure, tidy
from gravbasin.report.map_figure import AXIS_LABELS, draw_circle, extent_of

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["odds_figure", "odds_steps"]

KM = 1000.0
STEPS = np.array([0.0, 1.0, 3.0, 10.0, 30.0, 100.0, 300.0, 1000.0, 3000.0, 1e4])
"""Steps of the colours, natural logarithm: even odds, e to 1, 20 to 1, 22,000 to 1, and so on."""

NOISE_BETTER = "#ebebeb"

LEFT, BOTTOM, TOP, WIDEST, TALLEST = 0.7, 0.55, 0.25, 5.6, 5.2
"""Inches."""


def odds_steps(values: Array) -> Array:
    """Boundaries of the colour classes: one class below even odds, then steps up to the largest value."""
    largest = float(np.nanmax(values))
    count = min(max(int(np.searchsorted(STEPS, largest, side="right")) + 1, 3), STEPS.size)
    return STEPS[:count]


def odds_figure(
    odds: xr.DataArray,
    *,
    centre_m: tuple[float, float],
    rim_radius_m: float,
    candidates: Sequence[tuple[float, float]] = (),
) -> Figure:
    """Natural logarithm of the odds of an impact structure against regional noise, centred at every node.

    Parameters
    ----------
    odds : DataArray (northing, easting)
        NaN where rings leave the map; at least one value is finite.
    centre_m : (easting, northing), m
        Centre of the structure; axes count from it.
    rim_radius_m : float
        Rim.
    candidates : sequence of (easting, northing), m
        Places to number in this order.
    """
    east, north = ((odds[name].values - c) / KM for name, c in zip(("easting", "northing"), centre_m, strict=True))
    across, up = extent_of(east), extent_of(north)
    wide = min(WIDEST, TALLEST * np.ptp(across) / np.ptp(up))
    tall = wide * np.ptp(up) / np.ptp(across)
    width, total = LEFT + wide + 1.1, TOP + tall + BOTTOM
    figure = blank_figure(total, width)
    axes = figure.add_axes((LEFT / width, BOTTOM / total, wide / width, tall / total))
    bar = figure.add_axes(((LEFT + wide + 0.15) / width, BOTTOM / total, 0.14 / width, tall / total))
    steps = odds_steps(odds.values)
    # One quiet tone where noise does better; from there colours darken, so that they keep their order in grey.
    shades = cm.lajolla(np.linspace(0.82, 0.08, steps.size - 1))
    colours = ListedColormap(shades).with_extremes(under=NOISE_BETTER, over=shades[-1])
    mesh = axes.pcolormesh(
        east,
        north,
        odds.values,
        shading="nearest",
        cmap=colours,
        norm=BoundaryNorm(steps, colours.N),
        rasterized=True,
    )
    axes.add_patch(Rectangle((across[0], up[0]), np.ptp(across), np.ptp(up), fill=False, edgecolor=FAINT, lw=0.8))
    draw_circle(axes, rim_radius_m / KM, "solid")
    for rank, (x, y) in enumerate(candidates, 1):
        at = (x - centre_m[0]) / KM, (y - centre_m[1]) / KM
        outline = [withStroke(linewidth=2.4, foreground="white")]
        axes.annotate(str(rank), at, fontsize=TEXT, ha="center", va="center", color=INK, path_effects=outline)
    axes.set(xlim=across, ylim=up, aspect="equal")
    tidy(axes, x=AXIS_LABELS[0], y=AXIS_LABELS[1])
    figure.colorbar(mesh, cax=bar, ticks=steps, spacing="uniform", extend="min", extendfrac=0.12)
    bar.set_yticklabels([f"{step:g}" for step in steps])
    bar.tick_params(labelsize=SMALL, width=0.7, length=3)
    bar.set_ylabel("natural logarithm of the odds", fontsize=TEXT)
    return figure
