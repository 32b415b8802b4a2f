"""Reading and writing scenario files: overrides, every fault at once, content hash."""

from __future__ import annotations

import difflib
import hashlib
import json
import tomllib
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any

from pydantic import BaseModel, ValidationError

from gravbasin.errors import InputError
from gravbasin.scenario import Scenario

__all__ = ["ScenarioError", "load_scenario", "parse_override", "scenario_hash", "scenario_toml"]

_FILES = ("observed.path", "samples.path", "survey.area", "survey.no_go", "survey.roads", "survey.existing")
"""Fields that name files, one or a list, and may be relative."""


class ScenarioError(InputError):
    """Every fault of one scenario file, one line each."""

    def __init__(self, faults: list[InputError]) -> None:
        self.faults = faults
        Exception.__init__(self, "\n".join(str(fault) for fault in faults))


def load_scenario(path: str | Path, overrides: Mapping[str, Any] | None = None) -> Scenario:
    """Read a scenario file, apply overrides, and check everything at once.

    Parameters
    ----------
    path : path
        A TOML file.
    overrides : mapping, optional
        New values by dotted path, e.g. ``{"history.erosion_km": 6.0}``.

    Returns
    -------
    Scenario
        Frozen; relative paths made absolute (from the file's folder; from the working directory for overrides).

    Raises
    ------
    ScenarioError
        All faults of the file, one line each: file, field, value, rule, remedy.
    """
    path = Path(path)
    where = path.name
    try:
        tree = tomllib.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise InputError(
            "scenario file", path, "does not exist", "check the path, or make one with: gravbasin init"
        ) from None
    except (OSError, UnicodeDecodeError) as error:
        raise InputError("scenario file", path, f"cannot be read ({error})", "give a UTF-8 TOML file") from None
    except tomllib.TOMLDecodeError as error:
        raise InputError("scenario file", path.name, f"is not valid TOML ({error})", "mend that line") from None
    _anchor(tree, path.resolve().parent)
    changes = dict(overrides or {})
    _check_overrides(changes, where)
    for dotted, value in changes.items():
        _set(tree, dotted, value)
    if any(name in changes for name in _FILES):
        _anchor(tree, Path.cwd())
    return _validated(tree, where)


def parse_override(text: str) -> tuple[str, Any]:
    """A command-line ``table.key=value`` as dotted path and value; the value is read as TOML, else as plain text.

    Examples
    --------
    >>> parse_override("history.erosion_km=6.0")
    ('history.erosion_km', 6.0)
    """
    key, sign, value = text.partition("=")
    if not sign or not key.strip():
        raise InputError("--set", text, "must have the form table.key=value", "for example: --set history.erosion_km=6")
    try:
        parsed = tomllib.loads(f"value = {value}")["value"]
    except tomllib.TOMLDecodeError:
        parsed = value.strip()
    return key.strip(), parsed


def scenario_hash(scenario: Scenario) -> str:
    """SHA-256 of the scenario without the folders of its files, so that a moved project keeps its hash."""
    tree = scenario.model_dump(mode="json")
    _rename(tree, lambda path: path.name)
    return hashlib.sha256(json.dumps(tree, sort_keys=True).encode()).hexdigest()


def scenario_toml(scenario: Scenario) -> str:
    """The scenario with every default filled in, as TOML that `load_scenario` reads back to an equal object."""
    lines: list[str] = []
    _write_table(scenario.model_dump(mode="json", exclude_none=True), "", lines)
    return "\n".join(lines).strip() + "\n"


def _write_table(tree: Mapping[str, Any], prefix: str, lines: list[str]) -> None:
    tables = {k: v for k, v in tree.items() if isinstance(v, dict)}
    lines += [f"{key} = {_toml_value(value)}" for key, value in tree.items() if key not in tables]
    for key, table in tables.items():
        lines += ["", f"[{prefix}{key}]"]
        _write_table(table, f"{prefix}{key}.", lines)


