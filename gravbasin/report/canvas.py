"""What every figure shares: blank figures, quiet axes, colours, and the way to self-contained SVG."""

from __future__ import annotations

import io
import re
import threading
from collections.abc import Iterable
from html import escape
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from matplotlib import rc_context
from matplotlib.figure import Figure
from numpy.typing import NDArray

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = [
    "BAND",
    "FAINT",
    "INK",
    "MODEL",
    "QUIET",
    "SMALL",
    "TEXT",
    "blank_figure",
    "bouguer_note",
    "mark_rim",
    "round_limit",
    "spread",
    "svg",
    "tidy",
]

Array = NDArray[np.float64]

INK, QUIET, FAINT = "#1a1a1a", "#555555", "#c8c8c8"
MODEL, BAND = "#0b4f7d", "#a9c4d8"
"""The model's line and its band: dark on light, so that they stay apart in grey."""

TEXT, SMALL = 8.5, 7.5
"""Font sizes, points; figures are 8 inches wide."""

BOUGUER = (
    "Modelled anomaly: attraction of all contrasts to the intact column below today's flat ground,\n"
    "which is what a complete Bouguer map shows after its regional is removed."
)

RASTER_DPI = 180

_SVG_SETTINGS: Any = {"svg.fonttype": "path", "svg.hashsalt": "gravbasin", "svg.image_inline": True}
_SVG_LOCK = threading.Lock()  # matplotlib takes these settings from the process, so one figure at a time


def blank_figure(height: float, width: float = 8.0) -> Figure:
    """A white figure of the given size in inches, tied to no window."""
    return Figure(figsize=(width, height), facecolor="white")


def tidy(axes: Axes, *, x: str = "", y: str = "", title: str = "") -> None:
    """Quiet frame, small ticks, and the labels."""
    axes.spines[["top", "right"]].set_visible(False)
    for side in ("left", "bottom"):
        axes.spines[side].set(color=QUIET, linewidth=0.7)
    axes.tick_params(labelsize=SMALL, color=QUIET, labelcolor=INK, width=0.7, length=3)
    axes.set_xlabel(x, fontsize=TEXT, color=INK)
    axes.set_ylabel(y, fontsize=TEXT, color=INK)
    if title:
        axes.set_title(title, fontsize=TEXT, color=INK, loc="left", fontweight="bold")


def mark_rim(axes: Axes, rim_km: float, *, label: Literal["beside", "above", "none"] = "beside") -> None:
    """A dotted line at the rim, with its name beside its upper end, above the panel, or not at all."""
    axes.axvline(rim_km, color=QUIET, linewidth=0.8, linestyle=(0, (1, 2)))
    place: dict[str, Any] = {"xycoords": ("data", "axes fraction"), "fontsize": SMALL, "color": QUIET}
    if label == "beside":
        axes.annotate(" rim", (rim_km, 0.98), va="top", **place)
    elif label == "above":
        axes.annotate("rim", (rim_km, 1.0), va="bottom", ha="center", **place)


def bouguer_note(figure: Figure, left: float) -> None:
    """What the modelled anomaly is, at the foot of the figure, so that it stays with the picture."""
    figure.text(left, 0.01, BOUGUER, fontsize=6.5, color=QUIET, va="bottom", linespacing=1.3)


def round_limit(values: Iterable[float] | Array) -> float:
    """The smallest of 1, 1.5, 2, 3, 4, 5, 6, 8 times a power of ten that holds every finite value by size."""
    largest = float(np.nanmax(np.abs(np.asarray(values, dtype=float)), initial=0.0))
    if largest < 1e-300:  # nothing to show
        return 1.0
    power = 10.0 ** np.floor(np.log10(largest))
    steps = power * np.array([1, 1.5, 2, 3, 4, 5, 6, 8, 10])
    return float(steps[np.searchsorted(steps, largest * (1 - 1e-9))])


def spread(positions: Array, gap: float) -> Array:
    """Positions for labels, in the same order, moved apart to at least `gap` and as little as need be.

    Labels that touch form a block about the mean of where they wanted to be.
    """
    order = np.argsort(positions, kind="stable")
    blocks: list[tuple[float, int]] = []  # (middle, number of labels)
    for wanted in np.asarray(positions, dtype=float)[order]:
        blocks.append((float(wanted), 1))
        while len(blocks) > 1 and blocks[-1][0] - blocks[-2][0] < 0.5 * gap * (blocks[-1][1] + blocks[-2][1]):
            (b, m), (a, n) = blocks.pop(), blocks.pop()
            blocks.append(((a * n + b * m) / (n + m), n + m))
    placed = np.concatenate([mid + gap * (np.arange(n) - 0.5 * (n - 1)) for mid, n in blocks] or [np.zeros(0)])
    result = np.empty_like(placed)
    result[order] = placed
    return result


def svg(figure: Figure, *, name: str = "figure", title: str = "", description: str = "") -> str:
    """A figure as one self-contained SVG element, the same text for the same figure every time.

    Parameters
    ----------
    figure : Figure
        What to write.
    name : str
        Prefix of every id inside, so that several figures can stand in one page.
    title, description : str
        What a screen reader says.

    Returns
    -------
    str
        The element, without XML declaration; letters are drawn as paths, so it needs no font.
    """
    buffer = io.StringIO()
    with _SVG_LOCK, rc_context(_SVG_SETTINGS):
        figure.savefig(buffer, format="svg", dpi=RASTER_DPI, metadata={"Date": None})
    text = buffer.getvalue()
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>\s*|<!--.*?-->\s*", "", text, flags=re.DOTALL)
    text = _own_ids(text, name).replace(">*{", f">#{name} *{{", 1)
    head = f'<svg id="{name}" role="img" aria-labelledby="{name}-title {name}-description"'
    words = (
        f'<title id="{name}-title">{escape(title or name)}</title>'
        f'<desc id="{name}-description">{escape(description)}</desc>'
    )
    opening, _, rest = text.partition(">")
    return opening.replace("<svg", head, 1) + ">\n " + words + rest


def _own_ids(text: str, name: str) -> str:
    """Every id numbered in order of appearance behind the figure's name; what nothing refers to loses its id."""
    used = set(re.findall(r'(?:href="#|url\(#)([^")]+)', text))
    numbers: dict[str, str] = {}

    def renamed(match: re.Match[str]) -> str:
        return match[1] + numbers.setdefault(match[2], f"{name}-{len(numbers)}")

    text = re.sub(r' id="([^"]+)"', lambda match: match[0] if match[1] in used else "", text)
    return re.sub(r'( id="|href="#|url\(#)([^")]+)', renamed, text)
