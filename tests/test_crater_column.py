"""The target column: integrals against quadrature, presets, cover, pores before impact."""

import numpy as np
import pytest
from scipy.integrate import quad

from gravbasin.crater.background import PRESETS, Column, saturated_porosity
from gravbasin.crater.model import crater_model
from gravbasin.scenario import Scenario

COLUMN = Column((0.0, 1500.0, 9000.0), (2450.0, 2700.0, 2790.0), (0.02, 0.012, -0.004), 31e3, 3310.0, (0.1, 0.0, 0.02))


def model_of(**tables: dict) -> Column:
    return crater_model(Scenario(**({"crater": {"rim_diameter_km": 20.0}} | tables))).column


@pytest.mark.parametrize("depth", [-300.0, 0.0, 700.0, 1500.0, 8000.0, 30999.0, 33e3])
def test_mass_is_the_integral_of_density(depth: float) -> None:
    points = [p for p in (0.0, 1500.0, 9000.0) if min(0, depth) < p < max(0, depth)]
    expected = quad(COLUMN.crust_density, 0.0, depth, points=points or None, epsabs=1e-6)[0]
    assert float(COLUMN.crust_mass(depth)) == pytest.approx(expected, rel=1e-12, abs=1e-6)


def test_excess_mass_is_mass_without_the_density_at_the_ground() -> None:
    depth = np.linspace(-500.0, 40e3, 501)
    expected = COLUMN.crust_mass(depth) - COLUMN.top_density * depth
    np.testing.assert_allclose(COLUMN.excess_mass(depth), expected, rtol=0, atol=1e-12 * expected.max())


def test_density_jumps_to_the_mantle_at_the_moho_only() -> None:
    above, below = COLUMN.density([30999.9, 31000.1])
    assert below == 3310.0
    assert COLUMN.moho_contrast == pytest.approx(below - above, abs=1e-3)


def test_a_flat_column_has_no_excess_at_all() -> None:
    flat = Column((0.0,), (2670.0,), (0.0,), 35e3, 3300.0)
    assert not flat.excess_mass(np.linspace(-1e3, 50e3, 77)).any()


def test_porosity_follows_the_layers() -> None:
    np.testing.assert_allclose(COLUMN.porosity([-10.0, 10.0, 1600.0, 9000.0, 50e3]), [0.1, 0.1, 0.0, 0.02, 0.02])


def test_pore_volume_is_the_integral_of_porosity() -> None:
    for upper, lower in [(200.0, 1400.0), (1000.0, 2500.0), (1600.0, 8000.0), (100.0, 12e3)]:
        points = [p for p in (1500.0, 9000.0) if upper < p < lower]
        expected = quad(lambda z: float(COLUMN.porosity(z)), upper, lower, points=points or None)[0] / (lower - upper)
        mean = (COLUMN.pore_volume(lower) - COLUMN.pore_volume(upper)) / (lower - upper)
        assert float(mean) == pytest.approx(expected, rel=1e-9)


def test_presets_suit_the_target() -> None:
    shield, basin = model_of(), model_of(crater={"rim_diameter_km": 20.0, "target_rock": "sedimentary"})
    assert shield.top_density == 2680.0
    assert not shield.porosities or not any(shield.porosities)
    assert basin.top_density == 2400.0
    # Grains of 2700 with water give the density of the middle of each preset layer.
    for top, density, gradient, pores in PRESETS["sedimentary"][:3]:
        assert pores == pytest.approx((2700.0 - density - gradient) / 1700.0)
        assert top < 6
    deep = 12e3
    assert float(basin.crust_density(deep)) == pytest.approx(float(shield.crust_density(deep)), abs=1.0)


def test_cover_replaces_the_top_of_the_basement() -> None:
    crater = {"rim_diameter_km": 20.0, "target_rock": "mixed", "cover_thickness_km": 1.2}
    covered, bare = model_of(crater=crater), model_of()
    assert covered.crust_density(600.0) == 2450.0
    assert float(covered.crust_density(5000.0)) == pytest.approx(float(bare.crust_density(5000.0)))
    assert covered.porosity(600.0) == pytest.approx(saturated_porosity(2450.0)) == pytest.approx(250 / 1700)
    assert covered.porosity(1300.0) == 0.0
    stated = model_of(crater=crater, background={"cover_porosity": 0.03})
    assert stated.porosity(600.0) == 0.03


def test_stated_layers_win_over_the_preset() -> None:
    layers = [{"top_km": 0.0, "density_kg_m3": 2750.0, "porosity": 0.05}]
    column = model_of(background={"layers": layers})
    assert (column.top_density, float(column.porosity(100.0))) == (2750.0, 0.05)


def test_a_thin_crust_keeps_only_preset_layers_above_its_moho() -> None:
    column = model_of(background={"moho_km": 15.0})
    assert column.tops == (0.0,)
    assert column.moho == 15e3
