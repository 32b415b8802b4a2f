"""Whole plans: outcome, table, files, vanishing level, impossible requests in one line each."""

import dataclasses
import json

import numpy as np
import pytest
import xarray as xr
from scipy import stats

from gravbasin.errors import CannotFinish, InputError
from gravbasin.observed import NoiseModel
from gravbasin.runs.plan_run import plan
from gravbasin.scenario import Scenario
from gravbasin.survey.merit import scatter_root, signal_to_noise
from gravbasin.survey.plan import default_spacings, evaluate, stations_of
from gravbasin.survey.recommend import recommend
from gravbasin.survey.sight import Plane, ring_sight, station_sight
from gravbasin.survey.vanish import last_crossing, vanishing_erosion, vanishing_of, worn_structures

QUIET = {"sill_mgal": 2.0, "range_km": 20.0, "smoothness": 0.8, "nugget_mgal": 0.1}
SMALL = {
    "layouts": ["square", "radial"], "spacings_km": [6.0, 12.0], "models": 100, "noise_draws": 2, "candidates": 200,
    "next_best": 3, "chart_diameters": 2, "crs": "EPSG:32725", "centre_easting_km": 500.0, "centre_northing_km": 7000.0,
}  # fmt: skip


def question(noise=QUIET, erosion=0.3, **survey):
    return Scenario(crater={"rim_diameter_km": 20.0}, history={"erosion_km": erosion}, noise=noise,
                    survey={**SMALL, **survey}, seed=3)  # fmt: skip


@pytest.fixture(scope="module")
def planned(tmp_path_factory):
    folder = tmp_path_factory.mktemp("plan") / "out"
    costs = {"stations_per_day": 20, "day_rate": 100.0, "currency": "X"}
    return plan(question(costs=costs), folder), folder


def test_a_plan_finds_the_cheapest_layout_that_meets_the_goal(planned):
    result, _ = planned
    table = result.table
    assert result.recommendation.outcome == "found"
    good = table.detection_probability >= 0.9
    chosen = table.sel(layout=result.recommendation.layout, spacing=result.recommendation.spacing_m)
    assert bool(chosen.detection_probability >= 0.9)
    assert float(chosen.cost) <= float(table.cost.where(good).min()) + 1e-9
    assert f"{int(chosen.stations)} stations" in result.recommendation.statement


def test_the_table_is_labelled_and_survives_a_round_trip(planned):
    result, folder = planned
    with xr.open_dataset(folder / "plan.nc", engine="h5netcdf") as back:
        xr.testing.assert_allclose(back.load(), result.table)
        assert json.loads(back.attrs["provenance"])["seed"] == 3
    for name in result.table.data_vars:
        assert result.table[name].attrs["long_name"]
        assert name == "best_rival" or result.table[name].attrs["units"]
    assert len((folder / "plan.csv").read_text().splitlines()) == 1 + 4


def test_numbers_keep_their_order(planned):
    t = planned[0].table
    assert (t.snr_low <= t.snr).all()
    assert (t.snr <= t.snr_high).all()
    assert (t.detection_low <= t.detection_probability).all()
    assert (t.detection_probability_searched < t.detection_probability).all()
    assert (t.threshold_searched > stats.norm.isf(1e-3)).all()
    np.testing.assert_array_equal(t.rival_distance_low <= t.rival_distance, True)
    square = t.sel(layout="square")
    assert float(square.rival_distance[0]) > float(square.rival_distance[1])  # 6 km nests within 12 km
    assert float(square.snr[0]) > float(square.snr[1])


def test_no_layout_beats_the_ceiling(planned):
    result, _ = planned
    for cell in result.cells.values():
        assert (cell.merit.snr[:, 0] < result.ceiling.merit.snr[:, 0]).all()
        assert (cell.merit.rival_distance < result.ceiling.merit.rival_distance).all()


def test_signal_to_noise_of_a_plan_by_simulated_surveys(planned):
    """The cell's detection probability for the model itself against 20,000 simulated surveys (4.5 s.e.)."""
    result, _ = planned
    quest = result.prepared.quest
    cell = result.cells["square", 12e3]
    stations, noise, stakes = stations_of(quest, cell.points), quest.noises[0], quest.stakes
    place = stations.place
    away = np.hypot(*(place[:, None] - place[None]).transpose(2, 0, 1))
    c = noise.covariance(away) + np.diag(noise.nugget_mgal**2 + stations.error**2)
    r = stakes.curves.at(stations.distance)
    robust = np.linalg.inv(c + r @ stakes.scatter @ stakes.scatter.T @ r.T)
    x = np.column_stack([np.ones(len(place)), place / 1e4])
    m = robust - robust @ x @ np.linalg.inv(x.T @ robust @ x) @ x.T @ robust
    w = m @ (r @ stakes.model)
    rng = np.random.default_rng(1)
    data = np.linalg.cholesky(c) @ rng.standard_normal((len(place), 20_000)) + x @ rng.normal(0, 30, (3, 20_000))
    faint = 3.0 / cell.merit.snr[0, 0]
    statistic = w @ (data + faint * (r @ stakes.model)[:, None]) / np.sqrt(w @ c @ w)
    rate, expected = np.mean(statistic > cell.threshold), float(stats.norm.cdf(3.0 - cell.threshold))
    assert abs(rate - expected) < 4.5 * np.sqrt(expected * (1 - expected) / 20_000)


