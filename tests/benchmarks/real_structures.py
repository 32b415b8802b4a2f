"""Known structures and shields on real maps: what the tool says of each, and how often shields raise false alarms.

    python tests/benchmarks/real_structures.py FOLDER [NAME ...] [--pictures DIR]

FOLDER holds netCDF windows centred on known structures (attribute rim_diameter_km) and windows without one, named
shield_*.nc. The windows tried in development are simple Bouguer anomalies from EGM2008 (NGA, public domain) with
topography from ETOPO1 (NOAA, public domain); each file names its sources. Settings are those of configs/own_map.toml
but for the map's resolution; no setting is chosen by looking at these windows.
"""

import argparse
import time
from pathlib import Path

import numpy as np
import xarray as xr

import gravbasin as gb
from gravbasin.runs.store import write_run

CONFIG = Path(__file__).parents[2] / "configs" / "own_map.toml"
SHIELD_DIAMETERS = (25.0, 50.0)
PLACES = 300


def scenario(path: Path, diameter: float) -> gb.Scenario:
    with xr.open_dataset(path, engine="h5netcdf") as window:
        resolution = 9.0 if "9 km" in str(window.attrs.get("resolution", "")) else None
    changes = {
        "observed.path": str(path.resolve()),
        "observed.variable": "bouguer_anomaly",
        "crater.rim_diameter_km": diameter,
        "name": path.stem,
    }
    if resolution:
        changes["observed.resolution_km"] = resolution
    return gb.load_scenario(CONFIG, changes)


def diameter_of(path: Path) -> float:
    with xr.open_dataset(path, engine="h5netcdf") as window:
        return float(np.ravel(window.attrs["rim_diameter_km"])[0])


def structures(paths: list[Path], pictures: Path | None) -> None:
    print(
        f"{'structure':16s} {'D km':>5} {'ln odds':>8} {'chance p':>9} {'±':>6} {'best family':28s} {'P(impact)':>9} "
        f"{'D 90 %':>11} {'erosion 90 %':>13} {'s':>5}  verdict"
    )
    found = []
    for path in paths:
        start, diameter = time.perf_counter(), diameter_of(path)
        result = gb.assess(scenario(path, diameter))
        v, seconds = result.verdict, time.perf_counter() - start
        best = max(v["rivals"], key=lambda r: r["probability"])
        d, e, chance = v["fit"]["rim_diameter_km"], v["fit"]["erosion_km"], v["chance"]
        found.append(chance["p_value"])
        print(
            f"{path.stem:16s} {diameter:5.0f} {chance['statistic']:8.2f} {chance['p_value']:9.4f} "
            f"{chance['standard_error']:6.3f} {best['name']:28s} {v['rivals'][0]['probability']:9.3f} "
            f"{d['low']:4.0f} to {d['high']:4.0f} {e['low']:5.1f} to {e['high']:4.1f} {seconds:5.0f}  {v['verdict']}",
            flush=True,
        )
        if pictures is not None:
            write_run(result, pictures / path.stem)
    p = np.array(found)
    print(f"\n{np.sum(p < 0.05)} of {p.size} at p < 0.05, {np.sum(p < 0.01)} at p < 0.01, median p {np.median(p):.3f}")


def shields(paths: list[Path]) -> None:
    """Every one of many random places of a shield is held against the rest of its map, as a structure would be."""
    print(f"\n{'shield':20s} {'D km':>5} {'places':>7} {'at 1 %':>7} {'at 5 %':>7} {'ln odds, 99 %':>14}")
    for path in paths:
        for diameter in SHIELD_DIAMETERS:
            odds = gb.assess(scenario(path, diameter)).comparison.odds
            row, column = np.nonzero(np.isfinite(odds.values))
            east, north = odds.easting.values[column], odds.northing.values[row]
            values = odds.values[row, column]
            rng = np.random.default_rng(1)
            p = []
            for i in rng.choice(values.size, min(PLACES, values.size), replace=False):
                away = np.hypot(east - east[i], north - north[i]) > 1e3 * diameter
                p.append((1 + np.sum(values[away] >= values[i])) / (1 + away.sum()))
            p = np.array(p)
            print(
                f"{path.stem:20s} {diameter:5.0f} {p.size:7d} {100 * np.mean(p < 0.01):6.1f}% "
                f"{100 * np.mean(p < 0.05):6.1f}% {np.quantile(values, 0.99):14.2f}",
                flush=True,
            )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("folder", type=Path)
    parser.add_argument("names", nargs="*", help="windows to run; all by default")
    parser.add_argument("--pictures", type=Path, help="write a run folder for each structure here")
    arguments = parser.parse_args()
    paths = sorted(arguments.folder.glob("*.nc"))
    if arguments.names:
        paths = [p for p in paths if p.stem in arguments.names]
    known = [p for p in paths if not p.stem.startswith("shield_")]
    if known:
        structures(known, arguments.pictures)
    bare = [p for p in paths if p.stem.startswith("shield_")]
    if bare:
        shields(bare)


if __name__ == "__main__":
    main()
