"""Next best stations: which single place adds most to those there are, exactly, by rank-one updates."""

from __future__ import annotations

import dataclasses

import numpy as np
from numpy.typing import NDArray
from scipy import linalg
from threadpoolctl import threadpool_limits

from gravbasin.errors import CannotFinish
from gravbasin.observed import NoiseModel, polynomial_basis
from gravbasin.survey.merit import Stakes, nearest_rival
from gravbasin.survey.sight import MOST_STATIONS, Lags, Stations

__all__ = ["Ranking", "next_best"]

Array = NDArray[np.float64]

REGIONAL_MGAL = 1000.0
"""Prior scale of the regional's coefficients: so wide that they are free as soon as stations can tell them."""

AIM_AGAIN = 10
"""Stations after which the nearest rival is looked for anew."""


@dataclasses.dataclass(frozen=True, eq=False)
class Ranking:
    """Places in the order in which they add most.

    Attributes
    ----------
    chosen : (count,) array of int
        Candidates, best first.
    gain : (count,) array
        What each adds to the squared distance that was aimed for: of the model to nothing (detection) or to the
        nearest rival (telling apart), with the scatter of shape counted as noise.
    snr : (1 + count,) array
        Signal-to-noise ratio before any and after each, the scatter of shape counted as noise: it never falls.
    rival_distance : (1 + count,) array
        Distance to the nearest rival, looked for anew every few stations; NaN without rivals.
    """

    chosen: NDArray[np.intp]
    gain: Array
    snr: Array
    rival_distance: Array


class _State:
    """Everything conditional on the stations chosen so far.

    Attributes
    ----------
    residual : (n_candidate, n_mode + n_regional) array
        Curves and regional at the candidates less their prediction from the chosen stations.
    variance : (n_candidate,) array, mGal²
        What the chosen stations leave unknown of a reading there, its own error included.
    information : (n_mode + n_regional,)² array
        Of the coefficients, from the chosen stations.
    """

    def __init__(self, first: Stations, candidates: Stations, stakes: Stakes, noise: NoiseModel, count: int) -> None:
        self.noise, self.place = noise, candidates.place
        everywhere = np.concatenate([first.place, candidates.place])
        centre = 0.5 * (everywhere.min(axis=0) + everywhere.max(axis=0))
        scale = 0.5 * float(np.ptp(everywhere, axis=0).max()) or 1.0

        def columns(stations: Stations) -> Array:
            basis = polynomial_basis(
                stations.place[:, 0], stations.place[:, 1], noise.regional_order,
                centre=(float(centre[0]), float(centre[1])), scale=scale,
            )  # fmt: skip
            return np.concatenate([stakes.curves.at(stations.distance), basis], axis=1)

        self.modes = stakes.curves.shapes.shape[1]
        here, there = columns(first), columns(candidates)
        # Scatter of shape is one more part of the noise, correlated over the whole structure.
        self.loading = there[:, : self.modes] @ stakes.scatter
        own = noise.sill_mgal**2 + noise.nugget_mgal**2
        self.variance = own + candidates.error**2 + np.sum(self.loading**2, axis=1)
        self.residual = there
        size = there.shape[1]
        self.information = np.zeros((size, size))
        self.information[self.modes :, self.modes :] = np.eye(size - self.modes) / REGIONAL_MGAL**2
        self.rows = np.empty((len(first.place) + count, len(candidates.place)))
        self.used = len(first.place)
        if self.used:
            self._begin(first, here, here[:, : self.modes] @ stakes.scatter)

    def _begin(self, first: Stations, columns: Array, loading: Array) -> None:
        noise = self.noise
        matrix = Lags.between(first.place, first.place).covariance(noise) + loading @ loading.T
        own = noise.sill_mgal**2 + noise.nugget_mgal**2 + first.error**2 + np.sum(loading**2, axis=1)
        matrix[np.diag_indices(len(matrix))] = own
        try:
            factor = linalg.cholesky(matrix, lower=True, overwrite_a=True, check_finite=False)
        except linalg.LinAlgError:
            raise CannotFinish("the covariance of the existing stations is singular: give them some error") from None
        across = Lags.between(first.place, self.place).covariance(noise) + loading @ self.loading.T
        white = linalg.solve_triangular(factor, across, lower=True, check_finite=False)
        known = linalg.solve_triangular(factor, columns, lower=True, check_finite=False)
        self.rows[: self.used] = white
        self.variance = self.variance - np.sum(white**2, axis=0)
        self.residual = self.residual - white.T @ known
        self.information = self.information + known.T @ known

    def gains(self, aim: Array) -> Array:
        """What one reading at each candidate adds to aim' G aim, the regional free, (n_candidate,)."""
        split = self.modes
        regional = self.information[split:, split:]
        offset = np.linalg.solve(regional, self.information[split:, :split] @ aim)
        free = self.residual[:, split:]
        left = self.residual[:, :split] @ aim - free @ offset
        spread = np.sum(free * np.linalg.solve(regional, free.T).T, axis=1)
        return np.asarray(left**2 / (self.variance + spread))

    def add(self, station: int) -> None:
        """Condition on one more reading: O(candidates × stations)."""
        away = np.hypot(*(self.place - self.place[station]).T)
        row = self.noise.covariance(away) + self.loading @ self.loading[station]
        row -= self.rows[: self.used, station] @ self.rows[: self.used]
        root = np.sqrt(self.variance[station])
        row /= root
        known = self.residual[station] / root
        self.rows[self.used] = row
        self.used += 1
        self.variance = self.variance - row**2
        self.residual = self.residual - np.outer(row, known)
        self.information = self.information + np.outer(known, known)

    def gram(self) -> Array:
        """G with the scatter of shape as noise and the regional free, (n_mode, n_mode)."""
        split = self.modes
        across = self.information[:split, split:]
        regional = self.information[split:, split:]
        return np.asarray(self.information[:split, :split] - across @ np.linalg.solve(regional, across.T))


