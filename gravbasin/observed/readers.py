"""Observed maps from files: one even grid in metres and mGal, or one clear line saying why not."""

from __future__ import annotations

import hashlib
from os import PathLike
from pathlib import Path
from typing import Literal

import numpy as np
import xarray as xr

from gravbasin.errors import InputError
from gravbasin.labels import data_array, provenance
from gravbasin.observed._formats import LOADERS, RawGrid
from gravbasin.observed._lattice import Array, even_axis
from gravbasin.observed._units import length_factor, mgal_factor

__all__ = ["read_grid"]

MIN_SIDE = 16
"""Fewest nodes along a side: with less there is neither a profile nor a noise estimate."""

LARGEST_MGAL = 2000.0
"""No gravity anomaly on Earth comes near this (from memory: within about ±800 mGal); larger values are fill values."""


def read_grid(
    path: str | PathLike[str],
    *,
    variable: str | None = None,
    nan: Literal["refuse", "skip"] = "refuse",
    units: str | None = None,
    coordinate_units: str | None = None,
) -> xr.DataArray:
    """Read an observed gravity map.

    Parameters
    ----------
    path : path
        netCDF with CF coordinates (.nc, .nc4, .cdf, .grd), GeoTIFF (.tif, .tiff; the `gis` extra) or text with a header
        easting,northing,value (.csv, .txt; x,y,z also; '#' comments; nodes in any order).
    variable : str, optional
        Variable, column or band. Default the only one, or the only one with units of gravity.
    nan : {"refuse", "skip"}
        What to do about nodes without data: refuse the map, or keep them as NaN (everything after skips and counts
        them).
    units : str, optional
        Units of the values where the file does not state them: mGal, m s-2 or um s-2. Text columns are mGal.
    coordinate_units : {"m", "km"}, optional
        Units of the coordinates where a netCDF file does not state them, or a text file's are kilometres.

    Returns
    -------
    DataArray (northing, easting), mGal
        float64, both axes ascending, evenly spaced and in metres; attributes units, long_name, crs_wkt where known,
        and provenance (file name, SHA-256, variable, NaN count, flips, conversions).

    Raises
    ------
    InputError
        No such file, unknown format, several candidate variables, degrees, easting and northing mixed up, gaps,
        doubles, uneven spacing, NaN under "refuse", unknown or missing units, a constant map, fewer than 16 nodes a
        side, values no anomaly reaches.

    Examples
    --------
    >>> import pathlib, tempfile
    >>> rows = [f"{1000 * i},{2000 * j},{0.3 * i - 0.1 * j * j:.3f}" for j in range(16) for i in range(20)]
    >>> path = pathlib.Path(tempfile.mkdtemp()) / "map.csv"
    >>> _ = path.write_text("easting,northing,value\\n" + "\\n".join(rows))
    >>> read_grid(path).sizes
    Frozen({'northing': 16, 'easting': 20})
    """
    path = Path(path)
    if nan not in ("refuse", "skip"):
        raise InputError("nan", nan, 'must be "refuse" or "skip"', "choose one", "read_grid")
    if not path.is_file():
        raise InputError("path", path, "is not a file", "check the path", "read_grid")
    if path.suffix.lower() not in LOADERS:
        raise InputError(
            "path",
            path.name,
            f"must end in one of {', '.join(LOADERS)}",
            "export the map in one of these formats",
            "read_grid",
        )
    raw = LOADERS[path.suffix.lower()](path, variable)
    where = path.name
    factor, stated = _value_units(raw, units, where)
    x, y, lengths = _axes_in_metres(raw, coordinate_units, where)
    values, flips = raw.values * factor, []
    if x[0] > x[-1]:
        x, values = x[::-1], values[:, ::-1]
        flips.append("easting")
    if y[0] > y[-1]:
        y, values = y[::-1], values[::-1]
        flips.append("northing")
    missing = _check_values(x, y, values, nan, where)
    facts = provenance(
        file=path.name,
        sha256=_sha256(path),
        variable=raw.variable,
        nan_count=missing,
        flips=flips,
        value_units=stated,
        coordinate_units=lengths,
        **raw.notes,
    )
    attrs = {"crs_wkt": raw.crs_wkt} if raw.crs_wkt else {}
    return data_array(
        np.ascontiguousarray(values),
        ("northing", "easting"),
        {"northing": y, "easting": x},
        name="anomaly",
        units="mGal",
        long_name=raw.long_name or "gravity anomaly",
        **attrs,
        provenance=facts,
    )


