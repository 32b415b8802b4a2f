"""Deformed sections: identity, mass, azimuths and signs, symmetry, convergence, independent sums, refusals."""

import dataclasses
import warnings
from itertools import pairwise

import harmonica
import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from pydantic import ValidationError

from gravbasin.constants import GRAVITATIONAL_CONSTANT, SI_TO_MGAL
from gravbasin.crater import density_section
from gravbasin.crater.cells import default_mesh
from gravbasin.crater.model import crater_model
from gravbasin.discs import disc_cell_area, ring_fractions
from gravbasin.errors import GravbasinWarning
from gravbasin.forward import grid_anomaly, harmonica_anomaly, layered_prisms, ring_anomaly
from gravbasin.forward.bodies import revolution_section, section_of
from gravbasin.forward.clipping import area, clipped, disc_area, rectangles
from gravbasin.forward.deformation import azimuthal_mean
from gravbasin.forward.motion import is_axisymmetric, motion_of, rock_above_m
from gravbasin.labels import read_provenance
from gravbasin.observed import ring_means
from gravbasin.scenario import Deformation, Scenario

G = GRAVITATIONAL_CONSTANT * SI_TO_MGAL
EDGES = np.array([0.0, 200.0, 500.0, 1.1e3, 2e3, 4e3])
RINGS = np.linspace(0.0, 8e3, 33)
EAST, NORTH = np.arange(-12e3, 11e3, 400.0), np.arange(-10.4e3, 13e3, 500.0)


def buried():
    """Contrast that dies out towards rim, base and top, with sharp steps inside."""
    r, z = 0.5 * (RINGS[1:] + RINGS[:-1]), 0.5 * (EDGES[1:] + EDGES[:-1])
    contrast = -200.0 * np.exp(-((r / 4e3) ** 4)) * np.where(z < 1.1e3, 1.0, 0.4)[:, None] + 90.0 * (r < 1.4e3)
    contrast[0] = 0.0
    return section_of(np.where(r < 7e3, contrast, 0.0), EDGES, RINGS)


def shallow():
    """The same rings from the ground down, so that tilt has something to erode and something to miss."""
    section = buried()
    values = np.repeat(section.density_contrast.values[1:2], EDGES.size - 1, axis=0)
    return section.assign(density_contrast=section.density_contrast.copy(data=values))


def prisms_mass(prisms):
    step = float(prisms.easting[1] - prisms.easting[0]) * float(prisms.northing[1] - prisms.northing[0])
    return prisms.density_contrast.sum(("northing", "easting")).values * np.diff(prisms.depth_edges) * step


def section_mass(section):
    return (
        section.density_contrast.values
        @ (np.pi * np.diff(section.radius_edges.values**2))
        * np.diff(section.depth_edges.values)
    )


