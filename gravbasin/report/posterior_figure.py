"""What the map says of diameter and erosion together: joint posterior, margins, priors, the scenario's own values."""

from __future__ import annotations

from collections.abc import Mapping
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
from scipy import stats

from gravbasin.crater import Range
from gravbasin.inference.evidence import Posterior, weighted_quantile
from gravbasin.report.canvas import BAND, FAINT, INK, MODEL, QUIET, SMALL, TEXT, Array, blank_figure, tidy

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["FEW", "highest_levels", "joint_density", "posterior_figure"]

NAMES = ("rim_diameter_km", "erosion_km")
LABELS = ("rim diameter when fresh (km)", "erosion (km)")

FEW = 50.0
"""Effective number of models below which the models themselves are drawn: contours alone would look too sure."""

GRID = 90


def posterior_figure(posterior: Posterior, prior: Mapping[str, Range], own: Mapping[str, float]) -> Figure:
    """Joint posterior of diameter and erosion with its margins.

    Parameters
    ----------
    posterior : Posterior
        Of the impact family.
    prior : mapping
        Ranges of ``rim_diameter_km`` and ``erosion_km`` before the map was looked at.
    own : mapping
        The scenario's own values of both.
    """
    values = np.stack([posterior.bank.parameters[name] for name in NAMES])
    figure = blank_figure(4.9)
    joint = figure.add_axes((0.09, 0.11, 0.67, 0.62))
    above = figure.add_axes((0.09, 0.75, 0.67, 0.18))
    beside = figure.add_axes((0.78, 0.11, 0.19, 0.62))
    windows = [_window(v, posterior.weights, prior[name], own[name]) for v, name in zip(values, NAMES, strict=True)]
    _joint(joint, values, posterior, [prior[name] for name in NAMES], windows)
    place = own[NAMES[0]], own[NAMES[1]]
    joint.plot(*place, marker="X", color=INK, markersize=9, markeredgecolor="white", zorder=5)
    joint.annotate("the scenario", place, (9, 0), textcoords="offset points", fontsize=SMALL, va="center", zorder=5)
    tidy(joint, x=LABELS[0], y=LABELS[1])
    joint.set(xlim=windows[0], ylim=windows[1])
    for axes, name, value, window, upright in zip((above, beside), NAMES, values, windows, (False, True), strict=True):
        _margin(axes, value, posterior, prior[name], own[name], window, upright)
    above.set_title("Shaded: 50 % and 90 % of the probability", fontsize=TEXT, loc="left", color=INK)
    return figure


def _window(values: Array, weights: Array, prior: Range, own: float) -> tuple[float, float]:
    """The part of the prior worth drawing: the posterior with as much again on both sides, and the scenario."""
    low, high = weighted_quantile(values, weights, [0.002, 0.998])
    room = max(0.7 * float(high - low), 0.02 * (prior.high - prior.low))
    ends = max(prior.low, low - room), min(prior.high, high + room)
    pad = 0.05 * (ends[1] - ends[0])
    return min(ends[0], own - pad if own < ends[0] else own), max(ends[1], own + pad if own > ends[1] else own)


def _joint(
    axes: Axes, values: Array, posterior: Posterior, prior: list[Range], windows: list[tuple[float, float]]
) -> None:
    grid = [np.linspace(max(w[0], p.low), min(w[1], p.high), GRID) for w, p in zip(windows, prior, strict=True)]
    density = joint_density(values, posterior.weights, *grid, bounds=prior)
    if density is not None:
        levels = highest_levels(density, [0.9, 0.5])
        axes.contourf(*grid, density, levels=[*levels, density.max() * 1.001], colors=["#d6e3ec", BAND])
        axes.contour(*grid, density, levels=levels, colors=[MODEL], linewidths=[0.8, 1.4])
    if posterior.effective_size < FEW:
        largest = posterior.weights.max()
        shown = posterior.weights > 0.003 * largest
        axes.scatter(
            values[0, shown],
            values[1, shown],
            s=90 * posterior.weights[shown] / largest,
            facecolor="none",
            edgecolor=QUIET,
            linewidth=0.8,
            rasterized=True,
        )


