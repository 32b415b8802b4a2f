"""Rival bodies (amplitudes on the axis: published.toml): exact masses, walls, priors, and those a user adds."""

import numpy as np
import pytest

from gravbasin.crater.cells import Mesh
from gravbasin.crater.priors import Range
from gravbasin.crater.rivals import KNOWN_RIVALS, Rival, rivals_of
from gravbasin.crater.shapes import SHAPES
from gravbasin.errors import InputError
from gravbasin.forward.rings import ring_anomaly, ring_table
from gravbasin.scenario import RivalBody, Scenario

CRATER = {"rim_diameter_km": 30.0}


def single(shape: str, **values: float) -> tuple[Rival, dict[str, float]]:
    return Rival("invented", shape, {k: Range(v, v) for k, v in values.items()}), values


def plug(radius: float, top: float, base: float, contrast: float, dip: float = 90.0) -> dict[str, float]:
    return {"radius_km": radius, "top_km": top, "thickness_km": base - top, "wall_dip_deg": dip,
            "contrast_kg_m3": contrast}  # fmt: skip


def mass(rival: Rival, parameters: dict[str, float], mesh: Mesh) -> float:
    area = np.pi * np.diff(mesh.radius_edges**2)
    return float(np.diff(mesh.depth_edges) @ rival.contrast(parameters, mesh) @ area)


@pytest.mark.parametrize(
    ("shape", "values", "expected"),
    [
        ("plug", plug(10, 0.5, 6.5, -100), -1e2 * np.pi * 1e8 * 6e3),
        # frusta: pi h (a² + ab + b²) / 3, wider below at 45°, narrower below at 120°
        ("plug", plug(10, 0, 4, -100, 45), -1e2 * np.pi * 4e3 * (1e8 + 1.4e8 + 1.96e8) / 3),
        ("plug", plug(10, 0, 3, 200, 120),
         2e2 * np.pi * 3e3 * (1e8 + 1e4 * (1e4 - 3e3 / 3**0.5) + (1e4 - 3e3 / 3**0.5) ** 2) / 3),
        ("ring complex", {"radius_km": 6, "lid_km": 2, "thickness_km": 5, "lid_contrast_kg_m3": -40,
                          "contrast_kg_m3": 300}, np.pi * 3.6e7 * (5e3 * 300 - 2e3 * 40)),
        ("dome", {"radius_km": 8, "thickness_km": 5, "contrast_kg_m3": -60}, -60 * np.pi * 6.4e7 * 5e3 / 2),
        # bowl: integral of cos²(pi r / 2R) over the disc is pi R² (1/2 - 2/pi²)
        ("basin", {"radius_km": 60, "depth_km": 2, "contrast_kg_m3": -200, "decay_km": 2000},
         -200 * 2e3 * np.pi * 3.6e9 * (0.5 - 2 / np.pi**2)),
    ],
)  # fmt: skip
def test_masses(shape: str, values: dict[str, float], expected: float) -> None:
    rival, parameters = single(shape, **values)
    assert mass(rival, parameters, rival.mesh(layers=30, rings=120)) == pytest.approx(expected, rel=3e-3)


def test_mass_does_not_depend_on_the_layers() -> None:
    for rival in KNOWN_RIVALS.values():
        parameters = rival.sample(np.random.default_rng(8))
        fine, coarse = (rival.mesh(layers=n, rings=60) for n in (300, 15))
        assert mass(rival, parameters, coarse) == pytest.approx(mass(rival, parameters, fine), rel=1e-9)


def test_a_shared_mesh_gives_the_anomaly_of_a_fine_one() -> None:
    """Every known rival, three draws each, on the mesh of its whole prior: within 4 % of its own peak."""
    rng = np.random.default_rng(3)
    for rival in KNOWN_RIVALS.values():
        mesh = rival.mesh()
        for _ in range(3):
            parameters = rival.sample(rng)
            stations = 1e3 * parameters["radius_km"] * np.array([0.0, 0.5, 1.0, 1.5, 2.5])
            table = ring_table(stations, mesh.radius_edges, mesh.depth_edges, height_m=1.0)
            exact = ring_anomaly(rival.section(parameters), stations, height_m=1.0).values
            shared = table.anomaly(rival.contrast(parameters, mesh))
            assert np.abs(shared - exact).max() < 0.04 * np.abs(exact).max(), rival.name


def test_signs_and_shapes_tell_rivals_apart() -> None:
    rng = np.random.default_rng(5)
    for name, sign in [("granite pluton", -1), ("mafic intrusion", 1), ("caldera fill", -1), ("gneiss dome", -1),
                       ("sag basin", -1)]:  # fmt: skip
        rival = KNOWN_RIVALS[name]
        assert sign * float(ring_anomaly(rival.section(rival.sample(rng)), [0.0])[0]) > 0


