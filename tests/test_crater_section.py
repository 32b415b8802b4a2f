"""The section: what adds up, what must be exactly nothing, what does not depend on the mesh, what survives a file."""

import dataclasses
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from gravbasin.crater import (
    PARTS,
    UNITS,
    CraterModel,
    Mesh,
    contrast,
    contrast_parts,
    crater_model,
    default_mesh,
    density_section,
    section_parts,
    shared_mesh,
)
from gravbasin.labels import read_provenance
from gravbasin.scenario import Scenario

FLAT = {"layers": [{"top_km": 0.0, "density_kg_m3": 2670.0}], "mantle_density_kg_m3": 2670.0}


def scenario(rim: float = 40.0, **tables: dict) -> Scenario:
    tables["crater"] = {"rim_diameter_km": rim} | tables.get("crater", {})
    return Scenario(**tables)


def part(model: CraterModel, name: str, mesh: Mesh) -> np.ndarray:
    return contrast_parts(model, mesh)[PARTS.index(name)]


def ring_mass(values: np.ndarray, mesh: Mesh) -> np.ndarray:
    """Mass per area of every ring, kg/m²."""
    return np.diff(mesh.depth_edges) @ values


@pytest.mark.parametrize("rim", [3.0, 30.0, 160.0])
def test_rock_that_moves_in_a_flat_column_makes_no_contrast_at_all(rim: float) -> None:
    model = crater_model(scenario(rim, background=FLAT, history={"erosion_km": 0.7}))
    mesh = default_mesh(model)
    assert not part(model, "crustal uplift", mesh).any()
    assert not part(model, "Moho uplift", mesh).any()


def test_a_crater_of_nothing_leaves_nothing() -> None:
    model = crater_model(
        scenario(
            background=FLAT,
            damage={"porosity": 0.0},
            fill={"hollow": "air", "breccia_contrast_kg_m3": 0.0, "melt_contrast_kg_m3": 0.0},
        )
    )
    assert not contrast(model, default_mesh(model)).any()


def test_the_moho_part_is_that_of_the_raised_interface_alone() -> None:
    """Mass per area of the Moho part is the contrast times the volume of mantle that came above the old interface,
    less that of crust below it; over the whole plane it vanishes because as much sank as rose."""
    model = crater_model(scenario(170.0))
    mesh = default_mesh(model, layers=400, rings=200)
    mass = ring_mass(part(model, "Moho uplift", mesh), mesh)
    below = np.linspace(model.column.moho - 4e3, model.column.moho + 4e3, 8001)
    source = below[:, None] + model.displacement.net_rise(below, mesh.radius)
    interface = np.array([np.interp(model.column.moho, column, below) for column in source.T])
    expected = model.column.moho_contrast * (model.column.moho - interface)
    np.testing.assert_allclose(mass, expected, atol=0.01 * np.abs(expected).max())
    area = np.pi * np.diff(mesh.radius_edges**2)
    assert abs(mass @ area) < 0.02 * np.abs(mass) @ area


@pytest.mark.parametrize("rock", ["crystalline", "sedimentary", "mixed"])
def test_parts_add_up_to_the_whole(rock: str) -> None:
    cover = {"cover_thickness_km": 1.1} if rock == "mixed" else {}
    case = scenario(crater={"target_rock": rock, **cover}, history={"erosion_km": 0.3, "burial_km": 0.45})
    whole, parts = density_section(case), section_parts(case)
    assert list(parts.part.values) == list(PARTS)
    np.testing.assert_allclose(parts.density_contrast.sum("part"), whole.density_contrast, atol=1e-9)
    model = crater_model(case)
    np.testing.assert_array_equal(whole.density_contrast, contrast(model, default_mesh(model)))


@pytest.mark.parametrize("name", ["sediment in the hollow", "melt", "breccia", "suevite"])
def test_the_mass_of_a_thin_unit_does_not_depend_on_the_layers(name: str) -> None:
    model = crater_model(scenario(18.0, crater={"target_rock": "mixed", "cover_thickness_km": 0.33}))
    fine = default_mesh(model, layers=1500, rings=60)
    coarse = default_mesh(model, layers=20, rings=60)
    exact = ring_mass(part(model, name, fine), fine)
    # Rock under the cover is dense, so breccia changes its contrast there; a cell that straddles takes the mean.
    loose = 1e-9 if name in ("sediment in the hollow", "melt") else 0.01
    np.testing.assert_allclose(ring_mass(part(model, name, coarse), coarse), exact, atol=loose * np.abs(exact).max())


