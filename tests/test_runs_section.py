"""A section described: parts add up, slices add up, sizes say where they come from, the folder is whole, times hold."""

from __future__ import annotations

import json
import sys

import numpy as np
import pytest
import xarray as xr

import gravbasin as gb
from gravbasin.crater import PARTS
from gravbasin.errors import InputError
from gravbasin.report.erosion_figure import erosion_figure, slices_shown
from gravbasin.report.samples_figure import samples_figure
from gravbasin.report.section_page import section_report, slice_rows
from gravbasin.runs.section_run import SectionDescription, describe_section

COARSE = {"layers": 30, "rings": 60}


def described(rim: float = 40.0, **more) -> SectionDescription:
    return describe_section(gb.Scenario(crater={"rim_diameter_km": rim}, model=COARSE, **more))


@pytest.fixture(scope="module")
def fresh() -> SectionDescription:
    return described()


@pytest.fixture(scope="module")
def worn() -> SectionDescription:
    """Below its floor, buried, one size given."""
    return described(
        history={"erosion_km": 2.4, "burial_km": 0.3}, dimensions={"structural_uplift_km": 5.0}, name="worn < ring"
    )


def test_causes_add_up_to_the_anomaly_of_the_whole_section(worn) -> None:
    whole = gb.ring_anomaly(worn.section, worn.profile.radius.values, height_m=1.0, earth=worn.earth)
    np.testing.assert_allclose(worn.profile.parts.sum("part"), whole, atol=1e-9)
    np.testing.assert_allclose(worn.profile.modelled, whole, atol=1e-9)
    np.testing.assert_allclose(worn.parts.density_contrast.sum("part"), worn.section.density_contrast, atol=1e-9 * 1000)
    assert list(worn.profile.part.values) == list(PARTS)


def test_slices_add_up_to_the_whole_and_nothing_is_left_below_the_deepest(fresh) -> None:
    erosion = fresh.erosion
    assert float(erosion.left[0]) == pytest.approx(1.0)
    assert float(erosion.share.sum()) == pytest.approx(1.0, abs=1e-9)
    assert float(np.abs(erosion.anomaly[-1]).max()) < 1e-6 * float(np.abs(erosion.anomaly[0]).max())
    np.testing.assert_allclose(erosion.left[:-1].values - erosion.left[1:].values, erosion.share.values)


def test_first_cut_is_the_fresh_structure_and_a_cut_is_the_scenario_eroded_so_deep(fresh) -> None:
    """Another mesh, cells up to 40 km / 60 wide, perhaps another Earth: within 1 % of the largest anomaly."""
    radius = fresh.erosion.radius.values
    here = fresh.profile.modelled.sel(radius=radius)
    np.testing.assert_allclose(fresh.erosion.anomaly[0].sum("part"), here, atol=1e-9)
    other = described(history={"erosion_km": 2.0})
    cut = fresh.erosion.anomaly.sel(erosion=2000.0).sum("part")
    np.testing.assert_allclose(cut, other.profile.modelled.sel(radius=radius), atol=0.01 * float(np.abs(here).max()))


def test_the_chart_forgets_what_the_scenario_eroded(fresh, worn) -> None:
    same = described(dimensions={"structural_uplift_km": 5.0})
    np.testing.assert_allclose(worn.erosion.anomaly, same.erosion.anomaly)
    assert slices_shown(worn.erosion, 2400.0) >= 3  # the slice that holds today's ground, at least


def test_a_doubled_diameter_is_twice_as_wide_and_hardly_stronger(fresh) -> None:
    """Published amplitudes level off with diameter (plateau above 20-30 km, Pilkington & Grieve 1992, from memory)."""
    double = described(80.0)

    def half_width(result: SectionDescription) -> float:
        size = np.abs(result.profile.modelled.values)
        return float(result.profile.radius[np.flatnonzero(size > 0.5 * size.max())[-1]])

    assert half_width(double) / half_width(fresh) == pytest.approx(2.0, abs=0.25)
    strength = [float(np.abs(result.profile.modelled).max()) for result in (fresh, double)]
    assert 0.8 < strength[1] / strength[0] < 1.6
    sizes = [{row["name"]: row["value"] for row in result.dimensions} for result in (fresh, double)]
    for name, value in sizes[0].items():
        assert sizes[1][name] >= value, name


