"""Dimensions of an impact structure from its rim diameter: published size laws, their ranges and their scatter."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Mapping
from typing import Literal, get_args

import numpy as np

from gravbasin.errors import InputError

__all__ = ["LAWS", "CraterDimensions", "Law", "crater_dimensions", "simple_to_complex_km"]

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


LAWS: Mapping[str, Mapping[str, Law]] = {
    "transient_diameter_km": {
        "collapse scaling": Law(
            lambda d: (d * 3.2**0.13 / 1.17) ** (1 / 1.13), (3.2, 300), 0.10, "McKinnon & Schenk 1985, from memory"
        ),
        "shallow exponent": Law(lambda d: 4.0**0.15 * d**0.85, (4, 200), 0.10, "Croft 1985, from memory"),
    },
    "transient_depth_km": {
        "default": Law(
            lambda dt: dt / (2 * np.sqrt(2)),
            (2, 300),
            0.15,
            "paraboloid, 2005 compilation, from memory",
            ("transient_diameter_km",),
        ),
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
        "shield": Law(lambda d: 0.175 * d, (4, 28), 0.30, "Dence 2017"),
    },
    "central_uplift_diameter_km": {
        "default": Law(lambda d: 0.31 * d**1.02, (5, 150), 0.20, "Therriault, Grieve & Reimold 1997, from memory"),
    },
    "peak_ring_diameter_km": {
        "default": Law(lambda d: 0.5 * d, (25, 250), 0.10, "half the rim diameter, from memory"),
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
    "breccia_thickness_km": {
        "complex": Law(lambda d: float(np.minimum(0.02 * d, 0.8)), (4, 300), 0.35, "0.2-0.8 km, common practice"),
        "simple": Law(lambda d: 0.15 * d, (0.1, 4), 0.25, "Grieve et al. 1989"),
    },
    "fracture_base_km": {
        "default": Law(lambda d: float(np.minimum(0.2 * d, 8.0)), (4, 300), 0.20, "synthesis of six structures"),
    },
    "moho_uplift_km": {
        "default": Law(
            lambda d: 0.009 * d * float(np.clip((d - 100) / 50, 0, 1)),
            (150, 250),
            0.35,
            "scaled from Christeson et al. 2009; one structure only, speculative",
        ),
    },
}
"""Every law by dimension and name."""


@dataclasses.dataclass(frozen=True)
class CraterDimensions:
    """Dimensions of one structure when fresh; kilometres and cubic kilometres as the names say.

    `origin` tells for every dimension whether it was given, follows its law, or was drawn from the law's scatter.
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
    fracture_base_km: float
    moho_uplift_km: float
    origin: Mapping[str, Origin] = dataclasses.field(repr=False)
    source: Mapping[str, str] = dataclasses.field(repr=False)

    @property
    def ring_weight(self) -> float:
        """How far the central peak has collapsed into a peak ring: 0 (peak) to 1 (ring)."""
        low, high = RING_ONSET_KM
        return float(np.clip((self.rim_diameter_km - low) / (high - low), 0.0, 1.0))


def simple_to_complex_km(target_rock: TargetRock) -> float:
    """Rim diameter at which craters turn complex: 4 km crystalline, 2 km sedimentary (Dence 1972, from memory)."""
    return 4.0 if target_rock == "crystalline" else 2.0


