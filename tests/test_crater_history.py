"""Erosion and burial in order, and the largest weight the floor has carried."""

import numpy as np
import pytest

from gravbasin.constants import STANDARD_GRAVITY
from gravbasin.crater.history import Burial, Erosion, Ground, after
from gravbasin.crater.model import crater_model, ground_of
from gravbasin.crater.overburden import filling_density, largest_overburden
from gravbasin.errors import InputError
from gravbasin.scenario import Scenario


def scenario(**tables: dict) -> Scenario:
    return Scenario(**({"crater": {"rim_diameter_km": 24.0}} | tables))


@pytest.mark.parametrize(
    ("events", "stripped", "cover", "loads"),
    [
        ([], 0, 0, ()),
        ([Erosion(2000), Burial(500), Erosion(800)], 2300, 0, ((2000, 500),)),
        ([Burial(900), Erosion(300)], 0, 600, ((0, 900),)),
        (
            [Erosion(100), Burial(50), Burial(70), Erosion(20), Burial(10)],
            100,
            110,
            ((100, 50), (100, 120), (100, 110)),
        ),
        ([Burial(0.0), Erosion(0.0)], 0, 0, ()),
    ],
)
def test_events_apply_in_order_and_erosion_takes_cover_first(events, stripped, cover, loads) -> None:
    ground = after(events)
    assert (ground.erosion, ground.cover, ground.loads) == (stripped, cover, loads)


def test_the_net_change_of_the_ground_is_the_sum_of_events() -> None:
    rng = np.random.default_rng(4)
    for _ in range(100):
        sizes = rng.uniform(0, 1000, 6)
        kinds = rng.integers(0, 2, 6)
        ground = after([(Erosion, Burial)[k](s) for k, s in zip(kinds, sizes, strict=True)])
        assert ground.cover - ground.erosion == pytest.approx(np.sum(np.where(kinds == 1, sizes, -sizes)))


def test_negative_thickness_is_refused() -> None:
    with pytest.raises(InputError, match="negative"):
        after([Erosion(-1.0)])


def test_depths_count_from_the_ground_before_impact() -> None:
    ground = Ground(erosion=3000.0, cover=800.0)
    np.testing.assert_allclose(ground.original_depth(np.array([0.0, 800.0, 1800.0])), [2200.0, 3000.0, 4000.0])


def test_largest_burial_remembers_cover_that_is_gone() -> None:
    ground = after([Erosion(500.0), Burial(2000.0), Erosion(2000.0)])
    np.testing.assert_allclose(ground.largest_burial(np.array([600.0, 3000.0])), [2100.0, 4500.0])


def test_scenario_histories() -> None:
    assert ground_of(scenario(history={"erosion_km": 1.5})).erosion == 1500.0
    aged = scenario(crater={"rim_diameter_km": 24.0, "age_myr": 400.0}, history={"erosion_rate_m_per_myr": 2.5})
    assert ground_of(aged).erosion == 1000.0
    events = scenario(history={"events": [{"bury_km": 1.0}, {"erode_km": 2.5}]})
    assert ground_of(events).erosion == 1500.0


def test_stripping_the_whole_crust_is_refused() -> None:
    with pytest.raises(InputError, match="must leave some crust"):
        crater_model(scenario(history={"erosion_km": 36.0}))


def weight_at_floor(**tables: dict) -> tuple[float, float, float]:
    """Largest weight on the floor at r = 0.3 D (Pa), hollow and floor there (m)."""
    model = crater_model(scenario(**tables))
    bases = model.fill.interfaces(np.array([7200.0]))
    surface = largest_overburden(model.column, model.fill, model.ground, bases)
    mass = model.column.crust_mass(bases.floor) + surface
    return float(STANDARD_GRAVITY * mass[0]), float(bases.hollow[0]), float(bases.floor[0])


def test_the_open_floor_carries_breccia_only() -> None:
    weight, hollow, floor = weight_at_floor(fill={"hollow": "air"})
    # Breccia is the intact column less 270 kg/m³, melt the column less 80 (the sheet is thin at this radius).
    intact = 2680 * (floor - hollow) + 0.5 * 0.01 * (floor**2 - hollow**2)
    assert weight == pytest.approx(STANDARD_GRAVITY * (intact - 270 * (floor - hollow)), rel=0.01)


def test_sediment_and_burial_add_their_own_weight() -> None:
    open_floor, hollow, _ = weight_at_floor(fill={"hollow": "air"})
    filled, _, _ = weight_at_floor()
    assert filled - open_floor == pytest.approx(STANDARD_GRAVITY * 2300 * hollow)
    buried, _, _ = weight_at_floor(history={"burial_km": 2.0})
    assert buried - filled == pytest.approx(STANDARD_GRAVITY * 2400 * 2000.0)


def test_erosion_takes_no_weight_back() -> None:
    once, _, _ = weight_at_floor(history={"burial_km": 2.0})
    exhumed, _, _ = weight_at_floor(history={"events": [{"bury_km": 2.0}, {"erode_km": 2.4}]})
    assert exhumed == pytest.approx(once)


def test_a_buried_hollow_is_full_of_what_buried_it() -> None:
    for hollow in ("air", "water"):
        model = crater_model(scenario(fill={"hollow": hollow}, history={"burial_km": 1.0}))
        np.testing.assert_array_equal(filling_density(model.fill, model.ground, np.array([100.0])), [2400.0])
    empty = crater_model(scenario(fill={"hollow": "air"}))
    assert filling_density(empty.fill, empty.ground, np.array([100.0])) is None
