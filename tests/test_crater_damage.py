"""Porosity: the three published forms, pressure, taper, core, sealing, and rock that was porous already."""

import dataclasses
import math

import numpy as np
import pytest

from gravbasin.crater.damage import SEALED_BRECCIA, SEALED_FRACTURES, Damage, bulking, sealing
from gravbasin.crater.model import crater_model
from gravbasin.scenario import Scenario

OPEN = Damage(
    form="exponential", porosity=0.1, decay=3000.0, base=1e9, closure_pressure=1e15, exponent=1.0, retention=1.0,
    taper_radius=1e12, core_suppression=0.0, core_radius=5000.0, fluid_density=1000.0,
)  # fmt: skip
DEPTH = np.array([0.0, 500.0, 3000.0, 7000.0])


def along(damage: Damage, pressure: float = 0.0, radius: float = 0.0) -> np.ndarray:
    return damage.open_porosity(DEPTH, np.array(radius), np.full(4, pressure))


@pytest.mark.parametrize(
    ("form", "expected"),
    [
        ("exponential", lambda z: 0.1 * math.exp(-z / 3000)),
        ("hyperbolic", lambda z: 0.1 * 3000**2 / (z + 3000) ** 2),
    ],
)
def test_forms_in_depth(form: str, expected) -> None:
    np.testing.assert_allclose(along(dataclasses.replace(OPEN, form=form)), [expected(z) for z in DEPTH], rtol=1e-9)


@pytest.mark.parametrize("exponent", [1.0, 0.5, 2.0])
def test_form_in_pressure(exponent: float) -> None:
    damage = dataclasses.replace(OPEN, form="pressure", exponent=exponent, closure_pressure=150e6)
    for pressure, expected in [(0.0, 0.1), (60e6, 0.1 * 0.6**exponent), (150e6, 0.0), (400e6, 0.0)]:
        np.testing.assert_allclose(along(damage, pressure), expected, atol=1e-15)


def test_no_form_leaves_pores_beyond_closure_or_base_or_above_the_floor() -> None:
    for form in ("exponential", "hyperbolic", "pressure"):
        damage = dataclasses.replace(OPEN, form=form, closure_pressure=200e6, base=5000.0)
        assert not along(damage, pressure=200e6).any()
        assert along(damage)[-1] == 0.0
        assert damage.open_porosity(np.array([-1.0]), np.zeros(1), np.zeros(1))[0] == 0.0
        loads = [float(along(damage, p)[1]) for p in np.linspace(0, 210e6, 30)]
        assert np.all(np.diff(loads) <= 0)


def test_taper_and_core() -> None:
    damage = dataclasses.replace(OPEN, taper_radius=10e3, core_suppression=0.7, core_radius=3000.0)
    assert along(damage, radius=0.0)[0] == pytest.approx(0.03)
    assert along(damage, radius=10e3)[0] == pytest.approx(0.1 / math.e, rel=1e-4)


def test_sealing_follows_setting_and_age() -> None:
    """Ends: a fresh crater on land 1; fractures 1/4 and breccia 1/10 under the sea (Sturkell et al. 1998)."""
    assert sealing("land", 0.5, sealed=SEALED_FRACTURES).expected == 1.0
    assert sealing("land", None, sealed=SEALED_FRACTURES).expected == 1.0
    assert sealing("marine", 455.0, sealed=SEALED_BRECCIA).expected == 0.1
    ages = [sealing("land", age, sealed=SEALED_FRACTURES) for age in (1.0, 30.0, 1000.0, 3000.0)]
    assert [a.expected for a in ages] == sorted((a.expected for a in ages), reverse=True)
    assert ages[-1].low == ages[-2].low == pytest.approx(SEALED_FRACTURES)
    hot = sealing("hydrothermal", 300.0, sealed=SEALED_FRACTURES)
    assert SEALED_FRACTURES < hot.expected < 1.0
    for case in (*ages, hot, sealing("marine", None, sealed=SEALED_FRACTURES)):
        drawn = [case.draw(np.random.default_rng(i)) for i in range(300)]
        assert case.low <= min(drawn) <= case.expected <= max(drawn) <= case.high


def test_given_retention_wins_over_setting_and_age() -> None:
    scenario = Scenario(
        crater={"rim_diameter_km": 20.0, "setting": "marine", "age_myr": 455.0},
        damage={"retention": 0.8}, fill={"breccia_retention": 0.9},
    )  # fmt: skip
    model = crater_model(scenario, np.random.default_rng(1))
    assert model.damage.retention == 0.8
    assert model.damage.fluid_density == 1030.0


def test_porous_rock_opens_less_and_changes_sign_at_the_crossover() -> None:
    """Low below about 7 % porosity before impact, high above (Milbury et al. 2015)."""
    before = [0.0, 0.035, 0.07, 0.105, 0.3]
    np.testing.assert_allclose(bulking(before, 0.07, least=-0.5), [1.0, 0.5, 0.0, -0.5, -0.5], atol=1e-12)
    np.testing.assert_allclose(bulking(before, 0.07), [1.0, 0.5, 0.0, 0.0, 0.0], atol=1e-12)  # water resists crushing
    assert dataclasses.replace(OPEN, fluid_density=0.0).least_bulking < 0 == OPEN.least_bulking


def test_porosity_is_suppressed_with_depth_so_amplitude_can_level_off() -> None:
    """Pressure closes cracks below about 8 km whatever the diameter (5-10 km: common practice)."""
    for rim in (60.0, 150.0):
        damage = crater_model(Scenario(crater={"rim_diameter_km": rim})).damage
        weight = 2750.0 * 9.81 * np.array([1000.0, 8000.0])
        shallow, deep = damage.open_porosity(np.array([200.0, 7500.0]), np.array(0.3e3 * rim), weight)
        assert shallow > 0.03
        assert deep < 0.001
