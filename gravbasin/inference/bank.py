"""Banks of models: thousands of draws from a family's prior, forwarded in batches, kept as radial profiles."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from functools import cached_property
from typing import Protocol

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

from gravbasin.crater import CraterModel, Mesh, contrast, crater_model, shared_mesh
from gravbasin.crater.model import ground_of
from gravbasin.crater.priors import Draws, Range
from gravbasin.errors import CannotFinish
from gravbasin.forward.rings import ring_table
from gravbasin.inference.latent import LatentStream, main_parameters
from gravbasin.scenario import Event, Scenario

__all__ = ["Bank", "Family", "ImpactFamily", "bank_of", "build_bank"]

Array = NDArray[np.float64]
KM = 1000.0

BANK_LAYERS, BANK_RINGS = 40, 128
"""Cells of the mesh a bank shares. Thin units keep their mass, so coarse is enough: means over 5 km stay within 1 %
of the peak of the default mesh, single points near a sharp rim within 2.5 % (tested)."""

BATCH = 256


class Family(Protocol):
    """A kind of body with priors on its main parameters."""

    @property
    def name(self) -> str:
        """Shown in tables."""

    @property
    def ranges(self) -> Mapping[str, Range]:
        """Prior of every main parameter, by name with its unit."""

    @property
    def extras(self) -> int:
        """How many standard normals a model draws beyond its main parameters."""

    def mesh(self, ranges: Mapping[str, Range], /) -> Mesh:
        """Cells that hold every model within the ranges."""

    def draw(self, main: Mapping[str, float], mesh: Mesh, rng: Draws) -> tuple[Array, Mapping[str, float]]:
        """Contrast (depth, radius), kg/m³, of one model with these main parameters, and further named results."""


@dataclasses.dataclass(frozen=True, eq=False)
class Bank:
    """Models of one family.

    Attributes
    ----------
    name : str
        The family.
    parameters : dict of (n_model,) arrays
        Main parameters and further results of every model, by name with unit.
    radius : (n_radius,) array, m
        Radii of the profiles.
    profiles : (n_model, n_radius) array, mGal
        Anomalies.
    latent : (n_model, n_latent) array
        Standard normals behind every model: its main parameters, then the rest of its scatter.
    """

    name: str
    parameters: Mapping[str, Array]
    radius: Array
    profiles: Array
    latent: Array

    @property
    def size(self) -> int:
        """Number of models."""
        return int(self.profiles.shape[0])


@dataclasses.dataclass(frozen=True)
class ImpactFamily:
    """Impact structures about a scenario: diameter and erosion from their priors, everything else from its scatter."""

    scenario: Scenario

    @property
    def name(self) -> str:
        """Shown in tables."""
        return "eroded impact structure"

    @property
    def ranges(self) -> Mapping[str, Range]:
        """Rim diameter (uniform in its logarithm) and erosion (uniform), km."""
        prior, crater = self.scenario.prior, self.scenario.crater
        diameter = prior.rim_diameter_km or (0.6 * crater.rim_diameter_km, 1.6 * crater.rim_diameter_km)
        erosion = prior.erosion_km or (0.0, 2.0 * self._erosion_km() + 2.0)
        return {"rim_diameter_km": Range(*diameter, logarithmic=True), "erosion_km": Range(*erosion)}

    def _erosion_km(self) -> float:
        return ground_of(self.scenario).erosion / KM

    def varied(self, rim_diameter_km: float, erosion_km: float) -> Scenario:
        """The scenario with another diameter and total erosion."""
        history = self.scenario.history.model_copy(
            update={"erosion_km": erosion_km, "erosion_rate_m_per_myr": None, "events": self._events(erosion_km)}
        )
        crater = self.scenario.crater.model_copy(update={"rim_diameter_km": rim_diameter_km})
        return self.scenario.model_copy(update={"crater": crater, "history": history})

    def _events(self, erosion_km: float) -> tuple[Event, ...]:
        """The scenario's episodes with all erosion scaled so that the wanted total is stripped; none where none is."""
        events = self.scenario.history.events
        if not events or self._erosion_km() == 0.0:
            return events

        def scaled(factor: float) -> tuple[Event, ...]:
            return tuple(
                e if e.erode_km is None else e.model_copy(update={"erode_km": factor * e.erode_km}) for e in events
            )

        def excess(factor: float) -> float:
            history = self.scenario.history.model_copy(update={"events": scaled(factor)})
            return ground_of(self.scenario.model_copy(update={"history": history})).erosion / KM - erosion_km

        # Cover laid down between two episodes is eroded first, so the total is not proportional to the factor.
        most = 1.0
        while excess(most) < 0:
            most *= 2.0
        return scaled(float(brentq(excess, 0.0, most, xtol=1e-9)))

    def mesh(self, ranges: Mapping[str, Range]) -> Mesh:
        """Cells for the widest, deepest and least eroded structure in the ranges, with room for scatter."""
        corners = [
            crater_model(self.varied(d, e))
            for d in (ranges["rim_diameter_km"].low, ranges["rim_diameter_km"].high)
            for e in (ranges["erosion_km"].low, ranges["erosion_km"].high)
        ]
        return _deeper(shared_mesh(corners, layers=BANK_LAYERS, rings=BANK_RINGS), 1.3)

    @cached_property
    def extras(self) -> int:
        """How many standard normals the scatter of one structure takes."""
        stream = LatentStream(np.zeros(0))
        crater_model(self.scenario, stream)
        return stream.used

    def draw(self, main: Mapping[str, float], mesh: Mesh, rng: Draws) -> tuple[Array, Mapping[str, float]]:
        """One structure with its laws and contrasts drawn."""
        model = crater_model(self.varied(**main), rng)
        return contrast(model, mesh), _results(model)


