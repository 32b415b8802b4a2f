"""Does the noise model describe the map? Blocks left out in turn and predicted from the rest."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import xarray as xr
from scipy import linalg

from gravbasin.errors import InputError
from gravbasin.observed._gls import covariance_of, whiten
from gravbasin.observed._lattice import Array, Disc, Nodes, lattice_of, thin
from gravbasin.observed.estimate import MIN_NODES
from gravbasin.observed.noise import NoiseModel
from gravbasin.observed.regional import polynomial_basis

__all__ = ["NoiseCheck", "check_noise"]


@dataclass(frozen=True, kw_only=True)
class NoiseCheck:
    """How blocks of the map, each predicted from all the others, compare with the noise model.

    Parameters
    ----------
    ratio : float
        Whitened residual chi-square per node: 1 if the model holds, above if it is too confident.
    standard_error : float
        Of the ratio, if the model holds (exact for Gaussian noise).
    p_value : float
        Two-sided, from a scaled chi-square with the exact mean and variance.
    worst_block : float
        Largest chi-square per node of a single block: a patch of other geology stands out here.
    n_points, n_blocks : int
        Nodes and blocks used.
    """

    ratio: float
    standard_error: float
    p_value: float
    worst_block: float
    n_points: int
    n_blocks: int


def check_noise(
    observed: xr.DataArray,
    noise: NoiseModel,
    exclude: Disc | None = None,
    *,
    blocks: int = 6,
    max_points: int = 700,
    seed: int | np.random.Generator = 1,
) -> NoiseCheck:
    """Leave each of blocks × blocks squares of the map out and predict it, regional included, from the rest.

    Parameters
    ----------
    observed : DataArray (northing, easting), mGal
        The map.
    noise : NoiseModel
        The model on trial.
    exclude : (easting, northing, radius), m, optional
        Disc left out.
    blocks : int
        Blocks along each side of the map.
    max_points : int
        Most nodes to use.
    seed : int or numpy Generator
        Picks the nodes.

    Returns
    -------
    NoiseCheck

    Raises
    ------
    InputError
        A bad map or disc, fewer than 80 nodes, fewer than 2 blocks a side.

    Notes
    -----
    With P = V⁻¹ − V⁻¹X(X'V⁻¹X)⁻¹X'V⁻¹ the error of predicting block B is P_BB⁻¹ (Py)_B with covariance P_BB⁻¹ (block
    form of the leave-one-out identity, common practice), so no block needs its own fit. The sum T = y'P D P y with
    D = blockdiag(P_BB⁻¹) has mean tr(DP) = n and variance 2 tr((DP)²).
    """
    from scipy import stats  # slow to import

    where = "check_noise"
    if blocks < 2:
        raise InputError("blocks", blocks, "must be 2 or more", "6 is usual", where)
    lattice = lattice_of(observed, where=where)
    separation = noise.resolution_m or 2.0 * max(lattice.spacing)
    nodes = thin(
        lattice,
        lattice.valid(exclude, where=where),
        separation_m=separation,
        max_points=max_points,
        rng=np.random.default_rng(seed),
    )
    count = nodes.values.size
    if count < MIN_NODES:
        raise InputError(
            "exclude",
            exclude,
            f"leaves {count} independent nodes, of which a check needs {MIN_NODES}",
            "use a wider map or a smaller disc",
            where,
        )
    precision, projected = _projected_precision(nodes, noise)
    members = _blocks(nodes, blocks)
    chi_square = np.empty(len(members))
    spread = np.empty_like(precision)  # D P, a block of rows at a time
    for i, block in enumerate(members):
        factor = linalg.cho_factor(precision[np.ix_(block, block)])
        spread[block] = linalg.cho_solve(factor, precision[block])
        chi_square[i] = projected[block] @ linalg.cho_solve(factor, projected[block])
    total, variance = float(chi_square.sum()), 2.0 * float(np.sum(spread * spread.T))
    scale = variance / (2.0 * count)
    below = float(stats.chi2.cdf(total / scale, count / scale))
    sizes = np.array([block.size for block in members])
    return NoiseCheck(
        ratio=total / count,
        standard_error=math.sqrt(variance) / count,
        p_value=2.0 * min(below, 1.0 - below),
        worst_block=float((chi_square / sizes).max()),
        n_points=count,
        n_blocks=len(members),
    )


def _projected_precision(nodes: Nodes, noise: NoiseModel) -> tuple[Array, Array]:
    """P and P y."""
    design = polynomial_basis(nodes.easting, nodes.northing, noise.regional_order)
    fit = whiten(covariance_of(nodes, noise), design, nodes.values)
    inverse = linalg.solve_triangular(fit.factor, np.eye(nodes.values.size), lower=True, check_finite=False)
    q = linalg.qr(fit.design, mode="economic", check_finite=False)[0]
    side = q.T @ inverse
    return inverse.T @ inverse - side.T @ side, inverse.T @ fit.residual


def _blocks(nodes: Nodes, blocks: int) -> list[np.ndarray]:
    """Indices of the nodes in each occupied square of the map."""
    number = np.zeros(nodes.values.size, dtype=int)
    for axis in (nodes.northing, nodes.easting):
        place = (axis - axis.min()) / max(float(np.ptp(axis)), 1e-9)
        number = number * blocks + np.minimum((place * blocks).astype(int), blocks - 1)
    return [np.flatnonzero(number == b) for b in np.unique(number)]