def quietly(function, *args, **kwargs):
    """Without the words about rock from above; whether they are right has tests of its own."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", GravbasinWarning)
        return function(*args, **kwargs)


def test_nothing_to_deform_changes_no_bit():
    section = buried()
    plain = layered_prisms(section, EAST, NORTH, centre=(300.0, -700.0))
    share = ring_fractions(EAST - 300.0, NORTH + 700.0, RINGS)
    for layer, row in zip(plain.density_contrast.values, section.density_contrast.values, strict=True):
        assert_array_equal(layer.ravel(), share @ row)
    still = Deformation(tilt_azimuth_degrees=77.0, stretch_azimuth_degrees=10.0, cover_edge_km=3.0)
    same = layered_prisms(section, EAST, NORTH, centre=(300.0, -700.0), deformation=still)
    assert_array_equal(same.density_contrast, plain.density_contrast)
    assert_array_equal(same.depth_edges, plain.depth_edges)
    assert azimuthal_mean(section, still) is section
    assert azimuthal_mean(section, None) is section


@pytest.mark.parametrize(
    ("slight", "share"),
    [
        ({"tilt_degrees": 1e-8, "tilt_azimuth_degrees": 40.0}, 1e-3),
        ({"erosion_slope_m_per_km": 1e-8}, 1e-3),
        ({"stretch_ratio": 1.0 + 1e-12, "stretch_azimuth_degrees": 40.0}, 1e-10),
        ({"cover_thickness_km": 1e-12, "cover_contrast_kg_m3": -300.0}, 1e-8),
        ({"missing_from_degrees": 50.0, "missing_to_degrees": 50.0 + 1e-9}, 1e-8),
    ],
)
def test_each_deformation_fades_into_the_identity(slight, share):
    """Level layers to rounding; columns to their quadrature: with 30 cells across, under 0.1 % of the peak."""
    section = buried()
    grid = grid_anomaly(layered_prisms(section, EAST, NORTH))
    bent = grid_anomaly(layered_prisms(section, EAST, NORTH, deformation=Deformation(**slight)))
    assert float(np.abs(bent - grid).max()) < share * float(np.abs(grid).max())


@pytest.mark.parametrize(("ratio", "azimuth"), [(1.3, 0.0), (2.0, 37.0), (1.7, 250.0)])
def test_stretch_keeps_mass_and_turns_circles_into_ellipses(ratio, azimuth):
    """Second moments along and across differ by the axis ratio squared; a cell's own moment is step²/12."""
    section, axis = buried(), np.arange(-14e3, 14.1e3, 400.0)
    stretch = Deformation(stretch_ratio=ratio, stretch_azimuth_degrees=azimuth)
    prisms = layered_prisms(section, axis, axis[3:] - 600.0, deformation=stretch)
    assert_allclose(prisms_mass(prisms), section_mass(section), rtol=1e-11, atol=1.0)
    layer = prisms.density_contrast[1]
    along = prisms.easting * np.sin(np.radians(azimuth)) + prisms.northing * np.cos(np.radians(azimuth))
    across = prisms.easting * np.cos(np.radians(azimuth)) - prisms.northing * np.sin(np.radians(azimuth))
    pairs = (along, along), (across, across), (along, across)
    moments = [float((layer * u * v).sum() / layer.sum()) for u, v in pairs]
    cell = 400.0**2 / 12.0
    ring = section.density_contrast.values[1] * np.diff(RINGS**4) / 4.0
    circle = ring.sum() / (section.density_contrast.values[1] * np.diff(RINGS**2)).sum()
    # ∫ r² dA over two, per area: each axis of the circle
    assert_allclose(moments[0] - cell, circle * ratio, rtol=2e-3)
    assert_allclose(moments[1] - cell, circle / ratio, rtol=2e-3)
    assert abs(moments[2]) < 1e-3 * circle


@pytest.mark.parametrize(("start", "end", "degrees"), [(20.0, 75.0, 55.0), (300.0, 10.0, 70.0), (10.0, 300.0, 290.0)])
def test_a_missing_sector_takes_its_share_and_nothing_else(start, end, degrees):
    section = buried()
    sector = Deformation(missing_from_degrees=start, missing_to_degrees=end)
    whole, cut = (layered_prisms(section, EAST, NORTH, deformation=d) for d in (None, sector))
    assert_allclose(prisms_mass(cut), (1.0 - degrees / 360.0) * section_mass(section), rtol=1e-11, atol=1.0)
    azimuth = np.degrees(np.arctan2(whole.easting, whole.northing)) % 360.0
    width, far = (end - start) % 360.0, np.hypot(whole.easting, whole.northing) > 3e3
    into = (azimuth - start) % 360.0
    inside, outside = (into > 10.0) & (into < width - 10.0) & far, (into > width + 10.0) & (into < 350.0) & far
    assert inside.any()
    assert outside.any()
    assert_allclose(cut.density_contrast.where(inside, 0.0), 0.0, atol=1e-10)
    assert_allclose((cut - whole).density_contrast.where(outside, 0.0), 0.0, atol=1e-10)


def test_two_sectors_and_what_they_leave_add_up():
    section = buried()
    tilt = {"tilt_degrees": 4.0, "tilt_azimuth_degrees": 200.0}
    whole = layered_prisms(section, EAST, NORTH, deformation=Deformation(**tilt))
    cuts = [(0.0, 130.0), (130.0, 205.0), (205.0, 0.0)]
    bends = [Deformation(missing_from_degrees=a, missing_to_degrees=b, **tilt) for a, b in cuts]
    parts = [layered_prisms(section, EAST, NORTH, deformation=bend) for bend in bends]
    assert_allclose(sum(p.density_contrast for p in parts), 2.0 * whole.density_contrast, atol=1e-9)


def ball_section(depth, radius, contrast):
    edges = np.linspace(0.0, 2 * depth, 81)
    return revolution_section(
        lambda z: np.sqrt(np.maximum(radius**2 - (z - depth) ** 2, 0.0)), edges, np.linspace(0.0, 1.2 * radius, 49),
        contrast=lambda z: np.full_like(z, contrast),
    )  # fmt: skip