def test_dimensions_say_where_they_come_from(worn) -> None:
    rows = {row["name"]: row for row in worn.dimensions}
    assert rows["structural_uplift_km"] | {"validity": ""} == {
        "name": "structural_uplift_km", "value": 5.0, "unit": "km", "origin": "given", "source": "scenario",
        "validity": "",
    }  # fmt: skip
    assert rows["transient_diameter_km"]["origin"] == "law"
    assert "McKinnon" in rows["transient_diameter_km"]["source"]
    assert rows["melt_thickness_km"]["origin"] == "derived"
    assert all(row["source"] for row in rows.values())
    stretched = {row["name"]: row["validity"] for row in described(120.0).dimensions}
    assert "law made for rims of 4 to 100 km" in stretched["fracture_base_km"]


def test_wide_structures_go_on_the_sphere() -> None:
    small, wide = described(10.0), described(200.0)
    assert (small.earth, wide.earth) == ("flat", "sphere")
    assert wide.flat_earth_error > 0.02 > small.flat_earth_error
    whole = gb.ring_anomaly(wide.section, wide.profile.radius.values, height_m=1.0, earth="sphere")
    np.testing.assert_allclose(wide.profile.modelled, whole, atol=1e-9)


def test_drawn_slices_are_the_numbers(fresh) -> None:
    figure = erosion_figure(fresh.erosion, today_m=1500.0)
    units, share, left = figure.axes[:3]
    count = slices_shown(fresh.erosion, 1500.0)
    lengths = np.array([[bar.get_width() for bar in container] for container in units.containers])
    np.testing.assert_allclose(lengths.sum(axis=0), 100.0)
    np.testing.assert_allclose([bar.get_width() for bar in share.patches], 100 * fresh.erosion.share[:count])
    curves = {line.get_label(): line for line in left.lines}
    np.testing.assert_allclose(curves["largest"].get_xdata(), fresh.erosion.largest[: count + 1])
    low, high = left.get_ylim()
    assert low == pytest.approx(count * 1.0)  # depth runs down
    assert high == 0.0


def test_page_shows_every_slice_and_every_source(worn) -> None:
    html, figures = section_report(worn)
    assert sorted(figures) == ["erosion", "parts", "section"]
    assert "worn &lt; ring" in html
    assert "http" not in html.replace("http://www.w3.org/", "")
    for row in slice_rows(worn):
        assert row.rock in html
    for row in worn.dimensions:
        assert row["source"].replace("&", "&amp;") in html
    assert section_report(worn)[0] == html
    bent = gb.Scenario(crater={"rim_diameter_km": 40.0}, model=COARSE, deformation={"tilt_degrees": 3.0})
    assert "before that" in section_report(describe_section(bent))[0]
    assert "before that" not in html


def test_folder_is_whole_reads_back_and_replaces_only_its_own_kind(worn, tmp_path) -> None:
    folder = tmp_path / "ring"
    describe_section(worn.scenario, folder)
    names = {"section.json", "section.nc", "parts.nc", "profile.nc", "erosion.nc", "report.html", "scenario.toml"}
    assert {path.name for path in folder.iterdir()} == names | {"figures"}
    facts = json.loads((folder / "section.json").read_text())
    values = worn.profile.modelled.values
    assert facts["anomaly"]["largest_mgal"] == pytest.approx(values[np.abs(values).argmax()])
    assert sum(facts["anomaly"]["centre_by_cause_mgal"].values()) == pytest.approx(facts["anomaly"]["centre_mgal"])
    assert sum(row["share"] for row in facts["erosion"]) == pytest.approx(1.0)
    assert facts["erosion"][0]["time_myr"]["common practice, fast"] == pytest.approx(20.0)  # 1 km at 50 m/Myr
    with xr.open_dataset(folder / "profile.nc", engine="h5netcdf") as stored:
        np.testing.assert_array_equal(stored.parts, worn.profile.parts)
    assert gb.load_scenario(folder / "scenario.toml") == worn.scenario
    describe_section(worn.scenario, folder)  # replaces its own
    (folder / "section.json").rename(folder / "mine.json")
    with pytest.raises(InputError, match="not a gravbasin run"):
        describe_section(worn.scenario, folder)


