"""What the engines read from a section, checked once at the door."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin.errors import InputError

__all__ = ["RingCells", "ascending", "finite_vector", "ring_cells"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class RingCells:
    """A section as plain arrays: uniform rings of contrast, nothing outside them.

    Attributes
    ----------
    contrast : (n_depth, n_ring) array, kg/m³
    depth_edges : (n_depth + 1,) array, m
    radius_edges : (n_ring + 1,) array, m
    """

    contrast: Array
    depth_edges: Array
    radius_edges: Array

    @property
    def peak(self) -> float:
        """Largest |contrast|, kg/m³."""
        return float(np.abs(self.contrast).max(initial=0.0))


def ring_cells(section: xr.Dataset, where: str) -> RingCells:
    """The section's contrast and edges, checked.

    Parameters
    ----------
    section : Dataset
        ``density_contrast`` on (depth, radius), with coordinates ``depth_edges`` and ``radius_edges``.
    where : str
        The public function that asks, for the error message.

    Raises
    ------
    InputError
        A part is missing, does not fit the others, or is not finite.
    """
    remedy = "give a section as gravbasin.density_section returns it"
    for name in ("density_contrast", "depth_edges", "radius_edges"):
        if name not in section:
            raise InputError(
                "section", f"variables {', '.join(map(str, section.variables))}", f"must hold {name}", remedy, where
            )
    contrast = section["density_contrast"]
    if set(contrast.dims) != {"depth", "radius"}:
        raise InputError("density_contrast", contrast.dims, "must have the dimensions depth and radius", remedy, where)
    values = np.ascontiguousarray(contrast.transpose("depth", "radius"), dtype=float)
    depth_edges = ascending("depth_edges", section["depth_edges"], where)
    radius_edges = ascending("radius_edges", section["radius_edges"], where)
    if values.shape != (depth_edges.size - 1, radius_edges.size - 1):
        raise InputError(
            "density_contrast",
            f"shape {values.shape}",
            f"must fit {depth_edges.size} depth edges and {radius_edges.size} radius edges",
            remedy,
            where,
        )
    if radius_edges[0] < 0.0:
        raise InputError("radius_edges", radius_edges[0], "must not be negative", "start the rings at 0 m", where)
    if not np.isfinite(values).all():
        bad = int((~np.isfinite(values)).sum())
        raise InputError("density_contrast", f"{bad} cells not finite", "must be finite everywhere", remedy, where)
    return RingCells(values, depth_edges, radius_edges)


def finite_vector(name: str, values: Any, where: str) -> Array:
    """The values as a one-dimensional float64 array (a scalar becomes one element), all finite and at least one."""
    out = np.atleast_1d(np.array(values, dtype=float))
    if out.ndim != 1 or out.size == 0:
        raise InputError(
            name, f"shape {out.shape}", "must be one-dimensional and not empty", "give a list of metres", where
        )
    if not np.isfinite(out).all():
        raise InputError(name, out[~np.isfinite(out)][0], "must be finite", "drop or repair the point", where)
    return out


def ascending(name: str, values: Any, where: str) -> Array:
    """A finite vector of at least two strictly ascending values."""
    out = finite_vector(name, values, where)
    if out.size < 2:
        raise InputError(name, out.tolist(), "must have two values or more", "give more cells", where)
    step = np.diff(out)
    if step.min() <= 0.0:
        at = int(np.argmin(step))
        raise InputError(name, f"{out[at]:g} then {out[at + 1]:g} m", "must be strictly ascending", "sort it", where)
    return out
