"""From a scenario to one structure in SI units: the door of this room, and where scatter is drawn."""

from __future__ import annotations

import dataclasses

import numpy as np

from gravbasin.crater.background import Column
from gravbasin.crater.damage import FLUID_DENSITY, Damage
from gravbasin.crater.dimensions import CraterDimensions, crater_dimensions, simple_to_complex_km
from gravbasin.crater.displacement import Displacement
from gravbasin.crater.fill import LITHOLOGIES, Fill
from gravbasin.crater.history import Burial, Erosion, Ground, after
from gravbasin.errors import InputError
from gravbasin.scenario import Scenario

__all__ = ["CONTRAST_SCATTER", "CraterModel", "crater_model", "erosion_of"]

KM = 1000.0

CONTRAST_SCATTER = {
    "breccia contrast": 0.35,
    "melt contrast": 0.40,
    "fracture porosity": 0.30,
    "porosity decay": 0.20,
    "closure pressure": 0.15,
    "density gradient": 0.20,
    "peak height": 0.40,
}
"""Standard deviation of the natural logarithm of each contrast, from the published ranges (breccia -150..-400,
melt -50..-200 kg/m³, porosity 0.05-0.12, decay 2-4 km, closure 150-200 MPa, gradient 8-12 kg/m³/km)."""


@dataclasses.dataclass(frozen=True)
class CraterModel:
    """Everything the section is assembled from; SI units but for `dimensions`, which keeps its kilometres."""

    dimensions: CraterDimensions
    column: Column
    displacement: Displacement
    damage: Damage
    fill: Fill
    ground: Ground

    @property
    def outer_radius(self) -> float:
        """Radius beyond which the model has no contrast, m."""
        return 0.8 * KM * self.dimensions.rim_diameter_km

    @property
    def base(self) -> float:
        """Depth below the ground before impact under which the model has no contrast, m."""
        floor = self.displacement.floor
        base = max(self.displacement.base, floor + self.damage.base)
        if self.displacement.moho_rise > 0:
            base = max(base, self.column.moho + 0.5 * self.displacement.moho_rise)
        return base


def erosion_of(scenario: Scenario) -> Ground:
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


