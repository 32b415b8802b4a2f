"""Sweeps: designs, cases against single runs, the same bits from every executor, rankings with known answers."""

import csv

import numpy as np
import pytest
import xarray as xr
from threadpoolctl import threadpool_limits

from gravbasin.crater import crater_model, default_mesh
from gravbasin.crater.cells import contrast
from gravbasin.errors import CannotFinish, InputError
from gravbasin.forward.rings import ring_table
from gravbasin.inference.detect import required_snr
from gravbasin.runs.case_bench import Recipe
from gravbasin.runs.cases import CaseMaker
from gravbasin.runs.compare import detect_without_map, noise_of
from gravbasin.runs.forward_run import model_anomaly
from gravbasin.runs.sampling import Design
from gravbasin.runs.sensitivity import ranking
from gravbasin.runs.sweep import estimate_sweep, sweep
from gravbasin.scenario import Scenario, Sweep
from gravbasin.scenario_file import ScenarioError, load_scenario, scenario_toml

NOISE = {"sill_mgal": 6.0, "range_km": 25.0, "smoothness": 0.8, "nugget_mgal": 0.5}
SIZE = {"field": "crater.rim_diameter_km", "low": 24.0, "high": 32.0, "scale": "log"}
EROSION = {"field": "history.erosion_km", "low": 0.0, "high": 2.0}
SETTING = {"field": "crater.setting", "values": ["land", "marine"]}


def scenario(table, **more) -> Scenario:
    return Scenario(crater={"rim_diameter_km": 28.0}, noise=NOISE, sweep=table, **more)


def sobol(cases=64, **more) -> Scenario:
    return scenario({"design": "sobol", "cases": cases, "profiles": True, "fields": [SIZE, EROSION, SETTING], **more})


# Designs


def test_a_grid_holds_every_combination_once_the_last_field_running_fastest():
    fields = [{**SIZE, "steps": 3}, SETTING]
    codes = Design.of(scenario({"fields": fields})).codes(0, 6)
    np.testing.assert_allclose(codes[:, 0], np.repeat(np.geomspace(24, 32, 3), 2))
    assert codes[:, 1].tolist() == [0, 1, 0, 1, 0, 1]


def test_a_list_takes_values_side_by_side():
    fields = [{"field": "history.erosion_km", "values": [3, 1, 2]}, {"field": "history.burial_km", "values": [0, 5, 6]}]
    codes = Design.of(scenario({"design": "list", "fields": fields})).codes(0, 3)
    assert codes.tolist() == [[3, 0], [1, 5], [2, 6]]


def test_a_latin_hypercube_has_one_case_in_every_slice_of_every_field():
    n = 50
    codes = Design.of(scenario({"design": "latin hypercube", "cases": n, "fields": [SIZE, EROSION]})).codes(0, n)
    slices = [np.log(codes[:, 0] / 24) / np.log(32 / 24) * n, codes[:, 1] / 2 * n]
    for each in slices:
        assert sorted(np.floor(each).astype(int)) == list(range(n))
    assert len(set(slices[0].argsort()) ^ set(slices[1].argsort())) == 0
    assert not np.array_equal(slices[0].argsort(), slices[1].argsort())


