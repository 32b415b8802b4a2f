"""What all cases of a sweep share: cells, tables of ring attractions, and a survey to see them with.

Made from the sweep's own fields alone, never from the cases that happened to come first, so that a case has the same
numbers wherever and whenever it is computed.
"""

from __future__ import annotations

import dataclasses
import hashlib
import math
import threading
from collections.abc import Callable, Hashable
from functools import cached_property
from pathlib import Path
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from gravbasin.crater import CraterModel, Mesh
from gravbasin.forward.rings import RingTable, ring_table
from gravbasin.inference.chance import Stencil
from gravbasin.inference.likelihood import RingLikelihood, ring_likelihood
from gravbasin.observed import NoiseModel, ring_covariance
from gravbasin.runs.compare import noise_of
from gravbasin.scenario import Scenario
from gravbasin.scenario_file import scenario_hash

__all__ = ["Bench", "Cells", "Fading", "Recipe", "Survey"]

Array = NDArray[np.float64]
T = TypeVar("T")
KM = 1000.0

DEPTH_LADDER = 2.0
"""Ratio of the depths of two neighbouring meshes: a case takes the shallowest that holds it."""

RADIUS_STEP = 0.013
"""Step of the profile's radii in asinh(r / 0.4 D): 0.5 % of the smallest diameter at the centre, 1 % of a structure's
own diameter near its rim."""

RING_GROWTH = 0.04
"""Rings of the survey widen to this share of their radius, but are never narrower than the stations are apart."""

LEAST_RINGS = 8

CUTS, LAYERS_PER_CUT = 24, 2
"""Erosion levels at which a case is looked at to find where it vanishes, even from 0 to below its base."""


@dataclasses.dataclass(frozen=True)
class Recipe:
    """All that a worker must be told to make any case.

    Attributes
    ----------
    scenario : Scenario
        With its [sweep] table.
    smallest, widest : float, m
        Rim diameters between which all cases lie.
    widest_disc : float
        Largest radius of the tested disc, diameters.
    noise : NoiseModel or None
        Estimated from the scenario's map; None where the cases state their own.
    spacing : float or None, m
        Step of that map.
    """

    scenario: Scenario
    smallest: float
    widest: float
    widest_disc: float
    noise: NoiseModel | None = None
    spacing: float | None = None

    @cached_property
    def key(self) -> str:
        """The same for equal recipes, in any process."""
        rest = (self.smallest, self.widest, self.widest_disc, self.noise, self.spacing)
        return hashlib.sha256(f"{scenario_hash(self.scenario)} {rest!r}".encode()).hexdigest()


@dataclasses.dataclass(frozen=True, eq=False)
class Cells:
    """One mesh with its table, the volume of its cells (flattened, m³), and the name of the table's file."""

    label: str
    mesh: Mesh
    table: RingTable
    volume: Array


@dataclasses.dataclass(frozen=True, eq=False)
class Fading:
    """Ring means of a fresh structure cut ever deeper.

    Layers are even, so what lies below a cut sees the stations on it as the top layers see those on the fresh ground:
    one table serves every cut. Contrasts at a depth below the ground before impact do not depend on the cut.

    Attributes
    ----------
    mesh : Mesh
        Of the fresh structure.
    cuts : (n_cut,) array, m
        Erosion levels.
    rings : (n_ring, n_layer, n_radius) array
        From contrast (kg/m³) to ring means (mGal), stations on the uppermost layer.
    label : str
        Name of the table's file.
    """

    label: str
    mesh: Mesh
    cuts: Array
    rings: Array

    def ring_means(self, contrast: Array) -> Array:
        """Of many fresh structures (n_model, n_layer, n_radius) at every cut, (n_cut, n_model, n_ring) mGal."""
        layers = self.mesh.depth.size
        found = np.empty((self.cuts.size, len(contrast), len(self.rings)))
        for i in range(self.cuts.size):
            left = layers - i * LAYERS_PER_CUT
            below = contrast[:, layers - left :].reshape(len(contrast), -1)
            found[i] = below @ self.rings[:, :left].reshape(len(self.rings), -1).T
        return found


