"""From a scenario to one structure in SI units: the door of this room, and where scatter is drawn."""

from __future__ import annotations

import dataclasses
import math

import numpy as np

from gravbasin.crater.background import PORE_DEFICIT, PRESETS, Column, saturated_porosity
from gravbasin.crater.damage import (
    FLUID_DENSITY,
    SEALED_BRECCIA,
    SEALED_FRACTURES,
    Damage,
    sealing,
)
from gravbasin.crater.dimensions import SUEVITE_DIAMETER, CraterDimensions, crater_dimensions
from gravbasin.crater.displacement import Displacement
from gravbasin.crater.fill import LITHOLOGIES, Fill, lithified_density
from gravbasin.crater.flexure import Plate, Rebound
from gravbasin.crater.history import Burial, Erosion, Ground, after
from gravbasin.crater.priors import Draws
from gravbasin.errors import InputError
from gravbasin.scenario import Scenario

__all__ = ["CONTRAST_SCATTER", "CraterModel", "crater_model", "ground_of"]

KM = 1000.0

CONTRAST_SCATTER = {
    "sediment contrast": 0.35,
    "breccia contrast": 0.35,
    "suevite contrast": 0.25,
    "melt contrast": 0.40,
    "porosity decay": 0.20,
    "closure pressure": 0.15,
    "density gradient": 0.20,
}
"""Standard deviation of the natural logarithm of each contrast, from the published ranges (sediment -200..-900,
breccia -150..-400, suevite -300..-600, melt -50..-200 kg/m³, decay 2-4 km, closure 150-200 MPa, gradient 8-12 kg/m³
per km);
that of the fracture porosity (0.05-0.12) is `damage.porosity_scatter`."""

STEEPEST = 0.8
"""Decrease of the rise per metre of depth at which a law's uplift is limited; rock turns over at 1."""


@dataclasses.dataclass(frozen=True)
class CraterModel:
    """Everything the section is assembled from; SI units but for `dimensions`, which keeps its kilometres."""

    dimensions: CraterDimensions
    column: Column
    displacement: Displacement
    damage: Damage
    fill: Fill
    ground: Ground
    rebound: Rebound | None = None

    @property
    def outer_radius(self) -> float:
        """Radius beyond which the model has no contrast, m."""
        return 0.8 * KM * self.dimensions.rim_diameter_km

    @property
    def base(self) -> float:
        """Depth below the ground before impact under which the model has no contrast, m."""
        base = max(self.displacement.base, self.displacement.floor + self.damage.base)
        if self.displacement.moho_rise > 0 or self.rebound is not None:
            # The moat of the Moho is shallower than its rise; the regional bend stays within a kilometre or two.
            base = max(base, self.column.moho + self.displacement.moho_rise + (2 * KM if self.rebound else 0.0))
        return base


def ground_of(scenario: Scenario) -> Ground:
    """Today's ground after the scenario's history."""
    history = scenario.history
    if history.events:
        episodes = [
            Erosion(KM * e.erode_km) if e.erode_km is not None else Burial(KM * (e.bury_km or 0.0))
            for e in history.events
        ]
    else:
        if history.erosion_km is not None:
            stripped = KM * history.erosion_km
        elif history.erosion_rate_m_per_myr:
            stripped = history.erosion_rate_m_per_myr * (scenario.crater.age_myr or 0.0)
        else:
            stripped = 0.0
        episodes = [Erosion(stripped), Burial(KM * history.burial_km)]
    return after(episodes, cover_density=history.cover_density_kg_m3)


def crater_model(scenario: Scenario, rng: Draws | None = None) -> CraterModel:
    """The structure a scenario describes, or with `rng` one draw from the scatter of its laws and contrasts.

    Parameters
    ----------
    scenario : Scenario
        Kilometres and kg/m³ as in the file.
    rng : numpy Generator, optional
        Draw dimensions that are not given from their laws' scatter, and contrasts from `CONTRAST_SCATTER`.

    Raises
    ------
    InputError
        Dimensions that contradict each other (a given uplift steeper than rock can rise without turning over), or a
        history that strips the whole crust.
    """
    crater = scenario.crater
    dims = crater_dimensions(
        crater.rim_diameter_km,
        target_rock=crater.target_rock,
        transient_law=crater.transient_law,
        depth_law=crater.depth_law,
        uplift_law=crater.uplift_law,
        melt_coefficient=crater.melt_coefficient,
        given=scenario.dimensions.model_dump(),
        rng=rng,
    )
    factor = _contrast_factors(rng)
    shift = 0.0 if rng is None else scenario.background.density_scatter_kg_m3 * rng.standard_normal()
    column = _column(scenario, factor["density gradient"], shift)
    ground = ground_of(scenario)
    if ground.erosion >= column.moho:
        raise InputError(
            "history", f"{ground.erosion / KM:g} km stripped", "must leave some crust", "lower the erosion or its rate"
        )
    fill = _fill(scenario, dims, column, factor, rng)
    floor = float(fill.interfaces(np.zeros(1)).floor[0])
    dims = _limited_uplift(dims, column, floor, drawn=rng is not None)
    damage = _damage(scenario, dims, factor, rng)
    displacement = _displacement(dims, column, floor)
    return CraterModel(dims, column, displacement, damage, fill, ground, _rebound(scenario, column, ground))


