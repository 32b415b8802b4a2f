"""The spectrum of a map against that of maps simulated from its noise model."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.ticker import NullLocator

from gravbasin.observed import SpectrumCheck
from gravbasin.report.canvas import BAND, INK, QUIET, SMALL, blank_figure, tidy
from gravbasin.report.words import given

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["spectrum_figure"]


def spectrum_figure(spectrum: SpectrumCheck, *, signal_km: tuple[float, float]) -> Figure:
    """Power relative to the model's, long waves on the left.

    Parameters
    ----------
    spectrum : SpectrumCheck
        From `check_spectrum`.
    signal_km : (float, float)
        Wavelengths that carry the structure's signal, marked along the foot.
    """
    figure = blank_figure(3.0)
    axes = figure.add_axes((0.10, 0.19, 0.86, 0.77))
    waves = np.array(spectrum.wavelength_km)
    axes.fill_between(waves, spectrum.low, spectrum.high, color=BAND, linewidth=0, label="simulated maps, 5–95 %")
    axes.axhline(1.0, color=QUIET, linewidth=0.8)
    axes.plot(waves, spectrum.ratio, "o-", color=INK, markersize=4, linewidth=1.0, label="this map")
    axes.set(xscale="log", yscale="log", xlim=(1.1 * waves.max(), waves.min() / 1.1))
    values = np.concatenate([spectrum.ratio, spectrum.low, spectrum.high])
    low, high = 0.6 * values.min(), 1.25 * values.max()
    axes.set_ylim(low, high)
    shortest, longest = sorted(axes.get_xlim())
    ends = np.clip(np.array(signal_km), shortest, longest)
    axes.plot(ends, [1.12 * low] * 2, color=INK, linewidth=3.0, solid_capstyle="butt", label="carries the signal")
    for axis, ticks in ((axes.xaxis, _ticks(shortest, longest)), (axes.yaxis, _ticks(low, high))):
        axis.set_ticks(ticks, labels=[given(t) for t in ticks])
        axis.set_minor_locator(NullLocator())
    axes.legend(fontsize=SMALL, frameon=False, loc="upper right", ncols=3)
    tidy(axes, x="wavelength (km)", y="power over the model's")
    return figure


def _ticks(low: float, high: float) -> list[float]:
    """1, 2 and 5 times powers of ten."""
    steps = [s * 10.0**p for p in range(-4, 7) for s in (1, 2, 5)]
    return [float(f"{s:.3g}") for s in steps if low <= s <= high]
