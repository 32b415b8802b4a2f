"""The two questions of odds: could it be seen, and how often does the map offer as much by chance."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from gravbasin.report.canvas import BAND, INK, MODEL, QUIET, SMALL, TEXT, Array, blank_figure, tidy
from gravbasin.report.words import given, percent, probability

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["chance_figure", "detectability_figure"]


def detectability_figure(
    *, snr: float, snr_low: float, snr_high: float, threshold: float, false_alarm: float, detected: float
) -> Figure:
    """What a survey's statistic would be without the structure and with it.

    Parameters
    ----------
    snr, snr_low, snr_high : float
        Signal-to-noise ratio, and the ends of its 5-95 % range.
    threshold : float
        Above which one would claim a detection.
    false_alarm : float
        Probability that noise alone passes it.
    detected : float
        Detection probability averaged over the scatter.
    """
    figure = blank_figure(3.3)
    axes = figure.add_axes((0.04, 0.15, 0.92, 0.83))
    left, right = min(-3.8, snr_low - 2.5, snr - 3.5), max(snr_high + 0.5, snr + 3.8, threshold + 4.6)
    x = np.linspace(left, right, 600)
    noise, signal = _normal(x), _normal(x - snr)
    found = x >= threshold
    axes.fill_between(x[found], signal[found], color=BAND, linewidth=0)
    axes.plot(x, noise, color=QUIET, linewidth=1.5, linestyle=(0, (5, 2)))
    axes.plot(x, signal, color=MODEL, linewidth=1.8)
    axes.plot([threshold, threshold], [0, 0.56], color=INK, linewidth=1.0)
    outward = 1 if snr >= 0 else -1  # labels stand on the flanks that face away from each other
    _name(axes, "noise alone", -1.05 * outward, QUIET, -outward)
    _name(axes, "with the structure", snr + 1.05 * outward, MODEL, outward)
    note: dict[str, Any] = {"fontsize": SMALL, "color": INK, "va": "top"}
    by_noise = f"noise alone passes {threshold:.1f}\nwith probability {given(false_alarm)}"
    by_signal = f"the structure passes it with\nprobability {probability(detected)} (mean over the bar below)"
    axes.text(threshold - 0.12, 0.56, by_noise, ha="right", **note)
    axes.text(threshold + 0.12, 0.56, by_signal, ha="left", **note)
    _interval(axes, snr, snr_low, snr_high)
    tidy(axes, x="matched-filter statistic, in standard deviations of the noise")
    axes.spines["left"].set_visible(False)
    axes.set(yticks=[], xlim=(left, right), ylim=(-0.10, 0.58))
    return figure


def _normal(x: Array) -> Array:
    return np.exp(-0.5 * x**2) / np.sqrt(2 * np.pi)


def _name(axes: Axes, text: str, x: float, colour: str, side: int) -> None:
    """A curve's name on its flank, to the left (-1) or right (1) of it."""
    axes.text(x + 0.12 * side, 0.25, text, ha="left" if side > 0 else "right", fontsize=TEXT, color=colour)


def _interval(axes: Axes, middle: float, low: float, high: float) -> None:
    axes.plot([low, high], [-0.045, -0.045], color=MODEL, linewidth=3.0, solid_capstyle="butt")
    axes.plot(middle, -0.045, marker="o", color=MODEL, markersize=6)
    axes.text(low - 0.12, -0.045, "expected, 5–95 %", ha="right", va="center", fontsize=SMALL, color=MODEL)
    axes.axhline(0.0, color=QUIET, linewidth=0.7)


def chance_figure(null: Array, statistic: float, *, p_value: float, standard_error: float, source: str) -> Figure:
    """The statistic at other places, with the structure's own value.

    Parameters
    ----------
    null : (centres,) array
        Values at the other places.
    statistic : float
        Value at the structure.
    p_value, standard_error : float
        Share that does as well, and its error.
    source : str
        "map" or "random fields".
    """
    figure = blank_figure(3.3)
    axes = figure.add_axes((0.09, 0.15, 0.88, 0.78))
    low, high = min(null.min(), statistic), max(null.max(), statistic)
    width = (high - low) / 40 or 1.0
    # The structure's value is an edge, so that no bar holds both kinds.
    steps = np.arange(np.floor((low - statistic) / width), np.ceil((high - statistic) / width) + 2)
    edges = statistic + width * steps
    counts, _ = np.histogram(null, edges)
    beyond, _ = np.histogram(null[null >= statistic], edges)
    place = {"map": "at other places of this map", "random fields": "in random fields of the noise"}
    axes.bar(edges[:-1], counts, np.diff(edges), align="edge", color="#d8d8d8", edgecolor="white", linewidth=0.4)
    axes.bar(edges[:-1], beyond, np.diff(edges), align="edge", color=BAND, edgecolor=MODEL, linewidth=0.4, hatch="////")
    top = 1.25 * max(int(counts.max()), 1)
    axes.plot([statistic, statistic], [0, 0.92 * top], color=INK, linewidth=1.4)
    left = statistic > 0.5 * (low + high)
    axes.text(
        statistic,
        0.92 * top,
        f"  the structure  \n  {percent(p_value, standard_error)} do as well  ",
        ha="right" if left else "left",
        va="center",
        fontsize=TEXT,
        color=INK,
    )
    label = "natural logarithm of the odds of an impact structure against regional noise"
    tidy(axes, x=label, y=f"count {place.get(source, source)}")
    axes.set(ylim=(0, top), xlim=(edges[0], edges[-1]))
    return figure
