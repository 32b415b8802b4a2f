"""One run from scenario to folder, on small invented maps."""

import json

import numpy as np
import pytest
import xarray as xr

import gravbasin as gb
from gravbasin import labels
from gravbasin.observed import NoiseModel

STEP = 4000.0
EASTING, NORTHING = 5e5 + STEP * np.arange(56), 2e6 + STEP * np.arange(48)
CENTRE = (float(EASTING[30]), float(NORTHING[22]))
NOISE = NoiseModel(sill_mgal=3.0, range_m=25e3, smoothness=0.8, nugget_mgal=0.3)
SMALL = {
    "model.layers": 30,
    "model.rings": 60,
    "model.draws": 30,
    "model.grid_step_km": 1.0,
    "prior.models": 300,
    "inference.chance_centres": 300,
    "inference.noise_points": 200,
    "inference.noise_draws": 3,
}


def _write_map(path, profile_factor, **encoding):
    scenario = gb.Scenario(crater={"rim_diameter_km": 30.0}, history={"erosion_km": 0.5})
    radius = np.concatenate([np.linspace(0, 25e3, 80), np.geomspace(25e3, 300e3, 40)[1:]])
    profile = gb.ring_anomaly(gb.density_section(scenario), radius, height_m=1.0).values
    distance = np.hypot(EASTING - CENTRE[0], NORTHING[:, None] - CENTRE[1])
    noise = gb.simulate_noise(NOISE, EASTING, NORTHING, seed=11).values
    values = profile_factor * np.interp(distance, radius, profile) + noise - 30.0 + 2e-5 * (EASTING - CENTRE[0])
    grid = labels.data_array(
        values, ("northing", "easting"), {"northing": NORTHING, "easting": EASTING},
        name="bouguer", units="mGal", long_name="invented Bouguer anomaly",
    )  # fmt: skip
    grid.to_dataset().to_netcdf(path, engine="h5netcdf", encoding=encoding or None)
    return path


def _scenario(folder, map_path, **changes):
    text = f"""
name = "Ossel ring (invented)"
[crater]
rim_diameter_km = 30.0
[history]
erosion_km = 0.5
[observed]
path = "{map_path.name}"
centre_easting_km = {CENTRE[0] / 1e3}
centre_northing_km = {CENTRE[1] / 1e3}
"""
    path = folder / "scenario.toml"
    path.write_text(text)
    return gb.load_scenario(path, {**SMALL, **changes})


@pytest.fixture(scope="module")
def place(tmp_path_factory):
    folder = tmp_path_factory.mktemp("place")
    _write_map(folder / "map.nc", 1.0)
    _write_map(folder / "empty.nc", 0.0)
    return folder


@pytest.fixture(scope="module")
def seen(place):
    stages = []
    result = gb.assess(_scenario(place, place / "map.nc"), place / "run", progress=lambda *s: stages.append(s))
    return result, place / "run", stages


def test_the_true_structure_is_consistent_and_beats_chance(seen):
    verdict = seen[0].verdict
    assert verdict["verdict"].startswith("consistent")
    assert verdict["chance"]["p_value"] < 0.05
    fit = verdict["fit"]
    assert fit["p_value"] > 0.05
    assert fit["rim_diameter_km"]["low"] < 30.0 < fit["rim_diameter_km"]["high"]
    assert fit["erosion_km"]["low"] < 0.5 < fit["erosion_km"]["high"]
    assert sum(r["probability"] for r in verdict["rivals"]) == pytest.approx(1.0)
    assert verdict["rivals"][-1]["name"] == "regional noise alone"


def test_the_audit_is_within_its_bars(seen):
    audit = seen[0].verdict["audit"]
    assert audit["max_abs_difference_mgal"] < 1e-6
    assert audit["stations"] >= 5


def test_the_folder_is_whole_and_reads_back(seen):
    result, folder, stages = seen
    names = {p.name for p in folder.iterdir()}
    assert names >= {
        "verdict.json", "report.html", "section.nc", "anomaly.nc", "profile.nc", "map.nc", "figures", "scenario.toml",
    }  # fmt: skip
    assert json.loads((folder / "verdict.json").read_text()) == result.verdict
    with xr.open_dataset(folder / "section.nc", engine="h5netcdf") as section:
        xr.testing.assert_allclose(section.density_contrast, result.modelled.section.density_contrast)
        assert labels.read_provenance(section)["scenario"]
    with xr.open_dataset(folder / "profile.nc", engine="h5netcdf") as profile:
        total = profile.parts.sum("part").values
        np.testing.assert_allclose(total, profile.modelled.values, atol=1e-9)
    assert gb.load_scenario(folder / "scenario.toml") == result.scenario
    assert [number for _, number, _ in stages] == sorted(number for _, number, _ in stages)
    assert "http" not in (folder / "report.html").read_text().replace("http://www.w3.org", "")


def test_the_same_scenario_and_seed_give_the_same_verdict(place, seen):
    assert gb.assess(_scenario(place, place / "map.nc")).verdict == seen[0].verdict


