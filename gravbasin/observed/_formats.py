"""What each file format holds, as found: axes, values and their labels, before any check that all formats share."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr

from gravbasin.errors import InputError
from gravbasin.observed._lattice import Array
from gravbasin.observed._units import is_degrees, is_gravity

__all__ = ["LOADERS", "RawGrid"]

_EASTINGS = {"x", "e", "easting", "eastings", "east", "projection_x_coordinate", "x_m", "easting_m"}
_NORTHINGS = {"y", "n", "northing", "northings", "north", "projection_y_coordinate", "y_m", "northing_m"}
_DEGREES = {"lon", "long", "longitude", "lat", "latitude", "lambda", "phi", "grid_longitude", "grid_latitude"}
_RULE_DEGREES = "must be a length, not degrees"
_REMEDY_DEGREES = "project the map to metres first, say to a local azimuthal equal-area or transverse Mercator grid"
_SNAP = 0.1  # of a step: rounded coordinates of one lattice line agree to far better, neighbours differ by 1


@dataclass(frozen=True, eq=False)
class RawGrid:
    """One variable of a file: values (n_y, n_x) on axes as stored, in the file's units (None where it states none)."""

    x: Array
    y: Array
    values: Array
    variable: str
    units: str | None
    x_units: str | None
    y_units: str | None
    long_name: str = ""
    crs_wkt: str | None = None
    notes: dict[str, Any] = field(default_factory=dict)


def _choose(candidates: dict[str, str | None], wanted: str | None, where: str) -> str:
    """The variable asked for, the only one, or the only one with units of gravity."""
    names = ", ".join(candidates) or "none"
    if wanted is not None:
        if wanted not in candidates:
            raise InputError("variable", wanted, f"must be a grid in the file; it has: {names}", "choose one", where)
        return wanted
    if not candidates:
        raise InputError(
            "variable", "none", "the file holds no two-dimensional variable", "give a map on two axes", where
        )
    gravity = [name for name, units in candidates.items() if is_gravity(units)]
    for group in (list(candidates), gravity):
        if len(group) == 1:
            return group[0]
    raise InputError("variable", "not given", f"the file holds several: {names}", "name one with variable=...", where)


def _load_netcdf(path: Path, variable: str | None) -> RawGrid:
    where = path.name
    with path.open("rb") as stream:
        magic = stream.read(4)
    engine = "h5netcdf" if magic == b"\x89HDF" else "scipy" if magic[:3] == b"CDF" else None
    if engine is None:
        raise InputError("format", magic, "is not netCDF", "export the map as netCDF, GeoTIFF or CSV", where)
    try:
        with xr.open_dataset(path, engine=engine, decode_times=False) as dataset:
            dataset.load()
    except (OSError, ValueError, KeyError, EOFError) as fault:
        raise InputError("format", fault, "cannot be read as netCDF", "check that the file is whole", where) from fault
    dataset = dataset.squeeze(drop=True)
    grids = {
        str(name): array.attrs.get("units")
        for name, array in dataset.data_vars.items()
        if array.ndim == 2 and np.issubdtype(array.dtype, np.number)
    }
    name = _choose(grids, variable, where)
    array = dataset[name]
    x_dim, y_dim = _axes(array, where)
    return RawGrid(
        x=np.asarray(array[x_dim].values, dtype=float),
        y=np.asarray(array[y_dim].values, dtype=float),
        values=np.asarray(array.transpose(y_dim, x_dim).values, dtype=float),
        variable=name,
        units=array.attrs.get("units"),
        x_units=array[x_dim].attrs.get("units"),
        y_units=array[y_dim].attrs.get("units"),
        long_name=str(array.attrs.get("long_name", "")),
        crs_wkt=_crs_wkt(dataset, array, where),
        notes={"transposed": array.dims == (x_dim, y_dim)},
    )


