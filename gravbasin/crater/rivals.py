"""Bodies other than impact structures that make roughly circular anomalies, with priors on their parameters."""

from __future__ import annotations

import dataclasses
import difflib
import itertools
from collections.abc import Mapping

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin import labels
from gravbasin.crater.cells import Mesh
from gravbasin.crater.priors import Range
from gravbasin.crater.shapes import SHAPES, shell_contrast, subring_radius
from gravbasin.errors import InputError
from gravbasin.scenario import Scenario

__all__ = ["KNOWN_RIVALS", "Rival", "rivals_of"]

Array = NDArray[np.float64]


@dataclasses.dataclass(frozen=True)
class Rival:
    """A kind of body with a prior on each of its parameters.

    Attributes
    ----------
    name : str
        Shown in tables.
    shape : str
        Name in `SHAPES`.
    ranges : mapping
        Prior of every parameter of the shape, by name with its unit.
    tells : str
        What sets it apart from an impact structure, one sentence.
    source : str
        Where its ranges come from.
    """

    name: str
    shape: str
    ranges: Mapping[str, Range]
    tells: str = ""
    source: str = ""

    def __post_init__(self) -> None:
        known = SHAPES[self.shape].parameters
        for name in self.ranges:
            if name not in known:
                near = difflib.get_close_matches(name, known, n=1)
                remedy = f"did you mean {near[0]}?" if near else f"a {self.shape} has: {', '.join(known)}"
                raise InputError(f"rivals: {self.name}: ranges.{name}", "", "is not a parameter of its shape", remedy)
        missing = [name for name in known if name not in self.ranges]
        if missing:
            raise InputError(
                f"rivals: {self.name}: ranges", "", f"must hold {', '.join(missing)}", "give [least, largest]"
            )
        for name, prior in self.ranges.items():
            self._check(name, prior)

    def _check(self, name: str, prior: Range) -> None:
        limits = {"_deg": (10.0, 170.0), "_kg_m3": (-2000.0, 2000.0)}
        low, high = next((v for ending, v in limits.items() if name.endswith(ending)), (0.0, 2000.0))
        positive = name.startswith(("radius", "thickness", "height", "depth", "decay"))
        if prior.low < low or prior.high > high or (positive and prior.low <= 0.0):
            rule = f"must lie {'above' if positive else 'between'} {low:g} and {high:g}"
            raise InputError(f"rivals: {self.name}: {name}", [prior.low, prior.high], rule, "narrow the range")

    def sample(self, rng: np.random.Generator) -> dict[str, float]:
        """One set of parameters from the prior."""
        return {name: float(prior.draw(rng, 1)[0]) for name, prior in self.ranges.items()}

    def contrast(self, parameters: Mapping[str, float], mesh: Mesh) -> Array:
        """Contrast of every cell, (depth, radius) kg/m³; exact mass in depth, walls smoothed over a quarter ring."""
        return shell_contrast(SHAPES[self.shape].shells(parameters, subring_radius(mesh)), mesh)

    @property
    def extras(self) -> int:
        """A rival draws nothing beyond its main parameters."""
        return 0

    def draw(self, main: Mapping[str, float], mesh: Mesh, rng: object) -> tuple[Array, Mapping[str, float]]:
        """Contrast of the body with these parameters, and no further results: the form banks of models ask for."""
        return self.contrast(main, mesh), {}

    def mesh(self, ranges: Mapping[str, Range] | None = None, *, layers: int = 40, rings: int = 96) -> Mesh:
        """Cells that hold every body within the ranges: finest at the ground and near the centre."""
        shape, wanted = SHAPES[self.shape], {**self.ranges, **(ranges or {})}
        corners = [
            dict(zip(wanted, values, strict=True))
            for values in itertools.product(*((prior.low, prior.high) for prior in wanted.values()))
        ]
        # Straight walls flare most at one corner; widths and depths grow with every parameter or fall with it.
        deepest = max(shape.base(corner) for corner in corners)
        widest = max(shape.radius(corner) for corner in corners)
        finest = min(shape.radius(corner) for corner in corners)
        edges = np.linspace(0.0, widest, rings + 1)
        if widest > 2.0 * finest:
            edges = finest * np.sinh(np.linspace(0.0, np.arcsinh(widest / finest), rings + 1))
        depth = deepest * np.expm1(2.0 * np.arange(layers + 1) / layers) / np.expm1(2.0)
        return Mesh(depth, edges)

    def section(self, parameters: Mapping[str, float], mesh: Mesh | None = None) -> xr.Dataset:
        """The body as a section: density_contrast (depth, radius), ready for every engine.

        Examples
        --------
        >>> granite = KNOWN_RIVALS["granite pluton"]
        >>> float(granite.section(granite.sample(np.random.default_rng(1))).density_contrast.min()) < 0
        True
        """
        cells = mesh or self.mesh(
            {name: Range(value, value) for name, value in parameters.items()}, layers=80, rings=160
        )
        facts = labels.provenance(rival=self.name, shape=self.shape, parameters=dict(parameters))
        long_name = "density minus that of the country rock"
        names = ("depth", "radius", "depth_edges", "radius_edges")
        return xr.Dataset(
            {
                "density_contrast": (
                    ("depth", "radius"),
                    self.contrast(parameters, cells),
                    {"units": "kg m-3", "long_name": long_name},
                )
            },
            coords={name: labels.coordinate(name, getattr(cells, name)) for name in names},
            attrs={"title": f"density section of a rival: {self.name}", "provenance": facts},
        )


