"""The page of real assessments: whole, self-contained, the same every time, and safe with any name."""

from __future__ import annotations

import dataclasses
import re
import tomllib
from html.parser import HTMLParser
from pathlib import Path
from xml.etree import ElementTree

import numpy as np
import pytest

import gravbasin as gb
from gravbasin.crater import KNOWN_RIVALS
from gravbasin.observed import NoiseModel
from gravbasin.report.html import assessment_report
from gravbasin.runs.families import NOISE_ALONE
from gravbasin.runs.search import Candidate, candidate_table
from gravbasin.runs.verdict import CAUTIONS

NAME = 'Basin <script>alert("x")</script> & Co'
SMALL = {"layers": 20, "rings": 40, "draws": 20, "grid_step_km": 1.5}
HEADED = ["section", "maps", "profile", "posterior", "parts", "detectability", "chance", "odds"]
FIGURES = [*HEADED, "spectrum"]  # the last one stands among the noise
HEADS = [f"head-{name}" for name in HEADED]
IMPACT = "eroded impact structure"
VOID = {"meta", "link", "br", "hr", "img", "input"}


def scenario(**more) -> gb.Scenario:
    return gb.Scenario(
        name=NAME,
        note="a < b",
        crater={"rim_diameter_km": 40.0},
        history={"erosion_km": 1.0},
        dimensions={"breccia_thickness_km": 0.35},
        model=SMALL,
        **more,
    )


@pytest.fixture(scope="module")
def alone() -> gb.runs.assess.Assessment:
    noise = {"sill_mgal": 6.0, "range_km": 30.0, "smoothness": 0.7, "nugget_mgal": 0.5}
    return gb.assess(scenario(noise=noise, inference={"noise_draws": 4}))


@pytest.fixture(scope="module")
def compared(alone, tmp_path_factory) -> gb.runs.assess.Assessment:
    """The structure on simulated noise and a tilted plane; noise left to estimate."""
    east, north = 5e3 * np.arange(60.0) + 1000e3, 5e3 * np.arange(46.0) + 2000e3
    noise = NoiseModel(sill_mgal=6.0, range_m=30e3, smoothness=0.7, nugget_mgal=0.5)
    grid = gb.simulate_noise(noise, east, north, seed=2)
    distance = np.hypot(grid.easting - 1140e3, grid.northing - 2120e3)
    structure = np.interp(distance.transpose(*grid.dims), alone.modelled.radius, alone.modelled.profile)
    grid = (grid + structure - 40.0 + 5e-5 * (grid.easting - 1140e3)).transpose(*grid.dims)
    grid.attrs = {"units": "mGal"}
    path = tmp_path_factory.mktemp("map") / "map.nc"
    grid.to_dataset(name="bouguer").to_netcdf(path, engine="h5netcdf")
    observed = {"path": str(path), "centre_easting_km": 1140.0, "centre_northing_km": 2120.0}
    inference = {"chance_centres": 200, "noise_points": 150, "noise_draws": 4}
    prior = {"models": 400, "odds": {"granite pluton": 3.0}}
    return gb.assess(scenario(observed=observed, inference=inference, prior=prior))


@pytest.fixture(scope="module")
def pages(alone, compared) -> dict[str, tuple[str, dict[str, str]]]:
    return {"alone": assessment_report(alone), "compared": assessment_report(compared)}


