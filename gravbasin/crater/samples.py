"""Laboratory samples: read, compared with what their minerals lead to expect, and used to narrow the structure."""

from __future__ import annotations

import dataclasses
import difflib
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gravbasin import labels
from gravbasin.constants import STANDARD_GRAVITY
from gravbasin.crater.background import PRESETS
from gravbasin.crater.minerals import MINERALS, brocher_density, gardner_density, grain_density
from gravbasin.crater.model import CraterModel, crater_model
from gravbasin.crater.overburden import largest_overburden
from gravbasin.errors import InputError
from gravbasin.scenario import Layer, Samples, Scenario

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["SampleUpdate", "compare_samples", "read_samples", "update_from_samples", "with_samples"]

Array = NDArray[np.float64]
KM = 1000.0

# Column: least and largest value, what to do about others.
_COLUMNS = {
    "density_kg_m3": (1000.0, 6000.0, "give kg/m³ (2.67 g/cm³ is 2670)"),
    "porosity": (0.0, 0.7, "give a fraction (2 % is 0.02)"),
    "velocity_m_s": (1500.0, 8500.0, "give m/s (5.8 km/s is 5800)"),
    "easting_km": (-1e5, 1e5, "give kilometres in the map's coordinates"),
    "northing_km": (-1e5, 1e5, "give kilometres in the map's coordinates"),
}

TARGET_SPREAD = 60.0
"""Standard deviation of the target's mean density about its preset, and typical spread of samples, kg/m³: a third of
the range of granite and gneiss means (Telford et al. 1990, from memory)."""

POROSITY_SPREAD = 0.02
"""Typical spread of measured porosity within one unit, common practice."""

HAND_SHARE = (0.3, 1.0)
"""Share of the fracture porosity that a hand sample can hold: cracks wider than a core go unseen (common practice)."""


def read_samples(path: str | Path) -> pd.DataFrame:
    """A table of samples, checked.

    Parameters
    ----------
    path : path
        CSV. Columns, all but one of the first two optional: ``density_kg_m3``, ``velocity_m_s``, ``porosity``,
        ``easting_km`` and ``northing_km``, ``name``, and ``<mineral>_percent`` for any of `MINERALS` (by volume).

    Raises
    ------
    InputError
        An unknown column, a value out of range, modes far from 100 %, no usable rows.
    """
    import pandas as pd

    path = Path(path)
    try:
        table = pd.read_csv(path, skipinitialspace=True)
    except (OSError, ValueError) as error:
        raise InputError("samples.path", path, f"cannot be read ({error})", "give a CSV table", path.name) from None
    minerals = {f"{name}_percent": (0.0, 100.0, "give percent by volume") for name in MINERALS}
    known = {**_COLUMNS, **minerals}
    for column in table.columns:
        if column not in (*known, "name"):
            near = difflib.get_close_matches(str(column), [*known, "name"], n=1)
            remedy = f"did you mean {near[0]}?" if near else f"remove it; known: {', '.join([*_COLUMNS, 'name'])}"
            raise InputError("samples: column", column, "is not known", remedy, path.name)
        if column != "name":
            table[column] = _numbers(table, column, known[column], path.name)
    if not {"density_kg_m3", "velocity_m_s"} & set(table.columns) or table.empty:
        raise InputError("samples", path, "must hold densities or velocities", "add density_kg_m3", path.name)
    _check_modes(table, [c for c in table.columns if c in minerals], path.name)
    return table


def _numbers(table: pd.DataFrame, column: str, rule: tuple[float, float, str], where: str) -> pd.Series:
    import pandas as pd

    low, high, remedy = rule
    values = pd.to_numeric(table[column], errors="coerce")
    bad = (values.isna() & table[column].notna()) | (values < low) | (values > high)
    if bad.any():
        row = int(np.flatnonzero(bad)[0])
        shown = table[column].iloc[row]
        raise InputError(
            f"samples: row {row + 1}: {column}", shown, f"must lie between {low:g} and {high:g}", remedy, where
        )
    return values


