"""The noise model of a map, by restricted likelihood with a weak prior, on a subset of its nodes."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import xarray as xr

from gravbasin.errors import CannotFinish, InputError
from gravbasin.observed._gls import Lags, Whitened, whiten
from gravbasin.observed._lattice import Array, Disc, Nodes, lattice_of, thin
from gravbasin.observed._posterior import Sample, importance_sample
from gravbasin.observed.noise import SMOOTHNESS_BOUNDS, NoiseModel
from gravbasin.observed.regional import polynomial_basis

__all__ = ["MIN_NODES", "estimate_noise"]

MIN_NODES = 80
"""Fewest independent nodes an estimate is made from."""

# The prior, in ln(range), ln(smoothness), ln(nugget/sill). Ranges and nuggets: our own fits to the station compilation
# of one old craton and its margins gave ranges of 29-40 km and nuggets of 0.05-0.15 of the sill; the scatter is wide.
# Smoothness is flat from 0.5 to 2 with soft shoulders, as the estimator moves it by about half.
_RANGE_MEDIAN_M, _RANGE_SCATTER = 40e3, 0.7
_NUGGET_MEDIAN, _NUGGET_SCATTER = 0.1, 1.5
_SMOOTH_FLAT, _SMOOTH_SHOULDER = (0.5, 2.0), 0.25
_NUGGET_BOUNDS = (1e-3, 10.0)
_FIRST_SCATTER = np.array([0.3, 0.4, 0.8])  # of the first round of sampling: about that of a 300-node posterior
_ROUNDS = (60, 60, 60, 80, 100)
_KEPT = 256  # equally likely models kept with the estimate


@dataclass(frozen=True, eq=False)
class _Problem:
    """Restricted likelihood of ln(range), ln(smoothness), ln(nugget/sill), with the sill profiled out."""

    lags: Lags
    design: Array
    values: Array
    bounds: Array  # (3, 2)

    @property
    def dof(self) -> int:
        """Nodes less regional coefficients."""
        return self.values.size - self.design.shape[1]

    def solve(self, theta: Array) -> Whitened:
        """Least squares under the correlation matrix of theta."""
        range_m, smoothness, ratio = np.exp(theta)
        matrix = self.lags.correlation(range_m, smoothness)
        matrix[np.diag_indices_from(matrix)] += ratio**2
        return whiten(matrix, self.design, self.values)

    def log_sill(self, fit: Whitened) -> float:
        """ln of the best sill, mGal, at this fit: σ² = r'V⁻¹r/(n − p)."""
        return 0.5 * math.log(fit.quadratic / self.dof)

    def minus_log_likelihood(self, fit: Whitened) -> float:
        """Restricted, sill profiled; Patterson & Thompson (1971), from memory."""
        constant = self.dof * (1.0 + math.log(2.0 * math.pi))
        level = 2.0 * self.dof * self.log_sill(fit)
        return 0.5 * (constant + level + fit.log_determinant + fit.log_determinant_design)

    def objective(self, theta: Array) -> tuple[float, float]:
        """Minus log posterior, and ln of the best sill, at theta."""
        try:
            fit = self.solve(theta)
        except CannotFinish:
            return math.inf, math.nan
        return self.minus_log_likelihood(fit) - _log_prior(theta), self.log_sill(fit)


def estimate_noise(
    observed: xr.DataArray,
    *,
    exclude: Disc | None = None,
    template: xr.DataArray | None = None,
    regional_order: int = 1,
    resolution_m: float | None = None,
    max_points: int = 700,
    seed: int | np.random.Generator = 0,
) -> NoiseModel:
    """Matérn noise model of a map, its regional estimated jointly.

    Parameters
    ----------
    observed : DataArray (northing, easting), mGal
        The map; NaN where there are no data.
    exclude : (easting, northing, radius), m, optional
        Disc left out: the structure, which is not noise. About 1.5 times the anomaly's radius.
    template : DataArray (northing, easting), mGal, optional
        A structure on the nodes of the map, some multiple of which is estimated with the noise: instead of leaving it
        out, for an anomaly that is what it was modelled to be.
    regional_order : int
        0, 1 or 2: order of the polynomial estimated with the noise.
    resolution_m : float, optional
        True resolution of the map. Nodes closer than this were made by the gridding and are not data; they are
        thinned to this separation. Default two grid steps.
    max_points : int
        Most nodes to use; the cost grows with its cube.
    seed : int or numpy Generator
        Picks the nodes and the models tried.

    Returns
    -------
    NoiseModel
        The posterior mean of the logarithms, with a sample of the posterior for `NoiseModel.draws`.

    Raises
    ------
    InputError
        A map that is not (northing, easting) in mGal, a bad disc, too few nodes left, a map without variation.

    Notes
    -----
    Restricted likelihood, which unlike the plain one does not lose the variance that the regional takes, times a weak
    prior. Smoothness and nugget resemble each other in data of one spacing: their posterior is a long bent ridge,
    whose peak sits at the smooth end and whose curvature there understates its width several times. So it is sampled
    (adaptive importance sampling, about 400 evaluations), not expanded about its peak; the sill is profiled out.

    Examples
    --------
    >>> from gravbasin.observed import simulate_noise
    >>> truth = NoiseModel(sill_mgal=9.0, range_m=35e3, smoothness=0.8, nugget_mgal=0.8)
    >>> field = simulate_noise(truth, range(0, 300_000, 5_000), range(0, 250_000, 5_000), seed=3)
    >>> noise = estimate_noise(field, max_points=300)
    >>> bool(abs(np.log(noise.sill_mgal / 9.0)) < 3 * noise.relative_errors["sill"])
    True
    """
    where = "estimate_noise"
    lattice = lattice_of(observed, where=where)
    resolution = 2.0 * max(lattice.spacing) if resolution_m is None else float(resolution_m)
    if not (math.isfinite(resolution) and resolution > 0):
        raise InputError("resolution_m", resolution_m, "must be greater than 0 m", "give metres", where)
    if max_points < MIN_NODES:
        raise InputError("max_points", max_points, f"must be {MIN_NODES} or more", "700 is usual", where)
    rng = np.random.default_rng(seed)
    nodes = thin(lattice, lattice.valid(exclude, where=where), separation_m=resolution, max_points=max_points, rng=rng)
    _check_nodes(nodes, exclude, resolution, where)
    problem = _problem(nodes, regional_order, resolution, template)
    return _model(problem, _sample(problem, rng), regional_order, resolution, rng)