class Reader(HTMLParser):
    """Collects tags, ids, attributes and visible text, and checks that tags close in order."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.stack: list[str] = []
        self.tags: list[tuple[str, dict]] = []
        self.words: list[str] = []
        self.feed(text)
        self.close()
        assert not self.stack

    def handle_starttag(self, tag, attrs) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.stack.append(tag)

    def handle_startendtag(self, tag, attrs) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag) -> None:
        assert self.stack.pop() == tag

    def handle_data(self, data) -> None:
        if not {"style", "svg"} & set(self.stack):
            self.words.append(data)

    @property
    def text(self) -> str:
        return " ".join(" ".join(self.words).split())


def test_with_a_map_everything_is_there_in_order(compared, pages) -> None:
    html, figures = pages["compared"]
    page = Reader(html)
    assert sorted(figures) == sorted(FIGURES)
    heads = [attrs["id"] for tag, attrs in page.tags if tag in ("h1", "h2") and "id" in attrs]
    assert heads == [
        "verdict", "cautions", "untested", "numbers", *HEADS[:3], "rivals", HEADS[3], "roundness", "marks", *HEADS[4:],
        "dimensions", "noise", "audit", "provenance",
    ]  # fmt: skip
    assert compared.verdict["statement"] in page.text
    assert all(caution in page.text for caution in CAUTIONS)
    for words in ("does not mean “only”", "Two bodies", "Centre and size range were taken as given"):
        assert words in page.text
    facts = compared.verdict["provenance"]
    assert facts["scenario_sha256"] in page.text
    assert facts["map"]["sha256"] in page.text
    assert "blocks of the map was predicted" in page.text


def test_without_a_map_missing_figures_are_explained(pages) -> None:
    html, figures = pages["alone"]
    page = Reader(html)
    assert sorted(figures) == sorted(set(FIGURES) - {"maps", "posterior", "chance", "odds", "spectrum"})
    assert "Erosion trades against diameter and density contrast" in page.text
    assert "Other bodies (a granite pluton, a mafic intrusion, a sag basin) were not compared" in page.text
    assert "no observed map, so no maps are drawn" in page.text
    assert "Without a map there are no other places to try" in page.text
    assert "Stated in the scenario" in page.text
    assert "Fit to the map" not in page.text


def without(comparison, **change):
    """The comparison with something about other places changed."""
    return dataclasses.replace(comparison, places=dataclasses.replace(comparison.places, **change))


def test_without_a_chance_test_its_absence_is_explained(compared) -> None:
    verdict = {key: value for key, value in compared.verdict.items() if key != "chance"}
    comparison = without(compared.comparison, chance=None)
    html, figures = assessment_report(dataclasses.replace(compared, comparison=comparison, verdict=verdict))
    assert "chance" not in figures
    assert "chance_centres = 0" in Reader(html).text


@pytest.mark.parametrize("which", ["alone", "compared"])
def test_page_asks_nothing_of_the_outside(which, pages) -> None:
    html, figures = pages[which]
    for text in (html, *figures.values()):
        bare = re.sub(r'xmlns(:\w+)?="[^"]*"', "", text)
        assert "http" not in bare
        assert "@import" not in bare
        for target in re.findall(r'(?:\bsrc|href)="([^"]*)"|url\(([^)]*)\)', bare):
            assert "".join(target).startswith(("#", "data:image/png;base64,"))
    assert not [tag for tag, _ in Reader(html).tags if tag in ("script", "link", "iframe", "img")]


@pytest.mark.parametrize("which", ["alone", "compared"])
def test_ids_are_unique_and_every_label_finds_its_target(which, pages) -> None:
    page = Reader(pages[which][0])
    ids = [attrs["id"] for _, attrs in page.tags if "id" in attrs]
    assert len(ids) == len(set(ids))
    referred = {name for _, attrs in page.tags for name in attrs.get("aria-labelledby", "").split()}
    assert referred
    assert referred <= set(ids)


def test_page_can_be_read_without_seeing_it(pages) -> None:
    page = Reader(pages["compared"][0])
    attributes = dict(page.tags)
    assert attributes["html"]["lang"] == "en"
    pictures = [attrs for tag, attrs in page.tags if tag == "svg"]
    assert len(pictures) == len(FIGURES)
    assert all(attrs["role"] == "img" and attrs["aria-labelledby"] for attrs in pictures)
    levels = [int(tag[1]) for tag, _ in page.tags if re.fullmatch(r"h[1-6]", tag)]
    assert levels[0] == 1
    assert max(np.diff(levels)) <= 1
    assert all("scope" in attrs for tag, attrs in page.tags if tag == "th")


def test_figures_are_well_formed(pages) -> None:
    for text in pages["compared"][1].values():
        root = ElementTree.fromstring(text.encode())
        assert root.tag == "{http://www.w3.org/2000/svg}svg"
        description = root.find("{http://www.w3.org/2000/svg}desc")
        assert len(description.text) > 40


def test_same_result_same_text(compared, pages) -> None:
    assert assessment_report(compared) == pages["compared"]


def test_names_are_escaped(pages) -> None:
    html, _ = pages["alone"]
    assert "<script" not in html
    assert NAME in Reader(html).text
    assert "a < b" in Reader(html).text


def test_dimensions_say_where_they_come_from(pages) -> None:
    text = Reader(pages["alone"][0]).text
    assert "breccia lens, thickness 0.35 km given scenario" in text
    assert "rim diameter 40 km given scenario" in text
    assert re.search(r"transient cavity, diameter 2\d\.\d km law McKinnon", text)
    assert re.search(r"melt sheet, mean thickness 0\.\d+ km derived", text)


def test_printed_numbers_are_the_verdicts(compared, pages) -> None:
    text = Reader(pages["compared"][0]).text
    verdict = compared.verdict
    peak = re.search(r"largest ([+−][\d.]+) mGal", text)[1].replace("−", "-")
    assert float(peak) == pytest.approx(verdict["model"]["peak_mgal"], abs=0.051)
    chi2, dof = re.search(r"χ² = ([\d.]+) for (\d+) degrees", text).groups()
    assert float(chi2) == pytest.approx(verdict["fit"]["chi2"], rel=6e-3)
    assert int(dof) == verdict["fit"]["dof"]
    snr = re.search(r"signal-to-noise ratio ([\d.]+) \(", text)[1]
    assert float(snr) == pytest.approx(verdict["detectability"]["snr"], rel=0.06)


def test_rivals_stand_with_their_odds_the_most_probable_first(compared, pages) -> None:
    text = Reader(pages["compared"][0]).text
    table = text[text.index("What sets it apart") : text.index("Diameter and erosion")]
    rows = sorted(compared.verdict["rivals"], key=lambda row: -row["probability"])
    places = [table.index(row["name"]) for row in rows]
    assert places == sorted(places)
    assert {row["name"] for row in rows} == {IMPACT, NOISE_ALONE, *KNOWN_RIVALS}
    for rival in KNOWN_RIVALS.values():
        assert rival.tells in table
    best = max(row["log_evidence"] for row in rows)
    for row in rows:
        shown = float(re.search(rf"{row['name']} ([+−\d.]+)", table)[1].replace("−", "-"))
        assert shown == pytest.approx(row["log_evidence"] - best, abs=0.051)
    assert "granite pluton" in table
    assert f" {3:g} " in table[table.index("granite pluton") : table.index("flat floor, no central high")]  # prior odds


def test_fitted_intervals_are_the_verdicts(compared, pages) -> None:
    text = Reader(pages["compared"][0]).text
    for words, key in (("rim diameter, fitted", "rim_diameter_km"), ("erosion, fitted", "erosion_km")):
        shown = re.search(rf"{words} ([\d.]+) km \(([\d.]+) to ([\d.]+)\)", text).groups()
        expected = compared.verdict["fit"][key]
        width = expected["high"] - expected["low"]
        for number, name in zip(shown, ("median", "low", "high"), strict=True):
            assert float(number) == pytest.approx(expected[name], abs=0.06 * max(width, 0.1 * expected["high"]))


def test_a_map_too_small_for_other_centres_says_so(compared) -> None:
    comparison = without(compared.comparison, odds=compared.comparison.odds * np.nan)
    html, figures = assessment_report(dataclasses.replace(compared, comparison=comparison))
    assert "odds" not in figures
    assert "rings about any other place leave the map" in Reader(html).text


def test_candidates_of_a_search_are_listed_and_marked_on_the_map(compared, pages) -> None:
    assert "Candidates" not in Reader(pages["compared"][0]).text
    found = (Candidate(1140e3, 2120e3, 8.25, 0.01), Candidate(1080e3, 2090e3, 1.5, 0.64))
    table = candidate_table(list(found)).to_dict("records")
    html, figures = assessment_report(
        dataclasses.replace(compared, candidates=found, verdict=compared.verdict | {"search": table})
    )
    text = Reader(html).text
    assert "1 1140.0 2120.0 +8.2 0.010 2 1080.0 2090.0 +1.5 0.64" in text
    assert figures["odds"] != pages["compared"][1]["odds"]
    nothing = dataclasses.replace(compared, verdict=compared.verdict | {"search": []})
    assert "No place on this map" in Reader(assessment_report(nothing)[0]).text


def test_page_is_small(pages) -> None:
    assert len(pages["compared"][0].encode()) < 3_000_000


def test_template_ships_inside_the_package() -> None:
    root = Path(gb.__file__).parent
    assert (root / "report" / "templates" / "assessment.html.j2").is_file()
    project = tomllib.loads((root.parent / "pyproject.toml").read_text(encoding="utf-8"))
    assert project["tool"]["hatch"]["build"]["targets"]["wheel"]["packages"] == [root.name]
