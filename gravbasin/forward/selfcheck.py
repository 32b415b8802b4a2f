"""The engines held to closed forms and to harmonica, on this machine and in seconds."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin.constants import EARTH_RADIUS, GRAVITATIONAL_CONSTANT, SI_TO_MGAL
from gravbasin.discs import disc_cell_area
from gravbasin.forward import closed_forms as exact
from gravbasin.forward.bodies import prisms_of, revolution_section, section_of
from gravbasin.forward.layers import grid_anomaly, layered_prisms
from gravbasin.forward.reference import harmonica_anomaly, tesseroid_anomaly
from gravbasin.forward.rings import ring_anomaly, ring_table

__all__ = ["Check", "run_selfcheck"]

Array = NDArray[np.float64]

_TEXTBOOK = "closed form, Telford et al. 1990 and Blakely 1995 (from memory), G of CODATA 2018"
_ENDLESS = 1e10  # metres; wider discs would lose digits in the difference of their ends
_CELLS = 400  # of a body's mesh in each direction: its staircase is then within a few millionths


@dataclass(frozen=True)
class Check:
    """One comparison.

    Attributes
    ----------
    name, source : str
        What was compared, and where the expected value comes from.
    expected, obtained, difference, limit : float
        In `unit`; the difference is absolute, or what is missing to an expected minimum.
    passed : bool
        Whether the difference is within the limit.
    unit : str
    """

    name: str
    source: str
    expected: float
    obtained: float
    difference: float
    limit: float
    passed: bool
    unit: str


def run_selfcheck(*, quick: bool = False) -> list[Check]:
    """Hold the ring, spherical and grid engines to known bodies, invariants and harmonica.

    Parameters
    ----------
    quick : bool
        Leave out tesseroids, and compare with harmonica on a small model, without the speed bar.

    Returns
    -------
    list of Check
        A result beyond its limit is returned with ``passed`` false, not raised.

    Examples
    --------
    >>> rows = run_selfcheck(quick=True)
    >>> all(row.passed for row in rows)
    True
    """
    groups: list[Callable[[], Iterator[Check]]] = [
        _slabs,
        _cylinders,
        _solids,
        _half_widths,
        _grids,
        _invariants,
        _shell,
    ]
    if not quick:
        groups.append(_tesseroids)
    shape = (12, 90, 110) if quick else (60, 400, 400)
    return [check for group in groups for check in group()] + list(_harmonica(shape, speed_bar=not quick))


def _close(
    name: str, expected: float, obtained: float, limit: float, *, source: str = _TEXTBOOK, unit: str = "mGal"
) -> Check:
    difference = abs(obtained - expected)
    return Check(name, source, expected, obtained, difference, limit, bool(difference <= limit), unit)


def _at_least(name: str, expected: float, obtained: float, *, source: str, unit: str) -> Check:
    missing = max(expected - obtained, 0.0)
    return Check(name, source, expected, obtained, missing, 0.0, missing == 0.0, unit)


def _disc(radius: float, top: float, bottom: float, contrast: float, stations: list[float]) -> Array:
    return ring_table(stations, [0.0, radius], [top, bottom]).anomaly([[contrast]])


def _slabs() -> Iterator[Check]:
    """A cylinder so wide, 10 million km, that it is a slab."""
    for contrast, value, digit in ((1000.0, 0.04193586, 1e-8), (2670.0, 0.1119688, 1e-7), (1640.0, 0.0687748, 1e-7)):
        got = float(_disc(_ENDLESS, 0.0, 1e3, contrast, [0.0])[0]) / 1e3
        yield _close(f"rings: infinite slab, {contrast:g} kg/m³, per metre", value, got, 0.51 * digit)


def _cylinders() -> Iterator[Check]:
    """Vertical cylinders on and off the axis: printed digits at half their last place."""
    on_axis = (
        (10, 0, 2, -100, -7.556679), (10, 0, 5, -150, -24.027112), (2, 0.5, 5, -250, -12.333212),
        (15, 0, 8, -100, -25.161518), (25, 32, 34, 400, 6.810138),
    )  # fmt: skip
    for radius, top, bottom, contrast, value in on_axis:
        got = float(_disc(1e3 * radius, 1e3 * top, 1e3 * bottom, contrast, [0.0])[0])
        name = f"rings: cylinder axis, radius {radius} km, {top:g}–{bottom} km, {contrast} kg/m³"
        yield _close(name, value, got, 0.51e-6)
    offsets = [0.0, 5e3, 9e3, 10e3, 15e3, 20e3]
    values = (-6.749867, -6.401995, -4.510238, -3.222269, -0.433274, -0.140013)
    for r, value, got in zip(offsets, values, _disc(1e4, 1e3, 3e3, -100.0, offsets), strict=True):
        # the printed digits were rounded or cut in the sixth place: one unit of it
        yield _close(f"rings: cylinder, radius 10 km, 1–3 km, at {r / 1e3:g} km", value, float(got), 1.01e-6)


def _solids() -> Iterator[Check]:
    """Solids of revolution as fine ring sections, seen from their axis; limits are the staircase of the mesh."""
    n = _CELLS

    def solid(
        outline: Callable[[Array], Array], depth: Array, radius: Array, contrast: Callable[[Array], Array] | float
    ) -> float:
        law = contrast if callable(contrast) else lambda z: np.full_like(z, contrast)
        return float(ring_anomaly(revolution_section(outline, depth, radius, contrast=law), [0.0])[0])

    graded = np.concatenate([[0.0], np.geomspace(1e-2, 2e3, 2 * n)])  # towards an apex at the station
    rows = (
        ("sphere, radius 1 km at 2 km, +500", 3.494655, _ball, np.linspace(1e3, 3e3, n + 1), 1e3, 500.0, 5e-6),
        ("hemisphere bowl, radius 5 km, −300", -31.451898, _bowl, np.linspace(0.0, 5e3, n + 1), 5e3, -300.0, 1e-5),
        ("inverted cone, base 10 km, depth 3 km, −200", -15.319628, lambda z: 1e4 * (1.0 - z / 3e3),
         np.linspace(0.0, 3e3, n + 1), 1e4, -200.0, 1e-5),
        ("paraboloid bowl, 10 km by 2 km, −200", -13.320458, lambda z: 1e4 * np.sqrt(1.0 - z / 2e3),
         np.linspace(0.0, 2e3, n + 1), 1e4, -200.0, 1e-5),
        ("paraboloid bowl, 1 km by 0.4 km, −300", -3.337256, lambda z: 1e3 * np.sqrt(1.0 - z / 400.0),
         np.linspace(0.0, 400.0, n + 1), 1e3, -300.0, 1e-5),
        ("exponential cylinder to 8 km, radius 10 km, −150", -13.683617, lambda z: np.full_like(z, 1e4),
         np.linspace(0.0, 8e3, n + 1), 1e4, lambda z: -150.0 * np.exp(-z / 3e3), 1e-5),
        ("exponential cylinder, radius 10 km, −150", -14.045916, lambda z: np.full_like(z, 1e4),
         np.linspace(0.0, 9e4, 3 * n + 1), 1e4, lambda z: -150.0 * np.exp(-z / 3e3), 1e-4),
        ("exponential layer, −150, scale 3 km", -18.871139, lambda z: np.full_like(z, _ENDLESS),
         np.linspace(0.0, 9e4, 3 * n + 1), _ENDLESS, lambda z: -150.0 * np.exp(-z / 3e3), 1e-6),
    )  # fmt: skip
    for name, value, outline, depth, radius, contrast, share in rows:
        rings = np.array([0.0, radius]) if name.startswith("exponential") else np.linspace(0.0, radius, n + 1)
        yield _close(f"rings: {name}", value, solid(outline, depth, rings, contrast), 5e-7 + share * abs(value))
    apex = solid(lambda z: z, graded, graded, 500.0)
    yield _close("rings: cone from its apex, 2 km, 45°, +500", 12.282730, apex, 2e-4 * 12.28273)


def _ball(z: Array) -> Array:
    return np.sqrt(np.maximum(1e6 - (z - 2e3) ** 2, 0.0))


def _bowl(z: Array) -> Array:
    return np.sqrt(np.maximum(25e6 - z**2, 0.0))


def _half_widths() -> Iterator[Check]:
    """Depth rules: the anomaly at the rule's distance over the anomaly at the peak."""
    edges = np.linspace(0.0, 1e3, 101)
    ball = revolution_section(_ball, np.linspace(1e3, 3e3, 201), edges, contrast=lambda z: np.full_like(z, 500.0))
    peak, half = ring_anomaly(ball, [0.0, 1532.842]).values
    yield _close("rings: sphere falls to half at 0.766421 of its depth", 0.5, float(half / peak), 1e-5, unit="1")
    rim, depth = 1e9, 2e3
    quarters = _disc(rim, depth - 5.0, depth + 5.0, 100.0, [rim - depth, rim, rim + depth])
    full = exact.slab(100.0, 10.0)
    for got, share in zip(quarters, (0.75, 0.5, 0.25), strict=True):
        name = f"rings: thin half-slab, its depth in or out from the edge: {share:g} of the slab"
        yield _close(name, share, float(got) / full, 2e-5, unit="1")
    surface = float(_disc(1e6, 0.0, 1e-3, 1e6, [1e6])[0]) / exact.slab(1e6, 1e-3)
    yield _close("rings: edge of a thin surface disc: half the slab", 0.5, surface, 1e-5, unit="1")


