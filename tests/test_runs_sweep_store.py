"""A sweep's folder: continued after any end, refused when it is another's, never half-written."""

import os
import signal
import subprocess
import sys
import textwrap
from types import SimpleNamespace

import pytest
import xarray as xr

from gravbasin.errors import CannotFinish, InputError
from gravbasin.runs import sweep_cost
from gravbasin.runs.case_store import CaseStore
from gravbasin.runs.executors import DaskExecutor
from gravbasin.runs.sweep import sweep
from gravbasin.scenario import Scenario

NOISE = {"sill_mgal": 6.0, "range_km": 25.0, "smoothness": 0.8, "nugget_mgal": 0.5}
FIELDS = [
    {"field": "history.erosion_km", "low": 0.0, "high": 2.0},
    {"field": "damage.porosity", "low": 0.04, "high": 0.12},
]

HEAD = """
import os, sys, time
from pathlib import Path
from gravbasin.runs import sweep_cost
from gravbasin.runs.sweep import sweep
from gravbasin.scenario import Scenario
sweep_cost._measured = lambda plan: (0.003, 0.0)   # not under test here, and the same every time
sweep_cost.BATCH_SECONDS = (0.1, 0.1)   # one tile at a time: as many places to be killed at as can be
"""


def question(cases=256, **more) -> Scenario:
    table = {
        "design": "sobol",
        "cases": cases,
        "profiles": True,
        "draws": 1,
        "fields": FIELDS,
        "layers": 20,
        "rings": 40,
    }
    return Scenario(crater={"rim_diameter_km": 24.0}, noise=NOISE, sweep=table, **more)


def _source(asked: Scenario) -> str:
    return f"question = Scenario.model_validate_json({asked.model_dump_json(exclude_none=True)!r})\n"


@pytest.fixture(scope="module")
def unbroken(tmp_path_factory) -> xr.Dataset:
    return sweep(question(), tmp_path_factory.mktemp("whole") / "out")


# Killed, and continued


def test_killed_at_random_moments_it_ends_as_if_never_broken(tmp_path, unbroken):
    """24 real processes killed without warning: one process that has its tables forks a child for every attempt, which
    dies by SIGKILL after 10 to 400 ms; the last one may finish. A few attempts must have kept something, and the
    dataset must equal the unbroken one bit for bit."""
    code = (
        HEAD
        + _source(question())
        + textwrap.dedent(
            """
            import random, signal
            from gravbasin.runs.executors import Task, maker_of
            from gravbasin.runs.sweep_plan import Plan
            plan = Plan.of(question)
            maker_of(plan.recipe).rows(0, plan.design.codes(0, 256))
            random.seed(3)
            folder = Path(sys.argv[1])
            kept = set()
            for attempt in range(24):
                child = os.fork()
                if child == 0:
                    sweep(question, folder)
                    os._exit(0)
                time.sleep(random.uniform(0.01, 0.4) if attempt > 12 else random.uniform(0.01, 0.12))
                os.kill(child, signal.SIGKILL)
                _, status = os.waitpid(child, 0)
                journal = folder / "journal.jsonl"
                kept.add(len(journal.read_bytes().splitlines()) if journal.exists() else -1)
            print(len(kept))
            """
        )
    )
    done = subprocess.run(
        [sys.executable, "-W", "ignore", "-c", code, str(tmp_path / "out")], capture_output=True, text=True, timeout=120
    )
    assert done.returncode == 0, done.stderr
    assert int(done.stdout.split()[-1]) >= 4
    xr.testing.assert_identical(sweep(question(), tmp_path / "out"), unbroken)


def test_killed_at_every_step_of_finishing_it_ends_as_if_never_broken(tmp_path, unbroken):
    """SIGKILL at the first, second, ... rename or removal in turn, until one attempt gets through."""
    code = (
        HEAD
        + _source(question())
        + textwrap.dedent(
            """
            import signal
            from gravbasin.runs.executors import maker_of
            from gravbasin.runs.sweep_plan import Plan
            plan = Plan.of(question)
            maker_of(plan.recipe).rows(0, plan.design.codes(0, 256))
            deaths = 0
            while True:
                child = os.fork()
                if child == 0:
                    count = 0
                    def deadly(do):
                        def step(*given, **more):
                            global count
                            count += 1
                            if count > deaths:
                                os.kill(os.getpid(), signal.SIGKILL)
                            return do(*given, **more)
                        return step
                    os.replace, os.unlink = deadly(os.replace), deadly(os.unlink)
                    sweep(question, Path(sys.argv[1]))
                    os._exit(0)
                if os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]) == 0:
                    break
                deaths += 1
            print(deaths)
            """
        )
    )
    done = subprocess.run(
        [sys.executable, "-W", "ignore", "-c", code, str(tmp_path / "out")], capture_output=True, text=True, timeout=120
    )
    assert done.returncode == 0, done.stderr
    assert int(done.stdout) >= 5  # sweep.json, cases.csv, scenario.toml, cases.nc, report.html at least
    xr.testing.assert_identical(sweep(question(), tmp_path / "out"), unbroken)
    left = {p.name for p in (tmp_path / "out").iterdir() if p.suffix != ".partial"}
    assert left == {"cases.nc", "cases.csv", "report.html", "scenario.toml", "sweep.json", "sweep.log", ".lock"}


