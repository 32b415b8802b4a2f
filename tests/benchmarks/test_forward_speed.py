"""Speed of the engines on this machine, against stated bars for two cores."""

import time
import tracemalloc

import numpy as np
import pytest

from gravbasin.forward import audit_anomaly, grid_anomaly, harmonica_anomaly, layered_prisms, ring_table
from gravbasin.forward.bodies import prisms_of, section_of
from gravbasin.forward.flat import flat_kernel
from gravbasin.forward.sphere import sphere_kernel


def graded(cells, first, last):
    return np.concatenate([[0.0], np.geomspace(first, last, cells)])


STATIONS = np.linspace(0.0, 120e3, 300)
RINGS, LAYERS = graded(160, 150.0, 90e3), graded(80, 25.0, 40e3)


def random_prisms(side, layers=60):
    density = np.random.default_rng(side).normal(0.0, 100.0, (layers, side, side))
    return prisms_of(density, np.linspace(0.0, 9e3, layers + 1), 500.0 * np.arange(side), 400.0 * np.arange(side))


def best(work, rounds=5):
    times = []
    for _ in range(rounds):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return min(times)


@pytest.mark.parametrize(("kernel", "bar"), [(flat_kernel, 6.0), (sphere_kernel, 12.0)])
def test_table_of_300_stations_400_rings_80_layers(benchmark, kernel, bar):
    rings = graded(400, 150.0, 90e3)
    benchmark.pedantic(kernel, args=(STATIONS, rings, LAYERS, 0.0), rounds=2)
    assert benchmark.stats["min"] < bar


def test_one_model_warm(benchmark):
    table = ring_table(STATIONS, RINGS, LAYERS)
    contrast = np.random.default_rng(1).normal(0.0, 100.0, (80, 160))
    benchmark(table.anomaly, contrast)
    assert benchmark.stats["median"] < 0.010


def test_ten_thousand_models_in_batches(benchmark):
    table = ring_table(STATIONS, RINGS, LAYERS)
    batch = np.random.default_rng(2).normal(0.0, 100.0, (500, 80, 160))

    def bank():
        return np.concatenate([table.anomaly(batch) for _ in range(20)])

    assert benchmark.pedantic(bank, rounds=2).shape == (10_000, 300)
    assert benchmark.stats["min"] < 30.0
    tracemalloc.start()
    table.anomaly(batch)
    assert tracemalloc.get_traced_memory()[1] < 0.1 * batch.nbytes  # no copy of the models
    tracemalloc.stop()


def test_grid_against_harmonica_at_400_by_400_by_60(benchmark):
    """The same prisms in the same run; harmonica, on both cores, at four random stations."""
    prisms = random_prisms(400)
    harmonica_anomaly(random_prisms(4), 0.0, 0.0, parallel=True)  # compiled before the clock starts
    grid = benchmark.pedantic(grid_anomaly, args=(prisms,), rounds=5)
    i, j = np.random.default_rng(3).integers(0, 400, (2, 4))
    start = time.perf_counter()
    direct = harmonica_anomaly(prisms, grid.easting.values[j], grid.northing.values[i], 1.0, parallel=True)
    ratio = (time.perf_counter() - start) / 4 * 160_000 / benchmark.stats["median"]
    difference = float(np.abs(direct.values - grid.values[i, j]).max())
    benchmark.extra_info.update(ratio=ratio, max_abs_difference_mgal=difference)
    seconds = benchmark.stats["median"]
    print(f"\n400 x 400 x 60: {seconds:.2f} s, {ratio:.1e} times as fast as harmonica, {difference:.1e} mGal from it")
    assert difference < 1e-6
    assert ratio > 1e5


def test_twice_the_side_costs_at_most_4_6_times():
    small, large = random_prisms(400), random_prisms(800)
    grid_anomaly(small)
    ratio = best(lambda: grid_anomaly(large), 4) / best(lambda: grid_anomaly(small), 8)
    print(f"\ntwice the side: {ratio:.2f} times the time")
    assert ratio < 4.6


def test_audit_of_100_by_100_by_60(benchmark):
    def section(layers, rings):
        depths, edges = graded(layers, 30.0, 8e3), graded(rings, 150.0, 47e3)
        depth, radius = (0.5 * (e[1:] + e[:-1]) for e in (depths, edges))
        return section_of(-200.0 * np.exp(-depth[:, None] / 2e3) * np.exp(-((radius / 25e3) ** 4)), depths, edges)

    axis = np.linspace(-49.5e3, 49.5e3, 100)
    model, finer = section(60, 120), section(120, 240)
    prisms = layered_prisms(model, axis, axis)
    grid = grid_anomaly(prisms)
    audit = benchmark.pedantic(
        audit_anomaly, args=(model, prisms, grid), rounds=3, warmup_rounds=1,
        kwargs={"height_m": 1.0, "seed": 1, "refined_section": finer},
    )  # fmt: skip
    assert audit.stations >= 12
    assert benchmark.stats["min"] < 3.0