@dataclasses.dataclass(frozen=True, eq=False)
class Survey:
    """Stations on an even lattice, seen as ring means under one noise.

    Attributes
    ----------
    edges : (n_ring + 1,) array, m
        Rings out to the tested disc of the widest case; a smaller one uses the inner rings.
    response : (n_ring, n_radius) array
        From profiles to ring means.
    area : (n_ring,) array
        Of the rings.
    regional : (n_ring, p) array
        Ring means of the regional's columns.
    covariances : (n_noise, n_ring, n_ring) array, mGal²
        Under the best noise model, then under plausible ones.
    likelihoods : dict
        Of so many inner rings; filled as they are asked for.
    """

    edges: Array
    response: Array
    area: Array
    regional: Array
    covariances: Array
    likelihoods: dict[int, RingLikelihood] = dataclasses.field(default_factory=dict, repr=False)

    def count(self, disc_radius: float) -> int:
        """Rings that hold a disc."""
        return max(int(np.searchsorted(self.edges, disc_radius * (1 - 1e-9))), min(LEAST_RINGS, self.area.size))

    def likelihood(self, count: int, scatter: Array | None = None) -> RingLikelihood:
        """Of the inner rings under the best noise, with the scatter of shape (mGal²) on top where given."""
        regional = self.regional[:count]
        if scatter is not None:
            return ring_likelihood(self.covariances[0, :count, :count] + scatter, regional)
        if count not in self.likelihoods:
            self.likelihoods[count] = ring_likelihood(self.covariances[0, :count, :count], regional)
        return self.likelihoods[count]