@pytest.mark.parametrize(
    ("bend", "sideways"),
    [
        ({"tilt_degrees": 15.0, "tilt_azimuth_degrees": 90.0}, (-1.0, 0.0)),
        ({"tilt_degrees": 8.0, "tilt_azimuth_degrees": 180.0}, (0.0, 1.0)),
        ({"tilt_degrees": 20.0, "tilt_azimuth_degrees": 250.0}, (np.sin(np.radians(70)), np.cos(np.radians(70)))),
        ({"erosion_slope_m_per_km": 50.0, "erosion_slope_azimuth_degrees": 30.0}, (0.0, 0.0)),
    ],
)
def test_a_buried_ball_moves_to_where_the_rotation_takes_it(bend, sideways):
    """Against G m z / R³: tilting down to the east swings deep rock west; a shear leaves what lies on the axis."""
    depth, radius, contrast = 4e3, 1.2e3, 300.0
    section, axis = ball_section(depth, radius, contrast), np.arange(-4e3, 4.1e3, 160.0)
    prisms = layered_prisms(section, axis, axis[7:] - 300.0, deformation=Deformation(**bend))
    grid = grid_anomaly(prisms, height_m=0.0)
    angle = np.radians(bend.get("tilt_degrees", 0.0))
    east, north, down = *(depth * np.sin(angle) * np.array(sideways)), depth * np.cos(angle)
    mass = 4 / 3 * np.pi * radius**3 * contrast
    distance = np.sqrt((grid.easting - east) ** 2 + (grid.northing - north) ** 2 + down**2)
    expected = (G * mass * down / distance**3).transpose("northing", "easting")
    # the cells blur by 160 m; sheared, the ball is an ellipsoid with a quadrupole of its own
    assert float(np.abs(grid - expected).max()) < 3e-3 * float(expected.max())
    highest = grid.isel(grid.argmax(...))
    assert np.hypot(float(highest.easting) - east, float(highest.northing) - north) <= 160.0


def test_erosion_deepens_towards_its_azimuth():
    """A contrast that grows evenly with depth shows at the ground how deep the ground cuts."""
    edges = np.linspace(0.0, 4e3, 41)
    section = section_of(0.1 * 0.5 * (edges[1:] + edges[:-1])[:, None] * np.ones(40), edges, np.linspace(0.0, 2e4, 41))
    bend = Deformation(erosion_slope_m_per_km=100.0, erosion_slope_azimuth_degrees=120.0)
    prisms = quietly(layered_prisms, section, EAST, NORTH, deformation=bend)
    along = prisms.easting * np.sin(np.radians(120.0)) + prisms.northing * np.cos(np.radians(120.0))
    surface = prisms.density_contrast[0]
    expected = (0.1 * (50.0 + 0.1 * along)).transpose("northing", "easting")
    seen = (along > 1.5e3) & (along < 1e4)
    assert_allclose(surface.where(seen, 0.0), expected.where(seen, 0.0), atol=0.11)
    assert_allclose(surface.where(along < -1.5e3, 0.0), 0.0, atol=1e-12)  # rock from above that the section lacks


def eroded_mass(section, deformation):
    """Mass left below today's ground, from the section's side: small pieces of rings, moved one by one."""
    back = np.linalg.inv(motion_of(deformation).matrix)
    azimuth = 2 * np.pi * (np.arange(720.0) + 0.5) / 720
    z, r = section.depth_edges.values, section.radius_edges.values
    radius = np.sqrt(0.5 * (r[1:] ** 2 + r[:-1] ** 2))
    mass = 0.0
    for layer, (top, bottom) in enumerate(pairwise(z)):
        ground = -(back[2, 0] * np.sin(azimuth)[:, None] + back[2, 1] * np.cos(azimuth)[:, None]) * radius / back[2, 2]
        left = bottom - np.clip(ground, top, bottom)
        mass += float((section.density_contrast.values[layer] * np.pi * np.diff(r**2) * left).mean(axis=0).sum())
    return mass


