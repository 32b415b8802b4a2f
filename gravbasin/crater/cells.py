"""Density contrast of every cell of a mesh, by cause: the numerics behind the section."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from functools import cached_property
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from gravbasin.constants import STANDARD_GRAVITY
from gravbasin.crater.background import PORE_DEFICIT
from gravbasin.crater.damage import bulking
from gravbasin.crater.fill import Interfaces
from gravbasin.crater.model import CraterModel
from gravbasin.crater.overburden import filling_density, largest_overburden

__all__ = ["PARTS", "Cells", "Mesh", "assemble", "contrast", "contrast_parts", "default_mesh", "shared_mesh"]

Array = NDArray[np.float64]

PARTS = ("sediment in the hollow", "suevite", "melt", "breccia", "fractures", "crustal uplift", "Moho uplift")
"""Causes of contrast; they add up to the whole."""


@dataclasses.dataclass(frozen=True)
class Mesh:
    """Edges of the section's cells, m: depth below today's ground, distance from the centre."""

    depth_edges: Array
    radius_edges: Array

    @cached_property
    def radius(self) -> Array:
        """Middle of every ring, m."""
        return 0.5 * (self.radius_edges[1:] + self.radius_edges[:-1])

    @cached_property
    def depth(self) -> Array:
        """Middle of every layer, m."""
        return 0.5 * (self.depth_edges[1:] + self.depth_edges[:-1])


def default_mesh(model: CraterModel, *, layers: int = 80, rings: int = 160) -> Mesh:
    """Even rings to where the model ends; layers that grow with depth, thinnest at the ground.

    Parameters
    ----------
    model : CraterModel
        Sets how deep and how wide the mesh must be.
    layers, rings : int
        Number of cells in depth and in radius.
    """
    ground = model.ground
    below = _growing(max(model.base - ground.erosion, 1000.0), layers)
    return Mesh(_with_cover(below, ground.cover), np.linspace(0.0, model.outer_radius, rings + 1))


def shared_mesh(models: Sequence[CraterModel], *, layers: int = 80, rings: int = 160) -> Mesh:
    """One mesh for many models, so that one table of ring attractions serves them all.

    Rings are as fine as the smallest structure needs near the centre and grow outwards to the widest one.
    """
    deepest = max(model.base - model.ground.erosion + model.ground.cover for model in models)
    widest, smallest = max(m.outer_radius for m in models), min(m.outer_radius for m in models)
    edges = np.linspace(0.0, widest, rings + 1)
    if widest > 1.01 * smallest:
        edges = smallest * np.sinh(np.linspace(0.0, np.arcsinh(widest / smallest), rings + 1))
    return Mesh(_growing(max(deepest, 1000.0), layers), edges)


def _growing(base: float, layers: int) -> Array:
    growth = 3.0  # the deepest layer is exp(3) = 20 times the thinnest
    return np.asarray(base * np.expm1(growth * np.arange(layers + 1) / layers) / np.expm1(growth))


def _with_cover(edges: Array, cover: float) -> Array:
    """Edges below the cover's base, with a few layers of cover put on top and as many edges as before."""
    if cover == 0:
        return edges
    count = max(2, edges.size // 20)
    kept = np.concatenate(
        [edges[:1], np.interp(np.linspace(0, 1, edges.size - count)[1:], np.linspace(0, 1, edges.size), edges)]
    )
    return np.concatenate([np.linspace(0.0, cover, count + 1)[:-1], cover + kept])


def contrast(model: CraterModel, mesh: Mesh) -> Array:
    """Density contrast of every cell, (depth, radius) kg/m³: the fast path for banks of models on one mesh."""
    return assemble(model, mesh).contrast


def contrast_parts(model: CraterModel, mesh: Mesh) -> Array:
    """Density contrast of every cell by cause.

    Parameters
    ----------
    model : CraterModel
        The structure.
    mesh : Mesh
        Any mesh; thin units are averaged over the cells they cross, so their mass does not depend on it.

    Returns
    -------
    (part, depth, radius) array, kg/m³
        In the order of `PARTS`.
    """
    cells = assemble(model, mesh)
    return np.stack([cells.whole(part) for part in cells.parts])


@dataclasses.dataclass(frozen=True)
class Cells:
    """Contrast by part, with what else a reader wants to know of every cell.

    Most parts reach a few layers only, so arrays hold the layers from the top down to where a part ends.

    Attributes
    ----------
    parts : tuple of (layers it reaches, radius) arrays, kg/m³
        In the order of `PARTS`.
    shares : tuple of (layers it reaches, radius) arrays
        Share of each cell in hollow, suevite, melt and breccia.
    rock : (depth, radius) array
        Share of each cell in rock below the floor; what is left over is cover.
    porosity_change : (depth, radius) array
        Fracture porosity of that rock.
    edges : (depth + 1,) array, m
        Depth of the cells' edges below the ground before impact, held at the stripped surface within the cover.
    """

    parts: tuple[Array, ...]
    shares: tuple[Array, ...]
    rock: Array
    porosity_change: Array
    edges: Array

    @property
    def middle(self) -> Array:
        """Middle of each layer's target part, depth below the ground before impact, m."""
        return 0.5 * (self.edges[1:] + self.edges[:-1])

    @property
    def contrast(self) -> Array:
        """Sum of the parts, (depth, radius) kg/m³."""
        total = np.zeros_like(self.rock)
        for part in self.parts:
            total[: len(part)] += part
        return total

    def whole(self, part: Array) -> Array:
        """An array that ends at some layer, with zeros below it."""
        full = np.zeros_like(self.rock)
        full[: len(part)] = part
        return full


def assemble(model: CraterModel, mesh: Mesh) -> Cells:
    """All parts of the contrast on a mesh."""
    ground, column, radius = model.ground, model.column, mesh.radius
    edges = np.maximum(ground.original_depth(mesh.depth_edges), ground.erosion)
    height = np.diff(mesh.depth_edges)[:, None]
    bend = _bend(model, radius)
    bases = Interfaces(*(base - bend for base in model.fill.interfaces(radius)))
    cut = int(np.searchsorted(edges[:-1], bases.floor.max()))  # layers from here down are rock throughout
    cuts = _cuts(edges[: cut + 1], bases)
    *shares, rock_above = ((lower - upper) / height[:cut] for upper, lower in pairwise(cuts))
    rock = np.empty((edges.size - 1, radius.size))
    rock[:] = np.diff(edges)[:, None] / height
    rock[:cut] = rock_above
    rise = model.displacement.net_rise(edges, radius) + bend
    crust_rise, moho_rise = _uplift(model, edges, bases.floor, rise, cut)
    middle = 0.5 * (edges[1:] + edges[:-1])
    weight = np.maximum(column.crust_mass(middle)[:, None] + largest_overburden(column, model.fill, ground, bases), 0.0)
    below_floor = middle[:, None] - bases.floor
    below_floor[:cut] = 0.5 * (np.maximum(edges[:cut, None], bases.floor) + edges[1 : cut + 1, None]) - bases.floor
    change = model.damage.open_porosity(below_floor, radius, STANDARD_GRAVITY * weight)
    if any(column.porosities):
        before = column.porosity(middle[:, None] + 0.5 * (rise[1:] + rise[:-1]))
        change *= bulking(before, model.damage.crossover, least=model.damage.least_bulking)
    solid = crust_rise + column.crust_density(middle)[:, None]
    fractures = change * (model.damage.fluid_density - solid) * rock
    fills = _fill_parts(model, edges[: cut + 1], height[:cut], bases, cuts, shares)
    return Cells(
        (*fills, fractures, rock * crust_rise, rock[: len(moho_rise)] * moho_rise), tuple(shares), rock, change, edges
    )


def _bend(model: CraterModel, radius: Array) -> Array:
    """How much more the plate rebounded here than at the model's edge, m."""
    if model.rebound is None:
        return np.zeros_like(radius)
    return model.rebound.rise(radius) - model.rebound.rise(model.outer_radius)


def _cuts(edges: Array, bases: Interfaces) -> tuple[Array, ...]:
    """Where each cell begins, is cut by the bases of hollow, suevite, melt and breccia, and ends; depths, m."""
    top, bottom = edges[:-1, None], edges[1:, None]
    return (top, *(np.minimum(np.maximum(base, top), bottom) for base in bases), bottom)


def _fill_parts(
    model: CraterModel,
    edges: Array,
    height: Array,
    bases: Interfaces,
    cuts: Sequence[Array],
    shares: Sequence[Array],
) -> tuple[Array, ...]:
    """Contrast of sediment, suevite, melt and breccia; exact integrals, so that mass does not depend on the mesh."""
    fill, column = model.fill, model.column
    hollow, suevite, melt, breccia = shares
    volumes = [column.pore_volume(cut) for cut in cuts[1:5]]
    pores = [
        (v - u) / np.maximum(lower - upper, 1e-9)
        for (u, v), (upper, lower) in zip(pairwise(volumes), pairwise(cuts[1:5]), strict=True)
    ]
    sheet = melt * (fill.melt_contrast + PORE_DEFICIT * pores[1])
    if fill.melt_layering:
        centre = np.clip(0.5 * (bases.suevite + bases.melt), edges[:-1, None], edges[1:, None])
        lower_half = np.clip(bases.melt, centre, edges[1:, None]) - centre
        sheet = sheet + fill.melt_layering * (lower_half / height - 0.5 * melt)
    return (
        _filled_hollow(model, edges, height, cuts[1], hollow),
        suevite * fill.suevite_contrast * bulking(pores[0], fill.suevite_crossover),
        sheet,
        breccia * fill.breccia_contrast * bulking(pores[2], fill.breccia_crossover),
    )


def _filled_hollow(model: CraterModel, edges: Array, height: Array, base: Array, share: Array) -> Array:
    """Contrast of what fills the hollow, over the layers above its deepest point; nothing where it holds air."""
    last = int(np.flatnonzero(share.any(axis=1)).max(initial=-1)) + 1
    filling = filling_density(model.fill, model.ground, 0.5 * (edges[1 : last + 1] + edges[:last]))
    if filling is None:
        return share[:0]
    intact = model.column.crust_mass(base[:last]) - model.column.crust_mass(edges[:last])[:, None]
    return share[:last] * filling[:, None] - intact / height[:last]


def _uplift(model: CraterModel, edges: Array, floor: Array, rise: Array, cut: int) -> tuple[Array, Array]:
    """Mean contrast of the risen rock in every cell, crust and Moho apart.

    A cell holds the interval of the column that its rock came from; below the floor only, and linear within the cell
    that the floor cuts.
    """
    column, upper, lower = model.column, edges[:-1, None], edges[1:, None]
    source = edges[:, None] + rise
    here = np.maximum(lower - upper, 1e-9)
    length = np.maximum(source[1:] - source[:-1], 1e-9)
    excess = column.excess_mass(source)
    crust = (excess[1:] - excess[:-1]) / length - np.diff(column.excess_mass(edges))[:, None] / here
    if cut:
        start = np.minimum(np.maximum(floor, upper[:cut]), lower[:cut])
        share = (start - upper[:cut]) / here[:cut]
        source_start = source[:cut] + share * (source[1 : cut + 1] - source[:cut])
        left = np.maximum(1.0 - share, 1e-9)
        risen = (excess[1 : cut + 1] - column.excess_mass(source_start)) / (length[:cut] * left)
        stayed = (column.excess_mass(lower[:cut]) - column.excess_mass(start)) / (here[:cut] * left)
        crust[:cut] = np.where(share < 1.0 - 1e-9, risen - stayed, 0.0)
    if model.displacement.moho_rise == 0 and model.rebound is None:
        return crust, crust[:0]
    mantle = np.clip(source[1:] - column.moho, 0.0, length) / length
    mantle_before = np.clip(lower - column.moho, 0.0, here) / here
    return crust, column.moho_contrast * (mantle - mantle_before)