class Bench:
    """Tables of one sweep, made when first asked for and kept within a bound.

    Attributes
    ----------
    radius : (n_radius,) array, m
        Radii of the profiles.
    radius_edges : (n_ring + 1,) array, m
        Of all sections.
    shelf : Path or None
        Folder with tables that another process of this machine has made, to be shared instead of made again.
    """

    def __init__(self, recipe: Recipe) -> None:
        self.recipe = recipe
        sweep = recipe.scenario.sweep
        assert sweep is not None
        self.layers = sweep.layers
        scale, ratio = 0.4 * recipe.smallest, recipe.widest / recipe.smallest
        rings = math.ceil(sweep.rings * np.arcsinh(2.0 * ratio) / np.arcsinh(2.0))
        self.radius_edges: Array = scale * np.sinh(np.linspace(0.0, np.arcsinh(2.0 * ratio), rings + 1))
        reach = max(2.0, recipe.widest_disc + 0.1) * recipe.widest + 2 * LEAST_RINGS * self._spacing(recipe.scenario)
        end = float(np.arcsinh(reach / scale))
        self.radius: Array = scale * np.sinh(np.linspace(0.0, end, math.ceil(end / RADIUS_STEP) + 1))
        self.shelf: Path | None = None
        self._kept: dict[Hashable, Any] = {}
        self._lock = threading.RLock()

    def cells(self, model: CraterModel, height: float) -> Cells:
        """The mesh that holds a structure, with its table."""
        base = _rung(model.base - model.ground.erosion + model.ground.cover)
        return self._once(("cells", base, height), 12, lambda: self._make_cells(base, height))

    def _make_cells(self, base: float, height: float) -> Cells:
        # The deepest layer is exp(3) = 20 times the thinnest, as in every section.
        edges = base * np.expm1(3.0 * np.arange(self.layers + 1) / self.layers) / np.expm1(3.0)
        mesh = Mesh(edges, self.radius_edges)
        # Rings on the sphere are exact for every width, so no case needs to be asked whether it is wide enough.
        label = f"cells-{base}-{height}.npy"
        kernel = self._shelved(label)
        if kernel is None:
            table = ring_table(self.radius, self.radius_edges, edges, height_m=height, earth="sphere")
        else:
            table = RingTable(self.radius, self.radius_edges, edges, height, "sphere", kernel)
        volume = np.outer(np.diff(edges), np.pi * np.diff(self.radius_edges**2)).ravel()
        return Cells(label, mesh, table, volume)

    def fading(self, fresh: CraterModel, case: Scenario) -> Fading:
        """The table that cuts a fresh structure ever deeper, for the case's survey."""
        base, height = _rung(fresh.base), case.model.station_height_m
        spacing = self._spacing(case)
        key = ("fading", base, height, spacing)
        return self._once(key, 12, lambda: self._make_fading(base, height, spacing))

    def _make_fading(self, base: float, height: float, spacing: float) -> Fading:
        layers = CUTS * LAYERS_PER_CUT
        edges = np.linspace(0.0, base, layers + 1)
        # The crossing of a threshold is not sharpened by the curvature of the Earth: the flat table is quicker.
        label = f"fading-{base}-{height}-{spacing}.npy"
        rings = self._shelved(label)
        if rings is None:
            stencil = self._stencil(spacing)
            kernel = ring_table(self.radius, self.radius_edges, edges, height_m=height).kernel
            rings = (stencil.response @ kernel.reshape(self.radius.size, -1)).reshape(-1, *kernel.shape[1:])
        return Fading(label, Mesh(edges, self.radius_edges), edges[::LAYERS_PER_CUT][:-1], rings)

    def fill_shelf(self, shelf: Path) -> None:
        """Write the tables made so far where other processes of this machine can share them."""
        for made in self._kept.values():
            if isinstance(made, Cells | Fading):
                np.save(shelf / made.label, made.table.kernel if isinstance(made, Cells) else made.rings)

    def _shelved(self, label: str) -> Array | None:
        path = self.shelf / label if self.shelf else None
        return np.load(path, mmap_mode="r") if path and path.exists() else None

    def survey(self, case: Scenario) -> Survey:
        """What a case is seen with: the map's noise and step, or those the case states."""
        noise = self.recipe.noise or noise_of(case, None)
        spacing = self._spacing(case)
        key = ("survey", noise, spacing, case.inference.noise_draws)
        return self._once(key, 64, lambda: self._make_survey(case, noise, spacing))

    def _make_survey(self, case: Scenario, noise: NoiseModel, spacing: float) -> Survey:
        stencil = self._stencil(spacing)
        draws = noise.draws(np.random.default_rng([self.recipe.scenario.seed, 2]), case.inference.noise_draws)
        covariances = np.stack([self._covariance(each, spacing) for each in (noise, *draws)])
        regional = stencil.likelihood.regional
        return Survey(self._ring_edges(spacing), stencil.response, stencil.area, regional, covariances)

    def _covariance(self, noise: NoiseModel, spacing: float) -> Array:
        """Level and nugget only scale what range and smoothness settle."""
        stencil = self._stencil(spacing)
        unit = NoiseModel(sill_mgal=1.0, range_m=noise.range_m, smoothness=noise.smoothness)
        correlated = self._once(
            ("unit", unit, spacing),
            64,
            lambda: ring_covariance(stencil.weights, unit, shape=stencil.shape, spacing_m=(spacing, spacing)),
        )
        nodes = self._once(("nodes", spacing), 4, lambda: (stencil.weights @ stencil.weights.T).toarray())
        return np.asarray(noise.sill_mgal**2 * correlated + noise.nugget_mgal**2 * nodes)

    def _stencil(self, spacing: float) -> Stencil:
        given = self.recipe.scenario.observed
        resolution = KM * given.resolution_km if given and given.resolution_km else None
        order = self.recipe.scenario.noise.regional_order
        # Only its geometry is used; the covariance it is born with is replaced by that of every noise asked for.
        some = NoiseModel(sill_mgal=1.0, range_m=spacing, smoothness=0.5, nugget_mgal=1.0, regional_order=order)
        edges = self._ring_edges(spacing)
        return self._once(
            ("stencil", spacing),
            4,
            lambda: Stencil.build(edges, (spacing, spacing), some, radius=self.radius, resolution=resolution),
        )

    def _ring_edges(self, spacing: float) -> Array:
        reach = max(self.recipe.widest_disc * self.recipe.widest, LEAST_RINGS * spacing)
        edges = [0.0]
        while edges[-1] < reach * (1 - 1e-9):
            edges.append(edges[-1] + spacing * max(1, round(RING_GROWTH * edges[-1] / spacing)))
        return np.array(edges)

    def _spacing(self, case: Scenario) -> float:
        return self.recipe.spacing or KM * case.inference.station_spacing_km

    def _once(self, key: Hashable, most: int, make: Callable[[], T]) -> T:
        """What was made under this key, or is made now; the oldest of a kind leaves when there are too many."""
        with self._lock:
            if key not in self._kept:
                kind = key[0] if isinstance(key, tuple) else key
                same = [k for k in self._kept if isinstance(k, tuple) and k[0] == kind]
                for old in same[: max(len(same) + 1 - most, 0)]:
                    del self._kept[old]
                self._kept[key] = make()
            found: T = self._kept[key]
            return found


def _rung(depth: float) -> float:
    """The depth of the ladder that holds a depth, m."""
    steps = max(math.ceil(math.log(max(depth, KM) / KM) / math.log(DEPTH_LADDER) - 1e-12), 1)
    return KM * DEPTH_LADDER**steps