def _check_nodes(nodes: Nodes, exclude: Disc | None, resolution: float, where: str) -> None:
    if nodes.values.size < MIN_NODES:
        rule = f"leaves {nodes.values.size} nodes {resolution / 1e3:g} km apart, of which an estimate needs {MIN_NODES}"
        raise InputError("exclude", exclude, rule, "use a wider map or a smaller disc, or give the noise model", where)
    if np.ptp(nodes.values) == 0.0:
        raise InputError("observed", nodes.values[0], "must vary", "check that the file holds the anomaly", where)


def _problem(nodes: Nodes, regional_order: int, resolution: float, template: xr.DataArray | None) -> _Problem:
    lags = Lags.between(nodes)
    bounds = np.log([(resolution, 4.0 * lags.distance.max()), SMOOTHNESS_BOUNDS, _NUGGET_BOUNDS])
    design = polynomial_basis(nodes.easting, nodes.northing, regional_order)
    if template is not None:
        places = {"northing": xr.DataArray(nodes.northing), "easting": xr.DataArray(nodes.easting)}
        column = template.sel(places).values
        if np.any(column):
            design = np.column_stack([design, column / np.abs(column).max()])
    return _Problem(lags, design, nodes.values, bounds)


def _log_prior(theta: Array) -> float:
    log_range, log_smoothness, log_ratio = theta
    low, high = _SMOOTH_FLAT
    beyond = max(low - math.exp(log_smoothness), math.exp(log_smoothness) - high, 0.0) / _SMOOTH_SHOULDER
    terms = (
        (log_range - math.log(_RANGE_MEDIAN_M)) / _RANGE_SCATTER,
        beyond,
        (log_ratio - math.log(_NUGGET_MEDIAN)) / _NUGGET_SCATTER,
    )
    return log_smoothness - 0.5 * sum(t**2 for t in terms)  # ln(smoothness): flat in smoothness, not its logarithm


def _mode(problem: _Problem) -> Array:
    """Roughly the mode: Nelder-Mead from the best of a coarse lattice, with a simplex of stated size.

    The default simplex is a share of the start and barely moves where a logarithm is near 0.
    """
    from scipy import optimize

    low, high = problem.bounds.T
    lattice = np.array(np.meshgrid(np.log([15e3, 40e3, 100e3]), np.log([0.5, 1.0, 1.8]), np.log([0.03, 0.2])))
    starts = np.unique(np.clip(lattice.reshape(3, -1).T, low, high), axis=0)
    start = starts[np.argmin([problem.objective(theta)[0] for theta in starts])]
    inward = np.where(start > 0.5 * (low + high), -1.0, 1.0) * np.array([0.4, 0.3, 0.7])
    simplex = np.clip(np.vstack([start, start + np.diag(inward)]), low, high)
    found = optimize.minimize(
        lambda theta: problem.objective(theta)[0],
        start,
        method="Nelder-Mead",
        bounds=problem.bounds,
        options={"initial_simplex": simplex, "xatol": 0.1, "fatol": 0.1, "maxfev": 60},
    )
    return np.asarray(found.x)


def _sample(problem: _Problem, rng: np.random.Generator) -> Sample:
    """Posterior of the three logarithms; each point carries the ln of its best sill."""

    def density(theta: Array) -> tuple[float, float]:
        value, log_sill = problem.objective(theta)
        return -value, log_sill

    return importance_sample(
        density, _mode(problem), np.diag(_FIRST_SCATTER**2), bounds=problem.bounds, rng=rng, sizes=_ROUNDS
    )


def _model(
    problem: _Problem,
    sample: Sample,
    regional_order: int,
    resolution: float,
    rng: np.random.Generator,
) -> NoiseModel:
    centre = sample.mean
    fit = problem.solve(centre)
    range_m, smoothness, ratio = (float(v) for v in np.exp(centre))
    sill = math.exp(problem.log_sill(fit))
    pick = sample.resample(_KEPT, rng)
    # given the rest, sill² is (n − p) times its best value over a chi-square: exact, the level has a flat log prior
    log_sill = sample.extra[pick] - 0.5 * np.log(rng.chisquare(problem.dof, size=_KEPT) / problem.dof)
    log_range, log_smoothness, log_ratio = sample.points[pick].T
    posterior = np.column_stack([log_sill, log_range, log_smoothness, log_ratio + log_sill])
    return NoiseModel(
        sill_mgal=sill,
        range_m=range_m,
        smoothness=smoothness,
        nugget_mgal=ratio * sill,
        regional_order=regional_order,
        posterior=tuple(map(tuple, posterior.tolist())),
        n_points=problem.values.size,
        log_likelihood=-problem.minus_log_likelihood(fit),
        resolution_m=resolution,
    )