def _check_modes(table: pd.DataFrame, columns: list[str], where: str) -> None:
    if not columns:
        return
    total = table[columns].sum(axis=1, min_count=1)
    bad = total.notna() & ((total < 90.0) | (total > 110.0))
    if bad.any():
        row = int(np.flatnonzero(bad)[0])
        raise InputError(
            f"samples: row {row + 1}: sum of the minerals", f"{total.iloc[row]:g} %", "must be near 100",
            "add the missing minerals, or leave the row's minerals empty", where,
        )  # fmt: skip


def compare_samples(table: pd.DataFrame, settings: Samples) -> xr.Dataset:
    """Measured against expected density, sample by sample along their transect.

    Parameters
    ----------
    table : DataFrame
        From `read_samples`.
    settings : Samples
        Centre of the structure and the score beyond which a sample is an outlier.

    Returns
    -------
    Dataset (sample)
        ``density`` measured; ``expected_low`` and ``expected_high`` from the modes (with the measured porosity where
        known); ``from_gardner`` and ``from_brocher`` from velocity, all kg/m³; ``porosity``; ``radius`` from the
        centre and ``transect`` along the line of best fit through the samples, m; ``score``, robust standard score of
        measured minus expected (minus the median of all where no minerals are known); ``outlier``, 0 or 1. NaN where
        something was not measured.
    """
    count = len(table)

    def column(name: str) -> Array:
        return table[name].to_numpy(dtype=float) if name in table else np.full(count, np.nan)

    density, porosity, velocity = column("density_kg_m3"), column("porosity"), column("velocity_m_s")
    low, high = _expected(table, porosity)
    position = np.stack([column("easting_km") - settings.centre_easting_km,
                         column("northing_km") - settings.centre_northing_km])  # fmt: skip
    position = KM * position
    score = _score(density, 0.5 * (low + high))
    names = table["name"].astype(str).to_list() if "name" in table else [str(i + 1) for i in range(count)]
    variables = {
        "density": (density, "kg m-3", "measured density"),
        "expected_low": (low, "kg m-3", "least density that the minerals allow"),
        "expected_high": (high, "kg m-3", "largest density that the minerals allow"),
        "from_gardner": (gardner_density(velocity), "kg m-3", "density from velocity after Gardner"),
        "from_brocher": (brocher_density(velocity), "kg m-3", "density from velocity after Brocher"),
        "porosity": (porosity, "1", "measured porosity"),
        "radius": (np.hypot(*position), "m", "distance from the centre of the structure"),
        "transect": (_along(position), "m", "distance along the line of best fit through the samples"),
        "score": (score, "1", "robust standard score of measured minus expected density"),
        "outlier": ((np.abs(np.nan_to_num(score)) > settings.outlier_scores).astype(np.int8), "1", "1 for an outlier"),
    }
    facts = labels.provenance(samples=settings.path.name, versions=labels.versions())
    return xr.Dataset(
        {key: ("sample", values, {"units": u, "long_name": text}) for key, (values, u, text) in variables.items()},
        coords={"sample": names},
        attrs={"title": "laboratory samples, measured and expected", "provenance": facts},
    )


def _expected(table: pd.DataFrame, porosity: Array) -> tuple[Array, Array]:
    """Bulk density that the modes allow, saturated with fresh water; NaN without modes."""
    columns = {name: f"{name}_percent" for name in MINERALS if f"{name}_percent" in table}
    low, high = np.full(len(table), np.nan), np.full(len(table), np.nan)
    if columns:
        known = table[list(columns.values())].notna().any(axis=1).to_numpy()
        modes = {name: table.loc[known, column].fillna(0.0).to_numpy() for name, column in columns.items()}
        low[known], high[known] = grain_density(modes)
    pores = np.nan_to_num(porosity)
    return low + pores * (1000.0 - low), high + pores * (1000.0 - high)


def _score(density: Array, expected: Array) -> Array:
    """Distance from the median in scaled median deviations, 20 kg/m³ at least to spare tight sets (common practice)."""
    centre = np.nanmedian(density) if np.isfinite(density).any() else np.nan
    difference = density - np.where(np.isfinite(expected), expected, centre)
    if not np.isfinite(difference).any():
        return difference
    middle = np.nanmedian(difference)
    return (difference - middle) / max(1.4826 * float(np.nanmedian(np.abs(difference - middle))), 20.0)


