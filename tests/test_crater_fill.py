"""Rocks within the crater: shapes, volumes, order, compaction (curves: published.toml)."""

import numpy as np
import pytest

from gravbasin.crater.cells import assemble, default_mesh
from gravbasin.crater.fill import LITHOLOGIES, Fill, lithified_density
from gravbasin.crater.model import CraterModel, crater_model
from gravbasin.scenario import Scenario


def model(rim: float, **tables: dict) -> CraterModel:
    tables["crater"] = {"rim_diameter_km": rim} | tables.get("crater", {})
    return crater_model(Scenario(**tables))


def volume(share: np.ndarray, mesh) -> float:
    height = np.diff(mesh.depth_edges)[: len(share), None]
    return float(np.sum(share * height * np.pi * np.diff(mesh.radius_edges**2)))


@pytest.mark.parametrize("rim", [3.0, 12.0, 40.0, 110.0])
def test_melt_keeps_its_volume_on_the_rings_of_a_section(rim: float) -> None:
    """Rings sample the sheet at their middles: measured 0.1 % on 160 rings, the tolerance is twice that."""
    crater = model(rim)
    mesh = default_mesh(crater)
    _, _, melt, _ = assemble(crater, mesh).shares
    assert volume(melt, mesh) == pytest.approx(1e9 * crater.dimensions.melt_volume_km3, rel=2e-3)


@pytest.mark.parametrize("rim", [2.5, 5.0, 28.0, 90.0, 300.0])
@pytest.mark.parametrize("rock", ["crystalline", "sedimentary"])
def test_units_lie_in_order_and_end_at_the_rim(rim: float, rock: str) -> None:
    fill = model(rim, crater={"target_rock": rock}).fill
    radius = np.linspace(0.0, 600.0 * rim, 301)
    bases = fill.interfaces(radius)
    for upper, lower in zip((0.0 * radius, *bases), bases, strict=False):
        assert np.all(lower >= upper - 1e-9)
    assert not np.any([base[radius > 500.0 * rim] for base in bases])


def test_a_simple_crater_is_a_paraboloid_of_its_true_depth() -> None:
    """True depth 0.28 D^1.02 (Grieve & Pilkington 1996, from memory): hollow and lens together, within 2 %."""
    fill = model(3.0).fill
    floor = fill.interfaces(np.array([0.0, 750.0])).floor
    assert floor[0] == pytest.approx(280.0 * 3.0**1.02, rel=0.02)
    assert floor[1] == pytest.approx(0.75 * floor[0], rel=0.01)


def test_suevite_tops_the_breccia_without_making_room() -> None:
    dry = model(24.0, crater={"target_rock": "mixed", "cover_thickness_km": 0.6},
                dimensions={"suevite_thickness_km": 0.0, "peak_height_km": 0.0})  # fmt: skip
    wet = model(24.0, crater={"target_rock": "mixed", "cover_thickness_km": 0.6},
                dimensions={"suevite_thickness_km": 0.3, "peak_height_km": 0.0})  # fmt: skip
    radius = np.array([2000.0])
    assert wet.fill.interfaces(radius).floor == pytest.approx(dry.fill.interfaces(radius).floor)
    bases = wet.fill.interfaces(radius)
    assert bases.suevite - bases.hollow == pytest.approx(300.0)


def test_a_differentiated_sheet_keeps_its_mean_density() -> None:
    plain, layered = model(90.0), model(90.0, fill={"melt_layering_kg_m3": 140.0})
    mesh = default_mesh(plain)
    one, other = (assemble(m, mesh).parts[2] for m in (plain, layered))
    height = np.diff(mesh.depth_edges)[: len(one), None]
    np.testing.assert_allclose((one * height).sum(axis=0), (other * height).sum(axis=0), atol=1e-8)
    thickest = int(np.argmax((one * height).sum(axis=0) * -1))
    column = (other - one)[:, thickest]
    assert column.min() == pytest.approx(-70.0, abs=1.0)  # upper half lighter by half the difference
    assert column.max() == pytest.approx(70.0, abs=1.0)
    assert np.argmin(column) < np.argmax(column)


def test_compaction_remembers_the_largest_burial() -> None:
    fill = {"lithology": "shale"}
    shallow = model(40.0, fill=fill)
    exhumed = model(40.0, fill=fill, history={"events": [{"bury_km": 2.0}, {"erode_km": 2.0}]})
    mesh = default_mesh(shallow)
    at = assemble(shallow, mesh).parts[0][0, 5], assemble(exhumed, mesh).parts[0][0, 5]
    middle = assemble(shallow, mesh).middle[0]
    curve = LITHOLOGIES["shale"]
    assert at[1] - at[0] == pytest.approx(float(curve.density(middle + 2000.0) - curve.density(middle)))


def test_sediment_density_by_age_given_or_marine() -> None:
    assert lithified_density(None) == 2300.0
    assert [lithified_density(a) for a in (0.1, 1.0, 1000.0, 3000.0)] == [2000.0, 2000.0, 2500.0, 2500.0]
    given = {"sediment_density_kg_m3": 2222.0}
    assert (
        crater_model(
            Scenario(crater={"rim_diameter_km": 9.0}, fill=given), np.random.default_rng(1)
        ).fill.sediment_density
        == 2222.0
    )
    assert model(9.0, crater={"setting": "marine"}).fill.sediment_density == 2530.0
    drawn = [crater_model(Scenario(crater={"rim_diameter_km": 9.0}), np.random.default_rng(i)) for i in range(200)]
    values = [m.fill.sediment_density for m in drawn]
    assert min(values) >= 1600.0
    assert np.median(values) == pytest.approx(2300.0, abs=60.0)  # 200 draws: standard error of the median 12


def test_fill_is_frozen_and_its_shape_scales() -> None:
    """Doubling every length doubles every interface."""
    import dataclasses

    fill = model(40.0).fill
    lengths = {f.name: 2 * getattr(fill, f.name) for f in dataclasses.fields(Fill)
               if f.name.endswith(("radius", "depth", "height", "width", "thickness"))}  # fmt: skip
    double = dataclasses.replace(fill, melt_volume=8 * fill.melt_volume, **lengths)
    radius = np.linspace(0, 25e3, 51)
    np.testing.assert_allclose(double.interfaces(2 * radius), 2 * np.array(fill.interfaces(radius)), atol=1e-6)


def test_suevite_fills_the_collapsed_disruption_cavity() -> None:
    """0.49 rim diameters wide (Pilkington & Hildebrand 2003)."""
    fill = model(24.0, crater={"target_rock": "sedimentary"}).fill
    radius = np.linspace(0.0, 12e3, 2401)
    bases = fill.interfaces(radius)
    held = bases.suevite > bases.hollow + 1e-6
    assert 2 * radius[held][-1] == pytest.approx(0.49 * 24e3, rel=0.005)
