"""The cross-section: anomaly above, density contrast and units below, all on one distance axis."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import xarray as xr
from cmcrameri import cm
from matplotlib.colors import ListedColormap
from matplotlib.patches import Patch

from gravbasin.crater import UNITS
from gravbasin.report.canvas import (
    BAND,
    FAINT,
    INK,
    MODEL,
    SMALL,
    TEXT,
    Array,
    blank_figure,
    bouguer_note,
    mark_rim,
    round_limit,
    tidy,
)

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["UNIT_LOOK", "section_figure"]

KM = 1000.0
LEFT, WIDTH, BAR = 0.75, 6.25, 0.14
"""Inches: left margin, panels, colour bar."""

EXAGGERATIONS = np.array([0.5, 1, 1.5, 2, 3, 4, 5, 6, 8, 10, 15, 20])
PANEL_HEIGHT = 1.9

UNIT_LOOK = {
    "intact target": ("#f4f2ee", ""),
    "cover": ("#e9e0c9", ""),
    "sediment": ("#d2c08d", "---"),
    "suevite": ("#b9a3ad", "++"),
    "melt rock": ("#7d4a3c", "xx"),
    "breccia": ("#a58d83", "\\\\\\"),
    "fractured rock": ("#d5dce2", "///"),
    "mantle": ("#5f6f66", "||"),
    "water or air": ("#ffffff", ""),
}
"""Colour and hatch of every unit: different in lightness or in hatch, so that they differ in grey."""


def section_figure(section: xr.Dataset, profile: xr.Dataset, *, rim_radius_m: float, porosity: bool = False) -> Figure:
    """Cross-section through the axis with the anomaly it makes.

    Parameters
    ----------
    section : Dataset (depth, radius)
        density_contrast (kg/m³), unit and porosity, with depth_edges and radius_edges (m).
    profile : Dataset
        modelled (radius), mGal; also modelled_low, modelled_high where there is a band.
    rim_radius_m : float
        Where the rim was.
    porosity : bool
        Whether to draw the porosity as well.
    """
    radius = section.radius_edges.values / KM
    edges = np.concatenate([-radius[:0:-1], radius])
    depth = section.depth_edges.values / KM
    deepest = _deepest_shown(section)
    sky = 0.02 * deepest
    exaggeration, height = _exaggeration(deepest + sky, span=2 * radius[-1])
    stated = "no vertical exaggeration" if exaggeration == 1 else f"vertical exaggeration {exaggeration:g}"
    titles = {"contrast": f"Density contrast to the intact column ({stated})"}
    titles |= {"porosity": "Porosity of rock, breccia and suevite"} if porosity else {}
    titles |= {"units": "Units"}
    total = 2.0 + len(titles) * (height + 0.35) + 0.75
    figure = blank_figure(total)

    def panel(top: float, tall: float, left: float = LEFT, wide: float = WIDTH) -> Axes:
        return figure.add_axes((left / 8, 1 - (top + tall) / total, wide / 8, tall / total))

    above = panel(0.3, 1.35)
    _anomaly(above, profile, radius[-1])
    band = ", with the 5–95 % band of its scatter" if "modelled_low" in profile else ""
    tidy(above, y="anomaly (mGal)", title=f"Modelled anomaly{band}")
    cuts = {}
    for number, (name, title) in enumerate(titles.items()):
        top = 2.0 + number * (height + 0.35)
        cuts[name] = panel(top, height)
        bar = panel(top, height, LEFT + WIDTH + 0.12, BAR) if name != "units" else None
        if name == "contrast" and bar:
            _contrast(cuts[name], bar, section, edges, depth)
        elif bar:
            _porosity(cuts[name], bar, section, edges, depth)
        else:
            _legend(figure, _units(cuts[name], section, edges, depth, deepest), 0.4 / total)
        tidy(cuts[name], y="depth (km)", title=title, x="distance from the axis (km)" if name == "units" else "")
        cuts[name].axhline(0.0, color=INK, linewidth=1.4, zorder=4)
        cuts[name].set_ylim(deepest, -sky)
    bouguer_note(figure, LEFT / 8)
    for axes in (above, *cuts.values()):
        axes.set_xlim(-radius[-1], radius[-1])
        mark_rim(axes, -rim_radius_m / KM, label="none")
        mark_rim(axes, rim_radius_m / KM, label="above" if axes is above else "none")
        axes.tick_params(labelbottom=axes is cuts["units"])
    cuts["contrast"].annotate(
        "today's ground", (1.0, 1.0), xycoords="axes fraction", ha="right", va="bottom", fontsize=SMALL, color=INK
    )
    return figure


def _deepest_shown(section: xr.Dataset) -> float:
    """Depth (km) to the lowest cell that has more than 1 % of the largest contrast, and a little more."""
    strength = np.abs(section.density_contrast.values).max(axis=1)
    strong = np.flatnonzero(strength > 0.01 * strength.max())
    last = strong[-1] if strong.size else strength.size - 1
    return float(min(1.1 * section.depth_edges.values[last + 1], section.depth_edges.values[-1])) / KM


def _exaggeration(tall: float, *, span: float) -> tuple[float, float]:
    """A round exaggeration, and the height (inches) of a panel of `tall` by `span` km that shows it exactly."""
    true_height = WIDTH * tall / span
    chosen = EXAGGERATIONS[np.argmin(np.abs(np.log(EXAGGERATIONS * true_height / PANEL_HEIGHT)))]
    return float(chosen), float(chosen * true_height)


def _mirrored(values: Array) -> Array:
    return np.concatenate([values[:, ::-1], values], axis=1)


def _anomaly(axes: Axes, profile: xr.Dataset, reach: float) -> None:
    radius = profile.radius.values / KM
    near = radius <= 1.02 * reach
    x = np.concatenate([-radius[near][:0:-1], radius[near]])

    def both(name: str) -> Array:
        values = profile[name].values[near]
        return np.concatenate([values[:0:-1], values])

    axes.axhline(0.0, color=FAINT, linewidth=0.8)
    if "modelled_low" in profile:
        axes.fill_between(x, both("modelled_low"), both("modelled_high"), color=BAND, linewidth=0)
    axes.plot(x, both("modelled"), color=MODEL, linewidth=1.6)


def _contrast(axes: Axes, bar: Axes, section: xr.Dataset, edges: Array, depth: Array) -> None:
    values = _mirrored(section.density_contrast.values)
    limit = round_limit(values)
    mesh = axes.pcolormesh(edges, depth, values, cmap=cm.vik, vmin=-limit, vmax=limit, rasterized=True)
    middle, down = 0.5 * (edges[1:] + edges[:-1]), 0.5 * (depth[1:] + depth[:-1])
    codes = _mirrored(section.unit.values)
    for code in np.unique(codes):
        if 0 < (codes == code).mean() < 1:
            axes.contour(middle, down, codes == code, levels=[0.5], colors=INK, linewidths=0.4)
    # Signed contours tell lows (dashed) from highs (full) where the colours are lost.
    levels = [share * limit for share in (-0.4, -0.1, 0.1, 0.4) if values.min() < share * limit < values.max()]
    if levels:
        axes.contour(middle, down, values, levels=levels, colors=INK, linewidths=0.7, negative_linestyles="dashed")
    for level in levels:
        bar.axhline(level, color=INK, linewidth=0.9, linestyle="dashed" if level < 0 else "solid")
    axes.figure.colorbar(mesh, cax=bar)
    bar.tick_params(labelsize=SMALL, width=0.7, length=3)
    bar.set_ylabel("kg/m³", fontsize=TEXT)
    bar.yaxis.get_offset_text().set_visible(False)


def _porosity(axes: Axes, bar: Axes, section: xr.Dataset, edges: Array, depth: Array) -> None:
    """Per cent, darker where more; lines at levels marked on the bar, so that numbers can be read without colour."""
    values = 100 * _mirrored(section.porosity.values)
    limit = round_limit(values)
    mesh = axes.pcolormesh(edges, depth, values, cmap=cm.davos_r, vmin=0.0, vmax=1.3 * limit, rasterized=True)
    middle, down = 0.5 * (edges[1:] + edges[:-1]), 0.5 * (depth[1:] + depth[:-1])
    levels = [share * limit for share in (0.1, 0.3, 0.5) if values.min() < share * limit < values.max()]
    if levels:
        axes.contour(middle, down, values, levels=levels, colors=INK, linewidths=0.6)
    for level in levels:
        bar.axhline(level, color=INK, linewidth=0.9)
    axes.figure.colorbar(mesh, cax=bar)
    bar.set_ylim(0.0, limit)
    bar.tick_params(labelsize=SMALL, width=0.7, length=3)
    bar.set_ylabel("%", fontsize=TEXT)


def _units(axes: Axes, section: xr.Dataset, edges: Array, depth: Array, deepest: float) -> list[Patch]:
    """Draw the units, and return what their legend shows."""
    codes = _mirrored(section.unit.values)
    middle, down = 0.5 * (edges[1:] + edges[:-1]), 0.5 * (depth[1:] + depth[:-1])
    axes.pcolormesh(
        edges,
        depth,
        codes,
        cmap=ListedColormap([UNIT_LOOK[name][0] for name in UNITS]),
        vmin=-0.5,
        vmax=len(UNITS) - 0.5,
        rasterized=True,
    )
    patches = []
    for code in np.unique(codes[depth[:-1] < deepest]):
        colour, hatch = UNIT_LOOK[UNITS[code]]
        inside = (codes == code).astype(float)
        if 0 < inside.mean() < 1:
            if hatch:
                axes.contourf(middle, down, inside, levels=[0.5, 1.5], colors="none", hatches=[hatch])
            axes.contour(middle, down, inside, levels=[0.5], colors=INK, linewidths=0.6)
        patches.append(Patch(facecolor=colour, edgecolor=INK, hatch=2 * hatch, linewidth=0.5, label=UNITS[code]))
    return patches


def _legend(figure: Figure, patches: list[Patch], bottom: float) -> None:
    figure.legend(
        handles=patches,
        loc="lower left",
        bbox_to_anchor=(LEFT / 8, bottom),
        ncols=6,
        fontsize=SMALL,
        frameon=False,
        handlelength=2.4,
        handleheight=1.3,
        borderaxespad=0.0,
        borderpad=0.0,
    )
