"""The audit finds what is wrong, and the closed forms and the selfcheck stand on their own."""

import dataclasses
import json
import subprocess
import sys

import numpy as np
import pytest
from scipy import integrate

from gravbasin.constants import GRAVITATIONAL_CONSTANT, SI_TO_MGAL
from gravbasin.errors import InputError
from gravbasin.forward import audit_anomaly, grid_anomaly, layered_prisms, run_selfcheck
from gravbasin.forward import closed_forms as exact
from gravbasin.forward.bodies import revolution_section

TWO_PI_G = 2 * np.pi * GRAVITATIONAL_CONSTANT * SI_TO_MGAL
CENTRE = (500.0, -1.5e3)


def lens(cells):
    """A bowl of low density to 9 km, sampled on `cells` × 2 `cells`."""
    return revolution_section(
        lambda z: 9e3 * np.sqrt(np.maximum(1 - z / 2e3, 0.0)),
        np.linspace(0.0, 2e3, cells + 1),
        np.linspace(0.0, 10e3, 2 * cells + 1),
        contrast=lambda z: np.full_like(z, -150.0),
    )


@pytest.fixture(scope="module")
def parts():
    section = lens(8)
    prisms = layered_prisms(section, np.arange(-12e3, 12.1e3, 600.0), np.arange(-14e3, 11e3, 750.0), centre=CENTRE)
    return section, prisms, grid_anomaly(prisms, height_m=5.0)


def test_a_sound_grid_passes(parts):
    audit = audit_anomaly(*parts, height_m=5.0, seed=3, refined_section=lens(32), centre=CENTRE)
    peak = float(np.abs(parts[2]).max())
    assert audit.max_abs_difference_mgal < 1e-9
    assert 0.0 < audit.mesh_error_mgal < 0.02 * peak
    assert 0.0 < audit.grid_error_mgal < 0.02 * peak
    assert 0.0 < audit.flat_earth_error_mgal < 0.002 * peak
    verdict = audit.as_dict()
    assert list(verdict) == [
        "reference", "stations", "max_abs_difference_mgal", "discretisation_error_mgal", "flat_earth_error_mgal",
    ]  # fmt: skip
    assert verdict["stations"] == 25
    assert verdict["reference"].startswith("harmonica 0.")
    assert verdict["discretisation_error_mgal"] == max(audit.mesh_error_mgal, audit.grid_error_mgal)
    assert json.loads(json.dumps(verdict)) == verdict
    assert audit == audit_anomaly(*parts, height_m=5.0, seed=3, refined_section=lens(32), centre=CENTRE)


def test_a_wrong_grid_mesh_or_centre_is_measured(parts):
    section, prisms, grid = parts
    spoiled = audit_anomaly(section, prisms, grid + 0.01, height_m=5.0, seed=3, centre=CENTRE)
    assert spoiled.max_abs_difference_mgal == pytest.approx(0.01, rel=1e-6)
    height = audit_anomaly(section, prisms, grid, height_m=105.0, seed=3, centre=CENTRE)
    assert height.max_abs_difference_mgal > 0.05
    moved = audit_anomaly(section, prisms, grid, height_m=5.0, seed=3, centre=(0.0, 0.0))
    assert moved.grid_error_mgal > 1.0
    denser = audit_anomaly(section, prisms, grid, height_m=5.0, seed=3, centre=CENTRE, refined_section=section * 1.1)
    expected = 0.1 * float(np.abs(exact.paraboloid_bowl(-150.0, 9e3, 2e3)))
    assert denser.mesh_error_mgal == pytest.approx(expected, rel=0.02)
    assert audit_anomaly(section, prisms, grid, height_m=5.0, seed=3, centre=CENTRE).mesh_error_mgal == 0.0


def test_a_costly_audit_takes_fewer_stations_and_says_so(parts):
    pairs = 10 * int((parts[1].density_contrast != 0).sum())
    assert audit_anomaly(*parts, height_m=5.0, seed=3, centre=CENTRE, max_pairs=pairs).stations == 10
    assert audit_anomaly(*parts, height_m=5.0, seed=3, centre=CENTRE, max_pairs=1).stations == 5


def test_another_grid_is_refused(parts):
    section, prisms, grid = parts
    with pytest.raises(InputError, match=r"grid\.easting"):
        audit_anomaly(section, prisms, grid.assign_coords(easting=grid.easting + 600.0), height_m=5.0, seed=3)
    with pytest.raises(InputError, match="northing and easting"):
        audit_anomaly(section, prisms, grid[0], height_m=5.0, seed=3)


def stack(outline, bottom, station=0.0, contrast=lambda z: 1.0):
    """A solid of revolution from its axis, disc by disc: 2πG ∫ (1 − z/√(z² + a²)) dz."""

    def disc(z):
        return contrast(z) * (1 - (z + station) / np.hypot(z + station, outline(z)))

    return TWO_PI_G * integrate.quad(disc, 0.0, bottom, epsabs=0, epsrel=1e-11, limit=300)[0]