def test_a_sobol_sample_fills_every_half_quarter_and_eighth_evenly():
    codes = Design.of(sobol()).codes(0, 64)
    for pieces in (2, 4, 8):
        assert np.bincount((codes[:, 1] / 2 * pieces).astype(int)).tolist() == [64 // pieces] * pieces


def test_a_saltelli_block_is_two_points_and_the_first_with_one_field_of_the_second():
    codes = Design.of(scenario({"design": "saltelli", "cases": 8, "fields": [SIZE, EROSION, SETTING]})).codes(0, 40)
    for block in codes.reshape(8, 5, 3):
        a, b = block[:2]
        for i, mixed in enumerate(block[2:]):
            assert mixed.tolist() == [b[j] if j == i else a[j] for j in range(3)]


@pytest.mark.parametrize("design", ["sobol", "saltelli", "latin hypercube", "grid"])
def test_any_piece_of_a_design_can_be_made_by_itself(design):
    fields = [{**SIZE, "steps": 8}, {**EROSION, "steps": 8}] if design == "grid" else [SIZE, EROSION]
    table = {"design": design, "fields": fields, **({} if design == "grid" else {"cases": 64})}
    whole = Design.of(scenario(table)).codes(0, 64)
    asked = Design.of(scenario(table))
    for first, last in ((40, 64), (0, 1), (3, 17), (17, 20), (0, 64)):
        np.testing.assert_array_equal(asked.codes(first, last), whole[first:last])


def test_another_seed_gives_another_sample():
    other = sobol().model_copy(update={"seed": 2})
    assert not np.array_equal(Design.of(sobol()).codes(0, 8), Design.of(other).codes(0, 8))


def test_the_table_survives_a_scenario_file(tmp_path):
    before = sobol()
    (tmp_path / "a.toml").write_text(scenario_toml(before))
    assert load_scenario(tmp_path / "a.toml") == before


@pytest.mark.parametrize(
    ("table", "message"),
    [
        ({"fields": [SIZE]}, "needs steps"),
        ({"design": "sobol", "fields": [SIZE]}, "needs cases"),
        ({"design": "sobol", "cases": 100, "fields": [SIZE]}, "take 64 or 128"),
        ({"fields": [{"field": "history.erosion_km"}]}, "either values or a range"),
        ({"fields": [{**SIZE, "low": 40.0, "steps": 3}]}, "low below high"),
        ({"fields": [{**EROSION, "steps": 3, "scale": "log"}]}, "start above 0"),
        ({"fields": [{"field": "crater.setting", "values": ["land", 3]}]}, "all numbers or all words"),
        ({"fields": [SETTING, SETTING]}, "vary once"),
        ({"design": "list", "fields": [SETTING, {"field": "history.erosion_km", "values": [1, 2, 3]}]}, "as many"),
    ],
)
def test_a_table_at_odds_with_itself_is_refused(table, message):
    with pytest.raises(ValueError, match=message):
        scenario(table)


@pytest.mark.parametrize(
    ("field", "message"),
    [
        ({"field": "history.erosion", "values": [1, 2]}, "did you mean history.erosion_km"),
        ({"field": "history", "values": [1, 2]}, "not a known field"),
        ({"field": "prior.models", "values": [300, 400]}, "changes nothing"),
        ({"field": "inference.chance_centres", "values": [300, 400]}, "changes nothing"),
        ({"field": "crater.rim_diameter_km", "low": 1.0, "high": 30.0, "steps": 3}, "greater than 2"),
        ({"field": "crater.setting", "values": ["land", "moon"]}, "'land', 'marine' or 'hydrothermal'"),
        ({"field": "background.layers.3.density_kg_m3", "values": [2600, 2700]}, "does not have"),
    ],
)
def test_a_field_that_is_wrong_by_itself_is_refused_before_any_work(field, message, tmp_path):
    with pytest.raises(InputError, match=message):
        sweep(scenario({"fields": [field]}), tmp_path / "out")
    assert not (tmp_path / "out").exists()


def test_a_scenario_without_the_table_or_without_noise_is_refused():
    with pytest.raises(InputError, match="add a \\[sweep\\] table"):
        estimate_sweep(Scenario(crater={"rim_diameter_km": 28.0}))
    with pytest.raises(InputError, match="give observed"):
        estimate_sweep(Scenario(crater={"rim_diameter_km": 28.0}, sweep={"fields": [SETTING]}))


# Cases against what a single run finds


def _made(question: Scenario) -> tuple[CaseMaker, np.ndarray]:
    diameter = 1e3 * question.crater.rim_diameter_km
    maker = CaseMaker(Recipe(question, diameter, 1.6 * diameter, 1.5))
    rows, failed = maker.rows(0, Design.of(question).codes(0, question.sweep.size))
    assert not failed
    return maker, rows


@pytest.mark.parametrize("erosion", [0.5, 1.5])
def test_a_case_agrees_with_a_single_run(erosion):
    """On a coarser mesh, shared by sizes up to 1.6 times as wide: means over 2 km agree within 1.5 % of the peak."""
    fields = [{"field": "history.erosion_km", "values": [erosion]}]
    question = scenario({"fields": fields, "profiles": True}, inference={"station_spacing_km": 2.0})
    maker, rows = _made(question)
    single = question.model_copy(
        update={
            "history": question.history.model_copy(update={"erosion_km": erosion}),
            "model": question.model.model_copy(update={"scatter": False}),
        }
    )
    modelled = model_anomaly(single, farthest=60e3)
    found = dict(zip([s.name for s in maker.scalars], rows[0, 1:], strict=False))
    at = np.arange(0.0, 30e3, 200.0)
    profile = np.interp(at, maker.bench.radius, rows[0, -maker.bench.radius.size :])
    difference = (profile - np.interp(at, modelled.radius, modelled.profile)).reshape(-1, 10).mean(axis=1)
    assert np.abs(difference).max() < 0.015 * abs(modelled.peak)
    assert found["excess_mass_kg"] == pytest.approx(modelled.mass_deficit(), rel=0.01)
    assert found["half_width_km"] == pytest.approx(modelled.half_width / 1e3, rel=0.02)
    seen, _ = detect_without_map(single, modelled, noise_of(single, None))
    assert found["signal_to_noise"] == pytest.approx(seen.snr, rel=0.02)
    assert found["detection_probability"] == pytest.approx(seen.detection_probability, abs=0.02)


def test_the_vanishing_level_is_where_the_ratio_needed_is_met():
    """Worked out again the long way: the structure eroded to that level, on its own mesh, seen by the same survey."""
    question = scenario({"fields": [{"field": "damage.porosity", "values": [0.05, 0.1]}]})
    maker, rows = _made(question)
    survey = maker.bench.survey(question)
    needed = required_snr(question.inference.detection_probability, question.inference.false_alarm_probability)
    for row, porosity in zip(rows, (0.05, 0.1), strict=True):
        level = row[1 + [s.name for s in maker.scalars].index("vanishing_erosion_km")]
        assert 0.2 < level < 5.0
        ratios = []
        for erosion in (0.9 * level, level, 1.1 * level):
            eroded = question.model_copy(
                update={
                    "history": question.history.model_copy(update={"erosion_km": erosion}),
                    "damage": question.damage.model_copy(update={"porosity": porosity}),
                }
            )
            model = crater_model(eroded)
            mesh = default_mesh(model)
            table = ring_table(maker.bench.radius, mesh.radius_edges, mesh.depth_edges, height_m=1.0)
            count = survey.count(1.5 * 28e3)
            means = survey.response[:count] @ table.anomaly(contrast(model, mesh))
            ratios.append(float(np.linalg.norm(survey.likelihood(count).whiten(means))))
        assert ratios[0] > needed > ratios[2]
        assert ratios[1] == pytest.approx(needed, rel=0.06)


def test_a_structure_that_is_never_seen_vanishes_at_once_and_one_never_lost_near_its_base():
    fields = [{"field": "noise.sill_mgal", "values": [500.0, 0.01]}]
    _, rows = _made(scenario({"fields": fields}, inference={"noise_draws": 0}))
    levels = rows[:, 1 + 8]
    assert levels[0] == 0.0
    assert levels[1] > 3.0


def test_scatter_lowers_the_ratio_and_every_draw_counts_in_the_probability():
    fields = [{"field": "history.erosion_km", "values": [0.5, 1.0]}]
    _, known = _made(scenario({"fields": fields}))
    maker, drawn = _made(scenario({"fields": fields, "draws": 12}))
    names = ["history.erosion_km", *(s.name for s in maker.scalars)]
    ratio, low, high = (names.index(n) for n in ("signal_to_noise", "snr_low", "snr_high"))
    assert (drawn[:, ratio] < known[:, ratio]).all()
    assert (drawn[:, high] - drawn[:, low] > known[:, high] - known[:, low]).all()
    low, high = names.index("peak_low_mgal"), names.index("peak_high_mgal")
    assert (drawn[:, low] < drawn[:, high]).all()
    np.testing.assert_array_equal(known[:, 1:3], drawn[:, 1:3])


def test_maps_follow_the_profile_and_honour_deformation():
    fields = [{"field": "deformation.tilt_degrees", "values": [0.0, 3.0]}]
    table = {"fields": fields, "profiles": True, "grids": True, "grid_step_km": 2.0}
    maker, rows = _made(scenario(table, history={"erosion_km": 2.0}))
    axis, radius = maker.grid_axis, maker.bench.radius
    grids = rows[:, -(axis.size**2) :].reshape(2, axis.size, axis.size)
    profiles = rows[:, -(axis.size**2) - radius.size : -(axis.size**2)]
    away = np.hypot(axis, axis[:, None])
    inside = away < 12e3
    spread = np.abs(grids[0] - np.interp(away, radius, profiles[0]))[inside]
    assert spread.max() < 0.12 * np.abs(profiles[0]).max()
    assert np.abs(grids[0] - grids[0][::-1]).max() < 1e-9
    assert np.abs(grids[1] - grids[1][::-1]).max() > 0.05
    assert np.isnan(rows[1, 1 + 8])  # where a deformed structure vanishes is not worked out
    assert np.isfinite(rows[0, 1 + 8])


# Executors


def test_every_executor_gives_the_same_bits(tmp_path):
    question = sobol(128, draws=1)
    serial = sweep(question, tmp_path / "serial")
    threads = sweep(question, tmp_path / "threads", "threads", workers=3)
    xr.testing.assert_identical(serial, threads)
    assert (serial.failure == "").all()
    assert serial["crater.setting"].values.tolist()[:2] in (["land", "marine"], ["marine", "land"])
    assert serial.peak_mgal.attrs["units"] == "mGal"
    assert serial["history.erosion_km"].attrs["units"] == "km"


def test_a_batch_does_not_change_its_cases():
    question = sobol(128, draws=1)
    maker = CaseMaker(Recipe(question, 24e3, 32e3, 1.5))
    codes = Design.of(question).codes(0, 128)
    with threadpool_limits(1):
        whole, _ = maker.rows(0, codes)
        pieces = [maker.rows(first, codes[first : first + 32])[0] for first in (96, 32, 0, 64)]
    np.testing.assert_array_equal(whole, np.concatenate([pieces[i] for i in (2, 1, 3, 0)]))


def test_the_numbers_of_the_table_of_text_are_those_of_the_dataset(tmp_path):
    cases = sweep(sobol(64), tmp_path / "out")
    with open(tmp_path / "out" / "cases.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == 64
    np.testing.assert_array_equal([float(r["peak_mgal"]) for r in rows], cases.peak_mgal)
    assert [r["crater.setting"] for r in rows] == cases["crater.setting"].values.tolist()


def test_an_unknown_executor_or_an_absent_scheduler_is_one_line(tmp_path, monkeypatch):
    monkeypatch.setattr("gravbasin.runs.executors.ANSWER_SECONDS", 0.5)
    with pytest.raises(InputError, match="choose serial, threads, dask"):
        sweep(sobol(), tmp_path / "a", "mpi")
    with pytest.raises(CannotFinish, match="no dask scheduler answers at tcp://127"):
        sweep(sobol(), tmp_path / "b", "tcp://127.0.0.1:9")
    assert len(sweep(sobol(), tmp_path / "b").case) == 64  # nothing was lost: the same folder goes on


# Rankings


def _ishigami(x):
    return np.sin(x[:, 0]) + 7.0 * np.sin(x[:, 1]) ** 2 + 0.1 * x[:, 2] ** 4 * np.sin(x[:, 0])


ISHIGAMI_FIRST = np.array([0.3139, 0.4424, 0.0])
"""Indices of the Ishigami function with a = 7, b = 0.1, and the totals below: from its closed form (Saltelli et al.
2000, from memory), recomputed here: V1 = (1 + bπ⁴/5)²/2, V2 = a²/8, V13 = 8b²π⁸/225."""
ISHIGAMI_TOTAL = np.array([0.5576, 0.4424, 0.2437])

NAMES = ("history.erosion_km", "history.burial_km", "damage.decay_km")


def _cases(table: Sweep, of) -> xr.Dataset:
    codes = Design(table, 3).codes(0, table.size)
    columns = {name: ("case", codes[:, i]) for i, name in enumerate(NAMES)}
    return xr.Dataset({**columns, "y": ("case", of(codes))})


def _sweep(design, **more) -> Sweep:
    fields = [{"field": name, "low": -np.pi, "high": np.pi, **more.get("field", {})} for name in NAMES]
    return Sweep(design=design, fields=fields, cases=more.get("cases"))


def test_the_reference_values_follow_from_the_closed_form():
    a, b = 7.0, 0.1
    v1, v2, v13 = 0.5 * (1 + b * np.pi**4 / 5) ** 2, a**2 / 8, 8 * b**2 * np.pi**8 / 225
    total = v1 + v2 + v13
    np.testing.assert_allclose(np.array([v1, v2, 0]) / total, ISHIGAMI_FIRST, atol=6e-5)
    np.testing.assert_allclose(np.array([v1 + v13, v2, v13]) / total, ISHIGAMI_TOTAL, atol=6e-5)


def test_sobol_indices_of_a_known_function():
    """4096 base points: within four of the stated standard errors, which are below 0.03 (chance 4e-4 over the six)."""
    table = _sweep("saltelli", cases=4096)
    found = {e.field: e for e in ranking(_cases(table, _ishigami), table, "y").effects}
    for name, first, total in zip(NAMES, ISHIGAMI_FIRST, ISHIGAMI_TOTAL, strict=True):
        assert found[name].first == pytest.approx(first, abs=4 * found[name].first_error)
        assert found[name].total == pytest.approx(total, abs=4 * found[name].total_error)
        assert 0 < found[name].first_error < 0.03
        assert 0 < found[name].total_error < 0.03


@pytest.mark.parametrize("design", ["sobol", "latin hypercube"])
def test_first_order_indices_of_a_plain_sample(design):
    table = _sweep(design, cases=4096)
    result = ranking(_cases(table, _ishigami), table, "y")
    found = {e.field: e for e in result.effects}
    for name, first in zip(NAMES, ISHIGAMI_FIRST, strict=True):
        assert found[name].first == pytest.approx(first, abs=0.03)
        assert np.isnan(found[name].total)
    assert "saltelli" in result.how


def test_a_whole_grid_gives_exact_indices():
    table = _sweep("grid", field={"steps": 5})
    found = {e.field: e for e in ranking(_cases(table, lambda x: 3 * x[:, 0] + x[:, 1]), table, "y").effects}
    assert found[NAMES[0]].first == pytest.approx(0.9, abs=1e-12)
    assert found[NAMES[0]].total == pytest.approx(0.9, abs=1e-12)
    assert found[NAMES[2]].total == pytest.approx(0.0, abs=1e-12)
    product = {e.field: e for e in ranking(_cases(table, lambda x: x[:, 0] * x[:, 1]), table, "y").effects}
    assert product[NAMES[0]].first == pytest.approx(0.0, abs=1e-12)
    assert product[NAMES[0]].total == pytest.approx(1.0, abs=1e-12)


def test_samples_that_do_not_tell_say_so():
    table = _sweep("saltelli", cases=32)
    assert "base points" in ranking(_cases(table, _ishigami), table, "y").how
    small = _sweep("sobol", cases=64)
    assert "fewer than 128" in ranking(_cases(small, _ishigami), small, "y").how
    assert "does not vary" in ranking(_cases(small, lambda x: 0 * x[:, 0]), small, "y").how


def test_estimates_write_nothing(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    cost = estimate_sweep(sobol(1024))
    assert cost.cases == 1024
    assert 2e-4 < cost.seconds_per_case < 0.5
    assert cost.batch % 32 == 0
    assert list(tmp_path.iterdir()) == []


def test_a_sample_that_fails_throughout_is_told_before_any_work(tmp_path):
    fields = [{"field": "history.erosion_km", "values": [50.0, 60.0]}]
    with pytest.raises(InputError, match="must leave some crust"):
        sweep(scenario({"fields": fields}), tmp_path / "out")


def test_words_are_checked_like_a_scenario_file(tmp_path):
    path = tmp_path / "a.toml"
    path.write_text("[crater]\nrim_diameter_km = 30\n[sweep]\ndesing = 'grid'\nfields = []\n")
    with pytest.raises(ScenarioError, match="did you mean sweep"):
        load_scenario(path)
