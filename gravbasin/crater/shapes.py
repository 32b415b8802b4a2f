"""Shapes of rival bodies: shells between two surfaces of revolution, filled with constant and decaying contrast."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable, Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from gravbasin.crater.cells import Mesh
from gravbasin.crater.fill import LITHOLOGIES

__all__ = ["SHAPES", "Shape", "Shell", "shell_contrast", "subring_radius"]

Array = NDArray[np.float64]
KM = 1000.0
SALT_DENSITY = 2160.0
"""Halite, kg/m³ (from memory)."""

SUBRINGS = 4
"""Parts of equal area into which a ring is cut, so that a steep wall moves smoothly from ring to ring."""


@dataclasses.dataclass(frozen=True)
class Shell:
    """Rock between two surfaces, with contrast `constant` + `decaying` exp(-depth / `decay`).

    Attributes
    ----------
    top, base : (n_radius,) arrays, m
        Depth below today's ground; nothing where the base is not below the top.
    constant, decaying : float, kg/m³
    decay : float, m
    """

    top: Array
    base: Array
    constant: float
    decaying: float = 0.0
    decay: float = 1.0


@dataclasses.dataclass(frozen=True)
class Shape:
    """A family of bodies: its parameters and the shells they make.

    Attributes
    ----------
    parameters : tuple of str
        Names with units: ..._km, ..._kg_m3, ..._deg, or a plain number.
    shells : callable
        From parameters and radii (m) to shells.
    radius, base : callable
        From parameters to the outer radius and the deepest point, m.
    """

    parameters: tuple[str, ...]
    shells: Callable[[Mapping[str, float], Array], Sequence[Shell]]
    radius: Callable[[Mapping[str, float]], float]
    base: Callable[[Mapping[str, float]], float]


def shell_contrast(shells: Sequence[Shell], mesh: Mesh) -> Array:
    """Mean contrast of every cell, exact in depth, (depth, radius) kg/m³; shells are given on `subring_radius`."""
    top, bottom = mesh.depth_edges[:-1, None], mesh.depth_edges[1:, None]
    total = np.zeros((mesh.depth.size, SUBRINGS * mesh.radius.size))
    for shell in shells:
        start = np.minimum(np.maximum(shell.top, top), bottom)
        end = np.minimum(np.maximum(shell.base, start), bottom)
        total += shell.constant * (end - start)
        if shell.decaying:
            total += shell.decaying * shell.decay * (np.exp(-start / shell.decay) - np.exp(-end / shell.decay))
    return np.asarray(total.reshape(mesh.depth.size, -1, SUBRINGS).mean(axis=2) / (bottom - top))


def subring_radius(mesh: Mesh) -> Array:
    """Radii that halve the area of each part of each ring, (SUBRINGS n_radius,) m."""
    inner, outer = mesh.radius_edges[:-1, None] ** 2, mesh.radius_edges[1:, None] ** 2
    return np.sqrt(inner + (outer - inner) * (np.arange(SUBRINGS) + 0.5) / SUBRINGS).ravel()


def _walls(radius: Array, at_top: float, top: float, base: float, dip_deg: float) -> tuple[Array, Array]:
    """Top and base of a body with straight walls; dip below 90° widens it downwards, above 90° narrows it."""
    slope = math.tan(math.radians(dip_deg))  # metres down per metre outwards
    beyond = radius - at_top
    if dip_deg <= 90.0:
        return np.minimum(top + np.maximum(beyond, 0.0) * slope, base), np.full_like(radius, base)
    return np.full_like(radius, top), np.clip(top + beyond * slope, top, base)


def _plug(p: Mapping[str, float], radius: Array) -> list[Shell]:
    top, base = KM * p["top_km"], KM * (p["top_km"] + p["thickness_km"])
    upper, lower = _walls(radius, KM * p["radius_km"], top, base, p["wall_dip_deg"])
    return [Shell(upper, lower, p["contrast_kg_m3"])]


def _ring_complex(p: Mapping[str, float], radius: Array) -> list[Shell]:
    """A dense plug under a lighter felsic lid of its own width, both cut by today's ground."""
    outer, lid, base = KM * p["radius_km"], KM * p["lid_km"], KM * (p["lid_km"] + p["thickness_km"])
    within = radius <= outer
    return [
        Shell(np.zeros_like(radius), np.where(within, lid, 0.0), p["lid_contrast_kg_m3"]),
        Shell(np.full_like(radius, lid), np.where(within, base, lid), p["contrast_kg_m3"]),
    ]


def _diapir(p: Mapping[str, float], radius: Array) -> list[Shell]:
    """A salt stem in compacting sediment: denser than mud near the ground, lighter than rock below."""
    sediment = LITHOLOGIES["shaly sand"]
    within = radius <= KM * p["radius_km"]
    top, base = KM * p["top_km"], KM * (p["top_km"] + p["height_km"])
    light = sediment.porosity * (sediment.grain_density - 1030.0)
    shell = Shell(
        np.full_like(radius, top),
        np.where(within, base, top),
        SALT_DENSITY - sediment.grain_density,
        light,
        sediment.decay,
    )
    return [shell]


def _basin(p: Mapping[str, float], radius: Array) -> list[Shell]:
    """A bowl with gentle rims, thinning as a squared cosine; sediment less light with depth."""
    x = np.minimum(radius / (KM * p["radius_km"]), 1.0)
    base = KM * p["depth_km"] * np.cos(0.5 * np.pi * x) ** 2
    return [Shell(np.zeros_like(radius), base, 0.0, p["contrast_kg_m3"], KM * p["decay_km"])]


def _dome(p: Mapping[str, float], radius: Array) -> list[Shell]:
    """A core whose upper surface falls away as a paraboloid, cut flat by the ground above."""
    base = KM * p["thickness_km"]
    top = np.minimum(base * (radius / (KM * p["radius_km"])) ** 2, base)
    return [Shell(top, np.full_like(radius, base), p["contrast_kg_m3"])]


def _plug_radius(p: Mapping[str, float]) -> float:
    flare = p["thickness_km"] / math.tan(math.radians(p["wall_dip_deg"])) if p["wall_dip_deg"] < 90.0 else 0.0
    return KM * (p["radius_km"] + flare)


SHAPES: Mapping[str, Shape] = {
    "plug": Shape(
        ("radius_km", "top_km", "thickness_km", "wall_dip_deg", "contrast_kg_m3"),
        _plug,
        _plug_radius,
        lambda p: KM * (p["top_km"] + p["thickness_km"]),
    ),
    "ring complex": Shape(
        ("radius_km", "lid_km", "thickness_km", "lid_contrast_kg_m3", "contrast_kg_m3"),
        _ring_complex,
        lambda p: KM * p["radius_km"],
        lambda p: KM * (p["lid_km"] + p["thickness_km"]),
    ),
    "diapir": Shape(
        ("radius_km", "top_km", "height_km"),
        _diapir,
        lambda p: KM * p["radius_km"],
        lambda p: KM * (p["top_km"] + p["height_km"]),
    ),
    "basin": Shape(
        ("radius_km", "depth_km", "contrast_kg_m3", "decay_km"),
        _basin,
        lambda p: KM * p["radius_km"],
        lambda p: KM * p["depth_km"],
    ),
    "dome": Shape(
        ("radius_km", "thickness_km", "contrast_kg_m3"),
        _dome,
        lambda p: KM * p["radius_km"],
        lambda p: KM * p["thickness_km"],
    ),
}
"""Every shape by name."""
