"""The noise model against closed forms, random fields against the model, estimates against the truth."""

from __future__ import annotations

import itertools
import json
import math

import mpmath
import numpy as np
import pytest
import xarray as xr
from scipy import integrate, special, stats

from gravbasin.errors import CannotFinish, GravbasinError, InputError
from gravbasin.labels import read_provenance
from gravbasin.observed import NoiseModel, check_noise, estimate_noise, simulate_noise
from gravbasin.observed._lattice import lattice_of, thin
from gravbasin.observed.noise import matern_correlation

EASTING = 5_000.0 * np.arange(60)
NORTHING = 1e6 + 5_000.0 * np.arange(50)
TRUTH = NoiseModel(sill_mgal=9.0, range_m=35e3, smoothness=0.8, nugget_mgal=0.8)


# --- the model -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("smoothness", "closed"),
    [
        (0.5, lambda x: np.exp(-x)),
        (1.5, lambda x: (1 + x) * np.exp(-x)),
        (2.5, lambda x: (1 + x + x**2 / 3) * np.exp(-x)),
    ],
)
def test_half_integer_smoothness_has_its_closed_form(smoothness: float, closed: object) -> None:
    distance = np.array([0.0, 1e-9, 10.0, 3e3, 4e4, 3e5, 1e9])
    x = math.sqrt(2 * smoothness) * distance / 30e3
    found = matern_correlation(distance, range_m=30e3, smoothness=smoothness)
    np.testing.assert_allclose(found, closed(x), rtol=1e-12, atol=1e-300)


def test_correlation_agrees_with_mpmath() -> None:
    for smoothness in (0.3, 0.77, 1.0, 2.2):
        for distance in (1.0, 2e3, 5e4, 4e5):
            x = mpmath.sqrt(2 * smoothness) * distance / 30e3
            exact = 2 ** (1 - mpmath.mpf(smoothness)) / mpmath.gamma(smoothness) * x**smoothness
            exact *= mpmath.besselk(smoothness, x)
            found = matern_correlation(distance, range_m=30e3, smoothness=smoothness)
            assert float(found) == pytest.approx(float(exact), rel=1e-11)


@pytest.mark.parametrize("smoothness", [0.3, 1.0, 2.5])
def test_large_arrays_are_interpolated_to_1e_9(smoothness: float) -> None:
    distance = np.concatenate([[0.0], np.random.default_rng(1).uniform(0.0, 6e5, 20_000), np.geomspace(50.0, 1e6, 500)])
    table = matern_correlation(distance, range_m=30e3, smoothness=smoothness)
    exact = np.concatenate(
        [matern_correlation(part, range_m=30e3, smoothness=smoothness) for part in np.array_split(distance, 20)]
    )
    assert np.abs(table - exact).max() < 2e-9


def test_half_correlation_distances() -> None:
    # 0.693, 1.678 and 2.330 times the scale a = L/√(2ν) of Matérn 1/2, 3/2, 5/2 (ln 2, and own root finding)
    for smoothness, distance in ((0.5, 0.693), (1.5, 1.678), (2.5, 2.330)):
        scale = 20e3 / math.sqrt(2 * smoothness)
        value = matern_correlation(distance * scale, range_m=20e3, smoothness=smoothness)
        assert float(value) == pytest.approx(0.5, abs=3e-4)


@pytest.mark.parametrize("smoothness", [0.5, 0.9, 2.0])
def test_spectrum_transforms_to_the_covariance(smoothness: float) -> None:
    noise = NoiseModel(sill_mgal=7.0, range_m=30e3, smoothness=smoothness)
    variance = integrate.quad(lambda u: float(noise.spectrum(u / 30e3)) * u / (2 * np.pi * 30e3**2), 0, np.inf)[0]
    assert variance == pytest.approx(49.0, rel=1e-6)
    # Hankel transform at one distance, lobe by lobe; averaging the last two sums takes the alternating tail off
    edges = np.concatenate([[0.0], special.jn_zeros(0, 400) / 25e3])
    pieces = [
        integrate.fixed_quad(lambda k: noise.spectrum(k) * special.j0(25e3 * k) * k / (2 * np.pi), a, b, n=20)[0]
        for a, b in itertools.pairwise(edges)
    ]
    sums = np.cumsum(pieces)
    assert 0.5 * (sums[-1] + sums[-2]) == pytest.approx(float(noise.covariance(25e3)), rel=2e-5)