def _results(model: CraterModel) -> dict[str, float]:
    return {
        "moho_uplift_km": model.dimensions.moho_uplift_km,
        "structural_uplift_km": model.dimensions.structural_uplift_km,
        "melt_volume_km3": model.dimensions.melt_volume_km3,
    }


def _deeper(mesh: Mesh, factor: float) -> Mesh:
    return Mesh(factor * mesh.depth_edges, mesh.radius_edges)


def build_bank(
    family: Family,
    radius: Array,
    *,
    models: int,
    height: float,
    rng: np.random.Generator,
    ranges: Mapping[str, Range] | None = None,
) -> Bank:
    """Draw models from a family's prior, or from narrower ranges, and forward them.

    Parameters
    ----------
    family : Family
        What to draw.
    radius : (n_radius,) array, m
        Radii of the profiles.
    models : int
        How many.
    height : float, m
        Stations above the ground.
    rng : numpy Generator
        Source of randomness.
    ranges : mapping, optional
        Where to look instead of the family's prior; such a bank is no sample of the prior.

    Returns
    -------
    Bank
        With "excess_mass_kg" among its parameters.

    Raises
    ------
    CannotFinish
        The bank would need more than 2 GiB.
    """
    if 8 * models * radius.size > 2**31:
        raise CannotFinish(f"a bank of {models} models needs more than 2 GiB; lower prior.models")
    latent = rng.standard_normal((models, len(family.ranges) + family.extras))
    return bank_of(family, latent, radius, height=height, ranges=ranges)


def bank_of(
    family: Family, latent: Array, radius: Array, *, height: float, ranges: Mapping[str, Range] | None = None
) -> Bank:
    """The models behind given latent vectors, (n_model, n_latent) standard normals, forwarded in batches."""
    wanted = ranges or family.ranges
    mesh, main = family.mesh(wanted), main_parameters(latent, wanted)
    table = ring_table(radius, mesh.radius_edges, mesh.depth_edges, height_m=height)
    volume = np.outer(np.diff(mesh.depth_edges), np.pi * np.diff(mesh.radius_edges**2)).ravel()
    models = latent.shape[0]
    profiles, mass = np.empty((models, radius.size)), np.empty(models)
    results: dict[str, list[float]] = {}
    for start in range(0, models, BATCH):
        rows = range(start, min(start + BATCH, models))
        batch = np.empty((len(rows), mesh.depth.size, mesh.radius.size))
        for i in rows:
            stream = LatentStream(latent[i, len(main) :])
            batch[i - start], extra = family.draw({k: float(v[i]) for k, v in main.items()}, mesh, stream)
            for key, value in extra.items():
                results.setdefault(key, []).append(value)
        profiles[rows.start : rows.stop] = table.anomaly(batch)
        mass[rows.start : rows.stop] = batch.reshape(len(rows), -1) @ volume
    parameters = {**main, **{k: np.array(v) for k, v in results.items()}, "excess_mass_kg": mass}
    return Bank(family.name, parameters, radius, profiles, latent)
