"""The stations of a plan as files: CSV, GeoJSON in degrees, GeoPackage in the survey's own system."""

from __future__ import annotations

import csv
import dataclasses
import io
import json
import struct
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gravbasin.errors import InputError
from gravbasin.survey.layouts import Site
from gravbasin.survey.prepare import degrees

__all__ = ["StationTable", "stations_csv", "stations_geojson", "write_geopackage"]

Array = NDArray[np.float64]


@dataclasses.dataclass(frozen=True, eq=False)
class StationTable:
    """Stations in the order in which they are listed.

    Attributes
    ----------
    kind : tuple of str
        "existing", "new" or "next best".
    place : (n, 2) array, m
        Easting and northing.
    distance_km : (n,) array
        From the structure's centre.
    modelled_mgal : (n,) array
        The modelled anomaly there.
    gain : (n,) array
        What a next best station adds to the squared distance aimed for; NaN for others.
    degrees : (n, 2) array or None
        Longitude and latitude, where the reference system is known.
    """

    kind: tuple[str, ...]
    place: Array
    distance_km: Array
    modelled_mgal: Array
    gain: Array
    degrees: Array | None

    @classmethod
    def of(cls, site: Site, new: Array, best: Array, gain: Array, radius: Array, profile: Array) -> StationTable:
        """Existing, new and next best stations with the modelled anomaly at each."""
        place = np.concatenate([site.existing, new, best])
        kind = ("existing",) * len(site.existing) + ("new",) * len(new) + ("next best",) * len(best)
        distance = np.asarray(np.hypot(*(place - site.centre).T))
        modelled = np.asarray(np.interp(distance, radius, profile, right=0.0))
        gains = np.concatenate([np.full(len(place) - len(best), np.nan), gain])
        return cls(kind, place, distance / 1000.0, modelled, gains, degrees(place, site.crs) if len(place) else None)

    @property
    def columns(self) -> dict[str, list[Any]]:
        """Every column by name; longitude and latitude only where they are known."""
        found: dict[str, list[Any]] = {
            "number": list(range(1, len(self.kind) + 1)),
            "kind": list(self.kind),
            "easting_m": np.round(self.place[:, 0], 2).tolist(),
            "northing_m": np.round(self.place[:, 1], 2).tolist(),
        }
        if self.degrees is not None:
            found["longitude"] = np.round(self.degrees[:, 0], 7).tolist()
            found["latitude"] = np.round(self.degrees[:, 1], 7).tolist()
        found["distance_km"] = np.round(self.distance_km, 3).tolist()
        found["modelled_mgal"] = (np.round(self.modelled_mgal, 3) + 0.0).tolist()  # no minus before a zero
        found["gain"] = [None if np.isnan(g) else round(float(g), 5) for g in self.gain]
        return found


def stations_csv(stations: StationTable) -> str:
    """The table as CSV."""
    columns = stations.columns
    buffer = io.StringIO()
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows(zip(*columns.values(), strict=True))
    return buffer.getvalue()


def stations_geojson(stations: StationTable) -> str | None:
    """The table as GeoJSON (RFC 7946: longitude and latitude), or None where these are not known."""
    if stations.degrees is None:
        return None
    columns = stations.columns
    rows = zip(*columns.values(), strict=True)
    features = [
        {
            "type": "Feature",
            "geometry": {"type": "Point", "coordinates": [record["longitude"], record["latitude"]]},
            "properties": record,
        }
        for record in (dict(zip(columns, row, strict=True)) for row in rows)
    ]
    return json.dumps({"type": "FeatureCollection", "features": features}, indent=0) + "\n"


def write_geopackage(stations: StationTable, crs: Any, path: Path) -> None:
    """The table as GeoPackage in the survey's own reference system.

    Raises
    ------
    InputError
        pyogrio is not installed, or the reference system is not known.
    """
    if crs is None:
        raise InputError(
            "survey.geopackage", True, "needs the survey's reference system", "state survey.crs, as EPSG:32633"
        )
    try:
        from pyogrio import raw
    except ImportError:
        raise InputError("survey.geopackage", True, "needs pyogrio", "install gravbasin[gis]") from None
    points = np.array([struct.pack("<BIdd", 1, 1, *place) for place in stations.place], dtype=object)
    columns = stations.columns
    columns["gain"] = [np.nan if gain is None else gain for gain in columns["gain"]]
    fields = [np.array(values, dtype=object if name == "kind" else None) for name, values in columns.items()]
    raw.write(
        path, points, fields, list(columns), layer="stations", driver="GPKG", geometry_type="Point", crs=crs.to_wkt()
    )
