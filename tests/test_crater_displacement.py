"""The field of net rise: volumes that balance at every depth, no jumps, the Moho's rise at the Moho."""

import dataclasses
import itertools

import numpy as np
import pytest
from scipy.integrate import quad

from gravbasin.crater.displacement import Displacement
from gravbasin.crater.model import crater_model
from gravbasin.errors import InputError
from gravbasin.scenario import Scenario


def field(rim: float, **dimensions: float) -> Displacement:
    return crater_model(Scenario(crater={"rim_diameter_km": rim}, dimensions=dimensions)).displacement


@pytest.mark.parametrize("rim", [3.0, 9.0, 27.0, 60.0, 160.0, 300.0])
@pytest.mark.parametrize("share", [0.0, 0.3, 1.0, 1.8, 4.0])
def test_at_every_depth_what_rose_also_sank(rim: float, share: float) -> None:
    u, depth = field(rim), share * field(rim).base

    def ring(r: float) -> float:
        return float(u.net_rise([depth], [r])[0, 0]) * r

    edges = np.linspace(0.0, 1100.0 * rim, 12)
    volume = sum(quad(ring, a, b, epsabs=1e-9 * rim)[0] for a, b in itertools.pairwise(edges))
    moved = sum(quad(lambda r: abs(ring(r)), a, b, limit=200)[0] for a, b in itertools.pairwise(edges))
    assert abs(volume) <= 1e-7 * moved


@pytest.mark.parametrize("rim", [3.0, 27.0, 160.0])
def test_the_field_is_continuous_and_never_turns_rock_over(rim: float) -> None:
    u = field(rim)
    z = np.linspace(0.0, 1.3 * u.moho, 60_001)
    r = np.linspace(0.0, 800.0 * rim, 41)
    slope = np.diff(u.net_rise(z, r), axis=0) / np.diff(z)[:, None]
    assert slope.min() > -1.0  # z + u must increase with z
    assert np.abs(slope).max() < 2.0  # a jump would show as rise over one step
    assert u.steepest() < 0.9


def test_uplift_is_the_stated_rise_at_the_floor_and_ends_at_its_base() -> None:
    u = field(20.0, structural_uplift_km=1.8)
    rise = u.net_rise([u.floor, u.base, u.base + 1.0, 30e3], [0.0])[:, 0]
    np.testing.assert_allclose(rise, [1800.0, 0.0, 0.0, 0.0], atol=0.01)


def test_large_cores_collapse_into_a_ring() -> None:
    u = field(60.0)
    assert u.net_rise([u.floor], [u.ring_radius])[0, 0] > field(60.0).net_rise([u.floor], [1.5 * u.ring_radius])[0, 0]
    assert u.net_rise([u.floor], [0.0])[0, 0] < u.rise
    single = dataclasses.replace(u, ring_share=0.0)
    assert single.net_rise([u.floor], [0.0])[0, 0] == pytest.approx(u.rise, rel=1e-6)


def test_the_moho_rises_by_its_own_amount_within_its_moat() -> None:
    """1.5-2.0 km at the centre, 0.5-1.0 km down at 30-55 km, for about 200 km (Christeson et al. 2009)."""
    u = field(200.0)
    at_moho = u.net_rise([u.moho], np.linspace(0, 160e3, 321))[0]
    assert at_moho[0] == pytest.approx(1800.0, abs=30.0)
    lowest = int(np.argmin(at_moho))
    assert 30e3 <= lowest * 500.0 <= 55e3
    assert -1000.0 <= at_moho[lowest] <= -300.0  # the volume that rose allows 0.4 km, less than was seen
    assert field(90.0).moho_rise == 0.0


def test_impossible_uplift_is_refused_when_given_and_limited_when_drawn() -> None:
    with pytest.raises(InputError, match="turn over"):
        field(60.0, structural_uplift_km=34.5)
    shield = Scenario(crater={"rim_diameter_km": 250.0, "uplift_law": "shield"})
    assert "turn rock over" in crater_model(shield).dimensions.validity["structural_uplift_km"]
    for rim in (5.0, 100.0, 300.0):
        for law in ("stratigraphic", "early stratigraphic", "shield"):
            scenario = Scenario(crater={"rim_diameter_km": rim, "uplift_law": law})
            for seed in range(60):
                assert crater_model(scenario, np.random.default_rng(seed)).displacement.steepest() < 0.9