def _grids() -> Iterator[Check]:
    """Long prisms: a horizontal cylinder, and a cosine interface under a wide Gaussian window."""
    east, north = np.arange(-40.0, 41.0) * 25.0, np.arange(-100.0, 101.0) * 2e3
    depth_edges = 500.0 + 25.0 * np.arange(41.0)
    west: Array = east[None, :] - 12.5
    top: Array = depth_edges[:-1, None] - 1000.0
    share = disc_cell_area(west, west + 25.0, top, top + 25.0, np.asarray(500.0)) / 625.0
    pipe = prisms_of(500.0 * share[:, None, :] * np.ones((1, north.size, 1)), depth_edges, north, east)
    row = grid_anomaly(pipe, height_m=0.0)[north.size // 2]
    yield _close("grid: horizontal cylinder, radius 0.5 km at 1 km, +500", 5.241983, float(row[40]), 1e-3)
    yield _close("grid: horizontal cylinder falls to half at its depth", 0.5, float(row[80] / row[40]), 1e-4, unit="1")

    depth, window, step = 35e3, 400e3, 500.0
    east, north = np.arange(-4000.0, 4001.0) * step, np.arange(-10.0, 11.0) * 50e3
    for wavelength, value in ((60e3, 0.85882), (100e3, 3.72059), (180e3, 9.88746)):
        # 1 m of 8e5 kg/m³ carries the mass of 400 kg/m³ over 2 km; the window lifts the crest by exp(depth²/2window²)
        wave = 8e5 * np.cos(2.0 * math.pi * east / wavelength) * np.exp(-0.5 * (east / window) ** 2)
        sheet = prisms_of(np.broadcast_to(wave, (1, north.size, east.size)), [depth - 0.5, depth + 0.5], north, east)
        crest = float(grid_anomaly(sheet, height_m=0.0)[north.size // 2, east.size // 2])
        crest *= math.exp(-0.5 * (depth / window) ** 2)
        yield _close(
            f"grid: cosine interface, {wavelength / 1e3:g} km at 35 km, 2 km × 400 kg/m³", value, crest, 1e-3 * value
        )


def _invariants() -> Iterator[Check]:
    """Gauss' theorem, upward continuation and linearity on one off-centre model."""
    identity = "potential theory (Blakely 1995, from memory)"
    section = section_of([[-80.0, 0.0, 0.0], [60.0, -40.0, 0.0]], [200.0, 1200.0, 3000.0], [0.0, 4e3, 7e3, 8e3])
    axis = np.arange(-40e3, 40.1e3, 500.0)
    prisms = layered_prisms(section, axis, axis[10:], centre=(1e3, 2e3))
    grid, above = grid_anomaly(prisms, height_m=0.0), grid_anomaly(prisms, height_m=1e3)
    flux = 2.0 * math.pi * GRAVITATIONAL_CONSTANT * SI_TO_MGAL * float(_prism_mass(prisms).sum())
    got = float(grid.sum()) * 500.0**2 + _flux_outside(prisms)
    yield _close(
        "grid: flux through the ground over 2πG times the mass", 1.0, got / flux, 1e-5, source=identity, unit="1"
    )
    rings = ring_anomaly(section, np.linspace(0.0, 20e3, 21), height_m=1e3)
    continued = _continue_upward(grid, 1e3)
    centre = {"easting": 1e3, "northing": 2e3}
    got = float(continued.sel(centre))
    yield _close("grid: continued upward 1 km by its spectrum", float(above.sel(centre)), got,
                 0.005 * float(np.abs(above).max()), source=identity)  # fmt: skip
    yield _close("grid at 1 km against rings at 1 km", float(rings[0]), float(above.sel(centre)),
                 0.005 * float(np.abs(rings).max()), source="ring engine")  # fmt: skip


def _prism_mass(prisms: xr.Dataset) -> xr.DataArray:
    """Mass of every prism, kg."""
    area = float(prisms.easting[1] - prisms.easting[0]) * float(prisms.northing[1] - prisms.northing[0])
    return prisms.density_contrast * area * xr.DataArray(np.diff(prisms.depth_edges), dims="layer")


def _flux_outside(prisms: xr.Dataset) -> float:
    """∫ of the anomaly over the plane outside the grid, mGal m²: per prism, the solid angle the grid leaves."""
    mass, edges = _prism_mass(prisms).values, prisms.depth_edges.values
    layer, row, column = np.nonzero(mass)
    z = (0.5 * (edges[1:] + edges[:-1]))[layer]
    covered = np.zeros(z.size)
    for x, x_sign in _bounds(prisms.easting.values, column):
        for y, y_sign in _bounds(prisms.northing.values, row):
            covered += x_sign * y_sign * np.arctan(x * y / (z * np.sqrt(x**2 + y**2 + z**2)))
    return float(GRAVITATIONAL_CONSTANT * SI_TO_MGAL * (mass[layer, row, column] @ (2.0 * math.pi - covered)))


def _bounds(axis: Array, index: NDArray[np.intp]) -> list[tuple[Array, int]]:
    half = 0.5 * (axis[1] - axis[0])
    return [(axis[-1] + half - axis[index], 1), (axis[0] - half - axis[index], -1)]


def _continue_upward(grid: xr.DataArray, height: float) -> xr.DataArray:
    from scipy import fft

    step = float(grid.easting[1] - grid.easting[0])
    shape = [2 * n for n in grid.shape]
    k = 2.0 * math.pi * np.hypot(fft.fftfreq(shape[0], step)[:, None], fft.rfftfreq(shape[1], step))
    spectrum = fft.rfft2(grid.values, shape) * np.exp(-k * height)
    return grid.copy(data=fft.irfft2(spectrum, shape)[: grid.shape[0], : grid.shape[1]])


def _shell() -> Iterator[Check]:
    """A whole spherical shell of rings: a point mass from outside, nothing from within."""
    source = "shell theorem"
    edges = np.array([0.0, 2e4, 3e5, 4e6, 1.2e7, math.pi * EARTH_RADIUS])
    depth = np.array([0.0, 1e3, 5e3])
    mass = 4.0 / 3.0 * math.pi * ((EARTH_RADIUS - depth[0]) ** 3 - (EARTH_RADIUS - depth[-1]) ** 3) * 1000.0
    for height, station in ((0.0, 1.5e4), (3e3, 5e6)):
        table = ring_table([station], edges, depth, height_m=height, earth="sphere")
        got = float(table.anomaly(np.full((2, 5), 1000.0))[0])
        whole = GRAVITATIONAL_CONSTANT * SI_TO_MGAL * mass / (EARTH_RADIUS + height) ** 2
        yield _close(
            f"spherical rings: full shell from {height / 1e3:g} km above", whole, got, 1e-10 * whole, source=source
        )
    table = ring_table([2e5], edges, depth, height_m=-8e3, earth="sphere")
    inside = float(table.anomaly(np.full((2, 5), 1000.0))[0])
    yield _close("spherical rings: full shell from inside", 0.0, inside, 1e-10 * whole, source=source)


def _tesseroids() -> Iterator[Check]:
    section = section_of([[-100.0, -60.0], [50.0, 20.0]], [500.0, 3e3, 8e3], [0.0, 40e3, 90e3])
    stations = [0.0, 20e3, 45e3, 80e3, 130e3]
    rings = ring_anomaly(section, stations, height_m=1e3, earth="sphere").values
    difference = np.abs(tesseroid_anomaly(section, stations, 1e3).values - rings).max()
    peak = float(np.abs(rings).max())
    name, source = "spherical rings against tesseroids, largest difference over peak", "harmonica tesseroid_gravity"
    yield _close(name, 0.0, float(difference) / peak, 1e-3, source=source, unit="1")


def _harmonica(shape: tuple[int, int, int], *, speed_bar: bool) -> Iterator[Check]:
    """The same random prisms by both engines: largest difference at sampled stations, and the ratio of times."""
    rng = np.random.default_rng(20)
    layers, rows, columns = shape
    prisms = prisms_of(rng.normal(0.0, 100.0, shape), np.linspace(0.0, 9e3, layers + 1),
                     400.0 * np.arange(rows), 500.0 * np.arange(columns))  # fmt: skip
    small = prisms.isel(layer=slice(1), northing=slice(3), easting=slice(3)).assign_coords(depth_edges=[0.0, 150.0])
    harmonica_anomaly(small, 0.0, 0.0, parallel=True)  # compiled before the clock starts
    start = time.perf_counter()
    grid = grid_anomaly(prisms)
    fast = time.perf_counter() - start
    i, j = rng.integers(0, rows, 3), rng.integers(0, columns, 3)
    start = time.perf_counter()
    direct = harmonica_anomaly(prisms, grid.easting.values[j], grid.northing.values[i], 1.0, parallel=True)
    slow = (time.perf_counter() - start) * rows * columns / i.size
    largest = float(np.abs(direct.values - grid.values[i, j]).max())
    label = f"{rows} × {columns} × {layers}"
    yield _close(f"grid against harmonica, {label} random prisms", 0.0, largest, 1e-6, source="harmonica prism_gravity")
    if speed_bar:
        yield _at_least(f"grid faster than harmonica at {label}, time of the latter from 3 stations", 1e5, slow / fast,
                        source="harmonica prism_gravity", unit="times")  # fmt: skip