def test_a_dask_worker_killed_in_mid_run_changes_nothing(tmp_path, unbroken, monkeypatch):
    monkeypatch.setattr("gravbasin.runs.sweep_cost.BATCH_SECONDS", (0.1, 0.1))
    made = DaskExecutor(None, 2)
    monkeypatch.setattr("gravbasin.runs.sweep.executor_of", lambda name, workers: made)
    killed = []

    def kill_one(text, done, cases):
        if 0 < done < cases and not killed:
            killed.extend(list(made.client.run(os.getpid).values())[:1])
            os.kill(killed[0], signal.SIGKILL)

    cases = sweep(question(), tmp_path / "out", "dask", progress=kill_one)
    assert killed
    xr.testing.assert_identical(cases, unbroken)


def test_interrupted_by_hand_it_goes_on_where_it_was(tmp_path, unbroken, monkeypatch):
    monkeypatch.setattr("gravbasin.runs.sweep_cost.BATCH_SECONDS", (0.1, 0.1))
    seen = []

    def stop_once(text, done, cases):
        if 0 < done < cases:
            seen.append(done)
            if len(seen) == 2:
                raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        sweep(question(), tmp_path / "out", progress=stop_once)
    assert "KeyboardInterrupt with 64 of 256 cases kept" in (tmp_path / "out" / "sweep.log").read_text()
    cases = sweep(question(), tmp_path / "out", progress=stop_once)
    assert min(seen[2:]) >= seen[1]  # nothing was done twice
    xr.testing.assert_identical(cases, unbroken)


def test_a_finished_folder_is_read_not_computed_again(tmp_path, unbroken, monkeypatch):
    sweep(question(), tmp_path / "out")
    monkeypatch.setattr("gravbasin.runs.sweep.executor_of", None)
    xr.testing.assert_identical(sweep(question(), tmp_path / "out"), unbroken)


# Another sweep's folder


@pytest.mark.parametrize(
    ("changed", "field"),
    [
        ({"history": {"burial_km": 0.5}}, "history.burial_km = 0.5: was 0.0"),
        ({"seed": 9}, "seed = 9: was 1"),
        ({"inference": {"false_alarm_probability": 0.01}}, "inference.false_alarm_probability = 0.01: was 0.001"),
        ({"crater": {"rim_diameter_km": 24.0, "age_myr": 5.0}}, "crater.age_myr = 5.0: was (not given)"),
    ],
)
def test_a_changed_scenario_is_refused_and_the_field_named(tmp_path, changed, field):
    with pytest.raises(KeyboardInterrupt):
        sweep(question(), tmp_path, progress=_stop_when_begun)
    other = Scenario.model_validate({**question().model_dump(exclude_none=True), **changed})
    with pytest.raises(InputError) as fault:
        sweep(other, tmp_path)
    assert field in str(fault.value)
    assert (tmp_path / "journal.jsonl").stat().st_size > 0


def _stop_when_begun(text, done, cases):
    if done:
        raise KeyboardInterrupt


def test_a_folder_without_a_single_case_takes_another_sweep(tmp_path):
    with pytest.raises(InputError, match="choose serial"):
        sweep(question(64), tmp_path, "nowhere")
    assert sweep(question(32), tmp_path).sizes["case"] == 32


def test_foreign_files_and_files_in_the_way_are_refused(tmp_path):
    (tmp_path / "thesis.tex").write_text("years of work")
    with pytest.raises(InputError, match="not a gravbasin sweep"):
        sweep(question(32), tmp_path)
    with pytest.raises(InputError, match="is a file"):
        sweep(question(32), tmp_path / "thesis.tex")


def test_two_sweeps_in_one_folder_and_a_lock_that_dies_with_its_process(tmp_path):
    code = (
        HEAD
        + _source(question(64))
        + "sweep(question, sys.argv[1], progress=lambda *a: (print('on', flush=True), time.sleep(60)))"
    )
    other = subprocess.Popen([sys.executable, "-W", "ignore", "-c", code, str(tmp_path)], stdout=subprocess.PIPE)
    try:
        assert other.stdout is not None
        assert other.stdout.readline() == b"on\n"
        with pytest.raises(CannotFinish, match=f"another sweep is at work in it \\(process {other.pid}\\)"):
            sweep(question(64), tmp_path)
    finally:
        other.kill()
        other.wait()
        other.stdout.close()
    assert sweep(question(64), tmp_path).sizes["case"] == 64


# Disks