def _axes(array: xr.DataArray, where: str) -> tuple[str, str]:
    """Names of the easting and northing dimensions, from whatever the file says; contradictions are refused."""
    roles = {}
    for dim in map(str, array.dims):
        if dim not in array.coords:
            raise InputError(
                dim,
                "no values",
                "a dimension of the map must have a coordinate variable",
                f"write the cell centres as variable {dim}(d{dim}) with units",
                where,
            )
        attrs = array[dim].attrs
        clues = [dim.lower(), str(attrs.get("standard_name", "")).lower()]
        if is_degrees(attrs.get("units")) or _DEGREES & set(clues):
            raise InputError(dim, attrs.get("units", "degrees"), _RULE_DEGREES, _REMEDY_DEGREES, where)
        votes = {{"x": "x", "y": "y"}.get(str(attrs.get("axis", "")).lower())}
        votes |= {"x" for clue in clues if clue in _EASTINGS} | {"y" for clue in clues if clue in _NORTHINGS}
        votes.discard(None)
        if len(votes) != 1:
            rule = "is called both easting and northing" if votes else "is neither easting nor northing"
            raise InputError(
                dim,
                attrs.get("standard_name", dim),
                rule,
                "name it easting or northing, or give its standard_name or axis attribute",
                where,
            )
        roles[votes.pop()] = dim
    if len(roles) != 2:
        raise InputError("dimensions", array.dims, "are both easting or both northing", "name one of each", where)
    return roles["x"], roles["y"]


def _crs_wkt(dataset: xr.Dataset, array: xr.DataArray, where: str) -> str | None:
    """CRS of the grid mapping as WKT; geographic ones are refused."""
    mapping = str(array.attrs.get("grid_mapping", array.encoding.get("grid_mapping", "")))
    if mapping not in dataset.variables:
        return None
    attrs = dataset[mapping].attrs
    wkt = attrs.get("crs_wkt") or attrs.get("spatial_ref")
    from pyproj import CRS
    from pyproj.exceptions import CRSError

    try:
        crs = CRS.from_wkt(wkt) if wkt else CRS.from_cf(attrs)
    except (CRSError, KeyError) as fault:
        rule = "is not a coordinate system"
        raise InputError(mapping, fault, rule, "correct or remove grid_mapping", where) from fault
    _refuse_geographic(crs, mapping, where)
    return str(crs.to_wkt())


def _refuse_geographic(crs: Any, what: str, where: str) -> None:
    if crs.is_geographic:
        name = getattr(crs, "name", "geographic coordinates")
        raise InputError(what, name, "must be projected, not degrees", _REMEDY_DEGREES, where)


def _load_csv(path: Path, variable: str | None) -> RawGrid:
    where = path.name
    try:
        frame = pd.read_csv(path, comment="#", skipinitialspace=True, encoding="utf-8-sig")
    except (ValueError, UnicodeDecodeError, pd.errors.ParserError) as fault:
        raise InputError(
            "format",
            str(fault).strip(),
            "cannot be read as comma-separated text",
            "give a header x,y,value and one node per line",
            where,
        ) from fault
    names = {str(column).strip(): str(column) for column in frame.columns}
    x_name, x_units = _csv_axis(names, "easting", _EASTINGS, where)
    y_name, y_units = _csv_axis(names, "northing", _NORTHINGS, where)
    value = _choose(
        {name: "mGal" if name.lower().endswith("mgal") else None for name in names if name not in (x_name, y_name)},
        variable,
        where,
    )
    x, y, values = (_numbers(frame[names[name]], name, where) for name in (x_name, y_name, value))
    for name, column in ((x_name, x), (y_name, y)):
        if not np.isfinite(column).all():
            raise InputError(
                name,
                "empty",
                f"is missing in data row {np.isnan(column).argmax() + 1}",
                "give every node its coordinates",
                where,
            )
    x_axis, y_axis, grid = _lattice_from_rows(x, y, values, where)
    return RawGrid(x_axis, y_axis, grid, value, "mGal", x_units, y_units)


def _csv_axis(names: Iterable[str], role: str, known: set[str], where: str) -> tuple[str, str]:
    """Column of a coordinate and its units: metres, or kilometres where the name ends so."""
    found = {}
    for name in names:
        plain = name.lower()
        if plain in _DEGREES or plain.endswith(("_deg", "_degrees")):
            raise InputError("columns", name, _RULE_DEGREES, _REMEDY_DEGREES, where)
        if plain.removesuffix("_km") in known:
            found[name] = "km" if plain.endswith("_km") else "m"
    if len(found) != 1:
        rule = f"must have one {role} column, " + ("found several" if found else "found none")
        raise InputError("columns", ", ".join(found or names), rule, "use the header easting,northing,value", where)
    return found.popitem()


def _numbers(column: pd.Series, name: str, where: str) -> Array:
    numbers = pd.to_numeric(column, errors="coerce")
    words = column.notna() & numbers.isna() & (column.astype(str).str.strip().str.lower() != "nan")
    if words.any():
        place = int(np.asarray(words).argmax())
        raise InputError(
            name,
            column.iloc[place],
            f"is not a number, in data row {place + 1}",
            "use a decimal point, and NaN or nothing where there are no data",
            where,
        )
    return np.asarray(numbers, dtype=float)