def _along(position: Array) -> Array:
    """Distance along the principal direction of the samples, from the point nearest to the centre, m."""
    known = np.isfinite(position).all(axis=0)
    along = np.full(position.shape[1], np.nan)
    if known.sum() >= 2:
        axis = np.linalg.svd(position[:, known] - position[:, known].mean(axis=1, keepdims=True))[0][:, 0]
        along[known] = axis @ position[:, known] * (1.0 if axis[np.argmax(np.abs(axis))] > 0 else -1.0)
    return along


@dataclasses.dataclass(frozen=True)
class SampleUpdate:
    """What the samples say about the structure.

    Attributes
    ----------
    density, density_sd : float, kg/m³
        Density of unfractured target at today's ground: posterior mean and standard deviation.
    prior_density : float, kg/m³
        The same before the samples.
    porosity, porosity_scatter : float
        Fracture porosity at the floor: posterior median, and standard deviation of its logarithm.
    used, outliers, in_fill : int
        Samples that counted, that were set aside as outliers, and that lie on crater fill rather than target rock.
    """

    density: float
    density_sd: float
    prior_density: float
    porosity: float
    porosity_scatter: float
    used: int
    outliers: int
    in_fill: int


def update_from_samples(scenario: Scenario, compared: xr.Dataset) -> SampleUpdate:
    """Posterior of the target's density and fracture porosity given samples of the ground.

    Density of a sample is solid - (solid - fluid) s phi0 g(r), its porosity s phi0 g(r), where phi0 g(r) is the
    model's porosity at the ground and s the share that a hand sample holds; spreads are unknown (inverse-gamma
    priors about `TARGET_SPREAD` and `POROSITY_SPREAD`, integrated in closed form). Solid density has a normal, phi0 a
    log-normal, s a uniform prior (`HAND_SHARE`); the posterior is summed on a grid. Samples without a position count
    as undamaged rock outside the structure. Assumes that samples err independently.

    Raises
    ------
    InputError
        No sample of target rock with a measured density or porosity is left.
    """
    model = crater_model(scenario)
    density, porosity = compared.density.values, compared.porosity.values
    shape, on_rock = _relative_porosity(model, compared.radius.values)
    measured = np.isfinite(density) | np.isfinite(porosity)
    usable = measured & on_rock & (compared.outlier.values == 0)
    if not usable.any():
        raise InputError("samples", f"{density.size} rows", "must hold target rock with a density or porosity",
                         "add samples from below the crater fill, or drop [samples]")  # fmt: skip
    prior = float(model.column.crust_density(model.ground.erosion))
    reach = [prior - 5.0 * TARGET_SPREAD, prior + 5.0 * TARGET_SPREAD, *density[usable & np.isfinite(density)]]
    solid = np.linspace(min(reach), max(reach), 161)
    spread = max(scenario.damage.porosity_scatter, 1e-6)
    phi = scenario.damage.porosity * np.exp(spread * np.linspace(-4.0, 4.0, 81))
    share = np.linspace(*HAND_SHARE, 8)
    log_posterior = (
        -0.5 * ((solid[:, None, None] - prior) / TARGET_SPREAD) ** 2
        - 0.5 * (np.log(phi[:, None] / scenario.damage.porosity) / spread) ** 2
        + _log_likelihood(model, (solid, phi, share), density[usable], porosity[usable], shape[usable])
    )
    weight = np.exp(log_posterior - log_posterior.max())
    weight /= weight.sum()
    of_solid, of_phi = weight.sum(axis=(1, 2)), weight.sum(axis=(0, 2))
    mean = float(of_solid @ solid)
    log_mean = float(of_phi @ np.log(phi))
    return SampleUpdate(
        density=mean,
        density_sd=float(np.sqrt(of_solid @ (solid - mean) ** 2)),
        prior_density=prior,
        porosity=float(np.exp(log_mean)),
        porosity_scatter=float(np.sqrt(of_phi @ (np.log(phi) - log_mean) ** 2)),
        used=int(usable.sum()),
        outliers=int((measured & (compared.outlier.values == 1)).sum()),
        in_fill=int((measured & ~on_rock).sum()),
    )


