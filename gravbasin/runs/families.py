"""Banks of the impact family and its rivals, and what the ring means say of each."""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from gravbasin.crater.rivals import rivals_of
from gravbasin.inference.bank import Bank, Family, ImpactFamily, build_bank
from gravbasin.inference.evidence import Posterior, evidence
from gravbasin.inference.level import Level
from gravbasin.inference.likelihood import RingLikelihood
from gravbasin.inference.refine import refined
from gravbasin.scenario import Scenario
from gravbasin.scenario_file import scenario_hash

__all__ = ["NOISE_ALONE", "compare_families", "impact_bank", "probabilities"]

Array = NDArray[np.float64]

NOISE_ALONE = "regional noise alone"

HOPELESS = 10.0
"""Log evidence behind the best family from which a rival is not worth refining: odds of 1 to 20,000."""


def impact_bank(scenario: Scenario, radius: Array) -> Bank:
    """Impact structures drawn from the scenario's prior."""
    return _bank(_Keyed(ImpactFamily(scenario), scenario_hash(scenario)), radius.tobytes(), *_effort(scenario), 4)


def compare_families(
    scenario: Scenario,
    bank: Bank,
    response: Array,
    likelihoods: Sequence[RingLikelihood],
    data: Array,
    level: Level,
) -> tuple[Posterior, ...]:
    """Posterior of the impact family, of every rival, and of regional noise alone, in that order.

    Parameters
    ----------
    bank : Bank
        Of the impact family, from `impact_bank`.
    response : (n_ring, n_radius) array
        From profiles to ring means.
    likelihoods : sequence of RingLikelihood
        Under plausible noise models.
    data : (n_ring,) array, mGal
        Observed ring means.
    level : Level
        Prior of the local noise level.
    """
    radius, (models, height, seed) = bank.radius, _effort(scenario)
    families: list[tuple[Family, Bank]] = [(ImpactFamily(scenario), bank)]
    for number, rival in enumerate(rivals_of(scenario)):
        key = _Keyed(rival, repr(rival))
        families.append((rival, _bank(key, radius.tobytes(), models, height, seed, 100 + number)))
    found = [evidence(likelihoods, response @ each.profiles.T, data, each, level) for _, each in families]
    nothing = Bank(NOISE_ALONE, {}, radius, np.zeros((1, radius.size)), np.zeros((1, 0)))
    found.append(evidence(likelihoods, np.zeros((data.size, 1)), data, nothing, level))
    best = max(p.log_evidence for p in found)
    rng = np.random.default_rng([scenario.seed, 5])
    for i, (family, _) in enumerate(families):
        # The impact family's intervals are reported, a rival's odds only matter while it is in the running.
        if i == 0 or found[i].log_evidence > best - HOPELESS:
            found[i] = refined(family, found[i], response, likelihoods, data, level, height=height, rng=rng)
    return tuple(found)


def probabilities(scenario: Scenario, posteriors: Sequence[Posterior]) -> Array:
    """Posterior probability of each family, from evidence and the scenario's prior odds (1 where none are given)."""
    odds = np.log([scenario.prior.odds.get(p.name, 1.0) for p in posteriors])
    log = np.array([p.log_evidence for p in posteriors]) + odds
    weight = np.exp(log - log.max())
    return np.asarray(weight / weight.sum())


def _effort(scenario: Scenario) -> tuple[int, float, int]:
    return scenario.prior.models, scenario.model.station_height_m, scenario.seed


class _Keyed:
    """A family that compares by a content key, so that its bank is built once in a process."""

    def __init__(self, family: Family, key: str) -> None:
        self.family, self.key = family, key

    def __hash__(self) -> int:
        return hash(self.key)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, _Keyed) and other.key == self.key


@lru_cache(maxsize=16)
def _bank(keyed: _Keyed, radius: bytes, models: int, height: float, seed: int, stream: int) -> Bank:
    rng = np.random.default_rng([seed, stream])
    return build_bank(keyed.family, np.frombuffer(radius), models=models, height=height, rng=rng)
