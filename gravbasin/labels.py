"""Names, units and provenance on every array that leaves a public function."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from importlib import metadata
from typing import Any

import numpy as np
import xarray as xr

__all__ = ["coordinate", "data_array", "provenance", "read_provenance", "versions"]

_COORDINATES = {
    "easting": {"units": "m", "long_name": "easting", "standard_name": "projection_x_coordinate", "axis": "X"},
    "northing": {"units": "m", "long_name": "northing", "standard_name": "projection_y_coordinate", "axis": "Y"},
    "radius": {"units": "m", "long_name": "distance from the centre of the structure"},
    "radius_edges": {"units": "m", "long_name": "edges of the rings"},
    "depth": {"units": "m", "long_name": "depth below today's ground", "positive": "down", "axis": "Z"},
    "depth_edges": {"units": "m", "long_name": "edges of the layers, depth below today's ground", "positive": "down"},
}


def data_array(
    values: Any,
    dims: Sequence[str],
    coords: Mapping[str, Any],
    *,
    name: str,
    units: str,
    long_name: str,
    **attrs: Any,
) -> xr.DataArray:
    """A DataArray with units, long name and CF coordinate attributes set; bare coordinate values are labelled too.

    Parameters
    ----------
    values : array
        The data, in the order of `dims`.
    dims : sequence of str
        Dimension names.
    coords : mapping
        One-dimensional coordinate values by name.
    name, units, long_name : str
        CF name, unit and description of the data.
    **attrs
        Further attributes (strings and numbers only, so that netCDF keeps them).
    """
    labelled = {key: coordinate(key, value) for key, value in coords.items()}
    return xr.DataArray(
        np.asarray(values),
        dims=tuple(dims),
        coords=labelled,
        name=name,
        attrs={"units": units, "long_name": long_name, **attrs},
    )


def coordinate(name: str, values: Any) -> xr.Variable:
    """A one-dimensional coordinate with the units and CF attributes that belong to its name."""
    return xr.Variable(name, np.asarray(values, dtype=float), _COORDINATES.get(name, {}))


def versions(*packages: str) -> dict[str, str]:
    """Installed versions of gravbasin and the named packages, without importing them."""
    return {name: metadata.version(name) for name in ("gravbasin", *packages)}


def provenance(**facts: Any) -> str:
    """The facts as one JSON string, fit for a netCDF attribute (keys sorted, so equal facts give equal strings)."""
    return json.dumps(facts, sort_keys=True, default=_plain)


def read_provenance(obj: xr.DataArray | xr.Dataset) -> dict[str, Any]:
    """The provenance attribute of an array or dataset as a dict, empty when it has none."""
    return dict(json.loads(obj.attrs.get("provenance", "{}")))


def _plain(value: Any) -> Any:
    if isinstance(value, np.generic):
        return value.item()
    if isinstance(value, np.ndarray):
        return value.tolist()
    return str(value)
