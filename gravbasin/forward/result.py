"""One form for every modelled anomaly that leaves this room."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import xarray as xr

from gravbasin.constants import GRAVITATIONAL_CONSTANT
from gravbasin.labels import data_array, provenance

__all__ = ["anomaly_array"]


def anomaly_array(
    values: Any, dims: Sequence[str], coords: Mapping[str, Any], *, engine: str, height_m: Any, **facts: Any
) -> xr.DataArray:
    """A modelled anomaly in mGal with its name, coordinates and provenance.

    Parameters
    ----------
    values : array, mGal
    dims : sequence of str
    coords : mapping
        Coordinate values by dimension; other one-dimensional values over `dims` by name.
    engine : str
        What computed it.
    height_m : float or array, m
        Height of the stations above today's ground.
    **facts
        Further entries of the provenance.
    """
    along = {name: axis for name, axis in coords.items() if name in dims}
    array = data_array(
        values,
        dims,
        along,
        name="gravity_anomaly",
        units="mGal",
        long_name="modelled gravity anomaly, positive for excess mass",
        provenance=provenance(engine=engine, height_m=height_m, G=GRAVITATIONAL_CONSTANT, **facts),
    )
    others = {name: axis for name, axis in coords.items() if name not in dims}
    return array.assign_coords({name: (tuple(dims), np.asarray(axis), {"units": "m"}) for name, axis in others.items()})
