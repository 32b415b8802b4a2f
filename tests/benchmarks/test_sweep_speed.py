"""Bars of sweeps: 10,000 profile cases in a minute, two local workers 1.6 times as fast as one process, flat memory.

Run: python -m pytest -s tests/benchmarks/test_sweep_speed.py (on a machine that does nothing else)
"""

import os
import subprocess
import sys
import time

import pytest
import xarray as xr

from gravbasin.runs import executors
from gravbasin.runs.sweep import sweep
from gravbasin.scenario import Scenario

FIELDS = [
    {"field": "crater.rim_diameter_km", "low": 30.0, "high": 120.0, "scale": "log"},
    {"field": "history.erosion_km", "low": 0.0, "high": 7.0},
    {"field": "damage.porosity", "low": 0.04, "high": 0.12},
]
NOISE = {"sill_mgal": 6.0, "range_km": 30.0, "smoothness": 0.8, "nugget_mgal": 0.5}


def question(cases: int, design: str = "latin hypercube", **more) -> Scenario:
    table = {"design": design, "cases": cases, "profiles": True, "fields": FIELDS, **more}
    return Scenario(crater={"rim_diameter_km": 60.0}, noise=NOISE, sweep=table)


def _seconds(asked: Scenario, folder, executor: str, **more) -> tuple[float, xr.Dataset]:
    executors._MAKERS.clear()  # none lives off the tables of a former run
    start = time.perf_counter()
    cases = sweep(asked, folder, executor, **more)
    return time.perf_counter() - start, cases


def test_ten_thousand_profiles_serial_within_a_minute(tmp_path):
    seconds, cases = _seconds(question(10_000), tmp_path, "serial")
    print(f"\n10,000 cases serial: {seconds:.1f} s, load {os.getloadavg()[0]:.1f}")
    assert cases.sizes["case"] == 10_000
    assert seconds <= 60


def test_two_local_workers_are_faster_in_the_same_run(tmp_path):
    """The whole command, cluster, tables, files and report included; the same bits."""
    asked = question(32_768, "sobol", draws=2)
    serial, first = _seconds(asked, tmp_path / "serial", "serial")
    dask, second = _seconds(asked, tmp_path / "dask", "dask", workers=2)
    print(
        f"\nserial {serial:.1f} s, two workers {dask:.1f} s: {serial / dask:.2f} times; load {os.getloadavg()[0]:.1f}"
    )
    xr.testing.assert_identical(first, second)
    assert serial / dask >= 1.6


def test_memory_does_not_grow_with_the_cases(tmp_path):
    """Peak memory of 8,192 cases less that of 1,024, each in a process of its own, as the kernel (Linux) tells it.

    The peak that getrusage tells would begin with that of the process which started it.
    """
    peaks = []
    for cases in (1024, 8192):
        asked = question(cases, "sobol")
        code = (
            "import re, sys\nfrom gravbasin.runs.sweep import sweep\nfrom gravbasin.scenario import Scenario\n"
            f"sweep(Scenario.model_validate_json({asked.model_dump_json(exclude_none=True)!r}), sys.argv[1])\n"
            "print(re.search(r'VmHWM:\\s+(\\d+) kB', open('/proc/self/status').read())[1])"
        )
        arguments = [sys.executable, "-W", "ignore", "-c", code, str(tmp_path / str(cases))]
        done = subprocess.run(arguments, capture_output=True, text=True, check=True)
        peaks.append(int(done.stdout) / 1024)
    print(f"\npeak memory {peaks[0]:.0f} MB for 1,024 cases, {peaks[1]:.0f} MB for 8,192")
    assert peaks[1] - peaks[0] < 50


@pytest.mark.parametrize(("layers", "rings"), [(20, 40), (40, 80), (80, 160), (160, 320)])
def test_growth_with_resolution(tmp_path, layers, rings):
    """No bar: how the cost of a case grows with its cells (rings are given for the smallest structure)."""
    from gravbasin.runs.sweep import estimate_sweep

    cost = estimate_sweep(question(4096, "sobol", layers=layers, rings=rings))
    print(f"\n{layers} x {rings}: {1e3 * cost.seconds_per_case:.2f} ms a case, {cost.seconds_to_start:.1f} s to start")
    assert cost.seconds_per_case < 0.1