@pytest.mark.parametrize("rim", [6.0, 45.0, 150.0])
def test_an_eroded_section_is_the_fresh_one_with_its_top_removed(rim: float) -> None:
    eroded = crater_model(scenario(rim, history={"erosion_km": 1.5}))
    fresh = dataclasses.replace(eroded, ground=dataclasses.replace(eroded.ground, erosion=0.0))
    mesh = default_mesh(eroded)
    top = np.linspace(0.0, 1500.0, 7)
    whole = Mesh(np.concatenate([top[:-1], 1500.0 + mesh.depth_edges]), mesh.radius_edges)
    np.testing.assert_allclose(contrast_parts(eroded, mesh), contrast_parts(fresh, whole)[:, 6:], atol=1e-6)


def test_burial_only_adds_distance_where_no_crack_closes() -> None:
    bare = crater_model(scenario(damage={"closure_pressure_mpa": 1e9}, history={"erosion_km": 1.0}))
    buried = crater_model(scenario(damage={"closure_pressure_mpa": 1e9}, history={"erosion_km": 1.0, "burial_km": 0.8}))
    mesh = default_mesh(bare)
    deep = Mesh(np.concatenate([[0.0, 400.0], 800.0 + mesh.depth_edges]), mesh.radius_edges)
    below = contrast(buried, deep)
    assert not below[:2].any()
    np.testing.assert_allclose(below[2:], contrast(bare, mesh), atol=1e-9)


def test_deep_burial_closes_cracks_for_good() -> None:
    fresh, buried, exhumed = (
        crater_model(scenario(history={"events": events}))
        for events in ([], [{"bury_km": 4.0}], [{"bury_km": 4.0}, {"erode_km": 4.0}])
    )
    mesh = default_mesh(fresh)
    deep = Mesh(np.concatenate([[0.0], 4000.0 + mesh.depth_edges]), mesh.radius_edges)
    open_mass = ring_mass(part(fresh, "fractures", mesh), mesh)[20]
    closed_mass = ring_mass(part(exhumed, "fractures", mesh), mesh)[20]
    assert 0.1 * open_mass > closed_mass > 0.95 * open_mass  # both negative
    np.testing.assert_allclose(part(buried, "fractures", deep)[1:], part(exhumed, "fractures", mesh), atol=1e-9)


def test_uneven_edges_refine_to_one_answer() -> None:
    """Mass of every part converges at second order or better as cells shrink."""
    model = crater_model(scenario(60.0, history={"erosion_km": 0.4}))

    def masses(factor: int) -> np.ndarray:
        mesh = default_mesh(model, layers=20 * factor, rings=40 * factor)
        area = np.pi * np.diff(mesh.radius_edges**2)
        return np.array([ring_mass(values, mesh) @ area for values in contrast_parts(model, mesh)])

    reference = masses(32)
    errors = [np.abs(masses(f) - reference)[4] for f in (2, 4, 8)]  # fractures: the smooth one
    assert errors[0] > errors[1] > errors[2]
    assert np.log2(errors[0] / errors[2]) / 2 > 1.6
    share = np.abs(masses(4) - reference).sum() / np.abs(reference).sum()
    assert share < 0.003  # default resolution: 0.3 % of all mass moved


def test_erosion_below_everything_leaves_nothing() -> None:
    model = crater_model(scenario(20.0, history={"erosion_km": 25.0}))
    assert not contrast(model, default_mesh(model)).any()


def test_one_mesh_serves_many_diameters() -> None:
    models = [crater_model(scenario(rim, history={"erosion_km": e, "burial_km": b}))
              for rim, e, b in [(15.0, 0.2, 0.0), (40.0, 3.0, 0.7), (110.0, 0.0, 0.3)]]  # fmt: skip
    shared = shared_mesh(models)
    area = np.pi * np.diff(shared.radius_edges**2)
    for model in models:
        own = default_mesh(model, layers=160, rings=320)
        exact = ring_mass(contrast(model, own), own) @ (np.pi * np.diff(own.radius_edges**2))
        assert ring_mass(contrast(model, shared), shared) @ area == pytest.approx(exact, rel=0.02)