def next_best(
    first: Stations, candidates: Stations, stakes: Stakes, noise: NoiseModel, *, count: int, tell_apart: bool = False
) -> Ranking:
    """Rank candidate places by what each adds to the stations chosen before it.

    Parameters
    ----------
    first : Stations
        Read already; may be none.
    candidates : Stations
        Where further ones may stand; each is taken once.
    stakes : Stakes
        What they shall tell.
    noise : NoiseModel
        The best one; its nugget adds to the stations' own errors.
    count : int
        How many to rank.
    tell_apart : bool
        Aim for the distance to the nearest rival instead of detection.

    Returns
    -------
    Ranking

    Raises
    ------
    CannotFinish
        More than 4000 stations to begin with.

    Notes
    -----
    Adding station s raises t'Mt by [t_s − c_s'C⁻¹t]² / (kriging variance_s + error²), all with the regional projected
    out. Each choice is the best single one; a set chosen one by one need not be the best set.
    """
    if len(first.place) > MOST_STATIONS:
        raise CannotFinish(f"{len(first.place)} existing stations are more than {MOST_STATIONS}; thin them first")
    with threadpool_limits(1):  # small matrices: waiting threads would cost more than they give
        return _ranked(first, candidates, stakes, noise, count, tell_apart)


def _ranked(
    first: Stations, candidates: Stations, stakes: Stakes, noise: NoiseModel, count: int, tell_apart: bool
) -> Ranking:
    count = min(count, len(candidates.place))
    state = _State(first, candidates, stakes, noise, count)
    tell_apart = tell_apart and bool(stakes.rivals)
    chosen: list[int] = []
    gain, snr, distance = [], [_snr(state, stakes)], [np.nan]
    aim, distance[0] = _aim(state, stakes, tell_apart)
    taken = np.zeros(len(candidates.place), dtype=bool)
    for number in range(count):
        if number and number % AIM_AGAIN == 0:
            aim, _ = _aim(state, stakes, tell_apart)
        gains = np.where(taken, -1.0, state.gains(aim))
        best = int(np.argmax(gains))
        taken[best] = True
        chosen.append(best)
        gain.append(float(gains[best]))
        state.add(best)
        snr.append(_snr(state, stakes))
        distance.append(_aim(state, stakes, True)[1] if stakes.rivals else np.nan)
    return Ranking(np.array(chosen, dtype=np.intp), np.array(gain), np.array(snr), np.array(distance))


def _aim(state: _State, stakes: Stakes, tell_apart: bool) -> tuple[Array, float]:
    """What to aim for, and the distance to the nearest rival."""
    if not stakes.rivals:
        return stakes.model, float("nan")
    size, vectors = np.linalg.eigh(state.gram())
    root = (vectors * np.sqrt(np.maximum(size, 0.0))).T
    found = [nearest_rival(root, stakes.model, stakes, name) for name in stakes.rivals]
    distance, rival = min(found, key=lambda each: each[0])
    return (stakes.model - rival if tell_apart else stakes.model), distance


def _snr(state: _State, stakes: Stakes) -> float:
    return float(np.sqrt(max(float(stakes.model @ state.gram() @ stakes.model), 0.0)))
