"""What erosion takes, slice by slice: units, share of the anomaly, and what is left of it."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr

from gravbasin.report.canvas import FAINT, INK, MODEL, QUIET, SMALL, TEXT, Array, blank_figure, tidy
from gravbasin.report.section_figure import UNIT_LOOK
from gravbasin.report.words import signed

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["erosion_figure", "slices_shown"]

KM = 1000.0
USUAL = "craton, usual"
"""Rate of the time axis."""

MOST_SLICES, LEAST_LEFT = 12, 0.02

_LOOK = {"hollow": UNIT_LOOK["sediment"], "other rock": UNIT_LOOK["intact target"]}
_LOOK |= {name: UNIT_LOOK[name] for name in ("suevite", "melt rock", "breccia", "fractured rock")}


def slices_shown(erosion: xr.Dataset, today_m: float) -> int:
    """How many slices are worth showing: to where the largest anomaly is 2 % of the fresh one, and beyond today."""
    size = np.abs(erosion.largest.values)
    alive = np.flatnonzero(size > LEAST_LEFT * size[0])
    worth = int(alive[-1]) + 1 if alive.size else 1
    today = int(np.searchsorted(erosion.erosion.values, today_m)) + 1
    return min(max(min(worth, MOST_SLICES), today), erosion.sizes["slice"])


def erosion_figure(erosion: xr.Dataset, *, today_m: float) -> Figure:
    """Three panels on one axis of erosion, from the ground before impact down.

    Parameters
    ----------
    erosion : Dataset
        stripped_volume (slice, stripped_unit), share (slice), largest and centre (erosion), time (slice, rate).
    today_m : float
        Erosion of the scenario, m.
    """
    count = slices_shown(erosion, today_m)
    cuts = erosion.erosion.values[: count + 1] / KM
    figure = blank_figure(5.0)
    units, share, left = (
        figure.add_axes((x, 0.175, wide, 0.745)) for x, wide in ((0.08, 0.29), (0.42, 0.19), (0.66, 0.24))
    )
    _units(units, erosion.isel(slice=slice(0, count)), cuts)
    _shares(share, 100 * erosion.share.values[:count], cuts)
    _left(left, erosion.isel(erosion=slice(0, count + 1)), cuts)
    for axes in (units, share, left):
        axes.set_ylim(cuts[-1], 0)
        if today_m > 0:
            axes.axhline(today_m / KM, color=INK, linewidth=1.4, zorder=4)
        if axes is not units:
            axes.tick_params(labelleft=False)
    if today_m > 0:
        share.annotate(
            "today", (1.0, today_m / KM), xycoords=("axes fraction", "data"), xytext=(3, 0),
            textcoords="offset points", fontsize=SMALL, va="center", color=INK,
        )  # fmt: skip
    _clock(left, erosion)
    figure.legend(
        *units.get_legend_handles_labels(),
        loc="lower left",
        bbox_to_anchor=(0.08, 0.0),
        ncols=6,
        fontsize=SMALL,
        frameon=False,
        handlelength=2.4,
        handleheight=1.3,
        borderaxespad=0.3,
        borderpad=0.0,
    )
    return figure


def _units(axes: Axes, erosion: xr.Dataset, cuts: Array) -> None:
    volume = erosion.stripped_volume.values
    shares = 100 * volume / volume.sum(axis=1, keepdims=True)
    start = np.zeros(len(shares))
    middle, height = 0.5 * (cuts[1:] + cuts[:-1]), np.diff(cuts)
    for name, part in zip(erosion.stripped_unit.values, shares.T, strict=True):
        if not part.any():
            continue
        colour, hatch = _LOOK[str(name)]
        axes.barh(
            middle, part, height, left=start, color=colour, hatch=hatch, edgecolor=INK, linewidth=0.5, label=str(name)
        )
        start = start + part
    axes.set_xlim(0, 100)
    tidy(axes, x="share of the slice within the rim (%)", y="erosion below the ground before impact (km)", title="Rock")


def _shares(axes: Axes, shares: Array, cuts: Array) -> None:
    middle, height = 0.5 * (cuts[1:] + cuts[:-1]), np.diff(cuts)
    axes.barh(middle, shares, 0.8 * height, color=[MODEL if value >= 0 else "white" for value in shares],
              edgecolor=MODEL, linewidth=0.8)  # fmt: skip
    axes.axvline(0.0, color=QUIET, linewidth=0.8)
    low, high = min(float(np.nanmin(shares, initial=0.0)), 0.0), max(float(np.nanmax(shares, initial=0.0)), 1.0)
    room = 0.45 * (high - low)
    axes.set_xlim(low - (room if low < 0 else 0.0), high + room)
    for y, value in zip(middle, shares, strict=True):
        side = 1 if value >= 0 else -1
        axes.annotate(
            signed(value, 0).removeprefix("+"), (value, y), xytext=(3 * side, 0), textcoords="offset points",
            fontsize=SMALL, va="center", ha="left" if side > 0 else "right", color=INK,
        )  # fmt: skip
    tidy(axes, x="of the fresh anomaly (%)", title="Carried by the slice")


def _left(axes: Axes, erosion: xr.Dataset, cuts: Array) -> None:
    axes.axvline(0.0, color=FAINT, linewidth=0.9)
    axes.plot(erosion.largest, cuts, color=MODEL, linewidth=1.6, marker="o", markersize=4, label="largest")
    axes.plot(erosion.centre, cuts, color=INK, linewidth=1.1, linestyle=(0, (4, 2)), marker="s", markersize=3,
              label="at the centre")  # fmt: skip
    tidy(axes, x="anomaly below the cut (mGal)", title="What is left")
    low, high = axes.get_xlim()
    axes.set_xlim(low - 0.08 * (high - low), high + 0.08 * (high - low))
    axes.legend(fontsize=SMALL, frameon=False, loc="best", handlelength=1.6)


def _clock(axes: Axes, erosion: xr.Dataset) -> None:
    """Time on the right, at the usual rate of a craton."""
    rate = float(erosion.rate_value.sel(rate=USUAL))

    def in_myr(km: Any) -> Any:
        return km * KM / rate

    def in_km(myr: Any) -> Any:
        return myr * rate / KM

    clock = axes.secondary_yaxis("right", functions=(in_myr, in_km))
    clock.set_ylabel(f"million years at {rate:g} m/Myr", fontsize=TEXT)
    clock.tick_params(labelsize=SMALL, width=0.7, length=3, color=QUIET)
    clock.spines["right"].set(color=QUIET, linewidth=0.7)