def test_units_and_density_make_sense() -> None:
    case = scenario(60.0, crater={"target_rock": "mixed", "cover_thickness_km": 0.5},
                    history={"burial_km": 0.3})  # fmt: skip
    section = density_section(case)
    seen = {UNITS[code] for code in np.unique(section.unit)}
    assert {"cover", "sediment", "breccia", "fractured rock", "intact target", "suevite"} <= seen
    assert section.density.where(section.unit == UNITS.index("cover")).mean() == pytest.approx(2400.0)
    assert float(section.density.min()) > 1800.0
    assert float(section.porosity.max()) < 0.5
    assert float(section.porosity.min()) >= 0.0
    far = section.isel(radius=-1)
    np.testing.assert_allclose(far.density_contrast, 0.0, atol=0.1)


def test_a_hollow_of_water_or_air_is_coded_as_such() -> None:
    for hollow in ("water", "air"):
        section = density_section(scenario(20.0, fill={"hollow": hollow}))
        assert UNITS.index("water or air") in section.unit
        assert UNITS.index("sediment") not in section.unit


def test_a_section_survives_netcdf(tmp_path: Path) -> None:
    section = density_section(scenario(25.0))
    section.to_netcdf(tmp_path / "section.nc", engine="h5netcdf")
    with xr.open_dataset(tmp_path / "section.nc", engine="h5netcdf", decode_cf=False) as back:
        xr.testing.assert_equal(back.load(), section)
        for name in section.variables:
            assert back[name].attrs["units"] == section[name].attrs["units"]
            assert back[name].attrs["long_name"] == section[name].attrs["long_name"]
        assert list(back.unit.attrs["flag_values"]) == list(range(len(UNITS)))
        assert len(back.unit.attrs["flag_meanings"].split()) == len(UNITS)
        assert read_provenance(back) == read_provenance(section)
        assert len(read_provenance(section)["scenario"]) == 64


def test_rebound_bends_units_upwards_and_is_off_by_default() -> None:
    flat = crater_model(scenario(60.0, history={"erosion_km": 2.0}))
    history = {"erosion_km": 2.0, "rebound_elastic_thickness_km": 20.0, "eroded_radius_km": 50.0}
    bent = crater_model(scenario(60.0, history=history))
    assert flat.rebound is None
    mesh = default_mesh(bent)
    crust, moho = (part(bent, name, mesh) - part(flat, name, mesh) for name in ("crustal uplift", "Moho uplift"))
    rise = bent.rebound.rise([0.0]) - bent.rebound.rise([bent.outer_radius])
    mass = ring_mass(moho, mesh)
    assert mass[0] == pytest.approx(bent.column.moho_contrast * rise[0], rel=0.02)
    assert abs(mass[-1]) < 0.02 * mass[0]
    assert ring_mass(crust, mesh)[0] > 0  # denser rock from below everywhere in the crust


def test_risen_crust_is_the_column_at_the_depth_it_came_from() -> None:
    """Mass per area below the floor against quadrature of rho0(z + u) - rho0(z), cells cut by the floor included."""
    model = crater_model(scenario(30.0, crater={"target_rock": "mixed", "cover_thickness_km": 1.1}))
    mesh = default_mesh(model, layers=25, rings=60)
    mass = ring_mass(part(model, "crustal uplift", mesh), mesh)
    z = np.linspace(0.0, model.base, 40_001)
    floor = model.fill.interfaces(mesh.radius).floor
    risen = model.column.crust_density(z[:, None] + model.displacement.net_rise(z, mesh.radius))
    contrast_below = np.where(z[:, None] >= floor, risen - model.column.crust_density(z)[:, None], 0.0)
    expected = np.trapezoid(contrast_below, z, axis=0)
    np.testing.assert_allclose(mass, expected, atol=0.012 * np.abs(expected).max())


def test_rebound_lifts_the_units_too() -> None:
    history = {"erosion_km": 0.3, "rebound_elastic_thickness_km": 10.0, "eroded_radius_km": 30.0}
    case = scenario(60.0, history=history, dimensions={"peak_height_km": 0.0})
    bent = crater_model(case)
    flat = dataclasses.replace(bent, rebound=None)
    mesh = default_mesh(bent)
    lost = ring_mass(part(bent, "sediment in the hollow", mesh) - part(flat, "sediment in the hollow", mesh), mesh)
    rise = bent.rebound.rise([0.0]) - bent.rebound.rise([bent.outer_radius])
    assert rise > 50.0
    # That much less sediment is left in the middle, at its contrast at the base of the hollow.
    base = bent.fill.interfaces(np.zeros(1)).hollow[0]
    assert lost[0] == pytest.approx(float(rise[0] * (bent.column.crust_density(base) - 2300.0)), rel=0.02)
