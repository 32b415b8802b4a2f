"""Days and money of a survey, from the user's own rates and nothing else."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
from numpy.typing import NDArray

from gravbasin.errors import InputError
from gravbasin.scenario import Costs

__all__ = ["Effort", "check_budget", "effort", "travelled"]

Array = NDArray[np.float64]


@dataclasses.dataclass(frozen=True)
class Effort:
    """What a set of new stations takes.

    Attributes
    ----------
    stations : int
        New stations.
    line_km : float
        Straight lines from station to station in the order of reading; real ways are longer.
    days : float
        Whole days in the field; NaN without `costs.stations_per_day`.
    cost : float
        In the user's currency; NaN without any price.
    """

    stations: int
    line_km: float
    days: float
    cost: float


def travelled(points: Array) -> float:
    """Length of the straight lines between stations in order, km.

    Parameters
    ----------
    points : (n, 2) array, m
    """
    return float(np.hypot(*np.diff(points, axis=0).T).sum()) / 1000.0


def effort(points: Array, costs: Costs) -> Effort:
    """What these new stations take at these rates.

    Parameters
    ----------
    points : (n, 2) array, m
        New stations in the order of reading.
    costs : Costs
        The user's rates.

    Notes
    -----
    days = the larger of readings / stations per day and distance / distance per day, rounded up; readings include
    repeats. cost = mobilisation + days × day rate + stations × station cost; a price that is not given counts as 0
    beside one that is.

    Examples
    --------
    >>> line = np.stack([np.arange(0.0, 31e3, 1e3), np.zeros(31)], axis=1)
    >>> effort(line, Costs(stations_per_day=20, day_rate=1000.0, mobilisation=500.0))
    Effort(stations=31, line_km=30.0, days=2.0, cost=2500.0)
    """
    count, distance = len(points), travelled(points)
    if count == 0:
        return Effort(0, 0.0, 0.0, 0.0)
    days = math.nan
    if costs.stations_per_day is not None:
        days = math.ceil(count * (1.0 + costs.repeat_share) / costs.stations_per_day - 1e-9)
        if costs.travel_km_per_day is not None:
            days = max(days, math.ceil(distance / costs.travel_km_per_day - 1e-9))
    prices = [costs.mobilisation, costs.day_rate, costs.station_cost]
    if all(price is None for price in prices):
        return Effort(count, distance, float(days), math.nan)
    fixed, per_day, each = (price or 0.0 for price in prices)
    cost = fixed + each * count + (per_day * days if per_day else 0.0)
    return Effort(count, distance, float(days), float(cost))


def check_budget(costs: Costs) -> None:
    """Refuse a budget that does not reach for one day with one station.

    Raises
    ------
    InputError
    """
    if costs.most_days is not None and costs.most_days < 1.0:
        raise InputError(
            "survey.costs.most_days", costs.most_days, "must be at least one whole day", "allow a day in the field"
        )
    if costs.budget is None:
        return
    least = (costs.mobilisation or 0.0) + (costs.day_rate or 0.0) + (costs.station_cost or 0.0)
    if costs.budget < least:
        raise InputError(
            "survey.costs.budget",
            f"{costs.budget:g} {costs.currency}".strip(),
            f"must reach for one day with one station, {least:g} at your rates",
            "raise the budget or check mobilisation, day_rate and station_cost",
        )