@pytest.mark.parametrize(
    ("name", "formula", "numeric", "printed"),
    [
        ("slab", exact.slab(2670.0, 1.0), TWO_PI_G * 2670, 0.1119688),
        ("sphere", exact.sphere(500.0, 1e3, 2e3),
         500 * stack(lambda z: np.sqrt(max(1e6 - (z - 1e3) ** 2, 0.0)), 2e3, 1e3), 3.494655),
        ("horizontal cylinder", exact.horizontal_cylinder(500.0, 500.0, 1e3), None, 5.241983),
        ("cylinder", exact.cylinder_axis(-250.0, 2e3, 500.0, 5e3),
         -250 * stack(lambda z: 2e3, 4.5e3, 500.0), -12.333212),
        ("cylinder from its axis", exact.cylinder_off_axis(-250.0, 2e3, 500.0, 5e3, 0.0), None, -12.333212),
        ("cylinder off axis", exact.cylinder_off_axis(-100.0, 1e4, 1e3, 3e3, 1e4), None, -3.222269),
        ("cylinder outside", exact.cylinder_off_axis(-100.0, 1e4, 1e3, 3e3, 2e4), None, -0.140013),
        ("hemisphere", exact.hemisphere_bowl(-300.0, 5e3),
         -300 * stack(lambda z: np.sqrt(max(25e6 - z * z, 0.0)), 5e3), -31.451898),
        ("inverted cone", exact.inverted_cone(-200.0, 1e4, 3e3),
         -200 * stack(lambda z: 1e4 * (1 - z / 3e3), 3e3), -15.319628),
        ("paraboloid", exact.paraboloid_bowl(-200.0, 1e4, 2e3),
         -200 * stack(lambda z: 1e4 * np.sqrt(1 - z / 2e3), 2e3), -13.320458),
        ("deep paraboloid", exact.paraboloid_bowl(-300.0, 1e3, 3e3),
         -300 * stack(lambda z: 1e3 * np.sqrt(1 - z / 3e3), 3e3), None),
        ("paraboloid as deep as its radius's half", exact.paraboloid_bowl(-300.0, 1e3, 500.0),
         -300 * stack(lambda z: 1e3 * np.sqrt(1 - z / 500), 500.0), None),
        ("cone", exact.cone_from_apex(500.0, 2e3, 45.0), TWO_PI_G * 500 * 2e3 * (1 - np.sqrt(0.5)), 12.282730),
        ("exponential", exact.exponential_slab(-150.0, 3e3), None, -18.871139),
        ("interface", exact.undulating_interface(400.0, 2e3, 1e5, 35e3), None, 3.72059),
        ("sheet far inside", exact.sheet_edge(1e5, 1e3, 1e12), exact.slab(1e5, 1.0), None),
        ("sheet at its edge", exact.sheet_edge(1e5, 1e3, 0.0), exact.slab(1e5, 0.5), None),
    ],
)  # fmt: skip
def test_closed_forms_agree_with_integration_and_printed_digits(name, formula, numeric, printed):
    """Printed digits: textbook formulas evaluated with G of CODATA 2018."""
    if numeric is not None:
        assert formula == pytest.approx(numeric, rel=1e-8)
    if printed is not None:
        assert formula == pytest.approx(printed, abs=1.1 * 10.0 ** -(len(str(printed).split(".")[1])))


def test_selfcheck_passes_and_every_row_says_where_it_comes_from():
    rows = run_selfcheck(quick=True)
    assert [row.name for row in rows if not row.passed] == []
    assert len({row.name for row in rows}) == len(rows) > 35
    assert all(row.source and row.unit for row in rows)
    assert all(row.difference <= row.limit for row in rows)


@pytest.mark.parametrize("engine", ["flat", "sphere", "layers"])
def test_selfcheck_notices_an_engine_that_is_off_by_a_thousandth(engine, monkeypatch):
    """Older values of G differ by 0.06 %: an engine wrong by that much must fail its own rows."""
    from gravbasin.forward import rings

    monkeypatch.setattr(f"gravbasin.forward.{engine}.GRAVITATIONAL_CONSTANT", 1.001 * GRAVITATIONAL_CONSTANT)
    rings._cached_table.cache_clear()
    failed = [row for row in run_selfcheck(quick=True) if not row.passed]
    rings._cached_table.cache_clear()
    word = {"flat": "rings", "sphere": "spherical", "layers": "grid"}[engine]
    assert sum(word in row.name for row in failed) >= 2
    with pytest.raises(dataclasses.FrozenInstanceError):
        failed[0].passed = True


def test_importing_the_room_loads_neither_harmonica_nor_numba():
    code = (
        "import sys, gravbasin.forward; print({'harmonica', 'numba', 'verde', 'matplotlib', 'dask'} & set(sys.modules))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "set()"