@pytest.mark.parametrize(
    "bend",
    [
        {"tilt_degrees": 6.0, "tilt_azimuth_degrees": 310.0},
        {"tilt_degrees": 18.0, "tilt_azimuth_degrees": 20.0},
        {"erosion_slope_m_per_km": 60.0, "erosion_slope_azimuth_degrees": 200.0},
        {"tilt_degrees": 5.0, "stretch_ratio": 1.4, "stretch_azimuth_degrees": 70.0},
    ],
)
def test_tilt_loses_what_rises_above_the_ground_and_no_more(bend):
    section, deformation = shallow(), Deformation(**bend)
    prisms = quietly(layered_prisms, section, EAST, NORTH, deformation=deformation)
    expected = eroded_mass(section, deformation)
    assert abs(expected) < 0.99 * abs(section_mass(section).sum())
    assert_allclose(prisms_mass(prisms).sum(), expected, rtol=5e-4)
    deep = buried().assign_coords(depth_edges=EDGES + 5e3)
    sunk = layered_prisms(deep, EAST, NORTH, deformation=deformation)
    assert_allclose(prisms_mass(sunk).sum(), section_mass(deep).sum(), rtol=5e-4)  # nothing of it reaches the ground
    assert sunk.depth_edges[-1] > deep.depth_edges[-1]


FULL = {
    "tilt_degrees": 6.0,
    "stretch_ratio": 1.4,
    "erosion_slope_m_per_km": 20.0,
    "cover_thickness_km": 0.35,
    "cover_edge_km": 1.3,
    "cover_contrast_kg_m3": -150.0,
}
AZIMUTHS = {"tilt_azimuth_degrees": 35.0, "stretch_azimuth_degrees": 110.0, "erosion_slope_azimuth_degrees": 260.0,
            "cover_azimuth_degrees": 160.0, "missing_from_degrees": 15.0, "missing_to_degrees": 80.0}  # fmt: skip


def turned(turn, swap=False):
    azimuths = {name: turn(value) % 360.0 for name, value in AZIMUTHS.items()}
    if swap:  # a mirror turns clockwise into anticlockwise
        ends = azimuths["missing_to_degrees"], azimuths["missing_from_degrees"]
        azimuths["missing_from_degrees"], azimuths["missing_to_degrees"] = ends
    return Deformation(**FULL, **azimuths)


def test_mirrored_and_turned_deformations_have_mirrored_and_turned_contrasts():
    section, centre = buried(), (200.0, -300.0)
    first = layered_prisms(section, EAST, NORTH, centre=centre, deformation=turned(lambda a: a)).density_contrast
    mirrored = turned(lambda a: -a, swap=True)
    west = layered_prisms(section, -EAST[::-1], NORTH, centre=(-200.0, -300.0), deformation=mirrored).density_contrast
    assert_allclose(west, first[:, :, ::-1], atol=1e-9)
    upside = turned(lambda a: 180.0 - a, swap=True)
    south = layered_prisms(section, EAST, -NORTH[::-1], centre=(200.0, 300.0), deformation=upside).density_contrast
    assert_allclose(south, first[:, ::-1], atol=1e-9)
    quarter = turned(lambda a: a + 90.0)  # clockwise: what was north is east
    east = layered_prisms(section, NORTH, -EAST[::-1], centre=(-300.0, -200.0), deformation=quarter).density_contrast
    assert_allclose(east, np.swapaxes(first.values, 1, 2)[:, ::-1], atol=1e-9)
    assert np.abs(first.values[:, :, ::-1] - first.values).max() > 20.0


def test_deformation_is_linear_in_the_contrast():
    a, b = buried(), buried()
    b["density_contrast"] = b.density_contrast * np.random.default_rng(3).normal(1.0, 0.5, b.density_contrast.shape)
    rock = {k: v for k, v in FULL.items() if k != "cover_contrast_kg_m3"}
    bend = Deformation(**rock, cover_contrast_kg_m3=0.0, **AZIMUTHS)
    one, two, both = (
        layered_prisms(xr.merge([s], join="exact"), EAST, NORTH, deformation=bend).density_contrast
        for s in (a, b, a.assign(density_contrast=2.0 * a.density_contrast - b.density_contrast))
    )
    assert_allclose(both, 2.0 * one - two, atol=1e-9)


