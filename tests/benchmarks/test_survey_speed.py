"""Time to plan a survey and to rank single places, on the demo and on real maps used as noise.

Real maps are read from the folder named by GRAVBASIN_WINDOWS (netCDF windows with a `bouguer_anomaly`), and skipped
without it. Run with: python -m pytest tests/benchmarks/test_survey_speed.py -s
"""

import dataclasses
import os
import time
from pathlib import Path

import numpy as np
import pytest

from gravbasin.observed import estimate_noise, read_grid
from gravbasin.runs.plan_run import plan
from gravbasin.scenario_file import load_scenario
from gravbasin.survey.greedy import next_best
from gravbasin.survey.layouts import layout_stations
from gravbasin.survey.plan import default_spacings, stations_of, sweep
from gravbasin.survey.sight import Stations

ROOT = Path(__file__).parents[2]
WINDOWS = ("Mistastin.nc", "shield_Superior.nc")
DEMO_FILES = {
    "survey.area": str(ROOT / "demo_grids/orveth_area.geojson"),
    "survey.no_go": [str(ROOT / "demo_grids/orveth_lake.geojson")],
    "survey.roads": str(ROOT / "demo_grids/orveth_tracks.geojson"),
}
FOUR = {"survey.layouts": ["square", "staggered", "lines", "radial"]}
PLAN_BAR, RANK_BAR = 30.0, 20.0
"""Seconds: twelve spacings of four layouts; 5,000 candidates."""


def timed_plan(scenario):
    start = time.perf_counter()
    result = plan(scenario)
    return time.perf_counter() - start, result


def report(name, seconds, result):
    cells, t = len(result.cells), result.table
    print(
        f"\n{name}: {seconds:.1f} s for {cells} cells; {result.recommendation.statement}\n"
        f"  detection {float(t.detection_probability.min()):.2f} to {float(t.detection_probability.max()):.2f}, "
        f"vanishes at {result.vanishing.median:.2f} km ({result.vanishing.low:.2f} to {result.vanishing.high:.2f})"
    )


def test_planning_the_demo():
    seconds, result = timed_plan(load_scenario(ROOT / "configs/plan_demo.toml", DEMO_FILES | FOUR))
    report("demo", seconds, result)
    assert len(result.cells) == 48
    assert seconds < PLAN_BAR


@pytest.mark.parametrize("window", WINDOWS)
def test_planning_on_a_real_map_as_noise(window):
    folder = os.environ.get("GRAVBASIN_WINDOWS")
    if not folder:
        pytest.skip("GRAVBASIN_WINDOWS names no folder")
    observed = read_grid(Path(folder) / window, variable="bouguer_anomaly")
    start = time.perf_counter()
    noise = estimate_noise(observed, exclude=(0.0, 0.0, 21e3), resolution_m=9e3, seed=1)
    estimated = time.perf_counter() - start
    stated = {
        "noise.sill_mgal": noise.sill_mgal, "noise.range_km": noise.range_m / 1e3,
        "noise.smoothness": noise.smoothness, "noise.nugget_mgal": noise.nugget_mgal,
    }  # fmt: skip
    seconds, result = timed_plan(load_scenario(ROOT / "configs/plan_demo.toml", DEMO_FILES | FOUR | stated))
    report(f"{window} (noise estimated in {estimated:.1f} s)", seconds, result)
    assert len(result.cells) == 48
    assert seconds < PLAN_BAR


def test_ranking_five_thousand_candidates():
    scenario = load_scenario(
        ROOT / "configs/plan_demo.toml", DEMO_FILES | {"survey.next_best": 0, "survey.chart_diameters": 0}
    )
    result = plan(scenario)
    quest = result.prepared.quest
    site = quest.site
    places = layout_stations(site, "square", float(np.sqrt(site.size / 5200)))
    assert len(places) >= 5000
    candidates = Stations(places[:5000] - site.centre, np.full(5000, quest.station_error))
    old = layout_stations(dataclasses.replace(site, no_go=()), "square", 5e3)
    first = stations_of(quest, old)
    for tell_apart in (False, True):
        start = time.perf_counter()
        found = next_best(first, candidates, quest.stakes, quest.noises[0], count=100, tell_apart=tell_apart)
        seconds = time.perf_counter() - start
        print(
            f"\n100 of 5,000 candidates beyond {len(old)} stations: {seconds:.1f} s; "
            f"signal-to-noise {found.snr[0]:.2f} to {found.snr[-1]:.2f}, "
            f"nearest rival {found.rival_distance[0]:.2f} to {found.rival_distance[-1]:.2f}"
        )
        assert seconds < RANK_BAR


def test_a_sweep_alone():
    scenario = load_scenario(ROOT / "configs/plan_demo.toml", DEMO_FILES | FOUR)
    quest = plan(scenario).prepared.quest
    start = time.perf_counter()
    cells = sweep(quest, default_spacings(quest.site.size))
    print(f"\nsweep of {len(cells)} cells alone: {time.perf_counter() - start:.1f} s")
    assert time.perf_counter() - start < PLAN_BAR