def test_the_station_files_hold_what_the_plan_says(planned):
    result, folder = planned
    rows = (folder / "stations.csv").read_text().splitlines()
    assert rows[0].startswith("number,kind,easting_m,northing_m,longitude,latitude")
    chosen = result.table.sel(layout=result.recommendation.layout, spacing=result.recommendation.spacing_m)
    assert sum(",new," in row for row in rows) == int(chosen.stations)
    assert sum(",next best," in row for row in rows) == 3
    features = json.loads((folder / "stations.geojson").read_text())["features"]
    assert len(features) == len(rows) - 1
    longitude, latitude = features[0]["geometry"]["coordinates"]
    assert -33.5 < longitude < -32.5
    assert -27.7 < latitude < -26.6
    assert (folder / "report.html").read_text().count("<svg") == 5


def test_causes_add_up_and_what_is_gone_gives_nothing(planned):
    v = planned[0].vanishing
    assert 0.0 <= v.low <= v.median <= v.high
    assert v.erosion_km[0] == 0.0
    deepest = v.snr[:, -1]
    assert np.abs(deepest).max() < 0.2
    result = planned[0]
    sight = station_sight(
        stations_of(result.prepared.quest, result.cells["square", 12e3].points), result.prepared.quest.stakes.curves,
        result.prepared.quest.noises[:1],
    )  # fmt: skip
    worn = result.prepared.worn
    np.testing.assert_allclose(worn.causes.sum(axis=1), worn.profiles[:, 0], rtol=1e-9, atol=1e-9)
    alone = vanishing_of(result.scenario, worn, sight, result.prepared.quest.stakes.curves)
    held = result.prepared.quest.stakes.curves.coefficients(worn.profiles[2].T)
    expected = signal_to_noise(sight, scatter_root(held, np.ones(len(held))), held)[0, 0]
    np.testing.assert_allclose(alone.by_cause[:, 2].sum(), expected, rtol=1e-6)


def test_rougher_noise_hides_a_structure_earlier():
    scenario = question()
    radius = np.concatenate([np.linspace(0, 16e3, 65), np.geomspace(16e3, 60e3, 20)[1:]])
    plane = Plane.of(radius)
    levels = []
    for sill in (1.0, 4.0, 16.0):
        noise = NoiseModel(sill_mgal=sill, range_m=20e3, smoothness=0.8)
        found = vanishing_erosion(scenario, plane.gram([noise], spacing=4e3, error=0.2), radius, draws=6)
        levels.append(found.median)
    assert levels[0] > levels[1] > levels[2]
    assert set(found.as_dict()) == {"median", "low", "high", "open_ended_share"}


def test_a_threshold_for_a_search_hides_it_earlier_too():
    scenario, radius = question(), np.linspace(0, 60e3, 90)
    response = np.eye(90)[1::3]
    noise = np.diag(np.full(len(response), 2.0)) + 9.0
    sight = ring_sight(response, [noise], np.ones((len(response), 1)))
    known, searched = (vanishing_erosion(scenario, sight, radius, threshold=u, draws=4).median for u in (3.09, 6.0))
    assert searched < known


def test_draws_keep_their_numbers_at_every_level():
    worn = worn_structures(question(), np.linspace(0, 40e3, 30), erosion_km=np.array([0.0, 0.01]), draws=3)
    np.testing.assert_allclose(worn.profiles[0], worn.profiles[1], atol=0.5)
    assert np.ptp(worn.profiles[0, 1:, 0]) > 1.0


def test_last_crossing_of_a_low_that_turns_into_a_high():
    track = np.array([[9.0], [3.0], [-1.0], [5.0], [1.0]])
    levels = np.arange(5.0)
    assert last_crossing(levels, track, 3.0)[0] == pytest.approx(3.5)
    assert last_crossing(levels, track + 9.0, 3.0)[0] == 4.0
    assert last_crossing(levels, track - 9.5, 3.0)[0] == 0.0


def test_default_spacings_span_the_counts():
    found = default_spacings(100e3**2)
    assert len(found) == 12
    counts = 100e3**2 / found**2
    assert 15 < counts.min() < 25
    assert 900 < counts.max() < 1150


def outline(tmp_path, half_km=25.0, centre=(500.0, 7000.0)):
    corners = 1e3 * (np.array(centre) + half_km * np.array([[-1, -1], [1, -1], [1, 0.8], [-1, 0.8], [-1, -1]]))
    path = tmp_path / "area.geojson"
    path.write_text(json.dumps({"type": "Polygon", "coordinates": [corners.tolist()]}))
    return path


