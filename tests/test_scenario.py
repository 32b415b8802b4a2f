"""Scenario files: every fault at once with a suggestion, overrides, paths, and a round trip."""

from pathlib import Path

import pytest
from pydantic import BaseModel

from gravbasin.errors import InputError
from gravbasin.scenario import Background, Crater, Damage, Dimensions, Fill, History, Scenario
from gravbasin.scenario_file import ScenarioError, load_scenario, parse_override, scenario_hash, scenario_toml

WHOLE = """
name = "Invented"
seed = 7
[crater]
rim_diameter_km = 45
target_rock = "mixed"
cover_thickness_km = 0.8
setting = "hydrothermal"
age_myr = 420
[dimensions]
structural_uplift_km = 3.9
[background]
moho_km = 38
layers = [{top_km = 0, density_kg_m3 = 2700, gradient_kg_m3_per_km = 9}, {top_km = 16, density_kg_m3 = 2850}]
[fill]
lithology = "shaly sand"
[history]
events = [{erode_km = 2.5}, {bury_km = 0.4}]
[observed]
path = "maps/bouguer.nc"
centre_easting_km = 12.5
"""


@pytest.fixture
def written(tmp_path: Path):
    def write(text: str) -> Path:
        path = tmp_path / "case.toml"
        path.write_text(text, encoding="utf-8")
        return path

    return write


def faults(error: pytest.ExceptionInfo) -> list[str]:
    return str(error.value).splitlines()


def test_every_fault_comes_at_once_with_file_field_value_rule_and_remedy(written) -> None:
    path = written("""
[crater]
rim_diametre_km = 30
rim_diameter_km = 900
setting = "swamp"
[history]
erosion_km = -2
[damage]
porosity = "much"
[fool]
x = 1
""")
    with pytest.raises(ScenarioError) as error:
        load_scenario(path)
    lines = faults(error)
    assert len(lines) == 6
    assert all(line.startswith("case.toml: ") for line in lines)
    for field, value in [
        ("crater.rim_diametre_km", "30"),
        ("crater.rim_diameter_km", "900"),
        ("crater.setting", "swamp"),
        ("history.erosion_km", "-2"),
        ("damage.porosity", "much"),
        ("fool", ""),
    ]:
        assert any(f" {field} = {value}" in line for line in lines), field
    assert "did you mean crater.rim_diameter_km?" in str(error.value)
    assert all("; " in line for line in lines)  # a remedy after every rule


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("", "crater = (missing)"),
        ("[crater]\nrim_diameter_km = 20\n[dimensions]\nuplift_km = 2", "did you mean"),
        ("[crater]\nrim_diameter_km = 20\ntarget_rock = 'mixed'", "needs crater.cover_thickness_km"),
        ("[crater]\nrim_diameter_km = 20\ncover_thickness_km = 1", "mixed targets only"),
        ("[crater]\nrim_diameter_km = 20\n[history]\nerosion_rate_m_per_myr = 5", "needs crater.age_myr"),
        ("[crater]\nrim_diameter_km = 20\nage_myr = 9\n[history]\nerosion_rate_m_per_myr = 5\nerosion_km = 1", "excl"),
        ("[crater]\nrim_diameter_km = 20\n[history]\nevents = [{bury_km = 1}]\nburial_km = 2", "events replace"),
        ("[crater]\nrim_diameter_km = 20\n[history]\nevents = [{bury_km = 1, erode_km = 1}]", "exactly one"),
        ("[crater]\nrim_diameter_km = 20\n[background]\nlayers = [{top_km = 1, density_kg_m3 = 2700}]", "start at 0"),
        ("[crater]\nrim_diameter_km = 20\n[background]\nlayers = [{top_km = 0, density_kg_m3 = 2700}, "
         "{top_km = 0, density_kg_m3 = 2800}]", "from the top down"),
        ("[crater]\nrim_diameter_km = 20\n[background]\nlayers = [{top_km = 0, density_kg_m3 = 2700}, "
         "{top_km = 40, density_kg_m3 = 2800}]", "above the Moho"),
        ("[crater\n", "is not valid TOML"),
        ("[crater]\nrim_diameter_km = nan", "crater.rim_diameter_km"),
        ("[crater]\nrim_diameter_km = 20\n[noise]\nsill_mgal = 3", "together"),
    ],
)  # fmt: skip
def test_rules(written, text: str, expected: str) -> None:
    with pytest.raises(InputError) as error:
        load_scenario(written(text))
    assert expected in str(error.value)
    assert "case.toml" in str(error.value)


def test_a_missing_file_is_one_clear_line(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="does not exist"):
        load_scenario(tmp_path / "none.toml")


def _bounds(model: type[BaseModel], prefix: str = "") -> list[tuple[str, object]]:
    """A value just outside every numeric bound and every choice of every table of the scenario."""
    cases: list[tuple[str, object]] = []
    for name, field in model.model_fields.items():
        inner = [c for c in (field.annotation, *getattr(field.annotation, "__args__", ()))
                 if isinstance(c, type) and issubclass(c, BaseModel)]  # fmt: skip
        if inner and "tuple" not in str(field.annotation):
            cases += _bounds(inner[0], f"{prefix}{name}.")
        schema = model.model_json_schema()["properties"][name]
        for option in (schema, *schema.get("anyOf", ())):
            cases += [(prefix + name, option[key] - 1) for key in ("minimum",) if key in option]
            cases += [(prefix + name, option[key] + 1) for key in ("maximum",) if key in option]
            cases += [(prefix + name, option["exclusiveMinimum"])] if "exclusiveMinimum" in option else []
            cases += [(prefix + name, "no such choice")] if "enum" in option else []
    return cases


