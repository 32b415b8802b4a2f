"""Is what the tool says true as often as it says: intervals, odds and false alarms on synthetic maps.

Slow proofs, outside the default run; a smaller one of each is in tests/test_inference_evidence.py and
tests/test_inference_chance.py. Run with:  python -m pytest tests/benchmarks/test_calibration.py -s
"""

import numpy as np
import pytest
from scipy import stats

from gravbasin.inference.bank import ImpactFamily, build_bank
from gravbasin.inference.chance import Stencil, chance_of, complete_nodes
from gravbasin.inference.evidence import evidence
from gravbasin.inference.harmonics import Harmonics
from gravbasin.inference.level import Level, fit_roughness
from gravbasin.inference.likelihood import ring_likelihood
from gravbasin.inference.odds import log_odds
from gravbasin.inference.refine import ENOUGH, refined
from gravbasin.observed import NoiseModel, simulate_noise
from gravbasin.runs.forward_run import profile_radii
from gravbasin.scenario import Scenario

MAPS = 400
STEP = 5000.0
SCENARIO = Scenario(crater={"rim_diameter_km": 45.0}, history={"erosion_km": 1.5})
NOISE = NoiseModel(sill_mgal=9.0, range_m=35e3, smoothness=0.9, nugget_mgal=0.7)
EDGES = STEP * np.arange(15.0)
RADIUS = profile_radii(45e3, 150e3)


@pytest.fixture(scope="module")
def bank():
    return build_bank(ImpactFamily(SCENARIO), RADIUS, models=4000, height=1.0, rng=np.random.default_rng(1))


@pytest.fixture(scope="module")
def stencil():
    return Stencil.build(EDGES, (STEP, STEP), NOISE, radius=RADIUS)


def test_intervals_cover_and_ranks_are_flat(bank, stencil):
    """400 maps: structure, noise model and local level all drawn; 90 % intervals must cover 85-95 %.

    One bank of 4,000 models serves all maps; strong signals are refined as in a run.
    """
    truth = build_bank(ImpactFamily(SCENARIO), RADIUS, models=MAPS, height=1.0, rng=np.random.default_rng(2))
    rng, level = np.random.default_rng(3), Level(1.0, 8.0)
    models = [NOISE, *NOISE.draws(rng, 8, level_scatter=0.2)]
    covariances = [Stencil.build(EDGES, (STEP, STEP), n, radius=RADIUS).covariance for n in models]
    regional = stencil.likelihood.regional
    likelihoods = [ring_likelihood(c, regional) for c in covariances]
    factors = [np.linalg.cholesky(c) for c in covariances]
    templates, true_rings = stencil.response @ bank.profiles.T, stencil.response @ truth.profiles.T
    names = ("rim_diameter_km", "erosion_km", "excess_mass_kg")
    inside = {n: np.zeros(MAPS, dtype=bool) for n in names}
    ranks = {n: np.zeros(MAPS) for n in names}
    sizes, refinements = [], 0
    for i in range(MAPS):
        roughness = np.sqrt(level.scale * level.dof / rng.chisquare(level.dof))
        noise = roughness * factors[rng.integers(len(models))] @ rng.standard_normal(EDGES.size - 1)
        data = true_rings[:, i] + noise + rng.normal(0, 50)
        found = evidence(likelihoods, templates, data, bank, level)
        if found.effective_size < ENOUGH:
            refinements += 1
            found = refined(
                ImpactFamily(SCENARIO), found, stencil.response, likelihoods, data, level, height=1.0, rng=rng
            )
        sizes.append(found.effective_size)
        for name in names:
            _, low, high = found.interval(name)
            value = truth.parameters[name][i]
            inside[name][i] = low <= value <= high
            ranks[name][i] = found.weights[found.bank.parameters[name] < value].sum()
    print(f"\neffective models: median {np.median(sizes):.0f}, least {np.min(sizes):.0f}; {refinements} refined")
    for name in names:
        counts = np.histogram(ranks[name], bins=10, range=(0, 1))[0]
        p = stats.chisquare(counts).pvalue
        print(f"{name:18s} 90 % intervals cover {100 * inside[name].mean():.1f} %, ranks {counts}, p = {p:.3f}")
        assert 0.85 <= inside[name].mean() <= 0.95
        assert p > 0.01


