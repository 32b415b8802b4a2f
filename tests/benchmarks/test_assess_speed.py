"""Bars a user feels: help, import, and one whole run from a cold start, with its peak memory.

Run with:  python -m pytest tests/benchmarks/test_assess_speed.py -s
"""

import resource
import subprocess
import sys
import textwrap
import time

import numpy as np

import gravbasin as gb
from gravbasin import labels
from gravbasin.inference.level import Level
from gravbasin.inference.likelihood import ring_likelihood
from gravbasin.inference.odds import log_odds
from gravbasin.observed import NoiseModel


def _best_of(command, tries=5):
    seconds = []
    for _ in range(tries):
        start = time.perf_counter()
        subprocess.run(command, check=True, capture_output=True)
        seconds.append(time.perf_counter() - start)
    return min(seconds)


def test_help_and_import():
    bare = _best_of([sys.executable, "-c", "pass"])
    for name, command, bar in (
        ("gravbasin --help", [sys.executable, "-m", "gravbasin", "--help"], 0.3),
        ("import gravbasin", [sys.executable, "-c", "import gravbasin"], 0.5),
    ):
        seconds = _best_of(command)
        print(f"\n{name}: {seconds:.2f} s (bar {bar} s; python alone {bare:.2f} s)")
        assert seconds < bar


def test_a_whole_run_from_a_cold_start(tmp_path):
    """100 × 100 nodes, all rivals, 1,000 other places, report: at most 60 s and 2 GiB."""
    axis = 5e3 * np.arange(100)
    noise = NoiseModel(sill_mgal=9.0, range_m=35e3, smoothness=0.9, nugget_mgal=0.7)
    values = gb.simulate_noise(noise, axis, axis, seed=3).values
    grid = labels.data_array(
        values, ("northing", "easting"), {"northing": axis, "easting": axis}, name="b", units="mGal", long_name="noise"
    )
    grid.to_dataset().to_netcdf(tmp_path / "map.nc", engine="h5netcdf")
    (tmp_path / "a.toml").write_text(
        textwrap.dedent(
            """
            [crater]
            rim_diameter_km = 45
            [history]
            erosion_km = 1.5
            [observed]
            path = "map.nc"
            centre_easting_km = 250
            centre_northing_km = 240
            """
        )
    )
    start = time.perf_counter()
    command = [sys.executable, "-m", "gravbasin", "assess", str(tmp_path / "a.toml"), "-o", str(tmp_path / "run")]
    subprocess.run(command, check=True)
    seconds = time.perf_counter() - start
    peak = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 2**20
    print(f"\nassess, 100 × 100, cold: {seconds:.1f} s (bar 60 s), {peak:.2f} GiB (bar 2 GiB)")
    assert (tmp_path / "run" / "report.html").exists()
    assert seconds < 60
    assert peak < 2


def test_two_thousand_places_by_twenty_thousand_models():
    """The chance matrix: at most 10 s."""
    rng, n = np.random.default_rng(0), 25
    x = np.arange(n, dtype=float)
    likelihood = ring_likelihood(50 * np.exp(-np.abs(x[:, None] - x) / 5) + 0.2 * np.eye(n), np.ones((n, 1)))
    templates, data = rng.standard_normal((n, 20000)), 5 * rng.standard_normal((n, 2000))
    start = time.perf_counter()
    log_odds(likelihood, templates, data, Level())
    seconds = time.perf_counter() - start
    print(f"\n2,000 places × 20,000 models: {seconds:.1f} s (bar 10 s)")
    assert seconds < 10