def _rival(name: str, shape: str, tells: str, source: str, **ranges: tuple[float, float]) -> Rival:
    """Lengths and contrasts that span a factor of three or more are uniform in their logarithm."""
    priors = {key: Range(low, high, logarithmic=low > 0 and high / low >= 3.0) for key, (low, high) in ranges.items()}
    return Rival(name, shape, priors, tells, source)


_KNOWN = (
    _rival(
        "granite pluton", "plug", "flat floor, no central high, gentle outer gradients from outward-dipping walls",
        "Canadian shield and Cornubian granites; Bott 1962", radius_km=(2.5, 20.0), top_km=(0.0, 2.0),
        thickness_km=(4.0, 12.0), wall_dip_deg=(40.0, 85.0), contrast_kg_m3=(-150.0, -40.0),
    ),
    _rival(
        "mafic intrusion", "plug", "positive, steep, magnetic", "Bhattacharji et al. 2004, common practice",
        radius_km=(2.5, 25.0), top_km=(0.0, 6.0), thickness_km=(3.0, 10.0), wall_dip_deg=(60.0, 120.0),
        contrast_kg_m3=(150.0, 400.0),
    ),
    _rival(
        "alkaline ring complex", "ring complex", "positive with strong circular magnetics; a felsic lid may mask it",
        "Andersson & Malehmir 2017; common practice", radius_km=(1.0, 12.5), lid_km=(0.0, 5.0), thickness_km=(3.0, 9.0),
        lid_contrast_kg_m3=(-100.0, 0.0), contrast_kg_m3=(150.0, 460.0),
    ),
    _rival(
        "salt diapir", "diapir", "in a sedimentary basin, with a rim syncline", "common practice; halite from memory",
        radius_km=(0.5, 4.0), top_km=(0.2, 3.0), height_km=(3.0, 7.0),
    ),
    _rival(
        "caldera fill", "plug", "steep inner walls, flat floor, volcanic rocks", "Delgado & Pavez 2015",
        radius_km=(2.5, 30.0), top_km=(0.0, 0.5), thickness_km=(1.0, 3.0), wall_dip_deg=(95.0, 120.0),
        contrast_kg_m3=(-500.0, -200.0),
    ),
    _rival(
        "gneiss dome", "dome", "elongate, in swarms, foliation parallel to its edge", "Eskola 1949; from memory",
        radius_km=(2.5, 15.0), thickness_km=(3.0, 10.0), contrast_kg_m3=(-120.0, -30.0),
    ),
    _rival(
        "sag basin", "basin", "very gentle gradient without a maximum at any rim", "from memory",
        radius_km=(25.0, 150.0), depth_km=(0.5, 5.0), contrast_kg_m3=(-400.0, -100.0), decay_km=(1.5, 4.0),
    ),
)  # fmt: skip

KNOWN_RIVALS: Mapping[str, Rival] = {rival.name: rival for rival in _KNOWN}
"""Rivals every run compares with."""

_USUAL = {"plug": "granite pluton", "ring complex": "alkaline ring complex", "diapir": "salt diapir",
          "basin": "sag basin", "dome": "gneiss dome"}  # fmt: skip


def rivals_of(scenario: Scenario) -> tuple[Rival, ...]:
    """The known rivals and those of the scenario's ``[[rivals]]`` tables; a known name is replaced.

    Parameters that a table leaves out keep the ranges of the known rival of that name, else of that shape.

    Raises
    ------
    InputError
        A range for a parameter that the shape does not have, or out of its bounds.
    """
    found = dict(KNOWN_RIVALS)
    for table in scenario.rivals:
        same = found.get(table.name)
        usual = same if same is not None and same.shape == table.shape else KNOWN_RIVALS[_USUAL[table.shape]]
        given = {
            name: Range(low, high, logarithmic=low > 0 and high / low >= 3.0)
            for name, (low, high) in table.ranges.items()
        }
        found[table.name] = Rival(table.name, table.shape, {**usual.ranges, **given}, "", "the scenario")
    return tuple(found.values())