def test_verdict_keys_and_draws_of_a_given_model() -> None:
    assert TRUTH.as_dict() == {
        "model": "matern",
        "sill_mgal": 9.0,
        "range_km": 35.0,
        "smoothness": 0.8,
        "nugget_mgal": 0.8,
        "regional_order": 1,
    }
    draws = TRUTH.draws(np.random.default_rng(3), 4000)
    logs = np.log([draw.sill_mgal / 9.0 for draw in draws])
    assert abs(logs.std() - 0.15) < 4 * 0.15 / math.sqrt(8000)  # four standard errors: fails once in 16,000 seeds
    assert {(draw.range_m, draw.smoothness) for draw in draws} == {(35e3, 0.8)}
    np.testing.assert_allclose([draw.nugget_mgal / draw.sill_mgal for draw in draws], 0.8 / 9.0)


@pytest.mark.parametrize(
    ("field", "value"),
    [
        ("sill_mgal", 0.0),
        ("sill_mgal", math.nan),
        ("range_m", -1.0),
        ("smoothness", 0.0),
        ("smoothness", 21.0),
        ("nugget_mgal", -0.1),
        ("regional_order", 3),
        ("model", "spherical"),
    ],
)
def test_faulty_models_are_refused(field: str, value: object) -> None:
    good = {"sill_mgal": 9.0, "range_m": 35e3, "smoothness": 0.8, field: value}
    with pytest.raises(InputError, match=rf"noise\.{field} = "):
        NoiseModel(**good)


# --- random fields ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "noise",
    [
        TRUTH,
        NoiseModel(sill_mgal=5.0, range_m=20e3, smoothness=1.8),
        NoiseModel(sill_mgal=5.0, range_m=90e3, smoothness=0.4, nugget_mgal=3.0),
    ],
)
def test_fields_have_the_covariance_of_the_model(noise: NoiseModel) -> None:
    """Products at fixed pairs over independent fields; 15 pairs, each within 4 standard errors: fails 1 in 1,000."""
    n = 3000
    fields = simulate_noise(noise, 4_000.0 * np.arange(30), 7_000.0 * np.arange(18), seed=11, n=n).values
    first = fields[:, 2, 3]
    for j, i in [(2, 3), (2, 4), (3, 3), (17, 29), (9, 20)]:
        second = fields[:, j, i]
        distance = math.hypot(7_000.0 * (j - 2), 4_000.0 * (i - 3))
        expected = float(noise.covariance(distance)) + (noise.nugget_mgal**2 if distance == 0 else 0.0)
        total = noise.sill_mgal**2 + noise.nugget_mgal**2
        standard_error = math.sqrt((total**2 + expected**2) / n)  # of a mean product of Gaussian pairs
        assert abs(np.mean(first * second) - expected) < 4 * standard_error, (j, i)
    assert abs(fields.mean()) < 4 * fields.mean(axis=(1, 2)).std() / math.sqrt(n)


def test_fields_are_gaussian_independent_and_repeatable() -> None:
    fields = simulate_noise(TRUTH, EASTING, NORTHING, seed=5, n=4)
    one = simulate_noise(TRUTH, EASTING, NORTHING, seed=5)
    assert fields.dims == ("draw", "northing", "easting")
    assert one.dims == ("northing", "easting")
    np.testing.assert_array_equal(fields.values[0], one.values)
    assert read_provenance(one)["seed"] == 5
    many = simulate_noise(TRUTH, EASTING[:20], NORTHING[:16], seed=6, n=600).values[:, 8, 9]
    assert stats.kstest(many / math.hypot(9.0, 0.8), "norm").pvalue > 1e-3  # fails for 1 seed in 1,000
    assert abs(np.corrcoef(many[::2], many[1::2])[0, 1]) < 4 / math.sqrt(300)  # the two halves of one transform


def test_an_embedding_that_cannot_be_positive_is_refused() -> None:
    endless = NoiseModel(sill_mgal=9.0, range_m=1e8, smoothness=1.5)
    with pytest.raises(CannotFinish, match="no positive circulant embedding"):
        simulate_noise(endless, 5_000.0 * np.arange(300), 5_000.0 * np.arange(300))


@pytest.mark.parametrize(
    ("easting", "message"),
    [
        (EASTING[::-1], "must ascend"),
        (np.array([0.0, 1.0, 3.0]), "evenly spaced"),
        (np.array([1.0]), "at least 2"),
    ],
)
def test_faulty_axes_are_refused(easting: np.ndarray, message: str) -> None:
    with pytest.raises(InputError, match=message):
        simulate_noise(TRUTH, easting, NORTHING)


# --- estimates -------------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def field() -> xr.DataArray:
    plane = 30.0 + 2e-4 * EASTING - 1e-4 * (NORTHING[:, None] - 1e6)
    return simulate_noise(TRUTH, EASTING, NORTHING, seed=21) + plane


