"""A section turned into layered prisms, and their anomaly on the same grid by exact FFT convolution."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin.constants import GRAVITATIONAL_CONSTANT, SI_TO_MGAL
from gravbasin.discs import ring_fractions
from gravbasin.errors import GravbasinWarning, InputError
from gravbasin.forward.convolution import EvenConvolution
from gravbasin.forward.cost import MEMORY_LIMIT_GIB, GridCost, refuse_above
from gravbasin.forward.deformation import deformed_cells
from gravbasin.forward.motion import (
    NEGLIGIBLE,
    Motion,
    is_axisymmetric,
    layer_edges,
    motion_of,
    reach,
    warn_of_missing_rock,
)
from gravbasin.forward.rectangles import rectangle_potentials
from gravbasin.forward.result import anomaly_array
from gravbasin.forward.sections import RingCells, ascending, ring_cells
from gravbasin.labels import coordinate, data_array, provenance, read_provenance, versions

if TYPE_CHECKING:
    from gravbasin.scenario import Deformation

__all__ = ["PrismLayers", "grid_anomaly", "layered_prisms", "prism_layers"]

Array = NDArray[np.float64]

_SMALLEST_CELL = 1.0  # metres; anything smaller is a grid in degrees


def layered_prisms(
    section: xr.Dataset,
    easting_m: Any,
    northing_m: Any,
    *,
    centre: tuple[float, float] = (0.0, 0.0),
    deformation: Deformation | None = None,
    memory_limit_gib: float = MEMORY_LIMIT_GIB,
) -> xr.Dataset:
    """Prisms on a map grid with the section's mass in every cell.

    Parameters
    ----------
    section : Dataset
        ``density_contrast`` on (depth, radius) with ``depth_edges`` and ``radius_edges``.
    easting_m, northing_m : (n_easting,), (n_northing,) arrays, m
        Cell centres, ascending and evenly spaced.
    centre : (float, float), m
        Easting and northing of the section's axis.
    deformation : Deformation, optional
        Tilt, stretch, uneven erosion, missing sector and one-sided cover of a scenario; see
        `gravbasin.forward.deformation` for what each does. None, or one that does nothing, changes no bit.
    memory_limit_gib : float
        Refuse rather than hold more than this.

    Returns
    -------
    Dataset
        ``density_contrast`` (layer, northing, easting), kg/m³, with ``depth_edges``. A cell that rings share gets
        their mean, weighted by the exact areas of ring and cell, so mass is kept. Deformed sections have layers added
        where contrast sank below their base, and no contrast above today's ground.

    Raises
    ------
    InputError
        A grid in degrees, unsorted, uneven or not finite.
    CannotFinish
        The prisms would not fit in `memory_limit_gib`.

    Warns
    -----
    GravbasinWarning
        The section ends before its contrast has died out, the grid ends before the section does, or a deformation
        brings in rock from above the section.

    Examples
    --------
    >>> section = xr.Dataset(
    ...     {"density_contrast": (("depth", "radius"), [[-100.0, 0.0]])},
    ...     coords={"depth_edges": [0.0, 2e3], "radius_edges": [0.0, 1e4, 1.5e4]},
    ... )
    >>> axis = np.arange(-14.5e3, 15e3, 1e3)
    >>> prisms = layered_prisms(section, axis, axis)
    >>> bool(np.isclose(prisms.density_contrast.sum() * 1e6, -100 * np.pi * 1e8))  # the disc's own mass per metre
    True
    """
    cells = ring_cells(section, "layered_prisms")
    motion = _motion(cells, deformation)
    depth_edges = cells.depth_edges if motion is None else layer_edges(cells, motion)
    easting = _even_axis("easting_m", easting_m, "layered_prisms")
    northing = _even_axis("northing_m", northing_m, "layered_prisms")
    shape = (depth_edges.size - 1, northing.size, easting.size)
    refuse_above(GridCost(*shape).prism_bytes, memory_limit_gib, "layered_prisms")
    local = easting - centre[0], northing - centre[1]
    _warn_of_edges(cells, motion, *local)
    if motion is not None:
        density = deformed_cells(cells, motion, *local, depth_edges).reshape(shape)
    else:
        density = np.empty(shape)
        share = ring_fractions(*local, cells.radius_edges)
        for layer, row in zip(density, cells.contrast, strict=True):
            layer[...] = (share @ row).reshape(shape[1:])
    contrast = data_array(
        density,
        ("layer", "northing", "easting"),
        {"northing": northing, "easting": easting},
        name="density_contrast",
        units="kg m-3",
        long_name="density contrast of the prism",
    )
    edges = coordinate("depth_edges", depth_edges)
    facts = {"centre_m": list(centre), "section": read_provenance(section), "versions": versions("numpy")}
    if motion is not None and deformation is not None:
        facts["deformation"] = deformation.model_dump()
    return contrast.to_dataset().assign_coords(depth_edges=edges).assign_attrs(provenance=provenance(**facts))


def _even_axis(name: str, values: Any, where: str) -> Array:
    axis = ascending(name, values, where)
    step = np.diff(axis)
    if step.min() < _SMALLEST_CELL:
        raise InputError(
            name,
            f"spacing {step.min():g}",
            f"must be at least {_SMALLEST_CELL:g} m",
            "give projected metres, not degrees",
            where,
        )
    if step.max() - step.min() > 1e-6 * step.max():
        raise InputError(
            name,
            f"spacing from {step.min():g} to {step.max():g} m",
            "must be even",
            "resample to a regular grid",
            where,
        )
    return axis


def _motion(cells: RingCells, deformation: Deformation | None) -> Motion | None:
    """What has to be done beyond placing rings; an undeformed section may still reach above the ground."""
    if deformation is None or (is_axisymmetric(deformation) and cells.depth_edges[0] >= 0.0):
        return None
    return motion_of(deformation)


def _warn_of_edges(cells: RingCells, motion: Motion | None, easting: Array, northing: Array) -> None:
    """Say where a model or a grid ends too early; `easting` and `northing` are relative to the axis."""
    strength = np.abs(cells.contrast).max(axis=0)
    filled = np.flatnonzero(strength > NEGLIGIBLE * cells.peak)
    if filled.size == 0:
        return
    if filled[-1] == strength.size - 1:
        warnings.warn(
            f"the section's contrast is still {100 * strength[-1] / cells.peak:.2g} % of its peak at its rim, "
            f"{cells.radius_edges[-1] / 1e3:g} km: what lies beyond is missing; widen the section",
            GravbasinWarning,
            stacklevel=3,
        )
    outer = np.full(4, cells.radius_edges[filled[-1] + 1])
    if motion is not None:
        warn_of_missing_rock(cells, motion, stacklevel=4)
        least, greatest = reach(cells, motion, NEGLIGIBLE * cells.peak)
        outer = np.array([-least[0], greatest[0], -least[1], greatest[1]])
    sides = np.array([*_sides(easting), *_sides(northing)])
    worst = int(np.argmax(outer - sides))
    if sides[worst] < outer[worst]:
        warnings.warn(
            f"the grid reaches {sides[worst] / 1e3:g} km from the centre but the section has contrast out to "
            f"{outer[worst] / 1e3:g} km: what lies outside the grid is missing; widen the grid or pad it and crop "
            "the result",
            GravbasinWarning,
            stacklevel=3,
        )


def _sides(axis: Array) -> tuple[float, float]:
    half = 0.5 * (axis[1] - axis[0])
    return float(half - axis[0]), float(half + axis[-1])


@dataclass(frozen=True, eq=False)
class PrismLayers:
    """Layered prisms as plain arrays.

    Attributes
    ----------
    density : (n_layer, n_northing, n_easting) array, kg/m³
    depth_edges, northing, easting : arrays, m
    """

    density: Array
    depth_edges: Array
    northing: Array
    easting: Array

    @property
    def spacing(self) -> tuple[float, float]:
        """Size of the cells in northing and easting, m."""
        n, e = (float((axis[-1] - axis[0]) / (axis.size - 1)) for axis in (self.northing, self.easting))
        return n, e


def prism_layers(prisms: xr.Dataset, where: str) -> PrismLayers:
    """The prisms' density and edges, checked.

    Raises
    ------
    InputError
        A part is missing, does not fit the others, or is not finite.
    """
    remedy = "give prisms as gravbasin.layered_prisms returns them"
    missing = {"density_contrast", "depth_edges", "northing", "easting"} - set(map(str, prisms.variables))
    if missing:
        raise InputError("prisms", f"without {', '.join(sorted(missing))}", "must be complete", remedy, where)
    contrast = prisms["density_contrast"]
    if set(contrast.dims) != {"layer", "northing", "easting"}:
        raise InputError("prisms", contrast.dims, "must have the dimensions layer, northing, easting", remedy, where)
    density = np.asarray(contrast.transpose("layer", "northing", "easting"), dtype=float)
    edges = ascending("depth_edges", prisms["depth_edges"], where)
    if density.shape[0] != edges.size - 1:
        raise InputError("prisms", f"{density.shape[0]} layers", f"must fit {edges.size} depth edges", remedy, where)
    if not np.isfinite(density).all():
        raise InputError("prisms", "NaN or infinity", "must be finite everywhere", "repair the densities", where)
    axes = [_even_axis(name, prisms[name], where) for name in ("northing", "easting")]
    return PrismLayers(density, edges, *axes)


def grid_anomaly(
    prisms: xr.Dataset, *, height_m: float = 1.0, memory_limit_gib: float = MEMORY_LIMIT_GIB
) -> xr.DataArray:
    """Gravity anomaly of layered prisms above the centres of their own columns.

    Parameters
    ----------
    prisms : Dataset
        As `layered_prisms` returns it.
    height_m : float
        Height of all stations above today's ground (depth 0).
    memory_limit_gib : float
        Refuse rather than hold more than this.

    Returns
    -------
    DataArray (northing, easting), mGal
        Positive for excess mass; the exact anomaly of these prisms, to rounding.

    Raises
    ------
    InputError
        The prisms are not a full, even, finite set of layers.
    CannotFinish
        The work would not fit in `memory_limit_gib`.

    Notes
    -----
    All columns share the layer edges, so the anomaly is a sum of two-dimensional convolutions. Each depth edge enters
    once: the potential of a rectangle at that edge, convolved with the step of density across it. The grid is padded
    to twice its size, so nothing wraps around. The kernel is even in both directions, hence a cosine transform of one
    quadrant gives its whole spectrum.

    Examples
    --------
    >>> prisms = xr.Dataset(
    ...     {"density_contrast": (("layer", "northing", "easting"), np.full((1, 41, 41), 100.0))},
    ...     coords={"northing": 1e6 * np.arange(41.0), "easting": 1e6 * np.arange(41.0), "depth_edges": [0.0, 1e3]},
    ... )
    >>> round(float(grid_anomaly(prisms)[20, 20]), 2)  # nearly the infinite slab, 2πG · 100 · 1000 = 4.194 mGal
    4.19
    """
    layers = prism_layers(prisms, "grid_anomaly")
    if not np.isfinite(height_m):
        raise InputError("height_m", height_m, "must be finite", "give metres above the ground", "grid_anomaly")
    cost = GridCost(*layers.density.shape)
    refuse_above(cost.convolution_bytes, memory_limit_gib, "grid_anomaly")
    values = _convolve(layers, float(height_m), cost.padded)
    return anomaly_array(
        values,
        ("northing", "easting"),
        {"northing": layers.northing, "easting": layers.easting},
        engine="layers",
        height_m=float(height_m),
        prisms=read_provenance(prisms),
        versions=versions("numpy", "scipy"),
    )


def _convolve(layers: PrismLayers, height_m: float, half_period: tuple[int, int]) -> Array:
    """Sum over depth edges of the kernel of the edge, convolved with the step of density across it."""
    shape = layers.density.shape[1:]
    step, quadrant = np.empty(shape), np.empty((half_period[1] + 1, half_period[0] + 1))
    with EvenConvolution(shape, half_period) as convolution:
        for edge, depth in enumerate(layers.depth_edges):
            np.subtract(_layer(layers.density, edge), _layer(layers.density, edge - 1), out=step)
            if step.any():
                rectangle_potentials(quadrant.shape, layers.spacing[::-1], depth + height_m, out=quadrant)
                convolution.add(step, quadrant)
        return convolution.result() * (GRAVITATIONAL_CONSTANT * SI_TO_MGAL)


def _layer(density: Array, index: int) -> Array | float:
    return density[index] if 0 <= index < density.shape[0] else 0.0