def test_columns_converge(monkeypatch):
    """Errors against 16 x 16 columns fall with their number; those of 3 x 3 are under 0.2 % of the peak here."""
    section, bend = buried(), Deformation(tilt_degrees=10.0, tilt_azimuth_degrees=33.0)

    def anomaly(columns):
        monkeypatch.setattr("gravbasin.forward.deformation._COLUMNS", columns)
        return grid_anomaly(layered_prisms(section, EAST, NORTH, deformation=bend))

    finest = anomaly(16)
    errors = [float(np.sqrt(((anomaly(n) - finest) ** 2).mean()) / np.abs(finest).max()) for n in (1, 3, 8)]
    assert errors[1] < 0.6 * errors[0]
    assert errors[2] < 0.6 * errors[1]
    assert float(np.abs(anomaly(3) - finest).max()) < 2e-3 * float(np.abs(finest).max())


def test_a_tilted_disc_against_harmonica():
    """The disc cut into 90 m cubes, each moved by the rotation: a sum over bodies that never meet a grid."""
    depth, thickness, radius, dip, azimuth = 3e3, 360.0, 2.4e3, np.radians(12.0), np.radians(215.0)
    edges = np.concatenate([np.linspace(0.0, depth, 61), depth + np.linspace(0.0, thickness, 13)[1:]])
    contrast = np.where((edges[1:] > depth + 1.0)[:, None], 250.0, 0.0) * np.ones((1, 2))
    fine = section_of(contrast * [1.0, 0.0], edges, [0.0, radius, radius + 200.0])
    east, north = np.arange(-6e3, 6.1e3, 200.0), np.arange(-5e3, 6.6e3, 200.0)
    bend = Deformation(tilt_degrees=12.0, tilt_azimuth_degrees=215.0)
    grid = grid_anomaly(layered_prisms(fine, east, north, deformation=bend), height_m=0.0)
    side = 90.0
    line = np.arange(-radius + side / 2, radius, side)
    x, y, z = (a.ravel() for a in np.meshgrid(line, line, depth + side / 2 + side * np.arange(4.0), indexing="ij"))
    share = disc_cell_area(x - side / 2, x + side / 2, y - side / 2, y + side / 2, np.full(x.size, radius)) / side**2
    down = np.array([np.sin(azimuth), np.cos(azimuth)])
    p, q = x * down[0] + y * down[1], x * down[1] - y * down[0]
    moved, deep = p * np.cos(dip) - z * np.sin(dip), p * np.sin(dip) + z * np.cos(dip)
    e, n = moved * down[0] + q * down[1], moved * down[1] - q * down[0]
    half = side / 2
    cubes = np.column_stack([e - half, e + half, n - half, n + half, -deep - half, -deep + half])[share > 0]
    stations = [(0, 0), (3e3, -2e3), (-2e3, 2.4e3), (-1e3, 5e3), (5e3, 3e3)]
    points = tuple(np.array(v, dtype=float) for v in zip(*[(a, b, 0.0) for a, b in stations], strict=True))
    expected = harmonica.prism_gravity(points, cubes, 250.0 * share[share > 0], field="g_z")
    got = [float(grid.sel(easting=a, northing=b)) for a, b in stations]
    assert_allclose(got, expected, atol=2e-3 * expected.max())


def test_the_deformed_grid_is_the_direct_sum_of_its_prisms():
    prisms = quietly(layered_prisms, buried(), EAST[::3], NORTH[::3], deformation=turned(lambda a: a))
    grid = grid_anomaly(prisms)
    direct = harmonica_anomaly(prisms, [-2.4e3, 3.6e3], [1.6e3, -4.4e3])
    expected = [float(grid.sel(easting=e, northing=n)) for e, n in ((-2.4e3, 1.6e3), (3.6e3, -4.4e3))]
    assert_allclose(direct, expected, atol=1e-9)