@pytest.fixture(scope="module")
def estimate(field: xr.DataArray) -> NoiseModel:
    return estimate_noise(field, max_points=300)


def test_posterior_intervals_hold_the_truth() -> None:
    """Truths from the prior, so ranks of the truth in the posterior are uniform.

    Over 200 maps 90 % intervals held the truth in 92, 88, 93 and 86 % (sill, range, smoothness, nugget). Here 12 maps:
    each of the four counts is below 8 of 12 with probability 0.4 %, so one seed in 60 would fail.
    """
    rng = np.random.default_rng(8)
    inside = np.zeros(4)
    for _ in range(12):
        range_m, smoothness = 40e3 * math.exp(0.7 * rng.standard_normal()), rng.uniform(0.5, 2.0)
        nugget = math.exp(1.5 * rng.standard_normal())
        truth = NoiseModel(sill_mgal=10.0, range_m=range_m, smoothness=smoothness, nugget_mgal=nugget)
        noise = estimate_noise(simulate_noise(truth, EASTING, NORTHING, seed=rng), max_points=150, seed=rng)
        logs = np.log([10.0, range_m, smoothness, nugget])
        low, high = np.quantile(noise.posterior, [0.05, 0.95], axis=0)
        inside += (low <= logs) & (logs <= high)
    assert inside.min() >= 8


def test_an_estimate_ignores_its_regional_and_the_order_of_magnitude(field: xr.DataArray, estimate: NoiseModel) -> None:
    steep = field + (100.0 - 3e-3 * EASTING + 1e-3 * NORTHING[:, None])
    same = estimate_noise(steep, max_points=300)
    assert same.sill_mgal == pytest.approx(estimate.sill_mgal, rel=1e-6)
    assert same.range_m == pytest.approx(estimate.range_m, rel=1e-6)
    tenfold = estimate_noise(10.0 * field, max_points=300)
    assert tenfold.sill_mgal == pytest.approx(10.0 * estimate.sill_mgal, rel=1e-6)
    assert tenfold.nugget_mgal == pytest.approx(10.0 * estimate.nugget_mgal, rel=1e-6)


def test_an_estimate_is_repeatable_and_carries_its_errors(field: xr.DataArray, estimate: NoiseModel) -> None:
    assert estimate_noise(field, max_points=300) == estimate
    assert estimate.n_points == 300
    assert estimate.resolution_m == 10_000.0
    assert set(estimate.relative_errors) == {"sill", "range", "smoothness", "nugget"}
    plain = json.loads(json.dumps(estimate.as_dict()))
    assert plain["range_km"] == pytest.approx(estimate.range_m / 1e3)
    draws = estimate.draws(np.random.default_rng(0), 200)
    spread = np.std([math.log(draw.smoothness) for draw in draws])
    assert spread == pytest.approx(estimate.relative_errors["smoothness"], rel=0.2)
    assert all(0.3 <= draw.smoothness <= 2.5 for draw in draws)
    assert np.std([math.log(draw.sill_mgal) for draw in draws]) > 0.03


def test_the_excluded_disc_is_not_seen(field: xr.DataArray) -> None:
    disc = (120e3, 1.1e6, 50e3)
    inside = np.hypot(field.easting - disc[0], field.northing - disc[1]) <= disc[2]
    changed = field.where(~inside, 500.0)
    kwargs = {"exclude": disc, "max_points": 200}
    assert estimate_noise(changed, **kwargs) == estimate_noise(field, **kwargs)
    assert estimate_noise(field.where(~inside), max_points=200) == estimate_noise(field, **kwargs)


def test_thinned_nodes_keep_their_distance_and_include_close_pairs(field: xr.DataArray) -> None:
    lattice = lattice_of(field, where="test")
    nodes = thin(lattice, lattice.valid(), separation_m=9_000.0, max_points=200, rng=np.random.default_rng(1))
    assert nodes.values.size == 200
    away = np.hypot(nodes.easting[:, None] - nodes.easting, nodes.northing[:, None] - nodes.northing)
    away[np.diag_indices(200)] = np.inf
    nearest = away.min(axis=1)
    assert nearest.min() == 10_000.0  # two steps of 5 km: the first multiple that reaches 9 km
    assert (nearest == 10_000.0).mean() > 0.5
    assert np.ptp(nodes.easting) > 0.9 * np.ptp(EASTING)
    place = field.sel(easting=xr.DataArray(nodes.easting), northing=xr.DataArray(nodes.northing))
    np.testing.assert_array_equal(place, nodes.values)


