"""Bodies whose attraction is known in closed form: what the engines are held to.

Lengths in metres, contrasts in kg/m³, results in mGal, positive down; depths are below the station. Unless a function
says otherwise the formulas are in Telford, Geldart and Sheriff 1990, *Applied Geophysics*, and Blakely 1995,
*Potential Theory in Gravity and Magnetic Applications* (from memory); each is also integrated numerically in the tests.
"""

from __future__ import annotations

import math

from scipy import special

from gravbasin.constants import GRAVITATIONAL_CONSTANT, SI_TO_MGAL

__all__ = [
    "cone_from_apex",
    "cylinder_axis",
    "cylinder_off_axis",
    "exponential_slab",
    "hemisphere_bowl",
    "horizontal_cylinder",
    "inverted_cone",
    "paraboloid_bowl",
    "sheet_edge",
    "slab",
    "sphere",
    "undulating_interface",
]

_G = GRAVITATIONAL_CONSTANT * SI_TO_MGAL
_TWO_PI_G = 2.0 * math.pi * _G


def slab(contrast: float, thickness: float) -> float:
    """Infinite horizontal slab, at any depth."""
    return _TWO_PI_G * contrast * thickness


def exponential_slab(contrast: float, scale: float) -> float:
    """Infinite layer whose contrast falls from `contrast` at its top as exp(−z / scale)."""
    return _TWO_PI_G * contrast * scale


def sphere(contrast: float, radius: float, depth: float, offset: float = 0.0) -> float:
    """Sphere with its centre at `depth`, the station `offset` to the side."""
    mass = 4.0 / 3.0 * math.pi * radius**3 * contrast
    return _G * mass * depth / math.hypot(depth, offset) ** 3


def horizontal_cylinder(contrast: float, radius: float, depth: float, offset: float = 0.0) -> float:
    """Infinite horizontal cylinder with its axis at `depth`, the station `offset` across it."""
    return _TWO_PI_G * contrast * radius**2 * depth / (depth**2 + offset**2)


def sheet_edge(surface_density: float, depth: float, offset: float) -> float:
    """Half of an infinite thin sheet (kg/m²), the station `offset` metres inside its straight edge."""
    return _TWO_PI_G * surface_density * (0.5 + math.atan2(offset, depth) / math.pi)


def cylinder_axis(contrast: float, radius: float, top: float, bottom: float) -> float:
    """Vertical cylinder, the station on its axis and not inside it."""
    return _TWO_PI_G * contrast * (bottom - top + math.hypot(radius, top) - math.hypot(radius, bottom))


def cylinder_off_axis(contrast: float, radius: float, top: float, bottom: float, offset: float) -> float:
    """Vertical cylinder, the station anywhere: K, E and Π by Carlson's forms (Lass and Blitzer 1983, from memory).

    Slower than the engine's own integral and less precise far away, which is why it can serve as a check of it.
    """
    discs = (_disc_potential(radius, abs(depth), abs(offset)) for depth in (top, bottom))
    return _G * contrast * (next(discs) - next(discs))


def _disc_potential(a: float, h: float, r: float) -> float:
    if h == 0.0 and r == a:
        return 4.0 * a
    s2, across = (a + r) ** 2 + h**2, (a + r) ** 2
    m1, n1 = ((a - r) ** 2 + h**2) / s2, (a - r) ** 2 / across  # 1 − m and 1 − n
    s = math.sqrt(s2)
    rim = s * special.ellipe(1.0 - m1) + (a * a - r * r) / s * special.ellipkm1(m1)
    if r != a:
        third = special.elliprf(0.0, m1, 1.0) + (1.0 - n1) / 3.0 * special.elliprj(0.0, m1, 1.0, n1)
        rim += h * h * (a - r) / ((a + r) * s) * third
    inside = 0.5 * (1.0 + (a > r) - (a < r))
    return float(2.0 * rim - 2.0 * math.pi * h * inside)


def cone_from_apex(contrast: float, height: float, half_angle_deg: float) -> float:
    """Cone opening downwards from its apex at the station."""
    return _TWO_PI_G * contrast * height * (1.0 - math.cos(math.radians(half_angle_deg)))


def inverted_cone(contrast: float, radius: float, depth: float) -> float:
    """Cone with its base at the station's level and its apex at `depth`, the station at the centre of the base."""
    slope = radius / depth
    square = 1.0 + slope**2
    logarithm = math.asinh(1.0 / slope) + math.asinh(slope)
    lost = (depth - radius + slope * radius / math.sqrt(square) * logarithm) / square
    return _TWO_PI_G * contrast * (depth - lost)


def paraboloid_bowl(contrast: float, radius: float, depth: float) -> float:
    """Bowl of radius √(1 − z/depth) times `radius`, the station at the centre of its flat top."""
    width = radius**2 / depth
    if math.isclose(radius, 2.0 * depth, rel_tol=1e-9):
        logarithm = math.log(2.0)
    else:
        logarithm = math.log((4.0 * depth - width) / (2.0 * radius - width))
    return _TWO_PI_G * contrast * (radius - 0.5 * width * logarithm)


def hemisphere_bowl(contrast: float, radius: float) -> float:
    """Half a sphere, flat side up, the station at the centre of the flat side."""
    return 0.5 * _TWO_PI_G * contrast * radius


def undulating_interface(contrast: float, amplitude: float, wavelength: float, depth: float) -> float:
    """Crest of a cosine interface of small amplitude at mean depth `depth` (first order in the amplitude)."""
    return _TWO_PI_G * contrast * amplitude * math.exp(-2.0 * math.pi * depth / wavelength)
