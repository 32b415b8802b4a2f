"""Make demo_grids/harnoth.nc: an invented gravity map over the invented Harnoth ring on the invented Talvira craton.

Nothing here was measured. The hidden structure differs in detail from the one configs/demo.toml assesses (a thicker
melt sheet, less erosion, other contrasts), a dense body lies north-east of it, and correlated geological noise and a
regional gradient lie over both. The grid is not square.

Run from the project's folder:  python demo_grids/make_harnoth.py
"""

from pathlib import Path

import numpy as np
import xarray as xr

import gravbasin as gb
from gravbasin import labels
from gravbasin.observed import NoiseModel

SEED = 20
STEP = 2500.0
EASTING = 612_500.0 + STEP * np.arange(120)
NORTHING = 4_405_000.0 + STEP * np.arange(96)
CENTRE = (EASTING[64], NORTHING[44])

HIDDEN = gb.Scenario(
    name="what really lies there",
    crater={"rim_diameter_km": 34.0, "melt_coefficient": 3e-4},
    damage={"porosity": 0.09, "decay_km": 2.6},
    fill={"breccia_contrast_kg_m3": -310.0, "sediment_density_kg_m3": 2350.0},
    history={"erosion_km": 0.55},
)
NOISE = NoiseModel(sill_mgal=5.0, range_m=28e3, smoothness=0.9, nugget_mgal=0.25)


def structure() -> np.ndarray:
    section = gb.density_section(HIDDEN)
    radius = np.concatenate([np.linspace(0, 30e3, 121), np.geomspace(30e3, 300e3, 60)[1:]])
    profile = gb.ring_anomaly(section, radius, height_m=1.0)
    distance = np.hypot(EASTING - CENTRE[0], NORTHING[:, None] - CENTRE[1])
    return np.interp(distance, radius, profile.values)


def dense_body() -> np.ndarray:
    """A steep dense intrusion, 18 km wide and 1 to 6 km deep, 85 km away."""
    radius_edges, depth_edges = np.linspace(0, 9e3, 19), np.linspace(1e3, 6e3, 21)
    contrast = np.full((20, 18), 190.0)
    section = xr.Dataset(
        {"density_contrast": (("depth", "radius"), contrast)},
        coords={
            "depth": 0.5 * (depth_edges[1:] + depth_edges[:-1]),
            "radius": 0.5 * (radius_edges[1:] + radius_edges[:-1]),
            "depth_edges": ("depth_edges", depth_edges),
            "radius_edges": ("radius_edges", radius_edges),
        },
    )
    radius = np.concatenate([np.linspace(0, 30e3, 121), np.geomspace(30e3, 400e3, 60)[1:]])
    profile = gb.ring_anomaly(section, radius, height_m=1.0)
    distance = np.hypot(EASTING - CENTRE[0] - 70e3, NORTHING[:, None] - CENTRE[1] - 48e3)
    return np.interp(distance, radius, profile.values)


def regional() -> np.ndarray:
    x, y = (EASTING - EASTING.mean()) / 150e3, (NORTHING[:, None] - NORTHING.mean()) / 120e3
    return -38.0 + 6.0 * x - 4.0 * y


def main() -> None:
    noise = gb.simulate_noise(NOISE, EASTING, NORTHING, seed=SEED)
    values = structure() + dense_body() + regional() + noise.values
    grid = labels.data_array(
        np.round(values, 3),
        ("northing", "easting"),
        {"northing": NORTHING, "easting": EASTING},
        name="bouguer_anomaly",
        units="mGal",
        long_name="complete Bouguer anomaly (invented)",
    )
    grid.attrs["comment"] = "Invented map of the invented Harnoth ring, Talvira craton; made by make_harnoth.py"
    target = Path(__file__).with_name("harnoth.nc")
    encoding = {"bouguer_anomaly": {"dtype": "float32", "zlib": True, "complevel": 9, "shuffle": True}}
    grid.to_dataset().to_netcdf(target, engine="h5netcdf", encoding=encoding)
    print(f"wrote {target.name}: {grid.shape[0]} x {grid.shape[1]} nodes")


if __name__ == "__main__":
    main()
