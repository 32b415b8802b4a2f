"""The checked inside of a map: two even axes and the values on them, and seeded subsets of its nodes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin.errors import InputError

__all__ = ["Array", "Disc", "Lattice", "Nodes", "even_axis", "lattice_of", "thin"]

Array = NDArray[np.float64]
Disc = tuple[float, float, float]
"""Easting, northing and radius of a disc, all in metres."""

EVEN_TOLERANCE = 1e-3
"""Allowed departure of a node from even spacing, in steps: covers float32 and rounded text, far below any effect."""


@dataclass(frozen=True, eq=False)
class Lattice:
    """A map as bare arrays: ascending even axes in metres, values (n_northing, n_easting) in mGal, NaN = no data."""

    easting: Array
    northing: Array
    values: Array

    @property
    def spacing(self) -> tuple[float, float]:
        """Northing step and easting step, m."""
        return _step(self.northing), _step(self.easting)

    def valid(self, exclude: Disc | None = None, *, where: str = "") -> NDArray[np.bool_]:
        """True at the nodes that hold data and lie outside the excluded disc, (n_northing, n_easting)."""
        keep = np.isfinite(self.values)
        if exclude is None:
            return keep
        easting, northing, radius = (float(v) for v in exclude)
        if not (np.isfinite([easting, northing, radius]).all() and radius > 0):
            raise InputError(
                "exclude",
                exclude,
                "must be (easting, northing, radius) in metres with radius > 0",
                "give the disc that holds the structure, or None",
                where,
            )
        return keep & (np.hypot(self.easting - easting, (self.northing - northing)[:, None]) > radius)


@dataclass(frozen=True, eq=False)
class Nodes:
    """Some nodes of a map: positions in metres and values in mGal, each (n,)."""

    easting: Array
    northing: Array
    values: Array


def _step(axis: Array) -> float:
    return float(axis[-1] - axis[0]) / (axis.size - 1)


def even_axis(values: Array, name: str, *, where: str) -> Array:
    """The axis snapped to exactly even spacing, ascending or descending as given; InputError where it is not even."""
    values = np.asarray(values, dtype=float)
    if values.ndim != 1 or values.size < 2 or not np.isfinite(values).all():
        raise InputError(
            name,
            f"array of shape {values.shape}",
            "must be one axis of at least 2 finite values",
            "give the cell centres along that axis, in metres",
            where,
        )
    steps = np.diff(values)
    typical = float(np.median(steps))
    even = np.linspace(values[0], values[-1], values.size)
    worst = np.abs(steps - typical).argmax()
    if typical == 0.0 or np.sign(steps).min() != np.sign(steps).max():
        raise InputError(
            name,
            f"{values[worst]:g}, {values[worst + 1]:g}",
            "must rise or fall all along",
            "sort the axis and remove repeated nodes",
            where,
        )
    if np.abs(values - even).max() > EVEN_TOLERANCE * abs(typical):
        rule = f"must be evenly spaced: a step of {abs(steps[worst]):.10g} meets steps of {abs(typical):.10g}"
        raise InputError(
            name,
            f"{values[worst]:.10g} to {values[worst + 1]:.10g}",
            rule,
            "fill the gap with NaN nodes or grid the data again on an even lattice",
            where,
        )
    return even


def lattice_of(observed: xr.DataArray, *, where: str) -> Lattice:
    """Check a map handed to a public function and take it apart.

    Raises
    ------
    InputError
        Not a DataArray with dims (northing, easting), uneven or descending axes, units other than mGal, infinities.
    """
    if not isinstance(observed, xr.DataArray):
        raise InputError(
            "observed",
            type(observed).__name__,
            "must be an xarray DataArray",
            "pass what read_grid returns, or one variable of a Dataset",
            where,
        )
    if observed.dims != ("northing", "easting") or not {"northing", "easting"} <= set(observed.coords):
        raise InputError(
            "observed.dims",
            observed.dims,
            'must be ("northing", "easting"), both with coordinates',
            "transpose or rename, or read the file with read_grid",
            where,
        )
    units = observed.attrs.get("units", "mGal")
    if units != "mGal":
        raise InputError("observed.units", units, "must be mGal", "convert it, or read the file with read_grid", where)
    axes = {}
    for name in ("easting", "northing"):
        axis = even_axis(observed[name].values, f"observed.{name}", where=where)
        if axis[1] < axis[0]:
            raise InputError(
                f"observed.{name}",
                f"{axis[0]:g} to {axis[-1]:g}",
                "must ascend",
                f'sort it: observed.sortby("{name}")',
                where,
            )
        axes[name] = axis
    values = np.asarray(observed.values, dtype=float)
    if np.isinf(values).any():
        raise InputError("observed", "infinite values", "must be finite or NaN", "mark missing nodes as NaN", where)
    return Lattice(axes["easting"], axes["northing"], values)


def thin(
    lattice: Lattice,
    valid: NDArray[np.bool_],
    *,
    separation_m: float,
    max_points: int,
    rng: np.random.Generator,
) -> Nodes:
    """A seeded subset of valid nodes, no two closer than the separation, spread over the map with some close pairs.

    The map is first cut to every k-th node so that none are closer than `separation_m`. If that still leaves more than
    `max_points`, three fifths are drawn one per square block of the map (even cover, long lags) and the rest are
    direct neighbours of those (short lags, which tell a nugget from roughness).
    """
    stride_n, stride_e = (max(1, int(np.ceil(separation_m / step - 1e-6))) for step in lattice.spacing)
    start_n, start_e = int(rng.integers(stride_n)), int(rng.integers(stride_e))
    open_nodes = valid[start_n::stride_n, start_e::stride_e]
    rows, columns = np.nonzero(open_nodes)
    if rows.size > max_points:
        chosen = _spread(open_nodes, rows, columns, max_points, rng)
        rows, columns = np.divmod(chosen, open_nodes.shape[1])
    rows, columns = rows * stride_n + start_n, columns * stride_e + start_e
    return Nodes(lattice.easting[columns], lattice.northing[rows], lattice.values[rows, columns])


def _spread(
    open_nodes: NDArray[np.bool_],
    rows: NDArray[np.int64],
    columns: NDArray[np.int64],
    count: int,
    rng: np.random.Generator,
) -> NDArray[np.int64]:
    """Flat indices of `count` of the nodes: one per block, then neighbours of those, then any."""
    width = open_nodes.shape[1]
    order = rng.permutation(rows.size)
    rows, columns = rows[order], columns[order]
    side = np.sqrt(rows.size / (0.6 * count))
    block = np.floor(rows / side) * width + np.floor(columns / side)
    _, first = np.unique(block, return_index=True)
    single = rng.permutation(first)[: max(1, int(0.6 * count))]
    turn = rng.integers(4, size=single.size)
    near_row = rows[single] + np.array([1, -1, 0, 0])[turn]
    near_column = columns[single] + np.array([0, 0, 1, -1])[turn]
    inside = (near_row >= 0) & (near_row < open_nodes.shape[0]) & (near_column >= 0) & (near_column < width)
    near_row, near_column = near_row[inside], near_column[inside]
    near = (near_row * width + near_column)[open_nodes[near_row, near_column]]
    wish = np.concatenate([rows[single] * width + columns[single], near, rows * width + columns])
    _, position = np.unique(wish, return_index=True)
    return np.sort(wish[np.sort(position)[:count]])
