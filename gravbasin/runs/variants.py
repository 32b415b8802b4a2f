"""One scenario with other values at dotted paths, and what is known of the field behind such a path."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from functools import cached_property
from typing import Any

from gravbasin.errors import InputError
from gravbasin.scenario import Scenario
from gravbasin.scenario_file import _known_fields, _suggestion, _validated

__all__ = ["Variants", "description_of", "unit_of"]

Value = float | str | bool

_UNITS = {
    "_kg_m3_per_km": "kg m-3 km-1",
    "_kg_m3": "kg m-3",
    "_m_per_myr": "m Myr-1",
    "_m_per_km": "m km-1",
    "_km3": "km3",
    "_km": "km",
    "_mgal": "mGal",
    "_myr": "Myr",
    "_mpa": "MPa",
    "_degrees": "degree",
    "_height_m": "m",
}

IDLE = (
    "name",
    "note",
    "seed",
    "samples",
    "rivals",
    "observed",
    "prior",
    "survey",
    "sweep",
    "model",
    "inference.consistent_p_value",
    "inference.chance_p_value",
    "inference.separation",
    "inference.chance_centres",
    "inference.noise_points",
    "inference.noise_draws",
)
"""Tables and fields that change nothing a sweep keeps."""

BUSY = ("model.station_height_m",)
"""Fields in these tables that do."""


@dataclasses.dataclass(frozen=True, eq=False)
class Variants:
    """A scenario and the paths at which its cases differ.

    Attributes
    ----------
    base : Scenario
        The scenario about which the sweep is made.
    paths : tuple of str
        Dotted names; a number picks one entry of a list (``background.layers.0.density_kg_m3``).
    """

    base: Scenario
    paths: tuple[str, ...]

    @cached_property
    def _tree(self) -> dict[str, Any]:
        return self.base.model_copy(update={"sweep": None}).model_dump()

    def scenario(self, values: Sequence[Value]) -> Scenario:
        """The case with these values, checked like a scenario file.

        Raises
        ------
        ScenarioError
            Values out of bounds or at odds with each other.
        """
        tree = self._tree
        for path, value in zip(self.paths, values, strict=True):
            tree = _placed(tree, path.split("."), value, path)
        return _validated(tree, "case")

    def check(self) -> None:
        """Refuse paths that name nothing, or nothing that matters to a case."""
        known = dict(_known_fields(Scenario))
        for path in self.paths:
            if _plain(path) not in known or known[_plain(path)].startswith("the table ["):
                raise InputError("sweep.fields", path, "is not a known field", _suggestion(path.split(".")))
            if path not in BUSY and any(path == idle or path.startswith(f"{idle}.") for idle in IDLE):
                raise InputError("sweep.fields", path, "changes nothing that a sweep keeps", "let another field vary")


def description_of(path: str) -> str:
    """What the scenario says of a field, without its unit."""
    text = dict(_known_fields(Scenario))[_plain(path)].split(";")[0]
    unit = unit_of(path)
    shown = unit.replace("-3", "³").replace("m3", "m³") if unit != "1" else ""
    return text.removesuffix(f", {shown}") if shown else text


def unit_of(path: str) -> str:
    """Unit of a field as netCDF attributes spell it, from its name; "1" where it has none."""
    return next((unit for ending, unit in _UNITS.items() if path.endswith(ending)), "1")


def _plain(path: str) -> str:
    return ".".join(part for part in path.split(".") if not part.isdigit())


def _placed(tree: Any, parts: Sequence[str], value: Value, path: str) -> Any:
    """A copy of the tree along one path, with the value at its end; everything else is shared."""
    if not parts:
        return value
    head, *rest = parts
    if head.isdigit():
        if not isinstance(tree, (list, tuple)) or int(head) >= len(tree):
            raise InputError("sweep.fields", path, "picks an entry that the list does not have", "list it in the file")
        return [_placed(item, rest, value, path) if i == int(head) else item for i, item in enumerate(tree)]
    if isinstance(tree, (list, tuple)):
        raise InputError("sweep.fields", path, "is a list", f"pick one entry, as in {path.replace(head, '0.' + head)}")
    return {**(tree or {}), head: _placed((tree or {}).get(head), rest, value, path)}