def crater_model(scenario: Scenario, rng: np.random.Generator | None = None) -> CraterModel:
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
        Dimensions that contradict each other (an uplift steeper than rock can rise without turning over).
    """
    crater = scenario.crater
    dims = crater_dimensions(
        crater.rim_diameter_km,
        target_rock=crater.target_rock,
        transient_law=crater.transient_law,
        uplift_law=crater.uplift_law,
        melt_coefficient=crater.melt_coefficient,
        given=scenario.dimensions.model_dump(),
        rng=rng,
    )
    factor = _contrast_factors(rng)
    column = _column(scenario, factor["density gradient"])
    fill = _fill(scenario, dims, factor)
    displacement = _displacement(dims, column, fill)
    return CraterModel(dims, column, displacement, _damage(scenario, dims, factor), fill, erosion_of(scenario))


def _contrast_factors(rng: np.random.Generator | None) -> dict[str, float]:
    if rng is None:
        return dict.fromkeys(CONTRAST_SCATTER, 1.0)
    return {name: float(np.exp(s * rng.standard_normal())) for name, s in CONTRAST_SCATTER.items()}


def _column(scenario: Scenario, gradient_factor: float) -> Column:
    background, crater = scenario.background, scenario.crater
    moho, cover = KM * background.moho_km, KM * crater.cover_thickness_km
    tops = [KM * layer.top_km for layer in background.layers]
    slopes = [gradient_factor * layer.gradient_kg_m3_per_km / KM for layer in background.layers]
    densities = [layer.density_kg_m3 for layer in background.layers]
    if cover > 0:
        # The basement keeps its densities by depth; the cover replaces its uppermost part.
        crust = Column(tuple(tops), tuple(densities), tuple(slopes), moho, background.mantle_density_kg_m3)
        kept = [(top, rho, slope) for top, rho, slope in zip(tops, densities, slopes, strict=True) if top > cover]
        slope_at = slopes[int(np.searchsorted(tops, cover, side="right")) - 1]
        top_of_basement = (cover, float(crust.crust_density(cover)), slope_at)
        tops, densities, slopes = (
            list(a) for a in zip((0.0, background.cover_density_kg_m3, 0.0), top_of_basement, *kept, strict=True)
        )
    return Column(tuple(tops), tuple(densities), tuple(slopes), moho, background.mantle_density_kg_m3)


def _fill(scenario: Scenario, dims: CraterDimensions, factor: dict[str, float]) -> Fill:
    given, crater = scenario.fill, scenario.crater
    sealed = given.breccia_retention or (0.1 if crater.setting == "marine" else 1.0)
    diameter = KM * dims.rim_diameter_km
    ring = dims.ring_weight
    # A central peak is 0.22 D wide at its foot (Pike 1985, from memory); a peak ring has flanks of 0.05 D.
    return Fill(
        rim_radius=0.5 * diameter,
        simple=dims.rim_diameter_km < simple_to_complex_km(crater.target_rock),
        apparent_depth=KM * dims.apparent_depth_km,
        peak_height=KM * dims.peak_height_km,
        peak_radius=0.5 * KM * dims.peak_ring_diameter_km * ring,
        peak_width=diameter * (0.11 * (1 - ring) + 0.05 * ring),
        melt_volume=KM**3 * dims.melt_volume_km3,
        melt_radius=0.5 * KM * dims.melt_diameter_km,
        breccia_thickness=KM * dims.breccia_thickness_km,
        breccia_contrast=given.breccia_contrast_kg_m3 * sealed * factor["breccia contrast"],
        melt_contrast=given.melt_contrast_kg_m3 * factor["melt contrast"],
        hollow=given.hollow,
        sediment_density=given.sediment_density_kg_m3,
        compaction=LITHOLOGIES[given.lithology] if given.lithology else None,
    )


def _displacement(dims: CraterDimensions, column: Column, fill: Fill) -> Displacement:
    diameter = KM * dims.rim_diameter_km
    floor = float(fill.interfaces(np.zeros(1))[2][0])
    # Rock rises over the depth of the transient cavity, at least 8 km, and never below the Moho by itself.
    base = min(max(KM * dims.transient_depth_km, 8 * KM, floor + 1.2 * KM * dims.structural_uplift_km), column.moho)
    field = Displacement(
        rise=KM * dims.structural_uplift_km,
        core_radius=0.5 * KM * dims.central_uplift_diameter_km,
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
    )
    if field.steepest() >= 1.0:
        raise InputError(
            "structural uplift",
            f"{dims.structural_uplift_km:.1f} km",
            f"rises faster than rock can without turning over (it fades within {base / KM:.1f} km)",
            "give a smaller dimensions.structural_uplift_km or the stratigraphic uplift law",
        )
    return field


def _damage(scenario: Scenario, dims: CraterDimensions, factor: dict[str, float]) -> Damage:
    given, crater = scenario.damage, scenario.crater
    diameter_km = dims.rim_diameter_km
    suppression = given.core_suppression
    if suppression is None:
        suppression = 0.7 * float(np.clip((diameter_km - 25.0) / 20.0, 0.0, 1.0))
    decay_km = given.decay_km or min(0.12 * diameter_km, 3.0)
    return Damage(
        form=given.form,
        porosity=min(given.porosity * factor["fracture porosity"], 0.4),
        decay=KM * decay_km * factor["porosity decay"],
        base=KM * dims.fracture_base_km,
        closure_pressure=1e6 * given.closure_pressure_mpa * factor["closure pressure"],
        exponent=given.pressure_exponent,
        retention=given.retention or (0.25 if crater.setting == "marine" else 1.0),
        taper_radius=0.42 * KM * diameter_km,
        core_suppression=suppression,
        core_radius=0.5 * KM * dims.central_uplift_diameter_km,
        fluid_density=FLUID_DENSITY[given.pore_fluid],
    )