@pytest.mark.parametrize(
    ("kwargs", "message"),
    [
        ({"exclude": (150e3, 1.1e6, 0.0)}, "radius > 0"),
        ({"exclude": (150e3, 1.12e6, 170e3)}, "of which an estimate needs 80"),
        ({"resolution_m": -1.0}, "resolution_m"),
        ({"max_points": 20}, "must be 80 or more"),
        ({"regional_order": 3}, "must be 0, 1 or 2"),
    ],
)
def test_faulty_requests_are_refused(field: xr.DataArray, kwargs: dict, message: str) -> None:
    with pytest.raises(InputError, match=message):
        estimate_noise(field, **kwargs)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda f: f.values, "must be an xarray DataArray"),
        (lambda f: f.transpose(), "observed.dims"),
        (lambda f: f.sortby("northing", ascending=False), "must ascend"),
        (lambda f: f.assign_attrs(units="m s-2"), "must be mGal"),
        (lambda f: f.isel(easting=[0, 1, 3, 4]), "evenly spaced"),
        (lambda f: f * 0.0, "must vary"),
        (lambda f: f / 0.0, "must be finite or NaN"),
    ],
)
def test_faulty_maps_are_refused(field: xr.DataArray, change: object, message: str) -> None:
    with np.errstate(divide="ignore"), pytest.raises(GravbasinError, match=message):
        estimate_noise(change(field))


# --- the check -------------------------------------------------------------------------------------------------------


def test_the_check_has_mean_variance_and_p_value_of_theory_when_the_model_holds() -> None:
    """Forty fields: mean ratio within 4 standard errors, scatter within 40 %, p-values uniform at the 1e-3 level."""
    fields = simulate_noise(TRUTH, EASTING[:40], NORTHING[:36], seed=31, n=40)
    checks = [check_noise(fields[i], TRUTH, blocks=4, max_points=200) for i in range(40)]
    ratios = np.array([check.ratio for check in checks])
    expected = checks[0].standard_error
    assert abs(ratios.mean() - 1.0) < 4 * expected / math.sqrt(40)
    assert ratios.std() == pytest.approx(expected, rel=0.4)
    assert stats.kstest([check.p_value for check in checks], "uniform").pvalue > 1e-3


def test_block_errors_are_those_of_leaving_the_block_out_and_refitting(field: xr.DataArray) -> None:
    """One block predicted the long way, by kriging from the rest with a fitted plane, as a cross-check."""
    small = field.isel(easting=slice(0, 24), northing=slice(0, 22))
    check = check_noise(small, TRUTH, blocks=2, max_points=500)
    lattice = lattice_of(small, where="test")
    nodes = thin(lattice, lattice.valid(), separation_m=1e4, max_points=500, rng=np.random.default_rng(1))
    position = np.column_stack([nodes.easting, nodes.northing])
    away = np.hypot(*(position[:, None] - position).transpose(2, 0, 1))
    covariance = TRUTH.covariance(away) + 0.64 * np.eye(len(position))
    design = np.column_stack([np.ones(len(position)), (position - position.mean(axis=0)) / 1e5])
    half = (position - position.min(axis=0)) / np.ptp(position, axis=0) >= 0.5
    total = 0.0
    for east in (False, True):
        for north in (False, True):
            out = (half == (east, north)).all(axis=1)
            inverse = np.linalg.inv(covariance[np.ix_(~out, ~out)])
            spread = np.linalg.inv(design[~out].T @ inverse @ design[~out])
            beta = spread @ design[~out].T @ inverse @ nodes.values[~out]
            carry = covariance[np.ix_(out, ~out)] @ inverse
            error = nodes.values[out] - design[out] @ beta - carry @ (nodes.values[~out] - design[~out] @ beta)
            drift = design[out] - carry @ design[~out]
            variance = covariance[np.ix_(out, out)] - carry @ covariance[np.ix_(~out, out)] + drift @ spread @ drift.T
            total += error @ np.linalg.solve(variance, error)
    assert check.n_blocks == 4
    assert check.ratio == pytest.approx(total / len(position), rel=1e-8)


@pytest.mark.parametrize(
    "wrong",
    [
        NoiseModel(
            sill_mgal=9.0, range_m=35e3, smoothness=2.5, nugget_mgal=0.1
        ),  # too smooth: the fault that fakes signal
        NoiseModel(sill_mgal=5.0, range_m=35e3, smoothness=0.8, nugget_mgal=0.4),
        NoiseModel(sill_mgal=20.0, range_m=35e3, smoothness=0.8, nugget_mgal=0.8),
    ],
)
def test_the_check_finds_a_wrong_model(field: xr.DataArray, estimate: NoiseModel, wrong: NoiseModel) -> None:
    assert check_noise(field, wrong).p_value < 1e-4
    assert check_noise(field, estimate).p_value > 1e-3
