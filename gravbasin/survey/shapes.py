"""Polygons, lines and points of a survey from files: GeoJSON by itself, GeoPackage with the `gis` extra."""

from __future__ import annotations

import csv
import dataclasses
import json
import struct
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from gravbasin.errors import InputError

__all__ = ["Polygon", "Shapes", "is_degrees", "projected_crs", "read_points", "read_shapes", "transformed"]

Array = NDArray[np.float64]
Kind = Literal["polygon", "line", "point"]
Polygon = tuple[Array, ...]
"""An outer ring, then its holes, each (n, 2) easting and northing."""

_WKB = {1: "Point", 2: "LineString", 3: "Polygon", 4: "MultiPoint", 5: "MultiLineString", 6: "MultiPolygon"}
_WANTED = {"polygon": "Polygon", "line": "LineString", "point": "Point"}


@dataclasses.dataclass(frozen=True, eq=False)
class Shapes:
    """Shapes of one kind from a file.

    Attributes
    ----------
    polygons, lines : tuples
        Of `Polygon`, and of (n, 2) arrays.
    points : (n, 2) array
        Empty where the file holds others.
    crs : str or None
        What the file says of its coordinates.
    """

    polygons: tuple[Polygon, ...] = ()
    lines: tuple[Array, ...] = ()
    points: Array = dataclasses.field(default_factory=lambda: np.zeros((0, 2)))
    crs: str | None = None


def projected_crs(name: str, *, where: str) -> Any:
    """A coordinate reference system by name, refused unless its coordinates are metres on a map.

    Raises
    ------
    InputError
    """
    from pyproj import CRS
    from pyproj.exceptions import CRSError

    try:
        crs = CRS.from_user_input(name)
    except CRSError:
        raise InputError(where, name, "is not a known reference system", "give a code such as EPSG:32633") from None
    if not crs.is_projected or any(axis.unit_name not in ("metre", "meter") for axis in crs.axis_info[:2]):
        raise InputError(where, name, "must be a projection in metres", "choose the UTM zone or national grid")
    return crs


def is_degrees(points: Array) -> bool:
    """Whether coordinates can only be degrees: all within ±360 by ±90."""
    return bool(len(points)) and bool((np.abs(points) <= [360.0, 90.0]).all())


def read_shapes(path: Path, kind: Kind, *, crs: Any, what: str) -> Shapes:
    """Read the shapes of one kind, in metres of the survey's reference system.

    Parameters
    ----------
    path : Path
        GeoJSON (.geojson, .json), or GeoPackage (.gpkg; the `gis` extra).
    kind : "polygon", "line" or "point"
        What to take; a file without any is refused.
    crs : pyproj CRS or None
        The survey's.
    what : str
        Field that names the file, for messages.

    Raises
    ------
    InputError
        No such file, unknown format, no such shape, degrees without a reference system to bring them into.
    """
    if not path.is_file():
        raise InputError(what, path, "is not a file", "check the path")
    if path.suffix.lower() == ".gpkg":
        geometries, stated = _geopackage(path)
    elif path.suffix.lower() in (".geojson", ".json"):
        geometries, stated = _geojson(path, what)
    else:
        raise InputError(what, path.name, "must end in .geojson, .json or .gpkg", "export it in one of these formats")
    parts = [part for geometry in geometries for part in _parts(geometry, _WANTED[kind], path.name, what)]
    if not parts:
        raise InputError(what, path.name, f"holds no {kind}", f"give a file with at least one {kind}")

    def metres(points: Any) -> Array:
        return transformed(_pairs(points, path.name, what), stated, crs, what=what, where=path.name)

    if kind == "polygon":
        return Shapes(polygons=tuple(tuple(metres(ring) for ring in rings) for rings in parts), crs=stated)
    if kind == "line":
        return Shapes(lines=tuple(metres(line) for line in parts), crs=stated)
    return Shapes(points=metres(parts), crs=stated)


def read_points(path: Path, *, crs: Any, what: str) -> Array:
    """Stations from a CSV table with columns easting and northing (metres), or from points in GeoJSON, (n, 2) m."""
    if path.suffix.lower() not in (".csv", ".txt"):
        return read_shapes(path, "point", crs=crs, what=what).points
    if not path.is_file():
        raise InputError(what, path, "is not a file", "check the path")
    with path.open(encoding="utf-8-sig", newline="") as handle:
        rows = list(csv.DictReader(handle))
    names = [name for name in (rows[0] if rows else {}) if name]
    columns = []
    for axis, others in (("easting", ("easting_m", "x")), ("northing", ("northing_m", "y"))):
        found = [name for name in names if name.strip().lower() in (axis, *others)]
        if not found:
            shown = ", ".join(names) or "no rows"
            raise InputError(what, shown, f"must have a column {axis}", "name it in the first line", path.name)
        columns.append(found[0])
    points = []
    for number, row in enumerate(rows, start=2):
        try:
            points.append([float(row[name]) for name in columns])
        except (TypeError, ValueError):
            met = [row[name] for name in columns]
            raise InputError(what, met, f"is not a position (line {number})", "mend that line", path.name) from None
    return transformed(np.array(points), None, crs, what=what, where=path.name)