def test_cover_beyond_an_edge_is_a_sheet_over_a_lowered_structure():
    section = buried()
    side = {"cover_thickness_km": 0.3, "cover_edge_km": 2.2, "cover_azimuth_degrees": 90.0}
    bend = Deformation(**side, cover_contrast_kg_m3=-240.0)
    east = EAST - 200.0  # an edge of cells at 2.2 km
    plain, half = (layered_prisms(section, east - 200.0, NORTH, deformation=d) for d in (None, bend))
    bare = plain.easting < 2.2e3
    assert_allclose(half.density_contrast[:5].where(bare, 0.0), plain.density_contrast.where(bare, 0.0), atol=1e-9)
    lowered = Deformation(**side, cover_contrast_kg_m3=0.0)
    without = layered_prisms(section, east - 200.0, NORTH, deformation=lowered)
    alone = half.density_contrast - without.density_contrast
    thickness = np.diff(np.minimum(half.depth_edges, 300.0))
    assert_allclose(alone.where(bare, 0.0), 0.0, atol=1e-9)
    inside = (alone * xr.DataArray(np.diff(half.depth_edges), dims="layer")).where(~bare, drop=True)
    assert_allclose(inside, -240.0 * thickness[:, None, None] * np.ones(inside.shape), atol=1e-6)
    # the slab as one prism, where its lower face is an edge of layers too
    flat = section_of(np.zeros((3, 1)), [0.0, 150.0, 300.0, 600.0], [0.0, 8e3])
    only = layered_prisms(flat, east - 200.0, NORTH, deformation=bend)
    box = [2.2e3, east[-1], NORTH[0] - 250.0, NORTH[-1] + 250.0, -300.0, 0.0]
    points = (np.array([east[20] - 200.0, east[40] - 200.0]), NORTH[[5, 20]], np.array([1.0, 1.0]))
    expected = harmonica.prism_gravity(points, box, -240.0, field="g_z")
    grid = grid_anomaly(only)
    assert_allclose([float(grid[5, 20]), float(grid[20, 40])], expected, atol=1e-9)


def test_cover_lowers_every_layer_by_its_thickness():
    """Far beyond the edge the columns are the undeformed ones, pushed down: by mass and by first moment."""
    section, lower = buried(), 700.0
    side = {"cover_edge_km": -20.0, "cover_azimuth_degrees": 70.0}
    bend = Deformation(cover_thickness_km=0.7, cover_contrast_kg_m3=0.0, **side)
    plain, sunk = (layered_prisms(section, EAST, NORTH, deformation=d) for d in (None, bend))
    assert_allclose(prisms_mass(sunk).sum(), prisms_mass(plain).sum(), rtol=1e-12)
    uncovered = grid_anomaly(plain, height_m=lower)
    fine = np.linspace(0.0, 4e3, 81)
    columns = np.searchsorted(EDGES, 0.5 * (fine[1:] + fine[:-1])) - 1
    split = section_of(section.density_contrast.values[columns], fine, RINGS)  # so that layers are lowered whole
    covered = grid_anomaly(layered_prisms(split, EAST, NORTH, deformation=bend), height_m=0.0)
    assert_allclose(covered, uncovered, atol=1e-3 * float(np.abs(uncovered).max()))


def test_missing_rock_is_said_and_rock_above_heals_it():
    """A cylinder of unlimited height: with rock above, the tilted side is as full as it should be."""
    section, bend = shallow(), Deformation(tilt_degrees=5.0, tilt_azimuth_degrees=60.0)
    with pytest.warns(GravbasinWarning, match=r"up to 0\.\d+ km above today's ground.*excess mass would be missing"):
        lacking = layered_prisms(section, EAST, NORTH, deformation=bend)
    with pytest.warns(GravbasinWarning, match="begins at -"):
        azimuthal_mean(section, bend)
    height = rock_above_m(section, bend)
    assert height == pytest.approx(np.tan(np.radians(5.0)) * 6e3)  # where 0.5 % of the peak is left
    edges = np.concatenate([np.linspace(-height, 0.0, 5)[:-1], EDGES])
    tall = section_of(np.repeat(section.density_contrast.values[:1], 9, axis=0), edges, RINGS)
    full = layered_prisms(tall, EAST, NORTH, deformation=bend)
    assert full.depth_edges[0] == 0.0
    # a tilted cylinder cut by level planes is 1/cos larger in area there
    area_now = full.density_contrast[0].sum() * 400.0 * 500.0
    assert float(area_now) == pytest.approx(section_mass(section)[0] / 200.0 / np.cos(np.radians(5.0)), rel=2e-3)
    along = full.easting * np.sin(np.radians(60.0)) + full.northing * np.cos(np.radians(60.0))
    gained = full.density_contrast[0] - lacking.density_contrast[0]
    assert float(np.abs(gained.where(along < -1e3, 0.0)).max()) < 1e-9
    assert float(gained.where(along > 1e3).sum()) < -100.0
    stripped = layered_prisms(tall, EAST, NORTH, deformation=Deformation())
    assert_allclose(stripped.density_contrast, layered_prisms(section, EAST, NORTH).density_contrast, atol=1e-9)