def _toml_value(value: Any) -> str:
    if isinstance(value, dict):
        return "{" + ", ".join(f"{k} = {_toml_value(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(_toml_value(v) for v in value) + "]"
    return json.dumps(value, ensure_ascii=False)


def _validated(tree: dict[str, Any], where: str) -> Scenario:
    try:
        return Scenario.model_validate(tree)
    except ValidationError as error:
        raise ScenarioError([_fault(e, where) for e in error.errors(include_url=False)]) from None


def _fault(error: Any, where: str) -> InputError:
    loc = [str(part) for part in error["loc"]]
    dotted = ".".join(loc) or "scenario"
    kind, value = error["type"], error.get("input")
    if kind == "extra_forbidden":
        return InputError(dotted, value, "is not a known field", _suggestion(loc), where)
    if kind == "missing":
        return InputError(dotted, "(missing)", "is required", f"add it: {_describe(loc)}", where)
    message = error["msg"].removeprefix("Value error, ")
    if kind == "value_error":
        rule, _, remedy = message.partition("; ")
        shown = "(this table)" if isinstance(value, (dict, BaseModel)) else value
        return InputError(dotted, shown, rule, remedy or "change it", where)
    rule = message.replace("Input should be", "must be")
    return InputError(dotted, value, rule, f"expected {_describe(loc)}", where)


def _known_fields(model: type[BaseModel], prefix: str = "") -> Iterator[tuple[str, str]]:
    for key, field in model.model_fields.items():
        yield prefix + key, field.description or f"the table [{prefix}{key}]"
        inner = _table_of(field.annotation)
        if inner is not None:
            yield from _known_fields(inner, f"{prefix}{key}.")


def _table_of(annotation: Any) -> type[BaseModel] | None:
    candidates = [annotation, *getattr(annotation, "__args__", ())]
    return next((c for c in candidates if isinstance(c, type) and issubclass(c, BaseModel)), None)


def _plain_path(loc: list[str]) -> str:
    return ".".join(part for part in loc if not part.isdigit())


def _describe(loc: list[str]) -> str:
    return dict(_known_fields(Scenario)).get(_plain_path(loc), "a value of the right kind")


def _suggestion(loc: list[str]) -> str:
    known = [path for path, _ in _known_fields(Scenario)]
    wanted = _plain_path(loc)
    near = difflib.get_close_matches(wanted, known, n=1, cutoff=0.6)
    if not near:
        same_name = [p for p in known if p.rpartition(".")[2] == loc[-1]]
        near = same_name or difflib.get_close_matches(loc[-1], [p.rpartition(".")[2] for p in known], n=1, cutoff=0.7)
    return f"did you mean {near[0]}?" if near else "remove it (gravbasin init writes a file with the common fields)"


def _check_overrides(changes: Mapping[str, Any], where: str) -> None:
    known = {path for path, _ in _known_fields(Scenario)}
    faults = [
        InputError(dotted, value, "is not a known field", _suggestion(dotted.split(".")), f"{where} (override)")
        for dotted, value in changes.items()
        if dotted not in known
    ]
    if faults:
        raise ScenarioError(faults)


def _set(tree: dict[str, Any], dotted: str, value: Any) -> None:
    *parents, key = dotted.split(".")
    for parent in parents:
        tree = tree.setdefault(parent, {})
    tree[key] = value


def _anchor(tree: dict[str, Any], folder: Path) -> None:
    _rename(tree, lambda path: str(folder / path.expanduser()))


def _rename(tree: dict[str, Any], change: Callable[[Path], str]) -> None:
    """Every file name in the tree replaced by what `change` makes of it."""
    for dotted in _FILES:
        name, _, key = dotted.partition(".")
        table = tree.get(name)
        if not isinstance(table, dict):
            continue
        value = table.get(key)
        if isinstance(value, (str, Path)):
            table[key] = change(Path(value))
        elif isinstance(value, (list, tuple)):
            table[key] = [change(Path(each)) if isinstance(each, (str, Path)) else each for each in value]