def _lattice_from_rows(x: Array, y: Array, values: Array, where: str) -> tuple[Array, Array, Array]:
    """Axes and grid (n_y, n_x) from one row per node in any order; doubles and gaps are refused."""
    (x_axis, column), (y_axis, row) = _lines(x), _lines(y)
    node = row * x_axis.size + column
    count = np.bincount(node, minlength=x_axis.size * y_axis.size)
    for bad, rule, remedy in (
        (count > 1, "is given more than once", "keep one row per node"),
        (count == 0, "is missing from the lattice", "add the node with value NaN, or grid the data first"),
    ):
        if bad.any():
            j, i = divmod(int(bad.argmax()), x_axis.size)
            raise InputError(
                "node",
                f"({x_axis[i]:.10g}, {y_axis[j]:.10g})",
                f"{rule} ({int(bad.sum())} such of {y_axis.size} by {x_axis.size})",
                remedy,
                where,
            )
    grid = np.empty(count.size)
    grid[node] = values
    return x_axis, y_axis, grid.reshape(y_axis.size, x_axis.size)


def _lines(coordinate: Array) -> tuple[Array, np.ndarray]:
    """Lattice lines of a coordinate column, ascending, and the line of each row; rounding within a line is averaged."""
    distinct = np.unique(coordinate)
    gaps = np.diff(distinct)
    step = np.median(gaps[gaps > 0.01 * gaps.max()]) if gaps.size else 1.0
    line = np.concatenate([[0], np.cumsum(gaps > _SNAP * step)])
    axis = np.bincount(line, distinct) / np.bincount(line)
    return axis, line[np.searchsorted(distinct, coordinate)]


def _load_geotiff(path: Path, variable: str | None) -> RawGrid:
    where = path.name
    try:
        import rasterio
    except ImportError as fault:
        raise InputError(
            "format",
            path.suffix,
            "needs the gis extra, which is not installed",
            "pip install 'gravbasin[gis]', or export the map as netCDF or CSV",
            where,
        ) from fault
    try:
        source = rasterio.open(path)
    except rasterio.errors.RasterioIOError as fault:
        raise InputError("format", fault, "cannot be read as GeoTIFF", "check that the file is whole", where) from fault
    with source:
        bands = {source.descriptions[i - 1] or f"band {i}": i for i in source.indexes}
        name = _choose({key: source.units[i - 1] for key, i in bands.items()}, variable, where)
        transform, band = source.transform, bands[name]
        if transform.is_identity or transform.b or transform.d:
            raise InputError(
                "transform",
                tuple(transform)[:6],
                "must place the raster north up, without rotation",
                "warp it to a projected, unrotated grid",
                where,
            )
        values = source.read(band, masked=True).astype(float).filled(np.nan)
        values = values * source.scales[band - 1] + source.offsets[band - 1]
        point = source.tags().get("AREA_OR_POINT", "Area") == "Point"
        factor, wkt = _raster_crs(source.crs, where)
        # GDAL moves PixelIsPoint rasters by half a cell on opening: its transform starts at a cell corner either way
        x = factor * (transform.c + transform.a * (np.arange(source.width) + 0.5))
        y = factor * (transform.f + transform.e * (np.arange(source.height) + 0.5))
        return RawGrid(
            x,
            y,
            values,
            name,
            source.units[band - 1],
            "m",
            "m",
            crs_wkt=wkt,
            notes={"pixel": "point" if point else "area", "crs_metres_per_unit": factor},
        )


def _raster_crs(crs: Any, where: str) -> tuple[float, str | None]:
    """Metres per unit and WKT of a raster's CRS; a raster without one is taken as metres, as a CSV is."""
    if crs is None:
        return 1.0, None
    _refuse_geographic(crs, "crs", where)
    return float(crs.linear_units_factor[1]), str(crs.to_wkt())


LOADERS = {
    ".nc": _load_netcdf,
    ".nc4": _load_netcdf,
    ".cdf": _load_netcdf,
    ".grd": _load_netcdf,
    ".csv": _load_csv,
    ".txt": _load_csv,
    ".tif": _load_geotiff,
    ".tiff": _load_geotiff,
}
"""Reader by suffix; each takes (path, variable or None) and returns a RawGrid."""
