"""The command line as a user meets it: help, exit codes, one clear line for every fault."""

import subprocess
import sys

import pytest
from click.testing import CliRunner

from gravbasin.cli import cli, main


def run(monkeypatch, capsys, *arguments):
    """Exit code, standard output and standard error of `gravbasin` with these arguments."""
    monkeypatch.setattr(sys, "argv", ["gravbasin", *map(str, arguments)])
    with pytest.raises(SystemExit) as stop:
        main()
    out, err = capsys.readouterr()
    return stop.value.code, out, err


@pytest.mark.parametrize("command", sorted(cli.commands))
def test_every_command_has_help_with_an_example(command):
    text = CliRunner().invoke(cli, [command, "--help"]).output
    assert "Example: gravbasin" in text
    assert "--quiet" in text


def test_init_writes_a_file_that_loads_and_refuses_to_overwrite(monkeypatch, capsys, tmp_path):
    from gravbasin.scenario_file import load_scenario

    target = tmp_path / "mine.toml"
    arguments = ("init", "--rim-diameter-km", 45, "--erosion-km", 4, "-o", target)
    code, out, _ = run(monkeypatch, capsys, *arguments)
    assert code == 0
    assert "gravbasin assess" in out
    scenario = load_scenario(target)
    assert (scenario.crater.rim_diameter_km, scenario.history.erosion_km) == (45.0, 4.0)
    code, _, err = run(monkeypatch, capsys, *arguments)
    assert code == 2
    assert "exists already" in err


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("[crater]\nrim_diameter_km = -3\n", "crater.rim_diameter_km = -3"),
        ("[crater]\nrim_diameter_kn = 30\n", "did you mean crater.rim_diameter_km?"),
        ("[crater\n", "is not valid TOML"),
        ("[crater]\nrim_diameter_km = 30\n", "noise.sill_mgal"),
        ("[crater]\nrim_diameter_km = 30\n[observed]\npath = 'none.nc'\n", "none.nc"),
    ],
)
def test_bad_scenarios_give_one_clear_line(monkeypatch, capsys, tmp_path, text, expected):
    path = tmp_path / "bad.toml"
    path.write_text(text)
    code, out, err = run(monkeypatch, capsys, "assess", path, "-o", tmp_path / "run")
    assert code == 2
    assert expected in err
    assert "Traceback" not in err + out
    assert not (tmp_path / "run").exists()


def test_a_missing_scenario_and_a_bad_change_are_told(monkeypatch, capsys, tmp_path):
    code, _, err = run(monkeypatch, capsys, "assess", tmp_path / "none.toml")
    assert (code, "gravbasin init" in err) == (2, True)
    path = tmp_path / "a.toml"
    path.write_text("[crater]\nrim_diameter_km = 30\n")
    for change, hint in (("history.erosion_kn=2", "did you mean history.erosion_km?"), ("erosion", "table.key=value")):
        code, _, err = run(monkeypatch, capsys, "assess", path, "--set", change)
        assert (code, hint in err) == (2, True)


def test_unknown_commands_and_options_exit_with_two(monkeypatch, capsys):
    assert run(monkeypatch, capsys, "asess")[0] == 2
    assert run(monkeypatch, capsys, "init", "--rim-diameter-km", "wide")[0] == 2


def test_importing_the_package_or_asking_for_help_loads_nothing_heavy():
    code = (
        "import sys, gravbasin, gravbasin.cli\n"
        "heavy = {'matplotlib', 'harmonica', 'verde', 'dask', 'numba', 'xarray', 'scipy', 'pandas'}\n"
        "print(sorted(heavy & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_public_names_are_sorted_and_all_resolve():
    import gravbasin as gb

    assert gb.__all__ == sorted(gb.__all__)
    assert all(getattr(gb, name) is not None for name in gb.__all__)
