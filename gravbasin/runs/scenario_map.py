"""The map of a scenario, read and checked against it."""

from __future__ import annotations

import re

import xarray as xr

from gravbasin.errors import InputError
from gravbasin.observed import read_grid
from gravbasin.scenario import Scenario

__all__ = ["scenario_map"]

FIELDS = ("path", "variable", "nan", "units")


def scenario_map(scenario: Scenario, *, centred: bool = True) -> xr.DataArray | None:
    """The observed map that a scenario names, or None.

    Parameters
    ----------
    scenario : Scenario
        Its [observed] table tells file, variable, gaps, units and centre.
    centred : bool
        Whether the centre must lie on the map; where only the map's noise is wanted it need not.

    Raises
    ------
    InputError
        What `read_grid` refuses, told by the scenario's own fields; a centre off the map.
    """
    given = scenario.observed
    if given is None:
        return None
    try:
        observed = read_grid(given.path, variable=given.variable, nan=given.nan, units=given.units)
    except InputError as error:
        what = f"observed.{error.what}" if error.what in FIELDS else error.what
        where = error.where if error.where == given.path.name else ""
        remedy = re.sub(rf"\b({'|'.join(FIELDS)})=", r"observed.\1 = ", error.remedy)
        raise InputError(what, error.value, error.rule, remedy, where) from None
    centres = (("easting", given.centre_easting_km), ("northing", given.centre_northing_km)) if centred else ()
    for axis, centre_km in centres:
        low, high = observed[axis].values[[0, -1]] / 1e3
        if not low <= centre_km <= high:
            raise InputError(
                f"observed.centre_{axis}_km",
                centre_km,
                f"must lie on the map, {low:g} to {high:g} km",
                "give the centre of the circle in the map's own coordinates, in kilometres",
                given.path.name,
            )
    return observed