def test_command_prints_sizes_and_slices(monkeypatch, capsys, tmp_path) -> None:
    from gravbasin.cli import main

    path = tmp_path / "ring.toml"
    path.write_text('name = "a ring"\n[crater]\nrim_diameter_km = 12\n[model]\nlayers = 20\nrings = 40\n')
    monkeypatch.chdir(tmp_path)
    arguments = ["gravbasin", "section", str(path), "--set", "crater.rim_diameter_km=24"]
    monkeypatch.setattr(sys, "argv", arguments)
    with pytest.raises(SystemExit) as stop:
        main()
    out, _ = capsys.readouterr()
    assert stop.value.code == 0
    for words in ("a ring", "mGal at most", "rim diameter", "24 km", "0–1 km", "ring_section/report.html"):
        assert words in out
    assert (tmp_path / "ring_section" / "section.json").is_file()
    monkeypatch.setattr(sys, "argv", [*arguments, "--quiet", "-o", str(tmp_path / "b")])
    with pytest.raises(SystemExit):
        main()
    assert capsys.readouterr().out == ""


# Laboratory samples

SAMPLES = """name,density_kg_m3,porosity,easting_km,northing_km,quartz_percent,plagioclase_percent
A,2660,0.01,-30,0,40,60
B,2650,0.02,-15,1,40,60
C,2600,0.04,-6,0,40,60
D,2640,,5,-1,40,60
E,2980,0.01,14,0,40,60
F,2665,0.01,29,1,40,60
G,2655,0.01,,,40,60
"""


@pytest.fixture
def sampled(tmp_path) -> SectionDescription:
    (tmp_path / "samples.csv").write_text(SAMPLES, encoding="utf-8")
    asked = gb.Scenario(
        crater={"rim_diameter_km": 40.0},
        history={"erosion_km": 2.4},
        samples={"path": tmp_path / "samples.csv"},
        model=COARSE,
    )
    return describe_section(asked, tmp_path / "out")


def test_samples_narrow_the_structure_and_stand_in_folder_and_page(sampled, tmp_path) -> None:
    compared, update = sampled.samples
    assert update.outliers == 1
    facts = json.loads((tmp_path / "out" / "section.json").read_text())
    assert facts["samples"]["density"] == update.density
    with xr.open_dataset(tmp_path / "out" / "samples.nc", engine="h5netcdf") as kept:
        np.testing.assert_array_equal(kept.density, compared.density)
    page = (tmp_path / "out" / "report.html").read_text()
    assert "Laboratory samples" in page
    assert "set aside as outliers" in page
    assert (tmp_path / "out" / "figures" / "samples.svg").exists()


def test_the_figure_of_samples_shows_each_where_it_lies(sampled) -> None:
    compared, update = sampled.samples
    density, porosity = samples_figure(compared, update).axes
    lines = {line.get_label(): line for line in density.get_lines()}
    used = compared.outlier.values == 0
    np.testing.assert_array_equal(lines["measured"].get_ydata(), compared.density.values[used])
    np.testing.assert_array_equal(lines["measured, set aside"].get_ydata(), [2980.0])
    places = lines["measured"].get_xdata()
    np.testing.assert_allclose(places[:-1], compared.transect.values[used][:-1] / 1e3)
    assert places[-1] > np.nanmax(compared.transect.values) / 1e3  # no position: after the end, and told
    assert "no position" in porosity.get_xlabel()
    np.testing.assert_array_equal(porosity.get_lines()[0].get_ydata(), 100 * compared.porosity.values)
    near, far = compared.held_high.values[[2, 0]]  # 6 and 30 km from the centre of a structure 40 km across
    assert near > 0.01 > far >= 0.0
    np.testing.assert_allclose(compared.held_low, 0.3 * compared.held_high)


def test_samples_without_positions_or_porosity_are_drawn_in_their_order(sampled) -> None:
    compared, update = sampled.samples
    bare = compared.assign(transect=compared.transect * np.nan, porosity=compared.porosity * np.nan)
    (density,) = samples_figure(bare, update).axes
    assert "order of the table" in density.get_xlabel()


def test_a_section_without_samples_has_no_such_chapter(fresh) -> None:
    page, figures = section_report(fresh)
    assert "Laboratory samples" not in page
    assert "samples" not in figures
