"""The page of a sweep: whole, self-contained, safe with any name, its numbers those of the cases."""

import json
import re

import numpy as np
import pytest
import xarray as xr
from test_report_plan import Balance

from gravbasin.report.sweep_page import CAUTIONS, sweep_report
from gravbasin.runs.sweep import sweep
from gravbasin.scenario import Scenario

NAME = 'Sweep </script><script>alert("x")</script> & Co'
NOISE = {"sill_mgal": 4.0, "range_km": 20.0, "smoothness": 0.8, "nugget_mgal": 0.3}
FIELDS = [
    {"field": "crater.rim_diameter_km", "values": [20.0, 30.0, 40.0]},
    {"field": "history.erosion_km", "values": [0.0, 1.0, 2.0]},
    {"field": "crater.setting", "values": ["land", "marine"]},
]


def question(**more) -> Scenario:
    table = {"fields": FIELDS, "layers": 20, "rings": 40, **more}
    return Scenario(name=NAME, crater={"rim_diameter_km": 30.0}, noise=NOISE, sweep=table)


@pytest.fixture(scope="module")
def cases(tmp_path_factory) -> xr.Dataset:
    return sweep(question(), tmp_path_factory.mktemp("sweep"))


@pytest.fixture(scope="module")
def page(cases) -> str:
    return sweep_report(question(), cases)


def embedded(page: str) -> dict:
    (text,) = re.findall(r'<script type="application/json" id="data">(.*?)</script>', page, re.S)
    return json.loads(text)


def test_it_is_whole_and_its_ids_are_unique(page):
    balance = Balance()
    balance.feed(page)
    assert balance.open == []
    assert balance.faults == []
    assert len(balance.ids) == len(set(balance.ids))


def test_it_asks_nothing_of_the_outside(page):
    without_namespaces = re.sub(r'xmlns(:\w+)?="[^"]*"', "", page.replace("http://www.w3.org/2000/svg", ""))
    assert "http:" not in without_namespaces
    assert "https:" not in without_namespaces
    assert "url(" not in re.sub(r"url\(#", "", without_namespaces)
    assert not re.search(r"\b(fetch|XMLHttpRequest|import)\s*\(", without_namespaces)


def test_a_name_cannot_become_a_script(page):
    assert '<script>alert("x")' not in page
    assert page.count("<script") == 2


def test_cautions_stand_before_the_numbers(page):
    for caution in CAUTIONS:
        assert caution in page
    assert page.index(CAUTIONS[0]) < page.index("What came out")


def test_means_in_the_page_are_those_of_the_cases(page, cases):
    """Diameter and erosion are fields 0 and 1; the mean over setting of three by three cells, erosion outermost."""
    found = np.array(embedded(page)["means"]["0 1 peak_mgal"]).reshape(3, 3)
    frame = cases.drop_vars(["profile", "grid"], errors="ignore").to_dataframe()
    expected = frame.groupby(["history.erosion_km", "crater.rim_diameter_km"])["peak_mgal"].mean().unstack()
    np.testing.assert_allclose(found, expected.to_numpy(), rtol=1e-3)


def test_the_table_holds_every_case(page, cases):
    data = embedded(page)
    assert [row[0] for row in data["rows"]] == list(range(18))
    column = data["columns"].index("signal_to_noise")
    np.testing.assert_allclose([row[column] for row in data["rows"]], cases.signal_to_noise, rtol=1e-4)


def test_a_heat_map_opens_on_fields_with_numbers(page):
    assert sorted(embedded(page)["first"]) == [0, 1]


def test_failed_cases_are_told_with_their_reason(page, tmp_path):
    """An erosion of 40 km leaves no crust of 38 km; six of eighteen cases fail and their cells stay empty."""
    fields = [FIELDS[0], {"field": "history.erosion_km", "values": [0.0, 40.0, 1.0]}, FIELDS[2]]
    asked = question(fields=fields)
    failed = sweep_report(asked, sweep(asked, tmp_path))
    assert "must leave some crust" in failed
    assert "No case failed." not in failed
    assert "No case failed." in page
    assert embedded(failed)["means"]["0 1 peak_mgal"][6:] == [None] * 3


def test_one_field_has_no_heat_map(tmp_path):
    asked = question(fields=FIELDS[:1])
    page = sweep_report(asked, sweep(asked, tmp_path))
    assert "A heat map needs two fields that vary" in page
    assert embedded(page)["first"] is None