def _relative_porosity(model: CraterModel, radius: Array) -> tuple[Array, NDArray[np.bool_]]:
    """Model porosity at today's ground over that at the floor, and whether the ground is target rock there."""
    known = np.isfinite(radius)
    r = np.where(known, radius, 10.0 * model.outer_radius)
    bases = model.fill.interfaces(r)
    below = model.ground.erosion - bases.floor
    surface = largest_overburden(model.column, model.fill, model.ground, bases)
    weight = STANDARD_GRAVITY * np.maximum(model.column.crust_mass(model.ground.erosion) + surface, 0.0)
    opened = model.damage.open_porosity(np.maximum(below, 0.0), r, weight)
    share = opened / model.damage.porosity if model.damage.porosity > 0 else np.zeros_like(r)
    return share, below >= -1.0


def _log_likelihood(
    model: CraterModel, grid: tuple[Array, Array, Array], density: Array, porosity: Array, shape: Array
) -> Array:
    """Logarithm of the likelihood on the grid of solid density, porosity and hand share, spreads integrated out."""
    solid, phi, share = grid
    held = phi[:, None] * share  # (phi, share): porosity a hand sample shows where the model has all of phi0
    total = np.zeros((solid.size, phi.size, share.size))
    dense = np.isfinite(density)
    deficit = held[..., None] * shape[dense]
    expected = solid[:, None, None, None] - (solid[:, None, None, None] - model.damage.fluid_density) * deficit
    total += _integrated(((density[dense] - expected) ** 2).sum(axis=-1), dense.sum(), TARGET_SPREAD)
    porous = np.isfinite(porosity)
    squares = ((porosity[porous] - held[..., None] * shape[porous]) ** 2).sum(axis=-1)
    return np.asarray(total + _integrated(squares, porous.sum(), POROSITY_SPREAD))


def _integrated(squares: Array, count: int, spread: float) -> Array:
    """Normal likelihood with its variance integrated over an inverse-gamma prior of shape 3/2 about `spread`."""
    return -0.5 * (count + 3) * np.log(squares + 3.0 * spread**2)


def with_samples(scenario: Scenario) -> tuple[Scenario, xr.Dataset, SampleUpdate]:
    """The scenario narrowed by its samples, their comparison, and what they said.

    The comparison also holds ``held_low`` and ``held_high``, the porosity that the narrowed structure lets a hand
    sample of its place hold.

    The layer at today's ground (cover, or all layers of the basement) takes on the posterior density and its
    uncertainty; fracture porosity and its scatter become those of the posterior.

    Raises
    ------
    InputError
        The scenario has no ``[samples]``, or its table breaks a rule.
    """
    if scenario.samples is None:
        raise InputError("samples", "(missing)", "must be in the scenario", "add [samples] with a path")
    compared = compare_samples(read_samples(scenario.samples.path), scenario.samples)
    update = update_from_samples(scenario, compared)
    damage = scenario.damage.model_copy(
        update={"porosity": update.porosity, "porosity_scatter": update.porosity_scatter}
    )
    changes = _shifted_background(scenario, update)
    background = scenario.background.model_copy(update=changes)
    narrowed = scenario.model_copy(update={"damage": damage, "background": background})
    shape, _ = _relative_porosity(crater_model(narrowed), compared.radius.values)
    held = {
        f"held_{end}": ("sample", share * update.porosity * shape, {"units": "1", "long_name": f"{word} porosity held"})
        for end, word, share in zip(("low", "high"), ("least", "largest"), HAND_SHARE, strict=True)
    }
    return narrowed, compared.assign(held), update


def _shifted_background(scenario: Scenario, update: SampleUpdate) -> Mapping[str, object]:
    shift = update.density - update.prior_density
    background, crater = scenario.background, scenario.crater
    ground = crater_model(scenario).ground
    if crater.target_rock == "mixed" and ground.erosion < KM * crater.cover_thickness_km:
        return {"cover_density_kg_m3": background.cover_density_kg_m3 + shift}
    layers = background.layers or tuple(
        Layer(top_km=top, density_kg_m3=density, gradient_kg_m3_per_km=gradient, porosity=pores)
        for top, density, gradient, pores in PRESETS[crater.target_rock]
        if top < background.moho_km
    )
    moved = tuple(layer.model_copy(update={"density_kg_m3": layer.density_kg_m3 + shift}) for layer in layers)
    return {"layers": moved, "density_scatter_kg_m3": update.density_sd}