def test_a_disk_too_small_is_told_before_any_case(tmp_path):
    """The kernel refuses files above 100 kB in this process: what a full disk or a quota does."""
    code = (
        HEAD
        + _source(question())
        + textwrap.dedent(
            """
        import resource, signal
        signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
        resource.setrlimit(resource.RLIMIT_FSIZE, (100_000, 100_000))
        try:
            sweep(question, sys.argv[1])
        except Exception as error:
            print(type(error).__name__, error)
        """
        )
    )
    done = subprocess.run([sys.executable, "-W", "ignore", "-c", code, str(tmp_path)], capture_output=True, text=True)
    assert done.stdout.startswith("CannotFinish output folder"), done.stderr
    assert "File too large" in done.stdout
    assert len(done.stdout.splitlines()) == 1
    assert sweep(question(32), tmp_path).sizes["case"] == 32


def test_a_sweep_above_the_limits_needs_a_yes_and_takes_no_room_without(tmp_path, monkeypatch):
    monkeypatch.setitem(sweep_cost.LIMITS, "seconds", 0.0)
    with pytest.raises(InputError, match="add --yes"):
        sweep(question(), tmp_path)
    assert not (tmp_path / "records.f64").exists()
    assert sweep(question(32), tmp_path, yes=True).sizes["case"] == 32  # the folder is free for another


def test_a_sweep_larger_than_the_disk_is_refused_and_takes_no_room(tmp_path, monkeypatch):
    monkeypatch.setattr("gravbasin.runs.sweep_cost.shutil.disk_usage", lambda folder: SimpleNamespace(free=9))
    with pytest.raises(CannotFinish, match="make room"):
        sweep(question(), tmp_path)
    assert not (tmp_path / "records.f64").exists()


def test_room_taken_in_vain_is_given_back(tmp_path, unbroken, monkeypatch):
    """A disk that turns out too small while room is taken keeps none of it."""

    def half(descriptor, start, size):
        os.ftruncate(descriptor, size // 2)
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr(os, "posix_fallocate", half)
        with pytest.raises(CannotFinish, match="No space left on device"):
            sweep(question(), tmp_path)
    assert (tmp_path / "records.f64").stat().st_size == 0
    xr.testing.assert_identical(sweep(question(), tmp_path), unbroken)


@pytest.mark.parametrize("file", ["journal.jsonl", "records.f64"])
def test_a_disk_that_fills_up_in_mid_run_loses_nothing(tmp_path, unbroken, monkeypatch, file):
    monkeypatch.setattr("gravbasin.runs.sweep_cost.BATCH_SECONDS", (0.1, 0.1))
    write, count = CaseStore._write, 0

    def full(self, name, data, offset):
        nonlocal count
        count += name == file
        if count > 3:
            write(self, name, data[: len(data) // 2], offset)  # as much as still fits
            raise OSError(28, "No space left on device")
        write(self, name, data, offset)

    monkeypatch.setattr(CaseStore, "_write", full)
    with pytest.raises(CannotFinish, match=r"No space left on device.*96 of 256 cases are kept"):
        sweep(question(), tmp_path)
    monkeypatch.setattr(CaseStore, "_write", write)
    xr.testing.assert_identical(sweep(question(), tmp_path), unbroken)


def test_a_folder_that_cannot_be_written_is_one_line():
    with pytest.raises(CannotFinish, match="output folder /proc/nowhere: cannot be written"):
        sweep(question(32), "/proc/nowhere")


def test_rows_that_changed_on_disk_are_made_again(tmp_path, unbroken, monkeypatch):
    monkeypatch.setattr("gravbasin.runs.sweep_cost.BATCH_SECONDS", (0.1, 0.1))

    def stop(text, done, cases):
        if done >= 128:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        sweep(question(), tmp_path, progress=stop)
    with open(tmp_path / "records.f64", "r+b") as records:
        records.seek(5000)
        records.write(b"\x00\x01\x02\x03")
    with open(tmp_path / "journal.jsonl", "ab") as journal:
        journal.write(b'{"first": 192, "cou')
    xr.testing.assert_identical(sweep(question(), tmp_path), unbroken)


# Failures, limits, memory


def test_failed_cases_keep_their_reason_and_the_rest_goes_on(tmp_path):
    fields = [{"field": "history.erosion_km", "values": [0.5, 40.0, 1.0]}, FIELDS[1] | {"steps": 2}]
    asked = Scenario(crater={"rim_diameter_km": 24.0}, noise=NOISE, sweep={"fields": fields, "profiles": True})
    cases = sweep(asked, tmp_path)
    assert [bool(f) for f in cases.failure.values] == [False, False, True, True, False, False]
    assert "must leave some crust" in str(cases.failure.values[2])
    assert cases.peak_mgal.isnull().values.tolist() == [False, False, True, True, False, False]
    assert cases["history.erosion_km"].values.tolist() == [0.5, 0.5, 40.0, 40.0, 1.0, 1.0]
    assert "2 of them failed" in (tmp_path / "sweep.log").read_text()
    assert "must leave some crust" in (tmp_path / "report.html").read_text()


def test_missing_runs_are_found_whatever_the_batch(tmp_path):
    with CaseStore(tmp_path, {"scenario": 1}, cases=100, width=2, tile=8) as store:
        store._done[[0, 3, 4, 12]] = True
        runs = list(store.missing(2))
        assert runs == [(8, 24), (40, 56), (56, 72), (72, 88), (88, 96)]
        assert store.count == 3 * 8 + 4