def test_salt_is_heavy_near_the_ground_and_light_below() -> None:
    """The sign flips above about 1 km (common practice)."""
    diapir, parameters = single("diapir", radius_km=2.0, top_km=0.2, height_km=6.0)
    section = diapir.section(parameters)
    column = section.density_contrast.isel(radius=0)
    inside = column.where(np.abs(column) > 0, drop=True)
    assert inside[0] > 0 > inside[-1]
    flip = float(inside.depth[int(np.argmax(inside.values < 0))])
    assert 800.0 < flip < 1800.0


def test_outward_walls_have_gentler_outer_gradients_than_inward_ones() -> None:
    """The criterion of Bott (1962): the sharper curvature lies inside the edge of a body whose walls dip outwards."""
    radius = np.linspace(2e3, 25e3, 400)

    def ratio(dip: float) -> float:
        rival, parameters = single("plug", **plug(10, 0, 6, -100, dip))
        anomaly = ring_anomaly(rival.section(parameters), radius, height_m=500.0).values
        curvature = np.gradient(np.gradient(anomaly, radius), radius)
        return float(abs(curvature.max() / curvature.min()))

    assert ratio(55.0) > ratio(90.0) > ratio(125.0)


def test_priors_are_drawn_within_their_ranges_and_repeat_with_the_seed() -> None:
    for rival in KNOWN_RIVALS.values():
        assert set(rival.ranges) == set(SHAPES[rival.shape].parameters)
        assert rival.tells
        assert rival.source
        draws = [rival.sample(np.random.default_rng(seed)) for seed in range(200)]
        for name, prior in rival.ranges.items():
            values = np.array([d[name] for d in draws])
            assert prior.contains(values).all()
            # 200 draws: the mean of the scaled values within four standard errors of the middle.
            scale = np.log if prior.logarithmic else np.asarray
            share = (scale(values) - scale(prior.low)) / (scale(prior.high) - scale(prior.low))
            assert abs(share.mean() - 0.5) < 4 * 0.2887 / np.sqrt(200)
        assert rival.sample(np.random.default_rng(1)) == draws[1]


def test_a_table_adds_a_rival_or_replaces_one() -> None:
    scenario = Scenario(
        crater=CRATER,
        rivals=[
            {"name": "sub-volcanic neck", "shape": "plug", "ranges": {"radius_km": [1, 4], "contrast_kg_m3": [6, 9]}},
            {"name": "gneiss dome", "shape": "dome", "ranges": {"radius_km": [10, 12]}},
        ],
    )
    found = {rival.name: rival for rival in rivals_of(scenario)}
    assert set(found) == {*KNOWN_RIVALS, "sub-volcanic neck"}
    assert found["sub-volcanic neck"].ranges["radius_km"] == Range(1.0, 4.0, logarithmic=True)
    assert found["gneiss dome"].ranges["radius_km"] == Range(10.0, 12.0)
    assert found["gneiss dome"].ranges["thickness_km"] == KNOWN_RIVALS["gneiss dome"].ranges["thickness_km"]
    assert rivals_of(Scenario(crater=CRATER)) == tuple(KNOWN_RIVALS.values())


@pytest.mark.parametrize(
    ("ranges", "said"),
    [
        ({"radius": [1, 4]}, "did you mean radius_km"),
        ({"decay_km": [1, 4]}, "not a parameter"),
        ({"wall_dip_deg": [0.5, 60]}, "wall_dip_deg"),
        ({"thickness_km": [-2, 4]}, "thickness_km"),
        ({"contrast_kg_m3": [-9000, 4]}, "contrast_kg_m3"),
    ],
)
def test_bad_ranges_are_refused(ranges: dict, said: str) -> None:
    with pytest.raises(InputError, match=said):
        rivals_of(Scenario(crater=CRATER, rivals=[{"name": "x", "shape": "plug", "ranges": ranges}]))


def test_descending_ranges_and_unknown_shapes_are_refused_by_the_scenario() -> None:
    for bad in ({"name": "x", "shape": "cube"}, {"name": "x", "shape": "plug", "ranges": {"radius_km": [4, 4]}}):
        with pytest.raises(ValueError, match=r"shape|ascend"):
            Scenario(crater=CRATER, rivals=[bad])


def test_the_scenario_knows_the_same_shapes() -> None:
    assert set(RivalBody.model_fields["shape"].annotation.__args__) == set(SHAPES)
