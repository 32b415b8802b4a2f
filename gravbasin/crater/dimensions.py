"""Dimensions of an impact structure from its rim diameter: published size laws, their ranges and their scatter."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable, Collection, Mapping
from typing import Literal, get_args

from gravbasin.crater.priors import Draws
from gravbasin.errors import InputError

__all__ = [
    "LAWS",
    "SUEVITE_DIAMETER",
    "CraterDimensions",
    "Law",
    "crater_dimensions",
    "simple_to_complex_km",
]

TargetRock = Literal["crystalline", "sedimentary", "mixed"]
Origin = Literal["given", "law", "drawn"]

RING_ONSET_KM = (25.0, 30.0)
"""Rim diameters between which a central peak gives way to a peak ring on Earth (Dence 2017; DESIGN: 25-30 km)."""


@dataclasses.dataclass(frozen=True)
class Law:
    """One size law: formula, range of rim diameters it was made for, scatter, source.

    Attributes
    ----------
    formula : callable
        From rim diameter (km), or the dimensions named in `arguments`, to the dimension (km or km³).
    valid_km : (float, float)
        Rim diameters for which the source states or implies validity.
    scatter : float
        Standard deviation of the natural logarithm of the dimension at a given argument.
    source : str
        Publication, or "from memory", or "common practice".
    arguments : tuple of str
        The dimensions the law starts from, in the order the formula takes them.
    """

    formula: Callable[..., float]
    valid_km: tuple[float, float]
    scatter: float
    source: str
    arguments: tuple[str, ...] = ("rim_diameter_km",)


def _constant_share(share: float) -> Callable[..., float]:
    return lambda value: share * value


LAWS: Mapping[str, Mapping[str, Law]] = {
    "transient_diameter_km": {
        "collapse scaling": Law(
            lambda d: (d * 3.2**0.13 / 1.17) ** (1 / 1.13), (3.2, 300), 0.10, "McKinnon & Schenk 1985, from memory"
        ),
        "shallow exponent": Law(lambda d: 4.0**0.15 * d**0.85, (4, 200), 0.10, "Croft 1985, from memory"),
        "simple": Law(_constant_share(1 / 1.25), (0.1, 4), 0.05, "2005 compilation, from memory"),
    },
    "transient_depth_km": {
        "paraboloid": Law(
            _constant_share(1 / (2 * math.sqrt(2))),
            (2, 300),
            0.15,
            "2005 compilation, from memory",
            ("transient_diameter_km",),
        ),
        "shield": Law(lambda d: 0.4 * d**0.75, (4, 100), 0.15, "Dence 2017"),
    },
    "apparent_depth_km": {
        "crystalline": Law(lambda d: 0.15 * d**0.43, (4, 150), 0.25, "Grieve & Pesonen 1992, from memory"),
        "sedimentary": Law(lambda d: 0.12 * d**0.30, (2, 150), 0.25, "Grieve & Pesonen 1992, from memory"),
        "simple": Law(lambda d: 0.13 * d**1.06, (0.1, 4), 0.20, "Grieve & Pilkington 1996, from memory"),
    },
    "rim_height_km": {
        "default": Law(
            lambda d, dt: 0.07 * dt**4 / d**3,
            (4, 150),
            0.5,
            "2005 compilation, from memory",
            ("rim_diameter_km", "transient_diameter_km"),
        ),
    },
    "structural_uplift_km": {
        "stratigraphic": Law(lambda d: 0.086 * d**1.03, (4, 250), 0.30, "Grieve & Pilkington 1996"),
        "early stratigraphic": Law(lambda d: 0.06 * d**1.1, (4, 100), 0.30, "Grieve et al. 1981, from memory"),
        "shield": Law(_constant_share(0.175), (4, 28), 0.30, "Dence 2017"),
    },
    "central_uplift_diameter_km": {
        "default": Law(lambda d: 0.31 * d**1.02, (5, 150), 0.20, "Therriault, Grieve & Reimold 1997, from memory"),
    },
    "peak_ring_diameter_km": {
        "default": Law(_constant_share(0.5), (25, 250), 0.10, "half the rim diameter, from memory"),
    },
    "melt_volume_km3": {
        "default": Law(
            lambda dt: 2e-4 * dt**3.85,
            (2, 300),
            0.45,
            "Grieve & Cintala 1992, exponent from memory",
            ("transient_diameter_km",),
        ),
    },
    "melt_diameter_km": {
        "default": Law(
            _constant_share(1.0), (2, 300), 0.0, "spans the transient cavity, from memory", ("transient_diameter_km",)
        ),
    },
    "breccia_thickness_km": {
        "complex": Law(lambda d: min(0.02 * d, 0.8), (10, 300), 0.35, "0.2-0.8 km in drilled craters, common practice"),
        "simple": Law(_constant_share(0.15), (0.1, 4), 0.25, "Grieve et al. 1989"),
    },
    "fracture_base_km": {
        "complex": Law(lambda d: min(0.2 * d, 8.0), (4, 100), 0.20, "synthesis of six structures, common practice"),
        "simple": Law(_constant_share(0.5), (0.1, 4), 0.20, "Ackermann et al. 1975, from memory"),
    },
    "moho_uplift_km": {
        "default": Law(
            lambda d: 0.009 * d * min(max((d - 100) / 50, 0.0), 1.0),
            (2, 250),
            0.35,
            "scaled from Christeson et al. 2009; one structure only, speculative",
        ),
    },
    # 0.12 of 0.55 km (Karp et al. 2002) and 0.55 km of a hollow of 0.59 km are known.
    "peak_height_km": {
        "default": Law(
            _constant_share(0.5), (4, 300), 0.40, "half the apparent depth, common practice", ("apparent_depth_km",)
        ),
    },
}
"""Every law by dimension and name."""


MELT_IN_SHEET: Mapping[str, float] = {"crystalline": 1.0, "mixed": 0.5, "sedimentary": 0.05}
"""Share of the melt that gathers in a coherent sheet; volatile-rich rock disperses the rest (0.01-0.1 for sedimentary
targets: Kieffer & Simonds 1980, from memory; the middle for mixed ones: common practice)."""

SUEVITE_MELT_SHARE = 0.25
"""Melt in suevite by volume, from one structure of 24 km: 350 m of suevite within 6 km hold the melt that its size
law asks for (computed)."""

SUEVITE_DIAMETER = 0.49
"""Diameter of the suevite, rim diameters: the collapsed disruption cavity (Pilkington & Hildebrand 2003)."""


@dataclasses.dataclass(frozen=True)
class CraterDimensions:
    """Dimensions of one structure when fresh; kilometres and cubic kilometres as the names say.

    `origin` tells for every dimension whether it was given, follows its law, or was drawn from the law's scatter;
    `source` names the law's publication; `validity` holds a remark for every dimension whose law was stretched beyond
    the diameters it was made for, or whose value met a physical limit.
    """

    rim_diameter_km: float
    target_rock: str
    transient_diameter_km: float
    transient_depth_km: float
    apparent_depth_km: float
    rim_height_km: float
    peak_height_km: float
    structural_uplift_km: float
    central_uplift_diameter_km: float
    peak_ring_diameter_km: float
    melt_volume_km3: float
    melt_diameter_km: float
    melt_thickness_km: float
    breccia_thickness_km: float
    suevite_thickness_km: float
    fracture_base_km: float
    moho_uplift_km: float
    origin: Mapping[str, Origin] = dataclasses.field(repr=False)
    source: Mapping[str, str] = dataclasses.field(repr=False)
    validity: Mapping[str, str] = dataclasses.field(repr=False, default_factory=dict)

    @property
    def simple(self) -> bool:
        """Whether the crater is a bowl without a central uplift."""
        return self.rim_diameter_km < simple_to_complex_km(self.target_rock)

    @property
    def ring_weight(self) -> float:
        """How far the central peak has collapsed into a peak ring: 0 (peak) to 1 (ring)."""
        low, high = RING_ONSET_KM
        return min(max((self.rim_diameter_km - low) / (high - low), 0.0), 1.0)


def simple_to_complex_km(target_rock: str) -> float:
    """Rim diameter at which craters turn complex: 4 km crystalline, 2 km sedimentary (Dence 1972, from memory)."""
    return 4.0 if target_rock == "crystalline" else 2.0


def crater_dimensions(
    rim_diameter_km: float,
    *,
    target_rock: TargetRock = "crystalline",
    transient_law: str = "collapse scaling",
    depth_law: str = "paraboloid",
    uplift_law: str = "stratigraphic",
    melt_coefficient: float = 2e-4,
    given: Mapping[str, float | None] | None = None,
    rng: Draws | None = None,
) -> CraterDimensions:
    """Dimensions of a crater from its final rim diameter.

    Parameters
    ----------
    rim_diameter_km : float
        Final rim diameter before erosion, km.
    target_rock : str
        "crystalline", "sedimentary" or "mixed" (sediments over basement: crystalline depth law, half the melt sheet).
    transient_law, depth_law, uplift_law : str
        Names in `LAWS` of the transient diameter, the transient depth and the structural uplift.
    melt_coefficient : float
        c in melt volume = c Dtc^3.85 (km³ from km); published range 1e-4 to 4e-4.
    given : mapping, optional
        Dimensions that are known; they win over their laws, and later laws start from them.
    rng : numpy Generator, optional
        Draw every dimension that is not given from the scatter of its law.

    Returns
    -------
    CraterDimensions

    Raises
    ------
    InputError
        An unknown law, target or dimension, a diameter that is not positive, or given values that contradict another.

    Examples
    --------
    >>> round(crater_dimensions(50.0).transient_diameter_km, 1)
    31.7
    """
    if not (math.isfinite(rim_diameter_km) and rim_diameter_km > 0):
        raise InputError("rim_diameter_km", rim_diameter_km, "must be greater than 0", "give kilometres")
    _known("target_rock", target_rock, get_args(TargetRock))
    _known("transient_law", transient_law, LAWS["transient_diameter_km"])
    _known("depth_law", depth_law, LAWS["transient_depth_km"])
    _known("uplift_law", uplift_law, LAWS["structural_uplift_km"])
    known = {name: float(value) for name, value in (given or {}).items() if value is not None}
    for name in known:
        _known("given dimension", name, [*LAWS, "suevite_thickness_km"])
    simple = rim_diameter_km < simple_to_complex_km(target_rock)
    settled = _Settled(float(rim_diameter_km), known, rng)
    settled.cavity("simple" if simple else transient_law, depth_law)
    settled.hollow("simple" if simple else "sedimentary" if target_rock == "sedimentary" else "crystalline", simple)
    settled.uplift(uplift_law, simple)
    settled.rocks("simple" if simple else "complex", melt_coefficient / 2e-4, MELT_IN_SHEET[target_rock])
    return CraterDimensions(
        target_rock=target_rock,
        origin=settled.origin,
        source=settled.source,
        validity=settled.validity,
        **settled.value,
    )


class _Settled:
    """Dimensions settled one after the other: given, else by law, else drawn; each within its physical limits."""

    def __init__(self, rim: float, given: Mapping[str, float], rng: Draws | None) -> None:
        self.value: dict[str, float] = {"rim_diameter_km": rim}
        self.origin: dict[str, Origin] = {}
        self.source: dict[str, str] = {}
        self.validity: dict[str, str] = {}
        self._rim, self._given, self._rng = rim, given, rng

    def cavity(self, transient_law: str, depth_law: str) -> None:
        collapse = (self._rim, "the rim collapses outwards, never inwards")
        self._settle("transient_diameter_km", transient_law, most=collapse)
        self._settle("transient_depth_km", depth_law)
        self._settle("rim_height_km", "default")

    def hollow(self, law: str, simple: bool) -> None:
        # Collapse can only fill the cavity, and a peak that is known needs a hollow to stand in.
        cavity = (0.9 * self.value["transient_depth_km"], "the hollow is what collapse left of the transient cavity")
        peak = (self._given.get("peak_height_km", 0.0), "the peak that was given stands in the hollow")
        self._settle("apparent_depth_km", law, least=peak, most=cavity)
        depth = (self.value["apparent_depth_km"], "a peak stays below the ground before impact")
        self._settle("peak_height_km", "default", 0.0 if simple else 1.0, most=depth)

    def uplift(self, law: str, simple: bool) -> None:
        within = (0.8 * self._rim, "central structures lie within the rim")
        self._settle("structural_uplift_km", law, 0.0 if simple else 1.0)
        self._settle("central_uplift_diameter_km", "default", most=within)
        ring = 1.0 if self._rim >= RING_ONSET_KM[0] and not simple else 0.0
        self._settle("peak_ring_diameter_km", "default", ring, most=within)
        self._settle("moho_uplift_km", "default")

    def rocks(self, law: str, melt_factor: float, in_sheet: float) -> None:
        self._settle("melt_volume_km3", "default", melt_factor * in_sheet)
        self._settle("melt_diameter_km", "default", most=(self._rim, "melt gathers within the rim"))
        self._settle("breccia_thickness_km", law)
        self._settle("fracture_base_km", law)
        sheet, width = self.value["melt_volume_km3"], self.value["melt_diameter_km"]
        self.value["melt_thickness_km"] = 4.0 * sheet / (math.pi * width**2)
        if "suevite_thickness_km" in self._given:
            self._accept("suevite_thickness_km", (self.value["breccia_thickness_km"], "suevite tops the breccia lens"))
            return
        by_law = melt_factor * float(LAWS["melt_volume_km3"]["default"].formula(self.value["transient_diameter_km"]))
        melt = by_law if "melt_volume_km3" in self._given else sheet / in_sheet
        dispersed = melt * (1.0 - in_sheet)
        area = 0.25 * math.pi * (SUEVITE_DIAMETER * self._rim) ** 2
        thickness = dispersed / SUEVITE_MELT_SHARE / area
        self.value["suevite_thickness_km"] = min(thickness, self.value["breccia_thickness_km"])
        self.origin["suevite_thickness_km"] = "drawn" if self._rng is not None else "law"
        self.source["suevite_thickness_km"] = "dispersed melt over its share in suevite, one structure, computed"

    def _settle(
        self,
        name: str,
        law_name: str,
        factor: float = 1.0,
        least: tuple[float, str] = (0.0, ""),
        most: tuple[float, str] = (math.inf, ""),
    ) -> None:
        law = LAWS[name][law_name]
        # Draw even what is given or zero, so that every structure uses up the same random numbers.
        scatter = 1.0 if self._rng is None else math.exp(law.scatter * self._rng.standard_normal())
        if name in self._given:
            self._accept(name, most)
            return
        free = scatter * factor * float(law.formula(*(self.value[a] for a in law.arguments)))
        self.value[name] = min(max(free, least[0]), most[0])
        self.origin[name] = "law" if self._rng is None else "drawn"
        self.source[name] = law.source
        low, high = law.valid_km
        if factor > 0 and not low <= self._rim <= high:
            self.validity[name] = f"law made for rims of {low:g} to {high:g} km"
        if self.value[name] != free:
            self.validity[name] = f"limited from {free:.3g}: {most[1] if free > most[0] else least[1]}"

    def _accept(self, name: str, most: tuple[float, str]) -> None:
        value = self._given[name]
        # In a draw the limit itself scatters and a given value stands; without one it must agree with the laws.
        if value > most[0] * (1 + 1e-9) and self._rng is None:
            raise InputError(
                f"dimensions.{name}", value, f"must not exceed {most[0]:.4g} km ({most[1]})", "lower it, or give both"
            )
        self.value[name], self.origin[name], self.source[name] = value, "given", "scenario"


def _known(what: str, value: str, known: Collection[str]) -> None:
    if value not in known:
        raise InputError(what, value, "is not known", f"choose one of: {', '.join(known)}")
