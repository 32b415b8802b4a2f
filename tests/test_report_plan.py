"""The page of a planned survey: whole, self-contained, safe with any name, honest about what it lacks."""

import dataclasses
import re
from html.parser import HTMLParser
from xml.etree import ElementTree

import numpy as np
import pytest
from test_survey_plan import question

from gravbasin.report.plan_page import TITLES, cost_rows, plan_report
from gravbasin.runs.plan_run import CAUTIONS, plan
from gravbasin.scenario import Costs

NAME = 'Plan <script>alert("x")</script> & Co'
VOID = {"meta", "link", "br", "hr", "img", "input"}


class Balance(HTMLParser):
    """Open tags, and every id met."""

    def __init__(self):
        super().__init__()
        self.open, self.ids, self.faults = [], [], []

    def handle_starttag(self, tag, attrs):
        if tag not in VOID:
            self.open.append(tag)
        self.ids += [value for key, value in attrs if key == "id"]

    def handle_startendtag(self, tag, attrs):
        self.ids += [value for key, value in attrs if key == "id"]

    def handle_endtag(self, tag):
        if not self.open or self.open.pop() != tag:
            self.faults.append(tag)


@pytest.fixture(scope="module")
def planned():
    asked = question(costs={"stations_per_day": 20, "day_rate": 1000.0, "currency": "X", "budget": 90_000.0})
    return plan(asked.model_copy(update={"name": NAME}))


@pytest.fixture(scope="module")
def report(planned):
    return plan_report(planned)


def test_the_page_is_whole_and_asks_nothing_of_the_outside(report):
    page, figures = report
    parser = Balance()
    parser.feed(page)
    assert (parser.open, parser.faults) == ([], [])
    assert len(set(parser.ids)) == len(parser.ids)
    plain = re.sub(r'xmlns(:\w+)?="[^"]+"', "", page)
    assert not re.search(r'(src|href)="(?!#|data:)', plain)
    assert "<script" not in page
    assert sorted(figures) == sorted(TITLES)
    for text in figures.values():
        assert ElementTree.fromstring(text).tag.endswith("svg")


def test_cautions_goal_floor_and_rules_stand_beside_the_recommendation(planned, report):
    page, _ = report
    for words in (*CAUTIONS, "Goal: detection probability 0.9", "do not average it away", "nearest rival"):
        assert words in page
    assert planned.recommendation.statement in page
    assert page.count("A spacing no wider than") == 2


def test_one_row_is_recommended_and_rows_say_what_the_table_says(planned):
    rows = cost_rows(planned)
    assert [row.verdict for row in rows].count("recommended") == 1
    for row in rows:
        cell = planned.table.sel(layout=row.layout, spacing=1000.0 * float(row.spacing))
        assert int(row.stations) == int(cell.stations)
        assert row.cost == f"{float(cell.cost):,.0f}".replace(",", " ")
        if row.verdict == "misses":
            assert float(cell.detection_probability) < 0.9


def test_without_rates_and_coordinates_the_page_says_so(planned):
    quest = planned.prepared.quest
    bare = dataclasses.replace(quest, site=dataclasses.replace(quest.site, crs=None))
    poor = dataclasses.replace(
        planned,
        survey=planned.survey.model_copy(update={"costs": Costs()}),
        prepared=dataclasses.replace(planned.prepared, quest=bare),
        chart=None,
        ranking=None,
    )
    page, figures = plan_report(poor)
    assert "No rates were given, so nothing is costed" in page
    assert "without degrees, and no stations.geojson was written" in page
    assert "The chart was switched off" in page
    assert "No single places were ranked" in page
    assert sorted(figures) == ["merit", "stations", "vanishing"]


def test_existing_stations_alone_make_a_page_too(planned):
    quest = planned.prepared.quest
    x, y = np.meshgrid(np.arange(-28e3, 29e3, 7e3), np.arange(-28e3, 29e3, 7e3))
    site = dataclasses.replace(quest.site, existing=quest.site.centre + np.stack([x.ravel(), y.ravel()], axis=1))
    told = dataclasses.replace(planned.recommendation, outcome="existing stations suffice", layout=None, spacing_m=None)
    alone = dataclasses.replace(
        planned,
        recommendation=told,
        existing=next(iter(planned.cells.values())),
        prepared=dataclasses.replace(planned.prepared, quest=dataclasses.replace(quest, site=site)),
    )
    page, _ = plan_report(alone)
    assert "Existing stations suffice" in page
    assert "beyond the existing stations" in page


def test_the_same_plan_gives_the_same_page(planned, report):
    assert plan_report(planned) == report