def test_rock_above_today_s_ground_comes_from_the_same_structure_less_eroded():
    """The way to give `layered_prisms` what a tilt brings in: the same model, stripped less, its depths shifted."""
    model = crater_model(Scenario(crater={"rim_diameter_km": 30.0}, history={"erosion_km": 2.0}))
    raised = dataclasses.replace(model, ground=dataclasses.replace(model.ground, erosion=model.ground.erosion - 600.0))
    mesh = default_mesh(raised, layers=60)
    levels = np.concatenate([np.linspace(0.0, 600.0, 9)[:-1], 600.0 + default_mesh(model, layers=60).depth_edges])
    tall = density_section(raised, mesh=dataclasses.replace(mesh, depth_edges=levels))
    today = density_section(model, mesh=dataclasses.replace(mesh, depth_edges=levels[8:] - 600.0))
    assert_allclose(tall.density_contrast[8:], today.density_contrast, atol=1e-6)
    tall = tall.assign_coords(depth_edges=tall.depth_edges - 600.0)
    bend = Deformation(tilt_degrees=1.5)
    assert rock_above_m(today, bend) < 600.0
    axis = np.arange(-26e3, 26.1e3, 1e3)
    mean = layered_prisms(tall, axis, axis, deformation=bend)
    assert float(np.abs(mean.density_contrast[0]).max()) > 0.5 * float(np.abs(today.density_contrast[0]).max())


@pytest.mark.parametrize(
    "bend",
    [
        {"cover_contrast_kg_m3": 0.0},
        {"cover_contrast_kg_m3": 0.0, "tilt_degrees": 9.0, "stretch_ratio": 1.0},
        {"cover_contrast_kg_m3": None, "cover_thickness_km": 0.0},
    ],
)
def test_the_azimuthal_mean_is_what_the_rings_of_the_grid_hold(bend):
    """Two routes to ring means of the anomaly: through map cells and through circles; within 0.5 % of the peak."""
    section, deformation = buried(), Deformation(**{**FULL, **AZIMUTHS, **bend})
    axis = np.arange(-17e3, 17.1e3, 250.0)
    grid = grid_anomaly(layered_prisms(section, axis, axis[4:], centre=(400.0, 300.0), deformation=deformation))
    edges = np.linspace(0.0, 12e3, 13)
    seen = ring_means(grid, (400.0, 300.0), edges).mean
    mean = azimuthal_mean(section, deformation)
    fine = np.linspace(0.0, 12e3, 601)
    profile = ring_anomaly(mean, 0.5 * (fine[1:] + fine[:-1]), height_m=1.0).values
    weight = np.diff(fine**2).reshape(12, 50)
    expected = (profile.reshape(12, 50) * weight).sum(axis=1) / weight.sum(axis=1)
    assert_allclose(seen, expected, atol=5e-3 * np.abs(expected).max())
    assert read_provenance(mean)["deformation"] == deformation.model_dump()


def test_the_azimuthal_mean_keeps_shares():
    section = buried()
    sector = azimuthal_mean(section, Deformation(missing_from_degrees=33.0, missing_to_degrees=101.0))
    assert_allclose(section_mass(sector), (292 / 360) * section_mass(section), rtol=1e-10, atol=1.0)
    stretched = azimuthal_mean(section, Deformation(stretch_ratio=1.5))
    assert_allclose(section_mass(stretched).sum(), section_mass(section).sum(), rtol=1e-3)
    flat = section_of(np.zeros((2, 3)), [0.0, 200.0, 600.0], [0.0, 1e3, 4e3, 9e3])
    cover = azimuthal_mean(flat, Deformation(cover_thickness_km=0.3, cover_edge_km=3.0, cover_contrast_kg_m3=100.0))
    share = cover.density_contrast.values / [[100.0], [25.0]]
    segment = [r**2 * np.arccos(3e3 / r) - 3e3 * np.sqrt(r**2 - 9e6) for r in (4e3, 9e3)]
    expected = [0.0, segment[0] / np.pi / 15e6, (segment[1] - segment[0]) / np.pi / 65e6]
    assert_allclose(share, [expected, expected], atol=1e-12)