def crater_dimensions(
    rim_diameter_km: float,
    *,
    target_rock: TargetRock = "crystalline",
    transient_law: str = "collapse scaling",
    uplift_law: str = "stratigraphic",
    melt_coefficient: float = 2e-4,
    given: Mapping[str, float] | None = None,
    rng: np.random.Generator | None = None,
) -> CraterDimensions:
    """Dimensions of a crater from its final rim diameter.

    Parameters
    ----------
    rim_diameter_km : float
        Final rim diameter before erosion, km.
    target_rock : str
        "crystalline", "sedimentary" or "mixed" (sediments over basement: crystalline depth law, half the melt).
    transient_law, uplift_law : str
        Names in ``LAWS["transient_diameter_km"]`` and ``LAWS["structural_uplift_km"]``.
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
        An unknown law, target or dimension, or a diameter that is not positive.

    Examples
    --------
    >>> round(crater_dimensions(50.0).transient_diameter_km, 1)
    31.7
    """
    if not (np.isfinite(rim_diameter_km) and rim_diameter_km > 0):
        raise InputError("rim_diameter_km", rim_diameter_km, "must be greater than 0", "give kilometres")
    _known("target_rock", target_rock, get_args(TargetRock))
    _known("transient_law", transient_law, LAWS["transient_diameter_km"])
    _known("uplift_law", uplift_law, LAWS["structural_uplift_km"])
    given = {k: v for k, v in (given or {}).items() if v is not None}
    for name in given:
        _known("given dimension", name, [*LAWS, "peak_height_km", "melt_diameter_km"])
    complex_crater = rim_diameter_km >= simple_to_complex_km(target_rock)
    value: dict[str, float] = {"rim_diameter_km": float(rim_diameter_km)}
    origin: dict[str, Origin] = {}
    source: dict[str, str] = {}

    def settle(name: str, law: Law, factor: float = 1.0) -> None:
        if name in given:
            value[name], origin[name], source[name] = float(given[name]), "given", "scenario"
            return
        value[name] = factor * float(law.formula(*(value[a] for a in law.arguments)))
        origin[name], source[name] = "law", law.source
        if rng is not None:
            # Draw even where the law gives zero, so that every structure uses up the same random numbers.
            value[name] *= float(np.exp(law.scatter * rng.standard_normal()))
            origin[name] = "drawn"

    depth_law = ("sedimentary" if target_rock == "sedimentary" else "crystalline") if complex_crater else "simple"
    melt_factor = melt_coefficient / 2e-4 * {"crystalline": 1.0, "mixed": 0.5, "sedimentary": 0.05}[target_rock]
    collapsed = 1.0 if complex_crater else 0.0
    settle("transient_diameter_km", LAWS["transient_diameter_km"][transient_law])
    settle("transient_depth_km", LAWS["transient_depth_km"]["default"])
    settle("apparent_depth_km", LAWS["apparent_depth_km"][depth_law])
    settle("rim_height_km", LAWS["rim_height_km"]["default"])
    settle("structural_uplift_km", LAWS["structural_uplift_km"][uplift_law], collapsed)
    settle("central_uplift_diameter_km", LAWS["central_uplift_diameter_km"]["default"])
    ring = 1.0 if rim_diameter_km >= RING_ONSET_KM[0] else 0.0
    settle("peak_ring_diameter_km", LAWS["peak_ring_diameter_km"]["default"], ring)
    settle("melt_volume_km3", LAWS["melt_volume_km3"]["default"], melt_factor)
    settle("breccia_thickness_km", LAWS["breccia_thickness_km"]["complex" if complex_crater else "simple"])
    settle("fracture_base_km", LAWS["fracture_base_km"]["default"])
    settle("moho_uplift_km", LAWS["moho_uplift_km"]["default"])
    # The peak: half the apparent depth; 0.12 of 0.55 km and 0.55 of 0.59 km are known (Karp et al. 2002; Boltysh).
    half_depth = Law(
        lambda da: 0.5 * da, (4, 300), 0.4, "half the apparent depth, common practice", ("apparent_depth_km",)
    )
    settle("peak_height_km", half_depth, collapsed)
    value["peak_height_km"] = min(value["peak_height_km"], value["apparent_depth_km"])
    same = Law(
        lambda dt: min(dt, rim_diameter_km), (2, 300), 0.0, "spans the transient cavity", ("transient_diameter_km",)
    )
    settle("melt_diameter_km", same)
    thickness = 4.0 * value["melt_volume_km3"] / (np.pi * value["melt_diameter_km"] ** 2)
    return CraterDimensions(
        target_rock=target_rock, origin=origin, source=source, melt_thickness_km=float(thickness), **value
    )


def _known(what: str, value: str, known: object) -> None:
    names = list(known)  # type: ignore[call-overload]  # any container of names
    if value not in names:
        raise InputError(what, value, "is not known", f"choose one of: {', '.join(map(str, names))}")
