"""Laboratory samples along their transect: measured against what minerals, velocities and the model lead to expect."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import xarray as xr

from gravbasin.crater.samples import SampleUpdate
from gravbasin.report.canvas import BAND, FAINT, INK, MODEL, QUIET, SMALL, Array, blank_figure, tidy

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["samples_figure"]

KM = 1000.0


def samples_figure(compared: xr.Dataset, update: SampleUpdate) -> Figure:
    """Density, and porosity where it was measured.

    Parameters
    ----------
    compared, update
        From `with_samples`.
    """
    porous = bool(np.isfinite(compared.porosity).any())
    figure = blank_figure(5.6 if porous else 3.8)
    bottom, height = (0.46, 0.48) if porous else (0.27, 0.66)
    density = figure.add_axes((0.10, bottom, 0.86, height))
    places, words = _places(compared)
    _densities(density, places, compared, update)
    last = density
    if porous:
        density.tick_params(labelbottom=False)
        last = figure.add_axes((0.10, 0.18, 0.86, 0.22), sharex=density)
        _porosities(last, places, compared)
    last.set_xlabel(words, fontsize=SMALL + 1, color=INK)
    handles, labels = density.get_legend_handles_labels()
    figure.legend(handles, labels, loc="lower left", bbox_to_anchor=(0.09, 0.0), ncols=3, fontsize=SMALL, frameon=False)
    return figure


def _places(compared: xr.Dataset) -> tuple[Array, str]:
    """Where to draw each sample: along the transect, those without a position after its end; else one by one."""
    along = compared.transect.values / KM
    unknown = ~np.isfinite(along)
    if unknown.all():
        return np.arange(1.0, along.size + 1), "sample, in the order of the table"
    span = max(float(np.ptp(along[~unknown])), 1.0)
    along = along.copy()
    along[unknown] = np.nanmax(along) + span * (0.05 + 0.03 * np.arange(unknown.sum()))
    more = "; the last ones have no position" if unknown.any() else ""
    return along, f"distance along the samples' line of best fit (km){more}"


def _densities(axes: Axes, places: Array, compared: xr.Dataset, update: SampleUpdate) -> None:
    axes.axhspan(
        update.density - 1.645 * update.density_sd, update.density + 1.645 * update.density_sd,
        color=FAINT, alpha=0.5, linewidth=0, label="intact target by these samples, 90 %",
    )  # fmt: skip
    axes.axhline(update.prior_density, color=QUIET, linewidth=0.9, linestyle=(0, (4, 2)), label="intact target before")
    low, high = compared.expected_low.values, compared.expected_high.values
    known = np.isfinite(low)
    if known.any():
        axes.vlines(places[known], low[known], high[known], color=BAND, linewidth=6, label="expected from minerals")
    for name, marker, word in (("from_gardner", "v", "Gardner"), ("from_brocher", "^", "Brocher")):
        values = compared[name].values
        if np.isfinite(values).any():
            axes.plot(
                places, values, marker, color="none", markeredgecolor=MODEL, markersize=5,
                label=f"from velocity ({word})",
            )  # fmt: skip
    measured, strange = compared.density.values, compared.outlier.values == 1
    axes.plot(places[~strange], measured[~strange], "o", color=INK, markersize=4, label="measured")
    if strange.any():
        axes.plot(places[strange], measured[strange], "x", color=INK, markersize=7, label="measured, set aside")
        for i in np.flatnonzero(strange & np.isfinite(measured)):
            axes.annotate(
                str(compared.sample.values[i]), (places[i], measured[i]), xytext=(6, 2), textcoords="offset points",
                fontsize=SMALL, color=INK,
            )  # fmt: skip
    axes.margins(x=0.04, y=0.08)
    tidy(axes, y="density (kg/m³)", title="Density")


def _porosities(axes: Axes, places: Array, compared: xr.Dataset) -> None:
    axes.vlines(places, 100 * compared.held_low, 100 * compared.held_high, color=BAND, linewidth=6)
    axes.plot(places, 100 * compared.porosity.values, "o", color=INK, markersize=4)
    axes.set_ylim(bottom=0)
    tidy(axes, y="porosity (%)", title="Porosity; bars: what the model lets a hand sample hold")
