"""Banks: priors, weights, and profiles as good as those of the full mesh."""

import numpy as np
import pytest

from gravbasin.crater import crater_model, density_section
from gravbasin.crater.priors import Range
from gravbasin.errors import CannotFinish
from gravbasin.forward.rings import ring_anomaly, ring_table
from gravbasin.inference.bank import Bank, ImpactFamily, bank_of, build_bank
from gravbasin.scenario import Scenario

RADIUS = np.linspace(0.0, 60e3, 40)


@pytest.fixture(scope="module")
def family():
    return ImpactFamily(Scenario(crater={"rim_diameter_km": 40.0}, history={"erosion_km": 1.0}))


@pytest.fixture(scope="module")
def bank(family) -> Bank:
    return build_bank(family, RADIUS, models=300, height=1.0, rng=np.random.default_rng(2))


def test_parameters_stay_within_their_priors(family, bank):
    for name, prior in family.ranges.items():
        values = bank.parameters[name]
        assert prior.contains(values).all()
        assert values.max() - values.min() > 0.8 * (prior.high - prior.low)


def test_the_coarse_shared_mesh_is_good_enough(family):
    """Against the default mesh: 2.5 % of the peak at any point, 1 % for means over 5 km."""
    radius = np.linspace(0.0, 60e3, 121)
    mesh = family.mesh(family.ranges)
    table = ring_table(radius, mesh.radius_edges, mesh.depth_edges, height_m=1.0)
    for diameter, erosion in ((25.0, 0.2), (33.0, 2.0), (40.0, 1.0), (62.0, 3.5)):
        main = {"rim_diameter_km": diameter, "erosion_km": erosion}
        coarse = table.anomaly(family.draw(main, mesh, np.random.default_rng(3))[0])
        model = crater_model(family.varied(**main), np.random.default_rng(3))
        fine = ring_anomaly(density_section(model), radius, height_m=1.0).values
        difference = coarse - fine
        assert np.abs(difference).max() < 0.025 * np.abs(fine).max()
        assert np.abs(np.convolve(difference, np.full(10, 0.1), "valid")).max() < 0.01 * np.abs(fine).max()


def test_the_same_seed_gives_the_same_bank(family, bank):
    again = build_bank(family, RADIUS, models=300, height=1.0, rng=np.random.default_rng(2))
    np.testing.assert_array_equal(bank.profiles, again.profiles)


def test_excess_mass_obeys_gauss(bank):
    """The profile integrates to 2πG M over the plane; out to 60 km most of a 40 km structure's flux is seen."""
    from gravbasin.constants import GRAVITATIONAL_CONSTANT, SI_TO_MGAL

    flux = np.trapezoid(2 * np.pi * RADIUS * bank.profiles / SI_TO_MGAL, RADIUS, axis=1)
    mass = flux / (2 * np.pi * GRAVITATIONAL_CONSTANT)
    heavy = np.abs(bank.parameters["excess_mass_kg"]) > np.median(np.abs(bank.parameters["excess_mass_kg"]))
    ratio = mass[heavy] / bank.parameters["excess_mass_kg"][heavy]
    assert 0.75 < np.median(ratio) < 1.02


def test_narrower_ranges_are_kept_to(family):
    narrow = {"rim_diameter_km": Range(30.0, 50.0, logarithmic=True), "erosion_km": Range(0.5, 1.5)}
    part = build_bank(family, RADIUS, models=50, height=1.0, rng=np.random.default_rng(1), ranges=narrow)
    assert all(narrow[name].contains(part.parameters[name]).all() for name in narrow)


def test_latent_vectors_are_the_whole_model(family, bank):
    """The same standard normals give the same structure; another entry of any gives another."""
    again = bank_of(family, bank.latent[:5], RADIUS, height=1.0)
    np.testing.assert_array_equal(again.profiles, bank.profiles[:5])
    moved = bank.latent[:1].repeat(bank.latent.shape[1], axis=0)
    moved += 0.5 * np.eye(moved.shape[0])
    changed = np.abs(bank_of(family, moved, RADIUS, height=1.0).profiles - bank.profiles[0]).max(axis=1)
    assert np.mean(changed > 1e-9) > 0.6  # the rest belong to units this structure has lost or never had


def test_a_list_of_episodes_scales_with_the_erosion():
    scenario = Scenario(
        crater={"rim_diameter_km": 30.0},
        history={"events": [{"erode_km": 1.0}, {"bury_km": 0.5}, {"erode_km": 1.5}]},
    )
    varied = ImpactFamily(scenario).varied(30.0, 4.0)
    assert crater_model(varied).ground.erosion == pytest.approx(4000.0)


def test_a_bank_that_would_not_fit_is_refused_first(family):
    with pytest.raises(CannotFinish, match=r"prior\.models"):
        build_bank(family, RADIUS, models=10**9, height=1.0, rng=np.random.default_rng(1))


def test_ranges_draw_uniformly_on_their_scale():
    rng = np.random.default_rng(9)
    drawn = Range(1.0, 100.0, logarithmic=True).draw(rng, 4000)
    assert np.median(drawn) == pytest.approx(10.0, rel=0.15)
    np.testing.assert_allclose(Range(1.0, 100.0, logarithmic=True).at([0.0, 0.5, 1.0]), [1.0, 10.0, 100.0])