@pytest.mark.parametrize(("dotted", "value"), _bounds(Scenario), ids=lambda v: str(v))
def test_every_declared_bound_is_kept(written, dotted: str, value: object) -> None:
    path = written(WHOLE)
    with pytest.raises(InputError, match=dotted.replace(".", r"\.")):
        load_scenario(path, {dotted: value})


def test_every_field_has_a_sentence() -> None:
    assert [name for name, field in _fields(Scenario) if not field.description] == []


@pytest.mark.parametrize("table", [Crater, Dimensions, Background, Damage, Fill, History], ids=lambda t: t.__name__)
def test_fields_of_the_structure_say_their_unit(table: type[BaseModel]) -> None:
    for name, field in _fields(table):
        for ending, unit in [("_km", "km"), ("_mgal", "mGal"), ("_myr", "million years"), ("_mpa", "MPa")]:
            if name.endswith(ending) and "_per_" not in name:
                assert unit in field.description, name


def _fields(model: type[BaseModel]):
    for name, field in model.model_fields.items():
        inner = [c for c in (field.annotation, *getattr(field.annotation, "__args__", ()))
                 if isinstance(c, type) and issubclass(c, BaseModel)]  # fmt: skip
        if inner:
            yield from _fields(inner[0])
        else:
            yield name, field


def test_a_resolved_file_reads_back_to_an_equal_scenario(written, tmp_path: Path) -> None:
    first = load_scenario(written(WHOLE))
    text = scenario_toml(first)
    again = tmp_path / "resolved" / "scenario.toml"
    again.parent.mkdir()
    again.write_text(text, encoding="utf-8")
    assert load_scenario(again) == first
    assert scenario_toml(load_scenario(again)) == text
    assert first.dimensions.structural_uplift_km == 3.9
    assert [e.bury_km for e in first.history.events] == [None, 0.4]


def test_odd_text_survives_the_round_trip(written, tmp_path: Path) -> None:
    odd = 'a "quoted" \\ back\\slash, tab\t, newline\n, é, 雪, ] [ = #'
    scenario = Scenario(name=odd, note=odd, crater={"rim_diameter_km": 10.1})
    assert load_scenario(written(scenario_toml(scenario))) == scenario


def test_relative_paths_start_at_the_file_and_overridden_ones_where_the_user_stands(
    written, monkeypatch, tmp_path
) -> None:
    path = written(WHOLE)
    assert load_scenario(path).observed.path == tmp_path.resolve() / "maps/bouguer.nc"
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    monkeypatch.chdir(elsewhere)
    assert load_scenario(path, {"observed.path": "other.nc"}).observed.path == elsewhere.resolve() / "other.nc"


def test_overrides_win_and_unknown_ones_are_refused_together(written) -> None:
    path = written(WHOLE)
    changed = load_scenario(path, {"crater.rim_diameter_km": 60.0, "damage.porosity": 0.05})
    assert (changed.crater.rim_diameter_km, changed.damage.porosity) == (60.0, 0.05)
    assert load_scenario(path).crater.rim_diameter_km == 45
    with pytest.raises(ScenarioError) as error:
        load_scenario(path, {"crater.rim": 60.0, "histry.erosion_km": 1.0})
    assert len(faults(error)) == 2
    assert "did you mean history.erosion_km?" in str(error.value)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("history.erosion_km=6.0", ("history.erosion_km", 6.0)),
        ("crater.setting = marine", ("crater.setting", "marine")),
        ('name="a = b"', ("name", "a = b")),
        ("history.events=[{bury_km=1}]", ("history.events", [{"bury_km": 1}])),
        ("observed.path=C:/maps/a b.nc", ("observed.path", "C:/maps/a b.nc")),
    ],
)
def test_command_line_overrides(text: str, expected: tuple) -> None:
    assert parse_override(text) == expected


@pytest.mark.parametrize("text", ["history.erosion_km", "=3", ""])
def test_overrides_without_key_or_value_are_refused(text: str) -> None:
    with pytest.raises(InputError, match=r"table\.key=value"):
        parse_override(text)


def test_the_hash_sees_content_but_not_the_folder(written, tmp_path: Path) -> None:
    one = load_scenario(written(WHOLE))
    moved = tmp_path / "moved"
    moved.mkdir()
    (moved / "case.toml").write_text(WHOLE, encoding="utf-8")
    two = load_scenario(moved / "case.toml")
    assert one.observed.path != two.observed.path
    assert scenario_hash(one) == scenario_hash(two)
    assert scenario_hash(one) != scenario_hash(load_scenario(moved / "case.toml", {"seed": 8}))


def test_a_scenario_cannot_be_changed_in_place() -> None:
    scenario = Scenario(crater={"rim_diameter_km": 20.0})
    with pytest.raises(ValueError, match="frozen"):
        scenario.seed = 3


CONFIGS = sorted(Path(__file__).parents[1].joinpath("configs").glob("*.toml"))


@pytest.mark.parametrize("path", CONFIGS, ids=lambda p: p.stem)
def test_every_scenario_that_ships_loads(path: Path) -> None:
    assert load_scenario(path).name