def told(result, cells=None, existing=None, ceiling=None, **survey):
    """The recommendation for the same stations under another goal or budget."""
    quest = dataclasses.replace(result.prepared.quest, survey=result.survey.model_copy(update=survey))
    if existing is not None:
        site = dataclasses.replace(quest.site, existing=existing)
        quest = dataclasses.replace(quest, site=site)
    alone = None if existing is None else evaluate(quest, np.zeros((0, 2)))
    return recommend(quest, result.cells if cells is None else cells, ceiling or result.ceiling, alone)


def test_a_target_met_by_existing_stations_is_told_so(planned):
    result, _ = planned
    x, y = np.meshgrid(np.arange(-28e3, 29e3, 4e3), np.arange(-28e3, 29e3, 4e3))
    old = result.prepared.quest.site.centre + np.stack([x.ravel(), y.ravel()], axis=1)
    found = told(result, cells={}, existing=old)
    assert found.outcome == "existing stations suffice"
    assert "The 225 existing stations already meet the goal" in found.statement
    assert (found.layout, found.spacing_m) == (None, None)
    with pytest.raises(InputError, match="beside the existing ones"):
        told(result, cells={}, existing=old[:3])
    assert told(result, existing=old[:3]).outcome == "found"


def test_a_goal_that_no_survey_can_meet_is_told_so(planned):
    found = told(planned[0], detection_probability=1.0 - 1e-12)
    assert found.outcome == "no survey can"
    assert found.statement.startswith("No survey can meet the goal (detection probability 1)")
    assert found.layout is not None


def test_goals_beyond_the_budget_and_beyond_the_spacings_are_told_apart(planned):
    result, _ = planned
    price = float(result.cells[result.recommendation.layout, result.recommendation.spacing_m].effort.cost)
    for budget, words in ((price - 1.0, "Nearest to it within the budget"), (1.0, "no layout tried is within")):
        poor = told(result, costs=result.survey.costs.model_copy(update={"budget": budget}))
        assert poor.outcome == "beyond the budget"
        assert f"{price:.0f} X" in poor.statement
        assert words in poor.statement
    apart = told(result, goal="tell apart", rival_distance=0.9 * float(result.ceiling.merit.rival_distance.min()))
    assert apart.outcome == "beyond the spacings tried"
    assert "No layout down to 6 km meets the goal" in apart.statement


def test_a_lucky_spacing_alone_is_not_recommended(planned):
    """A layout whose next closer spacing misses the goal owes its success to where its stations happen to lie."""
    result, _ = planned
    square = {key: cell for key, cell in result.cells.items() if key[0] == "square"}
    swapped = {("square", 6e3): square["square", 12e3], ("square", 12e3): square["square", 6e3]}
    between = np.mean([float(cell.detection("given").mean()) for cell in square.values()])
    assert told(result, cells=square, detection_probability=float(between)).outcome == "found"
    assert told(result, cells=swapped, detection_probability=float(between)).outcome != "found"


@pytest.mark.parametrize(
    ("survey", "fault", "hint"),
    [
        ({"spacings_km": [0.3]}, InputError, "of 4000 at most"),
        ({"spacings_km": [0.05]}, CannotFinish, "use a wider spacing"),
        ({"costs": {"budget": 50.0, "day_rate": 100.0, "stations_per_day": 10}}, InputError, "must reach for one day"),
        ({"costs": {"most_days": 0.5, "stations_per_day": 10}}, InputError, "at least one whole day"),
        ({"geopackage": True, "crs": None}, InputError, "needs the survey's reference system"),
        ({"crs": "EPSG:4326"}, InputError, "must be a projection in metres"),
    ],
)
def test_impossible_requests_are_refused_in_one_line(survey, fault, hint):
    with pytest.raises(fault, match=hint) as caught:
        plan(question(**survey))
    assert "\n" not in str(caught.value)


def test_an_area_without_room_is_refused_in_one_line(tmp_path):
    area = outline(tmp_path, half_km=1.0, centre=(503.0, 7004.0))
    with pytest.raises(InputError, match="has no room for a single new station") as caught:
        plan(question(area=area, layouts=["square"], spacings_km=[20.0]))
    assert "\n" not in str(caught.value)


def test_the_command_line_gives_the_same_plan_and_refuses_in_one_line(planned, tmp_path, monkeypatch, capsys):
    from test_cli import run

    result, folder = planned
    scenario = folder / "scenario.toml"
    code, out, err = run(monkeypatch, capsys, "spacing", scenario, "-o", tmp_path / "out")
    assert (code, err) == (0, "")
    assert result.recommendation.statement in out
    assert "licensed practice" in out
    names = {"plan.nc", "plan.csv", "stations.csv", "stations.geojson", "report.html", "scenario.toml", "figures"}
    assert {p.name for p in (tmp_path / "out").iterdir()} == names
    for name in ("plan.csv", "stations.csv", "stations.geojson", "report.html"):
        assert (tmp_path / "out" / name).read_text() == (folder / name).read_text()
    code, out, err = run(
        monkeypatch, capsys, "spacing", scenario, "-o", tmp_path / "no", "--set", "survey.crs=EPSG:4326"
    )
    assert (code, err.count("\n")) == (2, 1)
    assert not (tmp_path / "no").exists()