def joint_density(values: Array, weights: Array, x: Array, y: Array, *, bounds: list[Range]) -> Array | None:
    """Smoothed density of weighted points on a grid, reflected at the prior's bounds; None where they are one point.

    Parameters
    ----------
    values : (2, n) array
        Points.
    weights : (n,) array
        Their weights.
    x, y : (n_x,), (n_y,) arrays
        Axes of the grid.
    bounds : two Ranges
        Nothing lies beyond them, so what smoothing spills over comes back.

    Returns
    -------
    (n_y, n_x) array or None
    """
    order = np.argsort(weights)[::-1]
    count = int(np.searchsorted(np.cumsum(weights[order]), 0.9995)) + 1
    kept = order[:count]
    if count < 3:
        return None
    try:
        kernel = stats.gaussian_kde(values[:, kept], weights=weights[kept])
    except np.linalg.LinAlgError:
        return None
    points = np.stack([axis.ravel() for axis in np.meshgrid(x, y)])
    density = kernel(points)
    for axis, bound in enumerate(bounds):
        for end in (bound.low, bound.high):
            mirrored = points.copy()
            mirrored[axis] = 2.0 * end - mirrored[axis]
            density += kernel(mirrored)
    return np.asarray(density.reshape(y.size, x.size))


def highest_levels(density: Array, shares: list[float]) -> list[float]:
    """Levels above which the grid holds these shares of the whole, for shares that descend."""
    ordered = np.sort(density.ravel())[::-1]
    running = np.cumsum(ordered) / ordered.sum()
    return [float(ordered[min(int(np.searchsorted(running, share)), ordered.size - 1)]) for share in shares]


def _margin(
    axes: Axes,
    values: Array,
    posterior: Posterior,
    prior: Range,
    own: float,
    window: tuple[float, float],
    upright: bool,
) -> None:
    """Histogram of one parameter with its 90 % interval, the prior dashed, the scenario's value as a line."""
    edges = np.linspace(*window, 31)
    heights, _ = np.histogram(values, edges, weights=posterior.weights)
    middle = 0.5 * (edges[1:] + edges[:-1])
    before = np.array([_prior_share(prior, a, b) for a, b in pairwise(edges)])
    top = 1.35 * heights.max()
    median, low, high = weighted_quantile(values, posterior.weights, [0.5, 0.05, 0.95])
    if upright:
        axes.barh(middle, heights, np.diff(edges), color=FAINT)
        axes.plot(before, middle, color=QUIET, linewidth=1.0, linestyle=(0, (4, 2)))
        axes.plot([0.9 * top] * 2, [low, high], color=MODEL, linewidth=2.4, solid_capstyle="butt")
        axes.plot(0.9 * top, median, marker="o", color=MODEL, markersize=5)
        axes.axhline(own, color=INK, linewidth=1.0)
        axes.set(ylim=window, xlim=(0, top), xticks=[])
    else:
        axes.bar(middle, heights, np.diff(edges), color=FAINT)
        axes.plot(middle, before, color=QUIET, linewidth=1.0, linestyle=(0, (4, 2)))
        axes.plot([low, high], [0.9 * top] * 2, color=MODEL, linewidth=2.4, solid_capstyle="butt")
        axes.plot(median, 0.9 * top, marker="o", color=MODEL, markersize=5)
        axes.axvline(own, color=INK, linewidth=1.0)
        axes.set(xlim=window, ylim=(0, top), yticks=[])
    tidy(axes)
    axes.tick_params(labelbottom=False, labelleft=False)
    axes.spines["left" if not upright else "bottom"].set_visible(False)


def _prior_share(prior: Range, low: float, high: float) -> float:
    low, high = max(low, prior.low), min(high, prior.high)
    return prior.share(Range(low, high, prior.logarithmic)) if high > low else 0.0
