"""The figures of a planned survey: where to stand, what each spacing buys, where the structure vanishes."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr
from cmcrameri import cm
from matplotlib.patheffects import withStroke
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullLocator

from gravbasin.report.canvas import (
    BAND,
    FAINT,
    INK,
    MODEL,
    QUIET,
    SMALL,
    TEXT,
    Array,
    blank_figure,
    bouguer_note,
    round_limit,
    tidy,
)
from gravbasin.report.map_figure import AXIS_LABELS, draw_circle

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from gravbasin.survey.layouts import Site
    from gravbasin.survey.rules import Rule
    from gravbasin.survey.station_files import StationTable
    from gravbasin.survey.vanish import Chart, Vanishing

__all__ = ["chart_figure", "gain_figure", "merit_figure", "stations_figure", "vanishing_figure"]

KM = 1000.0

LOOKS: dict[str, dict[str, Any]] = {
    "square": {"color": "#0b4f7d", "marker": "s", "linestyle": "solid"},
    "staggered": {"color": "#4d8fb8", "marker": "D", "linestyle": (0, (5, 2))},
    "lines": {"color": "#8a8a8a", "marker": "|", "linestyle": (0, (1, 1.5))},
    "radial": {"color": "#b0552a", "marker": "^", "linestyle": "solid"},
    "roads": {"color": "#3a3a3a", "marker": "x", "linestyle": (0, (7, 2, 1, 2))},
}
"""Line, marker and colour of each layout: apart in grey by marker and dash."""

STATION_LOOKS: dict[str, dict[str, Any]] = {
    "new": {"marker": "o", "s": 13, "facecolor": "white", "edgecolor": INK, "linewidth": 0.8, "zorder": 5},
    "existing": {"marker": "^", "s": 20, "facecolor": "#8a8a8a", "edgecolor": INK, "linewidth": 0.6, "zorder": 4},
    "next best": {"marker": "*", "s": 46, "facecolor": "#ffd166", "edgecolor": INK, "linewidth": 0.6, "zorder": 6},
}

CAUSE_LOOKS = (("#a9c4d8", ""), ("#b0552a", "////"), ("#d9d9d9", ".."))


def stations_figure(
    stations: StationTable, site: Site, radius: Array, profile: Array, *, rim_radius_m: float
) -> Figure:
    """Stations on the modelled anomaly, with the area, no-go polygons and roads.

    Parameters
    ----------
    stations : StationTable
    site : Site
    radius, profile : (n,) arrays, m and mGal
        The modelled anomaly.
    rim_radius_m : float
    """
    low, high = ((corner - site.centre) / KM for corner in site.bounds)
    pad = 0.04 * float((high - low).max())
    (west, south), (east, north) = low - pad, high + pad
    tall = min(6.2, 5.9 * (north - south) / (east - west))
    wide = tall * (east - west) / (north - south)
    total, width = tall + 1.15, wide + 1.95
    figure = blank_figure(total, width)
    axes = figure.add_axes((0.75 / width, 0.95 / total, wide / width, tall / total))
    bar = figure.add_axes(((0.9 + wide) / width, 0.95 / total, 0.14 / width, tall / total))
    x, y = np.linspace(west, east, 240), np.linspace(south, north, 240)
    values = np.interp(np.hypot(x, y[:, None]).ravel() * KM, radius, profile, right=0.0).reshape(240, 240)
    limit = round_limit(profile)
    mesh = axes.pcolormesh(x, y, values, cmap=cm.vik, vmin=-limit, vmax=limit, shading="nearest", rasterized=True)
    levels = [v for v in MaxNLocator(8).tick_values(-limit, limit) if v and profile.min() < v < profile.max()]
    if levels:  # dashed below zero, so that the sign survives in grey
        lines = axes.contour(x, y, values, levels=levels, colors=INK, linewidths=0.5, negative_linestyles="dashed")
        lines.set_rasterized(True)
    for polygon in site.area:
        for ring in polygon:
            _outline(axes, (ring - site.centre) / KM, color=INK, linewidth=1.1)
    for polygon in site.no_go:
        ring = (polygon[0] - site.centre) / KM
        axes.fill(*ring.T, facecolor="white", edgecolor=INK, linewidth=0.9, hatch="xxxx", zorder=3)
    for line in site.roads:
        axes.plot(*((line - site.centre) / KM).T, color="white", linewidth=2.6, zorder=2)
        axes.plot(*((line - site.centre) / KM).T, color=QUIET, linewidth=1.1, linestyle=(0, (4, 2)), zorder=2)
    draw_circle(axes, rim_radius_m / KM, "solid")
    kinds = np.array(stations.kind)
    for kind, look in STATION_LOOKS.items():
        at = (stations.place[kinds == kind] - site.centre) / KM
        if len(at):
            crowded = 0.4 if len(at) > 400 else 1.0
            axes.scatter(*at.T, label=f"{kind} ({len(at)})", **{**look, "s": crowded * look["s"]})
    axes.set(xlim=(west, east), ylim=(south, north), aspect="equal")
    tidy(axes, x=AXIS_LABELS[0], y=AXIS_LABELS[1])
    if len(stations.place):
        axes.legend(loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=3, fontsize=SMALL, frameon=False, borderpad=0.1)
    figure.colorbar(mesh, cax=bar)
    bar.tick_params(labelsize=SMALL, width=0.7, length=3)
    bar.set_ylabel("modelled anomaly (mGal)", fontsize=TEXT)
    bouguer_note(figure, 0.75 / width)
    return figure


def _outline(axes: Axes, ring: Array, **look: Any) -> None:
    axes.plot(*np.concatenate([ring, ring[:1]]).T, zorder=3, **look)


def merit_figure(
    table: xr.Dataset,
    rules: Sequence[Rule],
    *,
    target: float,
    distance: float,
    ceiling: tuple[float, float],
    searched: bool,
    chosen: tuple[str, float] | None,
) -> Figure:
    """Detection probability and distance to the nearest rival against spacing, layout by layout.

    Parameters
    ----------
    table : Dataset (layout, spacing)
    rules : sequence of Rule
        Drawn as upright lines.
    target, distance : float
        The survey's goals.
    ceiling : (float, float)
        What an endless survey without errors reaches of either.
    searched : bool
        Whether centre and size are searched for.
    chosen : (layout, spacing) or None
        The recommended cell.
    """
    figure = blank_figure(7.2)
    upper, lower = figure.add_axes((0.085, 0.57, 0.70, 0.395)), figure.add_axes((0.085, 0.12, 0.70, 0.395))
    seen = "detection_probability_searched" if searched else "detection_probability"
    band = None if searched else ("detection_low", "detection_high")
    _curves(upper, table, seen, band)
    _curves(lower, table, "rival_distance", ("rival_distance_low", "rival_distance_high"))
    upper.set(ylim=(0, 1.03))
    lower.set(ylim=(0, 1.06 * float(np.nanmax([distance, ceiling[1], float(table.rival_distance_high.max())]))))
    for axes, goal, top in ((upper, target, ceiling[0]), (lower, distance, ceiling[1])):
        axes.axhline(goal, color=INK, linewidth=1.1)
        axes.axhline(top, color=QUIET, linewidth=1.1, linestyle=(0, (6, 3)))
        _beside(axes, [(goal, f"goal {goal:g}"), (top, f"ceiling {top:.2g}: an endless\nsurvey without errors")])
        _spacing_axis(axes, table.spacing.values / KM, rules)
    if chosen is not None:
        cell = table.sel(layout=chosen[0], spacing=chosen[1])
        for axes, name in ((upper, seen), (lower, "rival_distance")):
            axes.plot(chosen[1] / KM, float(cell[name]), "o", markersize=12, markerfacecolor="none", color=INK, mew=1.4)
    where = "centre and size searched for" if searched else "place and size known"
    tidy(upper, y="detection probability", title=f"Seen? ({where})")
    tidy(lower, x="station spacing along rows (km)", y="distance, standard errors", title="Told from its rivals?")
    upper.tick_params(labelbottom=False)
    figure.legend(
        *upper.get_legend_handles_labels(), loc="lower left", bbox_to_anchor=(0.07, 0.0), ncols=5, fontsize=SMALL,
        frameon=False, handlelength=3.2,
    )  # fmt: skip
    return figure


def _curves(axes: Axes, table: xr.Dataset, name: str, band: tuple[str, str] | None) -> None:
    spacing = table.spacing.values / KM
    for layout in table.layout.values:
        row, look = table.sel(layout=layout), LOOKS[str(layout)]
        good = np.isfinite(row[name].values)
        if band is not None and layout == table.layout.values[0]:
            low, high = (row[each].values[good] for each in band)
            axes.fill_between(spacing[good], low, high, color=BAND, alpha=0.7, linewidth=0)
        axes.plot(spacing[good], row[name].values[good], markersize=4.5, linewidth=1.4, label=str(layout), **look)


def _beside(axes: Axes, notes: list[tuple[float, str]]) -> None:
    """Names of level lines at the right, the higher above and the lower below where they come close."""
    (a, first), (b, second) = sorted(notes)
    place: dict[str, Any] = {
        "xycoords": ("axes fraction", "data"), "textcoords": "offset points", "fontsize": SMALL, "color": INK
    }  # fmt: skip
    axes.annotate(first, (1.0, a), xytext=(4, -2), va="top", **place)
    axes.annotate(second, (1.0, b), xytext=(4, 2), va="bottom", **place)


def _spacing_axis(axes: Axes, spacing: Array, rules: Sequence[Rule]) -> None:
    low = min([spacing.min(), *(0.9 * rule.spacing_m / KM for rule in rules if np.isfinite(rule.spacing_m))])
    axes.set(xscale="log", xlim=(0.93 * low, 1.08 * spacing.max()))
    for rule in rules:
        at = rule.spacing_m / KM
        if not axes.get_xlim()[0] < at < axes.get_xlim()[1]:
            continue
        axes.axvline(at, color=QUIET, linewidth=0.9, linestyle=(0, (1, 2)))
        axes.annotate(
            rule.short, (at, 0.02), xycoords=("data", "axes fraction"), rotation=90, fontsize=SMALL, color=QUIET,
            ha="right", va="bottom", path_effects=[withStroke(linewidth=2, foreground="white")],
        )  # fmt: skip
    ticks = [v for v in (0.2, 0.5, 1, 2, 3, 5, 7, 10, 15, 20, 30, 50, 100) if 0.93 * low <= v <= 1.08 * spacing.max()]
    axes.xaxis.set_major_locator(FixedLocator(ticks))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.xaxis.set_major_formatter(FuncFormatter(lambda v, _: f"{v:g}"))


def vanishing_figure(vanishing: Vanishing, causes: Sequence[str], *, today_km: float) -> Figure:
    """Detection probability and the signal's causes against erosion, with how long it takes.

    Parameters
    ----------
    vanishing : Vanishing
    causes : sequence of str
        Names of `vanishing.by_cause`.
    today_km : float
        Erosion of the scenario.
    """
    figure = blank_figure(6.6)
    upper, lower = figure.add_axes((0.085, 0.57, 0.86, 0.24)), figure.add_axes((0.085, 0.08, 0.86, 0.43))
    x = vanishing.erosion_km
    upper.plot(x, vanishing.detection_probability, color=MODEL, linewidth=1.8)
    upper.axvspan(vanishing.low, vanishing.high, color="#ececec", zorder=0)
    upper.axvline(vanishing.median, color=QUIET, linewidth=1.0, linestyle=(0, (6, 3)))
    upper.set(ylim=(0, 1.05))
    tidy(upper, y="detection probability")
    upper.tick_params(labelbottom=False)
    _stacked(lower, x, vanishing.by_cause, causes)
    lower.plot(x, vanishing.by_cause.sum(axis=0), color=INK, linewidth=1.6, label="the structure, best noise")
    lower.plot(x, vanishing.snr[0], color=MODEL, linewidth=1.4, linestyle=(0, (5, 2)), label="median of its scatter")
    for edge, name in ((1, "90 % of scatter and noise"), (2, None)):
        lower.plot(x, vanishing.snr[edge], color=MODEL, linewidth=0.9, linestyle=(0, (1, 1.5)), label=name)
    lower.axhline(vanishing.required_snr, color=INK, linewidth=1.0, linestyle=(0, (1, 2)))
    lower.annotate("needed ", (1.0, vanishing.required_snr), xycoords=("axes fraction", "data"), ha="right",
                   va="bottom", fontsize=SMALL, color=INK)  # fmt: skip
    tidy(lower, x="erosion below the ground before impact (km)", y="signal-to-noise ratio")
    lower.legend(fontsize=SMALL, frameon=False, loc="upper right", handlelength=2.6)
    last = float(x[-1])
    for axes in (upper, lower):
        axes.set_xlim(0, last)
        if 0 < today_km < last:
            axes.axvline(today_km, color=INK, linewidth=1.4)
    if 0 < today_km < last:
        upper.annotate(" scenario", (today_km, 0.04), fontsize=SMALL, color=INK)
    _clocks(figure, upper, vanishing.rates, last)
    return figure


def _stacked(axes: Axes, x: Array, parts: Array, names: Sequence[str]) -> None:
    """Causes on top of each other, those that push the other way below zero."""
    above, below = np.zeros_like(x), np.zeros_like(x)
    for part, name, (colour, hatch) in zip(parts, names, CAUSE_LOOKS, strict=True):
        if not np.abs(part).max() > 0.01:
            continue
        up, down = np.maximum(part, 0.0), np.minimum(part, 0.0)
        look: dict[str, Any] = {"facecolor": colour, "edgecolor": "white", "hatch": hatch, "linewidth": 0.0}
        axes.fill_between(x, above, above + up, label=name, **look)
        if down.any():
            axes.fill_between(x, below, below + down, **look)
        above, below = above + up, below + down
    axes.axhline(0.0, color=QUIET, linewidth=0.7)


def _clocks(figure: Figure, axes: Axes, rates: dict[str, float], last: float) -> None:
    """One time scale above the panel per erosion rate: slowest usual one, its fast end, and the scenario's own."""
    names = [name for name in ("craton, usual", "common practice, fast", "this scenario") if name in rates]
    box = axes.get_position()
    for number, name in enumerate(names[-2:]):
        rate = rates[name]
        clock = figure.add_axes((box.x0, box.y1 + 0.015 + 0.078 * number, box.width, 0.001))
        clock.set_xlim(0, last * KM / rate)
        for side in ("left", "right", "bottom"):
            clock.spines[side].set_visible(False)
        clock.spines["top"].set(color=QUIET, linewidth=0.7)
        clock.xaxis.tick_top()
        clock.tick_params(labelsize=SMALL, color=QUIET, width=0.7, length=3, labelleft=False, left=False)
        label = f"million years at {rate:g} m/Myr ({name})"
        figure.text(box.x1, box.y1 + 0.056 + 0.078 * number, label, fontsize=SMALL, color=QUIET, ha="right")