def _value_units(raw: RawGrid, given: str | None, where: str) -> tuple[float, str]:
    """Factor to mGal and the units it is from: the file's, or the caller's where the file states none."""
    what = f"{raw.variable}.units"
    stated = raw.units.strip() if raw.units else None
    if given is None and not stated:
        raise InputError(
            what,
            "missing",
            "the file does not state the units of its values",
            'say what they are, for instance units="mGal"',
            where,
        )
    factors = [mgal_factor(text, what=name, where=where) for text, name in ((given, "units"), (stated, what)) if text]
    if len(set(factors)) > 1:
        raise InputError("units", given, f"contradicts the file, which states {stated}", "leave units out", where)
    return factors[0], stated or str(given)


def _axes_in_metres(raw: RawGrid, given: str | None, where: str) -> tuple[Array, Array, str]:
    """Both axes, even and in metres, and the units they are from."""
    axes, names = [], []
    for name, values, stated in (("easting", raw.x, raw.x_units), ("northing", raw.y, raw.y_units)):
        units = given if given is not None else stated
        if units is None:
            raise InputError(
                f"{name}.units",
                "missing",
                "the file does not state the units of its coordinates",
                'say what they are, for instance coordinate_units="m"',
                where,
            )
        factor = length_factor(units, what=f"{name} units", where=where)
        if values.size < MIN_SIDE:
            raise InputError(name, f"{values.size} nodes", f"must have {MIN_SIDE} or more", "give a wider map", where)
        axes.append(factor * even_axis(values, name, where=where))
        names.append(units)
    x, y = axes
    if np.abs(x).max() <= 360.0 and np.abs(y).max() <= 90.0:  # a map within 360 m by 180 m of the origin: no survey
        raise InputError(
            "coordinates",
            f"{x.min():g} to {x.max():g}, {y.min():g} to {y.max():g}",
            "must be metres; these look like degrees",
            "project the map to metres first",
            where,
        )
    return x, y, names[0] if names[0] == names[1] else ", ".join(names)


def _check_values(x: Array, y: Array, values: Array, nan: str, where: str) -> int:
    """Refuse values that are not an anomaly map; the number of NaN nodes."""
    gaps = ~np.isfinite(values)
    missing = int(gaps.sum())
    if np.isinf(values).any():
        raise InputError("values", "infinite", "must be finite", "mark missing nodes as NaN", where)
    if missing and (nan == "refuse" or missing == gaps.size):
        j, i = divmod(int(gaps.argmax()), x.size)
        remedy = 'use nan="skip" to leave them out' if missing < gaps.size else "choose another variable"
        raise InputError(
            "values",
            f"{missing} of {gaps.size} are NaN",
            f"must be numbers; the first is missing at ({x[i]:.10g}, {y[j]:.10g})",
            remedy,
            where,
        )
    largest = float(np.nanmax(np.abs(values)))
    if largest > LARGEST_MGAL:
        raise InputError(
            "values",
            f"{largest:g} mGal",
            f"must be within ±{LARGEST_MGAL:g} mGal",
            "mark fill values as such in the file, or correct its units",
            where,
        )
    if np.nanmax(values) == np.nanmin(values):
        raise InputError("values", f"{np.nanmax(values):g} everywhere", "must vary", "choose another variable", where)
    return missing


def _sha256(path: Path) -> str:
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()
