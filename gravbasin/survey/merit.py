"""Merits of a set of stations: seen or not, told apart or not, how well erosion is bounded."""

from __future__ import annotations

import dataclasses

import numpy as np
from numpy.typing import NDArray
from scipy import special

from gravbasin.inference.detect import detection_probability
from gravbasin.inference.likelihood import shape_scatter
from gravbasin.survey.sight import Curves, Sight

__all__ = ["Merit", "Stakes", "filter_of", "robust_gram", "scatter_root", "signal_to_noise", "worth"]

Array = NDArray[np.float64]

SIMULATIONS = 32
"""Data sets simulated per noise model; layouts share their random numbers, so differences between them are sharp."""


@dataclasses.dataclass(frozen=True, eq=False)
class Stakes:
    """What the stations shall tell, as coefficients of the curves.

    Attributes
    ----------
    curves : Curves
    model : (n_mode,) array
        The scenario's structure.
    draws : (n_mode, n_draw) array
        Draws of its scatter.
    scatter : (n_mode, n_scatter) array
        Root of the scatter of shape, which counts as noise.
    impacts : (n_mode, n_impact) array
        Impact structures of the prior.
    erosion : (n_impact,) array, km
        Of each.
    rivals : dict of (n_mode, n_rival) arrays
        Rival bodies by name.
    stretch : dict of (2, n_rival) arrays
        Least and largest multiple of each rival that its prior of the contrast allows.
    deviates : (n_mode, n_simulation) array
        Standard normal numbers, for the simulated data.
    """

    curves: Curves
    model: Array
    draws: Array
    scatter: Array
    impacts: Array
    erosion: Array
    rivals: dict[str, Array]
    stretch: dict[str, Array]
    deviates: Array


@dataclasses.dataclass(frozen=True, eq=False)
class Merit:
    """Merits of one layout; tables over noise models (first the best) and draws of the structure (first the model).

    Attributes
    ----------
    snr : (n_noise, 1 + n_draw) array
        Signal-to-noise ratio.
    rival_distance : (n_noise,) array
        Whitened distance of the structure to the nearest body of any rival family, standard errors.
    best_rival : str
        That family, under the best noise.
    log_odds : (n_noise, n_simulation) array
        Logarithm of the evidence of the impact family over that of the best other explanation, noise alone included.
    erosion_width : (n_noise, n_simulation) array, km
        Width of the 90 % posterior interval of the erosion.
    effective : float
        Median number of equally weighted models behind those intervals; below about 20 they are rough.
    """

    snr: Array
    rival_distance: Array
    best_rival: str
    log_odds: Array
    erosion_width: Array
    effective: float

    def detection(self, threshold_probability: float) -> Array:
        """Detection probability at a local false-alarm probability, like `snr`."""
        return detection_probability(self.snr, threshold_probability)


def scatter_root(templates: Array, weight: Array) -> Array:
    """Root B of the scatter of shape, B B' = `shape_scatter`, without directions that carry next to nothing.

    Parameters
    ----------
    templates : (n, 1 + n_draw) array, mGal
        The model, then draws of its scatter, at rings or radii.
    weight : (n,) array, m²
        Area of each.
    """
    size, vectors = np.linalg.eigh(shape_scatter(templates, weight))
    kept = size > 1e-8 * max(float(size[-1]), 1e-300)
    return np.asarray(vectors[:, kept] * np.sqrt(size[kept]))


def robust_gram(gram: Array, scatter: Array) -> Array:
    """G with the scatter of shape counted as noise: G − GB(1 + B'GB)⁻¹B'G, the information after Woodbury."""
    if scatter.shape[1] == 0:
        return gram
    cross = gram @ scatter
    return np.asarray(gram - cross @ np.linalg.solve(np.eye(scatter.shape[1]) + scatter.T @ cross, cross.T))


def filter_of(gram: Array, scatter: Array, model: Array) -> tuple[Array, float]:
    """The matched filter f for the model with the scatter of shape counted as noise, and its noise.

    f @ c is the filter's response to a profile with coefficients c; the noise is that of geology and stations alone.
    """
    response = robust_gram(gram, scatter) @ model
    power = float(model @ response) - float(np.sum((scatter.T @ response) ** 2))
    return response, float(np.sqrt(max(power, 0.0)))


