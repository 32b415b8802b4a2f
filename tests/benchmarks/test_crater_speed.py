"""Bars of the crater room, on one thread: 5 ms a section, 2 ms a model in a bank, rings included.

Run: OMP_NUM_THREADS=1 python -m pytest tests/benchmarks/test_crater_speed.py
"""

import numpy as np
import pytest

from gravbasin.crater import (
    KNOWN_RIVALS,
    contrast,
    contrast_parts,
    crater_model,
    default_mesh,
    density_section,
    erosion_chart,
    shared_mesh,
)
from gravbasin.forward.rings import ring_table
from gravbasin.scenario import Scenario

CRATERS = {
    "crystalline": {"rim_diameter_km": 45.0},
    "mixed": {"rim_diameter_km": 45.0, "target_rock": "mixed", "cover_thickness_km": 1.0},
    "Moho": {"rim_diameter_km": 160.0},
}


@pytest.fixture(params=CRATERS)
def scenario(request) -> Scenario:
    return Scenario(crater=CRATERS[request.param], history={"erosion_km": 0.6, "burial_km": 0.3})


def test_one_section(benchmark, scenario: Scenario) -> None:
    density_section(scenario)
    benchmark(density_section, scenario)
    assert benchmark.stats["median"] < 5e-3


def test_one_draw(benchmark, scenario: Scenario) -> None:
    rng = np.random.default_rng(1)
    benchmark(crater_model, scenario, rng)
    assert benchmark.stats["median"] < 1e-3


def test_a_model_in_a_bank(benchmark, scenario: Scenario) -> None:
    """Drawn, assembled and forwarded together: default cells, 120 radii, batches of 128."""
    rng = np.random.default_rng(1)
    mesh = shared_mesh([crater_model(scenario)])
    radius = np.linspace(0, 1e3 * scenario.crater.rim_diameter_km, 120)
    table = ring_table(radius, mesh.radius_edges, mesh.depth_edges, height_m=1.0)

    def batch() -> None:
        table.anomaly(np.stack([contrast(crater_model(scenario, rng), mesh) for _ in range(128)]))

    benchmark.pedantic(batch, rounds=5, warmup_rounds=1)
    assert benchmark.stats["median"] / 128 < 2e-3


def test_parts_of_one_model(benchmark, scenario: Scenario) -> None:
    model = crater_model(scenario)
    mesh = default_mesh(model)
    benchmark(contrast_parts, model, mesh)
    assert benchmark.stats["median"] < 3e-3


@pytest.mark.parametrize("name", KNOWN_RIVALS)
def test_one_rival_in_a_bank(benchmark, name: str) -> None:
    rival = KNOWN_RIVALS[name]
    mesh, parameters = rival.mesh(), rival.sample(np.random.default_rng(1))
    benchmark(rival.contrast, parameters, mesh)
    assert benchmark.stats["median"] < 2e-3


def test_erosion_chart(benchmark) -> None:
    benchmark(erosion_chart, Scenario(crater=CRATERS["crystalline"]))
    assert benchmark.stats["median"] < 0.1