def _contrast_factors(rng: Draws | None) -> dict[str, float]:
    if rng is None:
        return dict.fromkeys(CONTRAST_SCATTER, 1.0)
    return {name: math.exp(s * rng.standard_normal()) for name, s in CONTRAST_SCATTER.items()}


def _column(scenario: Scenario, gradient_factor: float, shift: float) -> Column:
    background, crater = scenario.background, scenario.crater
    moho, cover = KM * background.moho_km, KM * crater.cover_thickness_km
    layers = [
        (layer.top_km, layer.density_kg_m3, layer.gradient_kg_m3_per_km, layer.porosity) for layer in background.layers
    ] or [layer for layer in PRESETS[crater.target_rock] if layer[0] < background.moho_km]
    tops, densities, slopes, pores = (list(a) for a in zip(*layers, strict=True))
    densities = [density + shift for density in densities]
    tops, slopes = [KM * top for top in tops], [gradient_factor * slope / KM for slope in slopes]
    crust = Column(tuple(tops), tuple(densities), tuple(slopes), moho, background.mantle_density_kg_m3, tuple(pores))
    return _covered(crust, cover, background.cover_density_kg_m3, background.cover_porosity) if cover > 0 else crust


def _covered(crust: Column, cover: float, density: float, porosity: float | None) -> Column:
    """The column with its uppermost part replaced by cover; the basement keeps its densities by depth."""
    at = int(np.searchsorted(crust.tops, cover, side="right")) - 1
    below = [i for i, top in enumerate(crust.tops) if top > cover]
    pores = saturated_porosity(density) if porosity is None else porosity
    return dataclasses.replace(
        crust,
        tops=(0.0, cover, *(crust.tops[i] for i in below)),
        densities=(density, float(crust.crust_density(cover)), *(crust.densities[i] for i in below)),
        gradients=(0.0, crust.gradients[at], *(crust.gradients[i] for i in below)),
        porosities=(pores, crust.porosities[at], *(crust.porosities[i] for i in below)),
    )


def _fill(
    scenario: Scenario,
    dims: CraterDimensions,
    column: Column,
    factor: dict[str, float],
    rng: Draws | None,
) -> Fill:
    given, crater = scenario.fill, scenario.crater
    left = sealing(crater.setting, crater.age_myr, sealed=SEALED_BRECCIA).draw(rng)
    left = left if given.breccia_retention is None else given.breccia_retention
    diameter, ring = KM * dims.rim_diameter_km, dims.ring_weight
    # A central peak is 0.22 D wide at its foot (Pike 1985, from memory), where it has fallen to 5 % of its height; a
    # peak ring has flanks of 0.05 D.
    width = diameter * (0.11 / math.sqrt(math.log(20.0)) * (1 - ring) + 0.05 * ring)
    return Fill(
        rim_radius=0.5 * diameter,
        simple=dims.simple,
        apparent_depth=KM * dims.apparent_depth_km,
        peak_height=KM * dims.peak_height_km,
        peak_radius=0.5 * KM * dims.peak_ring_diameter_km * ring,
        peak_width=width,
        melt_volume=KM**3 * dims.melt_volume_km3,
        melt_radius=0.5 * KM * dims.melt_diameter_km,
        breccia_thickness=KM * dims.breccia_thickness_km,
        suevite_thickness=KM * dims.suevite_thickness_km,
        suevite_radius=0.5 * SUEVITE_DIAMETER * diameter,
        breccia_contrast=given.breccia_contrast_kg_m3 * left * factor["breccia contrast"],
        suevite_contrast=given.suevite_contrast_kg_m3 * left * factor["suevite contrast"],
        melt_contrast=given.melt_contrast_kg_m3 * factor["melt contrast"],
        breccia_crossover=_crossover(given.breccia_contrast_kg_m3),
        suevite_crossover=_crossover(given.suevite_contrast_kg_m3),
        melt_layering=given.melt_layering_kg_m3,
        hollow=given.hollow,
        sediment_density=_sediment_density(scenario, column, factor["sediment contrast"]),
        compaction=LITHOLOGIES[given.lithology] if given.lithology else None,
    )


def _crossover(contrast: float) -> float:
    """Porosity that a contrast stands for; rock that is not lighter than its target has no such porosity."""
    return -contrast / PORE_DEFICIT if contrast < 0 else math.inf


