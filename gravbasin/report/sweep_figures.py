"""The heat map of a sweep as a still picture."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from gravbasin.report.canvas import INK, QUIET, SMALL, TEXT, blank_figure, round_limit, tidy
from gravbasin.report.words import given

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from gravbasin.runs.sensitivity import Bins

__all__ = ["heat_figure"]

Array = NDArray[np.float64]


def heat_figure(means: Array, x: Bins, y: Bins, *, words: tuple[str, str, str]) -> Figure:
    """Means of a number over two fields.

    Parameters
    ----------
    means : (n_y, n_x) array
        NaN where there are no cases.
    x, y : Bins
        Of the fields.
    words : (str, str, str)
        Of the number, the field along x and the field along y, with their units.
    """
    from cmcrameri import cm

    figure = blank_figure(4.6)
    axes = figure.add_axes((0.16, 0.13, 0.66, 0.80))
    signed = bool(np.nanmin(means) < 0 < np.nanmax(means)) if np.isfinite(means).any() else False
    limit = round_limit(means)
    low, high = (-limit, limit) if signed else (np.nanmin(means), np.nanmax(means))
    mesh = axes.pcolormesh(
        np.arange(x.count + 1), np.arange(y.count + 1), means, cmap=cm.vik if signed else cm.batlow, vmin=low, vmax=high
    )
    if means.size <= 150:
        _write(axes, means, low, high, signed)
    bar = figure.colorbar(mesh, cax=figure.add_axes((0.85, 0.13, 0.02, 0.80)))
    bar.outline.set_visible(False)
    bar.ax.tick_params(labelsize=SMALL, color=QUIET)
    bar.set_label(words[0], fontsize=TEXT, color=INK)
    _ticks(axes, x, y)
    tidy(axes, x=words[1], y=words[2])
    return figure


def _write(axes: Axes, means: Array, low: float, high: float, signed: bool) -> None:
    for (row, column), value in np.ndenumerate(means):
        if not np.isfinite(value):
            continue
        place = (value - low) / (high - low) if high > low else 0.5
        dark = abs(place - 0.5) > 0.3 if signed else place < 0.55
        text = f"{value:.2g}".replace("-", "−")
        axes.text(column + 0.5, row + 0.5, text, ha="center", va="center", fontsize=6.5, color="white" if dark else INK)


def _ticks(axes: Axes, x: Bins, y: Bins) -> None:
    for bins, axis in ((x, axes.xaxis), (y, axes.yaxis)):
        if bins.labels:
            step = max(1, bins.count // 12)
            axis.set_ticks(np.arange(0, bins.count, step) + 0.5, labels=list(bins.labels[::step]))
        else:
            step = max(1, bins.count // 6)
            axis.set_ticks(
                np.arange(0, bins.count + 1, step), labels=[given(float(f"{e:.3g}")) for e in bins.edges[::step]]
            )
