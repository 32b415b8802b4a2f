"""Physical constants, each with its source."""

from __future__ import annotations

__all__ = ["EARTH_RADIUS", "GRAVITATIONAL_CONSTANT", "SI_TO_MGAL", "STANDARD_GRAVITY"]

GRAVITATIONAL_CONSTANT = 6.67430e-11
"""Newtonian constant of gravitation, m³ kg⁻¹ s⁻² (CODATA 2018)."""

SI_TO_MGAL = 1e5
"""One m s⁻² in mGal."""

EARTH_RADIUS = 6_371_000.0
"""Mean Earth radius in metres (IUGG, rounded; common practice)."""

STANDARD_GRAVITY = 9.80665
"""Standard acceleration of gravity, m s⁻² (3rd CGPM, 1901)."""