def _sediment_density(scenario: Scenario, column: Column, factor: float) -> float:
    """Given, else by age; the scatter stretches its contrast to the ground, within mud (1600) and solid rock (2750)."""
    if scenario.fill.sediment_density_kg_m3 is not None:
        return scenario.fill.sediment_density_kg_m3
    marine = scenario.crater.setting == "marine"
    top = column.top_density
    # Sea-floor sediment filled a marine crater at once and compacted with the target (contrast -150, computed).
    expected = max(lithified_density(scenario.crater.age_myr), top - 150.0 if marine else 0.0)
    return min(max(top - factor * (top - expected), 1600.0), max(2750.0, expected))


def _limited_uplift(dims: CraterDimensions, column: Column, floor: float, *, drawn: bool) -> CraterDimensions:
    """Uplift that rock can do: it fades between the floor and the Moho without turning over."""
    available = max(column.moho - floor, 0.0) / KM
    given = dims.origin["structural_uplift_km"] == "given"
    most = STEEPEST * available
    if dims.structural_uplift_km <= most or (given and dims.structural_uplift_km < available):
        return dims
    if given and not drawn:
        raise InputError(
            "dimensions.structural_uplift_km",
            dims.structural_uplift_km,
            f"must be less than {available:.3g} km, or rock would turn over above the Moho",
            "lower it, or deepen background.moho_km",
        )
    note = f"limited from {dims.structural_uplift_km:.3g}: more would turn rock over above the Moho"
    return dataclasses.replace(
        dims, structural_uplift_km=most, validity={**dims.validity, "structural_uplift_km": note}
    )


def _displacement(dims: CraterDimensions, column: Column, floor: float) -> Displacement:
    diameter, rise = KM * dims.rim_diameter_km, KM * dims.structural_uplift_km
    # Rock rises over the depth of the transient cavity, deeper only so as not to turn over, and not below the Moho; a
    # rim needs a tenth of the diameter to die out.
    base = min(max(KM * dims.transient_depth_km, floor + rise / STEEPEST, floor + 0.1 * diameter), column.moho)
    # The mapped base of an uplift is where it has all but ended: a tenth of the rise.
    core = 0.5 * KM * dims.central_uplift_diameter_km / math.sqrt(math.log(10.0))
    return Displacement(
        rise=rise,
        core_radius=core,
        floor=floor,
        base=base,
        ring_radius=max(0.5 * KM * dims.peak_ring_diameter_km, 0.1 * diameter),
        ring_width=0.06 * diameter,
        ring_share=0.35 * dims.ring_weight,
        ring_depth=0.05 * diameter,
        rim_radius=0.5 * diameter,
        rim_width=0.05 * diameter,
        rim_rise=0.5 * KM * dims.rim_height_km,
        syncline_radius=0.37 * diameter,
        syncline_width=0.09 * diameter,
        moho=column.moho,
        moho_rise=KM * dims.moho_uplift_km,
        # 1.5-2 km at the centre, a moat at 30-55 km of a structure of about 200 km (Christeson et al. 2009).
        moho_radius=0.10 * diameter,
        moat_radius=0.21 * diameter,
        moat_width=0.07 * diameter,
    )


def _damage(scenario: Scenario, dims: CraterDimensions, factor: dict[str, float], rng: Draws | None) -> Damage:
    given, crater = scenario.damage, scenario.crater
    left = sealing(crater.setting, crater.age_myr, sealed=SEALED_FRACTURES).draw(rng)
    opened = 1.0 if rng is None else math.exp(given.porosity_scatter * rng.standard_normal())
    diameter_km = dims.rim_diameter_km
    suppression = given.core_suppression
    if suppression is None:
        suppression = 0.7 * min(max((diameter_km - 25.0) / 20.0, 0.0), 1.0)
    decay_km = given.decay_km or min(0.12 * diameter_km, 3.0)
    fluid = given.pore_fluid or ("sea water" if crater.setting == "marine" else "fresh water")
    return Damage(
        form=given.form,
        porosity=min(given.porosity * opened, 0.4),
        decay=KM * decay_km * factor["porosity decay"],
        base=KM * dims.fracture_base_km,
        closure_pressure=1e6 * given.closure_pressure_mpa * factor["closure pressure"],
        exponent=given.pressure_exponent,
        retention=left if given.retention is None else given.retention,
        taper_radius=0.42 * KM * diameter_km,
        core_suppression=suppression,
        core_radius=0.5 * KM * dims.central_uplift_diameter_km,
        fluid_density=FLUID_DENSITY[fluid],
        crossover=given.crossover_porosity,
    )


def _rebound(scenario: Scenario, column: Column, ground: Ground) -> Rebound | None:
    history = scenario.history
    if history.rebound_elastic_thickness_km is None:
        return None
    plate = Plate(KM * history.rebound_elastic_thickness_km, mantle_density=column.mantle_density)
    density = float(column.crust_mass(ground.erosion)) / max(ground.erosion, 1.0)
    return Rebound(plate, KM * history.eroded_radius_km, ground.erosion, density)