def chart_figure(chart: Chart, *, probability: float, today: tuple[float, float]) -> Figure:
    """Detection probability against diameter and erosion.

    Parameters
    ----------
    chart : Chart
    probability : float
        The contour that stands out.
    today : (diameter, erosion), km
        The scenario.
    """
    figure = blank_figure(4.3)
    axes, bar = figure.add_axes((0.085, 0.13, 0.72, 0.83)), figure.add_axes((0.83, 0.13, 0.02, 0.83))
    steps = np.linspace(0.0, 1.0, 11)
    x, y = chart.rim_diameter_km, chart.erosion_km
    mesh = axes.contourf(x, y, chart.detection_probability.T, levels=steps, cmap=cm.lajolla_r)
    lines = axes.contour(x, y, chart.detection_probability.T, levels=[probability], colors=INK, linewidths=1.8)
    axes.clabel(lines, fmt=f"{probability:g}", fontsize=SMALL)
    axes.plot(*today, "o", markersize=7, markerfacecolor="white", markeredgecolor=INK, mew=1.4)
    axes.annotate("scenario", today, xytext=(7, -3), textcoords="offset points", fontsize=SMALL, color=INK,
                  path_effects=[withStroke(linewidth=2.4, foreground="white")])  # fmt: skip
    axes.set(xscale="log", ylim=(y[-1], 0), xlim=(x[0], x[-1]))
    ticks = np.unique(np.round(np.geomspace(x[0], x[-1], 6)))
    axes.xaxis.set_major_locator(FixedLocator(ticks.tolist()))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.xaxis.set_major_formatter(FuncFormatter(lambda v, _: f"{v:g}"))
    tidy(axes, x="rim diameter when fresh (km)", y="erosion (km)")
    axes.spines["bottom"].set_color(FAINT)
    figure.colorbar(mesh, cax=bar, ticks=steps[::2])
    bar.tick_params(labelsize=SMALL, width=0.7, length=3)
    bar.set_ylabel("detection probability", fontsize=TEXT)
    return figure


def gain_figure(snr: Array, distance: Array, *, beyond: str) -> Figure:
    """How the signal-to-noise ratio and the distance to the nearest rival grow with single stations.

    Parameters
    ----------
    snr, distance : (1 + count,) arrays
        The first with the scatter of shape counted as noise.
    beyond : str
        What they are added to.
    """
    figure = blank_figure(3.0)
    left, right = figure.add_axes((0.085, 0.17, 0.39, 0.70)), figure.add_axes((0.58, 0.17, 0.39, 0.70))
    for axes, values, title in (
        (left, snr, "Signal to noise and scatter of shape"), (right, distance, "Standard errors to the nearest rival")
    ):  # fmt: skip
        axes.plot(np.arange(values.size), values, color=MODEL, linewidth=1.5, marker="o", markersize=3)
        spread = max(float(np.ptp(values)), 0.05 * max(float(values.max()), 1e-9))
        axes.set(ylim=(float(values.min()) - 0.15 * spread, float(values.max()) + 0.15 * spread))
        tidy(axes, x=f"stations added to {beyond}", title=title)
    return figure
