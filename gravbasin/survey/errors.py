"""What one new station is worth: every source of error of a Bouguer anomaly, and their sum as a nugget."""

from __future__ import annotations

import dataclasses
import math

from gravbasin.scenario import StationErrors

__all__ = ["ErrorTerm", "error_terms", "station_error"]

FREE_AIR = 0.3086
"""mGal per metre (common practice)."""

SLAB = 0.0419
"""mGal per metre and g/cm³: 2πG (common practice)."""

LATITUDE = 0.812
"""mGal per kilometre of northing and sin 2φ: slope of normal gravity (common practice)."""

WORST_LATITUDE = 45.0


@dataclasses.dataclass(frozen=True)
class ErrorTerm:
    """One source of error.

    Attributes
    ----------
    name : str
        What it is.
    error_mgal : float
        One standard deviation.
    reason : str
        How it was worked out.
    """

    name: str
    error_mgal: float
    reason: str


def error_terms(errors: StationErrors, *, latitude: float | None = None) -> tuple[ErrorTerm, ...]:
    """Every source of error of one station.

    Parameters
    ----------
    errors : StationErrors
        The scenario's table.
    latitude : float, optional
        Degrees, from the survey's coordinates; the table's own value wins, 45 (the worst) where neither is known.

    Notes
    -----
    Height: (0.3086 − 0.0419 ρ) mGal per metre with ρ in g/cm³, 0.197 for 2.67. Northing: 0.812 sin 2φ mGal per
    kilometre. Density: 0.0419 Δρ Δh, where Δh is the relief between neighbours; what follows the topography over
    longer distances is not noise and belongs into the reduction, as a term in height.

    Examples
    --------
    >>> terms = error_terms(StationErrors(height_m=1.0))
    >>> {t.name: round(t.error_mgal, 4) for t in terms}["height"]
    0.1967
    """
    rho = errors.slab_density_kg_m3 / 1000.0
    phi = errors.latitude_degrees if errors.latitude_degrees is not None else latitude
    phi = WORST_LATITUDE if phi is None else phi
    per_metre = FREE_AIR - SLAB * rho
    along = LATITUDE * abs(math.sin(math.radians(2.0 * phi))) / 1000.0
    density = SLAB * errors.relief_m * errors.density_kg_m3 / 1000.0
    return (
        ErrorTerm("meter", errors.meter_mgal, "as stated"),
        ErrorTerm("drift", errors.drift_mgal, "as stated"),
        ErrorTerm("tide", errors.tide_mgal, "as stated"),
        ErrorTerm("tie", errors.tie_mgal, "as stated"),
        ErrorTerm("height", abs(per_metre) * errors.height_m, f"{per_metre:.4f} mGal/m × {errors.height_m:g} m"),
        ErrorTerm(
            "northing",
            along * errors.position_m,
            f"{along:.6f} mGal/m × {errors.position_m:g} m at {latitude_name(phi)}",
        ),
        ErrorTerm("terrain correction", errors.terrain_mgal, "as stated"),
        ErrorTerm(
            "slab density",
            density,
            f"{SLAB:g} × {errors.relief_m:g} m of relief × {errors.density_kg_m3 / 1000.0:g} g/cm³",
        ),
    )


def latitude_name(degrees: float) -> str:
    """A latitude as people write it, 26.8° S."""
    return f"{abs(degrees):.3g}° {'N' if degrees >= 0 else 'S'}"


def station_error(terms: tuple[ErrorTerm, ...]) -> float:
    """All sources together, mGal: independent, so their squares add.

    Examples
    --------
    >>> round(station_error((ErrorTerm("a", 0.3, ""), ErrorTerm("b", 0.4, ""))), 12)
    0.5
    """
    return math.sqrt(sum(term.error_mgal**2 for term in terms))