@given(
    st.lists(st.floats(-3.0, 3.0), min_size=4, max_size=4),
    st.floats(0.05, 3.0),
    st.floats(0.0, 6.3),
    st.floats(-2.0, 2.0),
)
@settings(max_examples=150, deadline=None)
def test_clipped_polygons_and_discs(corners, radius, angle, offset):
    west, east, south, north = (np.array([v]) for v in (*sorted(corners[:2]), *sorted(corners[2:])))
    box, size = rectangles(west, east, south, north), np.array([radius])
    whole = disc_cell_area(west, east, south, north, size)
    assert_allclose(disc_area(box, size), whole, atol=1e-12)
    normal = float(np.cos(angle)), float(np.sin(angle))
    this, that = clipped(box, normal, offset), clipped(box, (-normal[0], -normal[1]), -offset)
    assert_allclose(area(this) + area(that), (east - west) * (north - south), atol=1e-12)
    assert_allclose(disc_area(this, size) + disc_area(that, size), whole, atol=1e-12)
    assert area(this) >= -1e-13


@given(
    st.floats(0.0, 20.0),
    st.floats(0.0, 360.0),
    st.floats(1.0, 4.0),
    st.floats(0.0, 360.0),
    st.floats(0.0, 200.0),
    st.floats(0.0, 360.0),
)
@settings(max_examples=60, deadline=None)
def test_every_motion_keeps_volumes(tilt, dip, ratio, long, slope, deeper):
    bend = Deformation(
        tilt_degrees=tilt, tilt_azimuth_degrees=dip, stretch_ratio=ratio, stretch_azimuth_degrees=long,
        erosion_slope_m_per_km=slope, erosion_slope_azimuth_degrees=deeper,
    )  # fmt: skip
    motion = motion_of(bend)
    assert np.linalg.det(motion.matrix) == pytest.approx(1.0, abs=1e-12)
    assert is_axisymmetric(bend) == (tilt == 0.0 and ratio == 1.0 and slope == 0.0)


def test_stretch_comes_before_uneven_erosion_and_that_before_tilt():
    """One point carried by hand, with the long axis to the east, erosion deepening to the north, dip to the west."""
    bend = Deformation(
        stretch_ratio=2.25,
        stretch_azimuth_degrees=90.0,
        erosion_slope_m_per_km=100.0,
        tilt_degrees=20.0,
        tilt_azimuth_degrees=270.0,
    )
    east, north, down = 1.5 * 1e3, 2.4e3 / 1.5, 3e3
    down -= 0.1 * north  # where more was eroded, the ground is nearer
    sin, cos = np.sin(np.radians(20.0)), np.cos(np.radians(20.0))
    west, down = -east * cos - down * sin, -east * sin + down * cos
    assert_allclose(np.linalg.inv(motion_of(bend).matrix) @ [1e3, 2.4e3, 3e3], [-west, north, down], rtol=1e-12)


def test_which_deformations_leave_rings():
    assert is_axisymmetric(None)
    assert is_axisymmetric(Deformation(tilt_azimuth_degrees=20.0))
    for bent in (
        Deformation(tilt_degrees=0.1),
        Deformation(stretch_ratio=1.01),
        Deformation(erosion_slope_m_per_km=1.0),
        Deformation(missing_from_degrees=0.0, missing_to_degrees=10.0),
        Deformation(cover_thickness_km=0.1, cover_contrast_kg_m3=0.0),
    ):
        assert not is_axisymmetric(bent)


@pytest.mark.parametrize(
    ("bad", "word"),
    [
        ({"tilt_degrees": 21.0}, "less than or equal to 20"),
        ({"tilt_azimuth_degrees": -5.0}, "greater than or equal to 0"),
        ({"stretch_ratio": 0.8}, "greater than or equal to 1"),
        ({"missing_from_degrees": 10.0}, "give both"),
        ({"missing_from_degrees": 0.0, "missing_to_degrees": 360.0}, "less than everything"),
        ({"cover_thickness_km": 1.0}, "needs cover_thickness_km and cover_contrast_kg_m3"),
        ({"cover_contrast_kg_m3": -100.0}, "needs cover_thickness_km and cover_contrast_kg_m3"),
        ({"cover_edge_km": float("inf")}, "finite"),
    ],
)
def test_deformations_that_make_no_sense_are_refused(bad, word):
    with pytest.raises(ValidationError, match=word):
        Deformation(**bad)


def test_a_grid_that_stretch_outgrows_is_said():
    axis = np.arange(-8e3, 8.1e3, 400.0)
    layered_prisms(buried(), axis, axis)
    with pytest.warns(GravbasinWarning, match=r"reaches 8\.2 km from the centre but the section has contrast out to"):
        layered_prisms(buried(), axis, axis, deformation=Deformation(stretch_ratio=2.0, stretch_azimuth_degrees=90.0))