def transformed(points: Array, stated: str | None, crs: Any, *, what: str, where: str) -> Array:
    """Coordinates in metres of the survey's system: as they are, or brought over from what their file states."""
    degrees = is_degrees(points)
    if degrees and crs is None:
        shown = ", ".join(f"{a:.6g} to {b:.6g}" for a, b in zip(points.min(axis=0), points.max(axis=0), strict=True))
        raise InputError(what, shown, "is in degrees", "state survey.crs (as EPSG:32633), or give it in metres", where)
    if crs is None or (stated is None and not degrees):
        return points
    from pyproj import CRS, Transformer

    source = CRS.from_user_input(stated or "OGC:CRS84")
    if degrees != source.is_geographic:
        raise InputError(what, stated, "does not fit its coordinates", "write the file again with its system", where)
    if source == crs:
        return points
    moved = np.stack(Transformer.from_crs(source, crs, always_xy=True).transform(*points.T), axis=1)
    if not np.isfinite(moved).all():
        raise InputError(what, points[0].tolist(), "lies outside survey.crs", "choose the zone that holds it", where)
    return moved


def _pairs(points: Any, where: str, what: str) -> Array:
    try:
        values = np.array([list(point)[:2] for point in points], dtype=float)
    except (TypeError, ValueError):
        raise InputError(what, where, "holds coordinates that are no numbers", "export it again") from None
    if values.ndim != 2 or values.shape[1] != 2 or not np.isfinite(values).all():
        raise InputError(what, where, "holds coordinates that are no pairs of numbers", "export it again")
    return values


def _geojson(path: Path, what: str) -> tuple[list[Any], str | None]:
    try:
        tree = json.loads(path.read_text(encoding="utf-8"))
    except (ValueError, OSError) as error:
        raise InputError(what, path.name, f"is not GeoJSON ({error})", "export it again") from None
    if not isinstance(tree, dict):
        raise InputError(what, path.name, "is not GeoJSON", "export it again")
    crs = tree.get("crs")
    name = crs.get("properties", {}).get("name") if isinstance(crs, dict) else None
    return list(_geometries(tree)), name


def _geometries(tree: Any) -> Iterator[Any]:
    if not isinstance(tree, dict):
        return
    if tree.get("type") == "FeatureCollection":
        for feature in tree.get("features", []):
            yield from _geometries(feature)
    elif tree.get("type") == "Feature":
        yield from _geometries(tree.get("geometry"))
    elif tree.get("type") == "GeometryCollection":
        for inner in tree.get("geometries", []):
            yield from _geometries(inner)
    else:
        yield tree


def _parts(geometry: Any, wanted: str, where: str, what: str) -> list[Any]:
    """Coordinates of a geometry's parts of the wanted kind."""
    kind, coordinates = geometry.get("type", ""), geometry.get("coordinates")
    if kind not in (wanted, f"Multi{wanted}"):
        return []
    if not coordinates:
        raise InputError(what, where, f"holds an empty {wanted}", "remove it")
    return [coordinates] if kind == wanted else list(coordinates)


def _geopackage(path: Path) -> tuple[list[Any], str | None]:
    try:
        from pyogrio import raw
    except ImportError:
        raise InputError(
            "file", path.name, "needs pyogrio", "install gravbasin[gis], or export it as GeoJSON"
        ) from None
    meta, _, geometry, _ = raw.read(path)
    return [_from_wkb(blob) for blob in geometry if blob is not None], meta.get("crs")


def _from_wkb(blob: bytes) -> dict[str, Any]:
    """A geometry as GeoJSON from well-known binary."""
    shape, _ = _wkb(blob, 0)
    return shape


def _wkb(blob: bytes, at: int) -> tuple[dict[str, Any], int]:
    order = "<" if blob[at] == 1 else ">"
    (code,) = struct.unpack_from(f"{order}I", blob, at + 1)
    width = 2 + bool(code & 0x80000000) + bool(code & 0x40000000)  # extended codes flag height and measure
    plain = code & 0x0FFFFFFF
    width += {0: 0, 1: 1, 2: 1, 3: 2}[plain // 1000]  # ISO codes count them in thousands
    kind, at = _WKB.get(plain % 1000, "other"), at + 5

    def points(start: int, count: int) -> tuple[list[list[float]], int]:
        end = start + 8 * width * count
        values = np.frombuffer(blob[start:end], dtype=f"{order}f8").reshape(count, width)[:, :2]
        return values.tolist(), end

    def counted(start: int) -> tuple[int, int]:
        return struct.unpack_from(f"{order}I", blob, start)[0], start + 4

    if kind == "Point":
        found, at = points(at, 1)
        return {"type": kind, "coordinates": found[0]}, at
    if kind == "other":
        return {"type": kind}, at
    count, at = counted(at)
    if kind == "LineString":
        found, at = points(at, count)
        return {"type": kind, "coordinates": found}, at
    parts: list[Any] = []
    for _ in range(count):
        if kind == "Polygon":
            size, at = counted(at)
            ring, at = points(at, size)
            parts.append(ring)
        else:
            inner, at = _wkb(blob, at)
            parts.append(inner["coordinates"])
    return {"type": kind, "coordinates": parts}, at