def test_bare_noise_is_no_circle(place):
    verdict = gb.assess(_scenario(place, place / "empty.nc")).verdict
    assert verdict["chance"]["p_value"] > 0.05
    odds = {r["name"]: r["probability"] for r in verdict["rivals"]}
    assert odds["eroded impact structure"] < 0.5


def test_deep_erosion_falls_below_detectability(tmp_path):
    path = tmp_path / "a.toml"
    path.write_text(
        "[crater]\nrim_diameter_km = 30\n[noise]\nsill_mgal=4\nrange_km=30\nsmoothness=1\nnugget_mgal=0.5\n"
    )
    verdict = gb.assess(gb.load_scenario(path, {"model.draws": 30, "history.erosion_km": 6.0})).verdict
    assert verdict["verdict"] == "below detectability"
    assert verdict["detectability"]["detection_probability"] < 0.05


def test_without_a_map_only_detectability_is_told(tmp_path):
    path = tmp_path / "a.toml"
    path.write_text(
        "[crater]\nrim_diameter_km = 30\n[noise]\nsill_mgal=4\nrange_km=30\nsmoothness=1\nnugget_mgal=0.5\n"
    )
    verdict = gb.assess(gb.load_scenario(path, {"model.draws": 30}), tmp_path / "run").verdict
    assert verdict["verdict"] == "detectable, no map compared"
    assert not {"fit", "chance", "rivals"} & set(verdict)
    assert not (tmp_path / "run" / "map.nc").exists()


def test_gaps_are_refused_then_skipped_on_request(place):
    with xr.open_dataset(place / "map.nc", engine="h5netcdf") as source:
        holed = source.load()
    holed.bouguer[5, 7] = np.nan
    holed.to_netcdf(place / "holed.nc", engine="h5netcdf")
    with pytest.raises(gb.InputError, match="skip"):
        gb.assess(_scenario(place, place / "holed.nc"))
    result = gb.assess(_scenario(place, place / "holed.nc", **{"observed.nan": "skip"}))
    assert result.verdict["provenance"]["map"]["nan_count"] == 1
    assert np.isnan(result.comparison.odds[5, 7])


def test_a_centre_off_the_map_is_told_in_one_line(place):
    with pytest.raises(gb.InputError, match=r"centre_easting_km = 9000\.0: must lie on the map"):
        gb.assess(_scenario(place, place / "map.nc", **{"observed.centre_easting_km": 9000.0}))


def test_a_map_that_is_not_there_is_told_by_the_scenarios_own_field(place):
    with pytest.raises(gb.InputError, match=r"^observed\.path = .*nowhere\.nc: is not a file; check the path$"):
        gb.assess(_scenario(place, place / "nowhere.nc"))
    holed = place / "gap.nc"
    with xr.open_dataset(place / "map.nc", engine="h5netcdf") as source:
        source.load().where(source.easting > EASTING[0]).to_netcdf(holed, engine="h5netcdf")
    with pytest.raises(gb.InputError, match=r'use observed\.nan = "skip"'):
        gb.assess(_scenario(place, holed))
    with pytest.raises(gb.InputError, match=r"^map\.nc: observed\.variable = free_air: must be a grid in the file"):
        gb.assess(_scenario(place, place / "map.nc", **{"observed.variable": "free_air"}))


def test_odds_for_a_body_nobody_weighs_are_refused(place):
    with pytest.raises(gb.InputError, match="granite plutom"):
        gb.assess(_scenario(place, place / "map.nc", **{"prior.odds": {"granite plutom": 2.0}}))


def test_prior_odds_shift_probabilities_but_not_evidence(place, seen):
    base = {r["name"]: r for r in seen[0].verdict["rivals"]}
    shifted = gb.assess(_scenario(place, place / "map.nc", **{"prior.odds": {"granite pluton": 50.0}})).verdict[
        "rivals"
    ]
    granite = next(r for r in shifted if r["name"] == "granite pluton")
    assert granite["log_evidence"] == pytest.approx(base["granite pluton"]["log_evidence"], abs=1e-9)
    ratio = granite["probability"] / shifted[0]["probability"]
    before = base["granite pluton"]["probability"] / base["eroded impact structure"]["probability"]
    assert ratio == pytest.approx(50 * before, rel=1e-6)


def test_a_deformed_structure_lies_on_the_map_as_it_was_bent(place):
    """A sector without contrast from north to east leaves less there, the rest as it was; the page tells."""
    plain = gb.assess(_scenario(place, place / "map.nc")).comparison.maps.modelled
    cut = {"deformation.missing_from_degrees": 0.0, "deformation.missing_to_degrees": 90.0}
    result = gb.assess(_scenario(place, place / "map.nc", **cut), place / "cut")
    bent = result.comparison.maps.modelled
    assert plain.dims == bent.dims
    assert not np.isnan(bent).any()
    offset = 8e3
    north_east, south_west = (
        {"easting": CENTRE[0] + sign * offset, "northing": CENTRE[1] + sign * offset} for sign in (1, -1)
    )
    assert abs(float(bent.sel(north_east))) < 0.6 * abs(float(plain.sel(north_east)))
    assert float(bent.sel(south_west)) == pytest.approx(float(plain.sel(south_west)), rel=0.15)
    assert "drawn for fit, rivals and chance are round" in (place / "cut" / "report.html").read_text()