def _false_alarms(bank, fields, nominal):
    """Share of places on each field that the chance test calls at the nominal level, by the field's other places."""
    called, tried = 0, 0
    rng = np.random.default_rng(5)
    for field in fields:
        stencil = Stencil.build(EDGES, (STEP, STEP), NOISE, radius=RADIUS)
        rows, columns = complete_nodes(field, stencil.shape)
        data = stencil.ring_means(field.values, rows, columns)
        misfits = np.sum(stencil.likelihood.whiten(data) ** 2, axis=0)
        texture = Harmonics.build(EDGES, (STEP, STEP), NOISE).texture(field.values)[rows, columns]
        independent = rows.size * STEP**2 / (np.pi * 45e3**2)
        level = fit_roughness(misfits, stencil.likelihood.dof, texture, independent).at(texture)
        templates = stencil.response @ bank.profiles[:2000].T
        odds = log_odds(stencil.likelihood, templates, data, level)
        for i in rng.choice(rows.size, 20, replace=False):
            away = np.hypot(rows - rows[i], columns - columns[i]) * STEP > 45e3
            chance = chance_of(odds[i], odds[away], centres=5000, independent=20, seed=1, fields=np.zeros)
            called += chance.p_value < nominal
            tried += 1
    return called / tried, tried


AXIS_E, AXIS_N = STEP * np.arange(110), STEP * np.arange(100)


@pytest.mark.parametrize("kind", ["as modelled", "rougher", "smoother", "heavy tails", "fault edge", "second body"])
def test_false_alarms_at_one_per_cent(bank, kind):
    """60 fields of 550 × 500 km, 1,200 places: 0.5-2 % where the noise is as modelled, at most 3 % where it is not."""
    models = {"rougher": 0.5, "smoother": 1.6}
    noise = NoiseModel(
        sill_mgal=9.0, range_m=35e3, smoothness=models.get(kind, NOISE.smoothness), nugget_mgal=NOISE.nugget_mgal
    )
    fields = simulate_noise(noise, AXIS_E, AXIS_N, seed=6, n=60)
    rng = np.random.default_rng(7)
    if kind == "heavy tails":
        log_level = simulate_noise(
            NoiseModel(sill_mgal=0.5, range_m=120e3, smoothness=1.5), AXIS_E, AXIS_N, seed=8, n=60
        )
        fields = fields * np.exp(log_level.values)
    if kind == "fault edge":
        fields = fields + 15.0 * (AXIS_E[40] < AXIS_E) + 0.0 * fields
    if kind == "second body":
        for k in range(60):
            east, north = rng.choice(AXIS_E), rng.choice(AXIS_N)
            distance = np.hypot(AXIS_E - east, AXIS_N[:, None] - north)
            fields.values[k] += 30.0 * np.exp(-((distance / 18e3) ** 2))
    rate, tried = _false_alarms(bank, [fields[k] for k in range(60)], 0.01)
    print(f"\n{kind}: {100 * rate:.2f} % called at a nominal 1 % ({tried} places)")
    low, high = (0.005, 0.02) if kind == "as modelled" else (0.0, 0.03)
    assert low <= rate <= high


def test_receiver_operating_curve(bank, stencil):
    """Power against false alarms for structures drawn from the prior: the curve must lie above chance everywhere."""
    truth = build_bank(ImpactFamily(SCENARIO), RADIUS, models=500, height=1.0, rng=np.random.default_rng(12))
    rng, level = np.random.default_rng(13), Level(1.0, 8.0)
    factor = np.linalg.cholesky(stencil.covariance)

    def noise(n):
        scale = np.sqrt(level.scale * level.dof / rng.chisquare(level.dof, n))
        return scale * (factor @ rng.standard_normal((EDGES.size - 1, n)))

    templates = stencil.response @ bank.profiles[:4000].T
    null = log_odds(stencil.likelihood, templates, noise(4000), level)
    seen = log_odds(stencil.likelihood, templates, stencil.response @ truth.profiles.T + noise(500), level)
    print()
    for rate in (0.001, 0.01, 0.05, 0.2):
        power = np.mean(seen > np.quantile(null, 1 - rate))
        print(f"false alarms {100 * rate:5.1f} %: {100 * power:5.1f} % of structures found")
        assert power > rate
