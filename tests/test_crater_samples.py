"""Laboratory samples: minerals, velocity laws, refusals, outliers, and a posterior that covers the truth."""

from pathlib import Path

import numpy as np
import pytest

from gravbasin.crater import crater_model
from gravbasin.crater.minerals import MINERALS, brocher_density, gardner_density, grain_density
from gravbasin.crater.samples import compare_samples, read_samples, update_from_samples, with_samples
from gravbasin.errors import InputError
from gravbasin.scenario import Samples, Scenario

HEADER = "name,density_kg_m3,porosity,velocity_m_s,easting_km,northing_km,quartz_percent,k_feldspar_percent"


@pytest.fixture
def table(tmp_path: Path):
    def write(*rows: str, header: str = HEADER) -> Path:
        path = tmp_path / "samples.csv"
        path.write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")
        return path

    return write


def test_velocity_laws() -> None:
    """Brocher at 3.0, 3.8, 5.0 and 6.0 km/s: 2.224, 2.365, 2.535, 2.717 (computed from the polynomial, from memory)."""
    np.testing.assert_allclose(brocher_density([3000, 3800, 5000, 6000]), [2224, 2365, 2535, 2717], atol=0.6)
    assert float(gardner_density(4096.0)) == pytest.approx(310 * 8)


def test_modes_bracket_the_grain_density() -> None:
    low, high = grain_density({"quartz": [50.0, 100.0], "amphibole": [50.0, 0.0]})
    np.testing.assert_allclose(low, [2825.0, 2650.0])
    np.testing.assert_allclose(high, [3025.0, 2650.0])
    assert all(1500 < a <= b < 6000 for a, b in MINERALS.values())
    np.testing.assert_allclose(grain_density({"quartz": [95.0]})[0], [2650.0])


@pytest.mark.parametrize(
    ("row", "said"),
    [
        ("a,2.67,,,,,,", "row 1: density_kg_m3 = 2.67"),
        ("a,2670,2.5,,,,,", "a fraction"),
        ("a,2670,,5.8,,,,", "5.8 km/s is 5800"),
        ("a,heavy,,,,,,", "row 1: density_kg_m3 = heavy"),
        ("a,2670,,,,,30,40", "must be near 100"),
    ],
)
def test_bad_values_are_refused_by_row(table, row: str, said: str) -> None:
    with pytest.raises(InputError, match=said) as error:
        read_samples(table(row))
    assert "samples.csv" in str(error.value)


def test_bad_tables_are_refused(table, tmp_path: Path) -> None:
    with pytest.raises(InputError, match="did you mean density_kg_m3"):
        read_samples(table("2670", header="density_kg_m"))
    with pytest.raises(InputError, match="densities or velocities"):
        read_samples(table("0.02", header="porosity"))
    with pytest.raises(InputError, match="densities or velocities"):
        read_samples(table(header="density_kg_m3"))
    with pytest.raises(InputError, match="cannot be read"):
        read_samples(tmp_path / "none.csv")


def test_comparison_uses_minerals_pores_and_positions(table) -> None:
    path = table("a,2600,0.02,5000,13,4,60,40", "b,2590,,,16,8,60,40", "c,2900,,,19,12,60,40", "d,2610,,,,,,",
                 "e,2595,,,22,16,,")  # fmt: skip
    settings = Samples(path=path, centre_easting_km=10.0, centre_northing_km=0.0)
    seen = compare_samples(read_samples(path), settings)
    grain_low = 0.6 * 2650 + 0.4 * 2540
    assert float(seen.expected_low[0]) == pytest.approx(grain_low * 0.98 + 20)
    assert float(seen.expected_low[1]) == pytest.approx(grain_low)
    assert np.isnan(seen.expected_low[3])
    np.testing.assert_allclose(seen.radius[:3], [5e3, 10e3, 15e3])
    np.testing.assert_allclose(np.diff(seen.transect.values[[0, 1, 2, 4]]), 5e3)
    np.testing.assert_array_equal(seen.outlier, [0, 0, 1, 0, 0])
    assert float(seen.from_brocher[0]) == pytest.approx(2535, abs=1)
    assert seen.density.attrs["units"] == "kg m-3"


def scenario(path: Path, **tables: dict) -> Scenario:
    base = {"crater": {"rim_diameter_km": 30.0}, "history": {"erosion_km": 1.6}, "samples": {"path": path}}
    return Scenario(**(base | tables))