def signal_to_noise(sight: Sight, scatter: Array, templates: Array) -> Array:
    """Signal-to-noise ratio of the model and its draws under every noise, (n_noise, 1 + n_draw).

    The filter is made for the model (the first column) under each noise; a draw of another shape is seen as badly as
    it would be.
    """
    found = np.zeros((len(sight.gram), templates.shape[1]))
    for row, gram in enumerate(sight.gram):
        response, noise = filter_of(gram, scatter, templates[:, 0])
        if noise > 0.0:
            found[row] = response @ templates / noise
    return found


def worth(sight: Sight, stakes: Stakes) -> Merit:
    """All merits of one set of stations.

    Parameters
    ----------
    sight : Sight
        What the stations tell.
    stakes : Stakes
        What they shall tell.

    Notes
    -----
    Distances and evidence count the scatter of shape as noise, as the filter does: a rim modelled sharply in smooth
    noise would otherwise separate anything from anything. Data are simulated from the model, its amplitude that of
    the draws, plus noise of that kind; families are weighed by their mean likelihood over the prior, as in `assess`.
    """
    snr = signal_to_noise(sight, stakes.scatter, np.column_stack([stakes.model, stakes.draws]))
    rows = [_discrimination(robust_gram(gram, stakes.scatter), stakes) for gram in sight.gram]
    distance, names, odds, width, effective = zip(*rows, strict=True)
    return Merit(
        snr, np.array(distance), names[0], np.stack(odds), np.stack(width), float(np.median(np.concatenate(effective)))
    )


def _discrimination(gram: Array, stakes: Stakes) -> tuple[float, str, Array, Array, Array]:
    size, vectors = np.linalg.eigh(gram)
    kept = size > 1e-12 * max(float(size[-1]), 1e-300)
    root = (vectors[:, kept] * np.sqrt(np.maximum(size[kept], 0.0))).T  # whitened = root @ coefficients
    truth = root @ stakes.model
    nearest = {name: nearest_rival(root, stakes.model, stakes, name)[0] for name in stakes.rivals}
    best = min(nearest, key=lambda name: nearest[name]) if nearest else ""
    amplitude = _amplitudes(stakes)
    # The symmetric root keeps the random numbers attached to the same curves whatever the layout.
    data = truth[:, None] * amplitude + vectors[:, kept].T @ stakes.deviates
    impact = _log_likelihood(root @ stakes.impacts, data)
    others = [_log_mean(_log_likelihood(root @ bank, data)) for bank in stakes.rivals.values()]
    others.append(-0.5 * np.sum(data**2, axis=0))
    odds = _log_mean(impact) - np.max(others, axis=0)
    weights = special.softmax(impact, axis=1)
    return nearest.get(best, np.inf), best, odds, _widths(stakes.erosion, weights), 1.0 / np.sum(weights**2, axis=1)


def nearest_rival(root: Array, target: Array, stakes: Stakes, name: str) -> tuple[float, Array]:
    """Smallest whitened distance of a profile to one family of rivals, and that rival's coefficients.

    Every body of the family's bank may be stretched within its prior of the density contrast.
    """
    bank = stakes.rivals[name]
    white, aim = root @ bank, root @ target
    power = np.maximum(np.sum(white**2, axis=0), 1e-300)
    along = aim @ white
    low, high = stakes.stretch[name]
    multiple = np.clip(along / power, low, high)
    squared = aim @ aim - 2.0 * multiple * along + multiple**2 * power
    at = int(np.argmin(squared))
    return float(np.sqrt(max(float(squared[at]), 0.0))), multiple[at] * bank[:, at]


def _amplitudes(stakes: Stakes) -> Array:
    """Multiples of the model that its draws amount to, one per simulation, taken in turn."""
    count = stakes.deviates.shape[1]
    if stakes.draws.shape[1] == 0:
        return np.ones(count)
    factors = stakes.model @ stakes.draws / float(stakes.model @ stakes.model)
    return np.resize(factors, count)


def _log_likelihood(models: Array, data: Array) -> Array:
    """(n_simulation, n_model)."""
    cross = data.T @ models
    return np.asarray(cross - 0.5 * np.sum(models**2, axis=0) - 0.5 * np.sum(data**2, axis=0)[:, None])


def _log_mean(logs: Array) -> Array:
    return np.asarray(special.logsumexp(logs, axis=1) - np.log(logs.shape[1]))


def _widths(values: Array, weights: Array) -> Array:
    """Width of the central 90 % of weighted values, one per row of weights."""
    order = np.argsort(values)
    rising = np.cumsum(weights[:, order], axis=1)
    low, high = (np.argmax(rising >= share, axis=1) for share in (0.05, 0.95))
    return np.asarray(values[order][high] - values[order][low])