def invented(case: Scenario, rng: np.random.Generator, count: int, *, shift: float, porosity: float, share: float):
    """Rows of samples of a structure whose density and porosity are known."""
    model = crater_model(case)
    easting, northing = rng.uniform(-25, 25, count), rng.uniform(-25, 25, count)
    radius = 1e3 * np.hypot(easting, northing)
    below = np.maximum(model.ground.erosion - model.fill.interfaces(radius).floor, 0.0)
    weight = 9.80665 * 2690.0 * np.full(count, model.ground.erosion)
    shape = model.damage.open_porosity(below, radius, weight) / model.damage.porosity
    solid = float(model.column.crust_density(model.ground.erosion)) + shift
    pores = share * porosity * shape
    density = solid - (solid - 1000.0) * pores + rng.normal(0, 35.0, count)
    measured = np.clip(pores + rng.normal(0, 0.008, count), 0.0, None)
    return [f"s{i},{d:.1f},{p:.4f},,{e:.3f},{n:.3f},," for i, (d, p, e, n) in
            enumerate(zip(density, measured, easting, northing, strict=True))]  # fmt: skip


def test_the_posterior_covers_the_truth(table) -> None:
    """Truths drawn from the prior, 60 sets of 25 samples: 90 % intervals cover 54 +- 2.3; bounds four deviations off
    (false alarm below 1e-3 each)."""
    rng, inside = np.random.default_rng(17), np.zeros(2)
    for _ in range(60):
        shift, share = rng.normal(0, 60.0), rng.uniform(0.3, 1.0)
        porosity = 0.08 * np.exp(0.3 * rng.standard_normal())
        case = scenario(table("x,2700,,,,,,"))
        path = table(*invented(case, rng, 25, shift=shift, porosity=porosity, share=share))
        update = update_from_samples(case, compare_samples(read_samples(path), Samples(path=path, outlier_scores=99.0)))
        inside += [abs(update.density - update.prior_density - shift) < 1.645 * update.density_sd,
                   abs(np.log(update.porosity / porosity)) < 1.645 * update.porosity_scatter]  # fmt: skip
    assert np.all(inside >= 45)


def test_many_samples_narrow_and_few_leave_the_prior(table) -> None:
    rng = np.random.default_rng(2)
    case = scenario(table("x,2700,,,,,,"))
    many = scenario(table(*invented(case, rng, 200, shift=50.0, porosity=0.05, share=0.6)))
    narrowed, compared, update = with_samples(many)
    assert update.used == 200 - update.in_fill - update.outliers
    assert update.density - update.prior_density == pytest.approx(50.0, abs=4 * update.density_sd)
    assert update.density_sd < 10.0
    assert update.porosity_scatter < 0.3
    assert narrowed.damage.porosity == update.porosity
    assert crater_model(narrowed).column.top_density == pytest.approx(2680.0 + update.density - update.prior_density)
    assert compared.sizes["sample"] == 200
    _, _, weak = with_samples(scenario(table("x,2650,,,40,0,,")))
    assert 30.0 < weak.density_sd < 60.0
    assert weak.porosity == pytest.approx(0.08, rel=0.05)


def test_draws_follow_the_narrowed_scatter(table) -> None:
    rng = np.random.default_rng(3)
    case = scenario(table("x,2700,,,,,,"))
    narrowed, _, update = with_samples(scenario(table(*invented(case, rng, 150, shift=0.0, porosity=0.08, share=0.9))))
    draws = [crater_model(narrowed, np.random.default_rng(i)) for i in range(400)]
    log = np.log([d.damage.porosity for d in draws])
    assert log.std() == pytest.approx(update.porosity_scatter, rel=0.15)  # 400 draws: four standard errors are 14 %
    tops = [d.column.top_density for d in draws]
    assert np.std(tops) == pytest.approx(update.density_sd, rel=0.15)


def test_samples_of_the_fill_do_not_count_as_target(table) -> None:
    case = scenario(table("in,2300,,,1,2,,", "out,2700,,,30,0,,"), history={"erosion_km": 0.0})
    _, _, update = with_samples(case)
    assert (update.used, update.in_fill) == (1, 1)
    with pytest.raises(InputError, match="target rock"):
        with_samples(scenario(table("in,2300,,,1,2,,"), history={"erosion_km": 0.0}))


def test_samples_of_the_cover_move_the_cover(table) -> None:
    crater = {"rim_diameter_km": 30.0, "target_rock": "mixed", "cover_thickness_km": 2.5}
    case = scenario(table("a,2500,,,30,0,,", "b,2520,,,31,0,,", "c,2490,,,32,0,,"), crater=crater)
    narrowed, _, update = with_samples(case)
    assert update.prior_density == 2450.0
    assert narrowed.background.cover_density_kg_m3 == pytest.approx(update.density) != 2450.0
    assert narrowed.background.layers == case.background.layers


def test_a_scenario_without_samples_is_refused() -> None:
    with pytest.raises(InputError, match="samples"):
        with_samples(Scenario(crater={"rim_diameter_km": 30.0}))
