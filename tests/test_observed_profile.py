"""Ring means against symmetry and closed forms; their covariance against dense algebra, theory and simulation."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
import xarray as xr
from scipy import integrate, sparse

from gravbasin.discs import ring_fractions
from gravbasin.errors import InputError
from gravbasin.labels import data_array, read_provenance
from gravbasin.observed import (
    NoiseModel,
    fit_regional,
    polynomial_basis,
    radial_profile,
    ring_covariance,
    ring_edges,
    ring_means,
    ring_radii,
    simulate_noise,
    stencil_axes,
)

NOISE = NoiseModel(sill_mgal=9.0, range_m=30e3, smoothness=0.6, nugget_mgal=1.5)
EASTING = 4_000.0 * np.arange(46)
NORTHING = -70_000.0 + 5_000.0 * np.arange(31)
CENTRE = (EASTING[20], NORTHING[15])
EDGES = np.array([0.0, 6e3, 13e3, 21e3, 30e3, 45e3, 62e3])


def _map(values: np.ndarray) -> xr.DataArray:
    return data_array(
        values,
        ("northing", "easting"),
        {"northing": NORTHING, "easting": EASTING},
        name="anomaly",
        units="mGal",
        long_name="test map",
    )


def _distance(centre: tuple[float, float] = CENTRE) -> np.ndarray:
    return np.hypot(EASTING - centre[0], (NORTHING - centre[1])[:, None])


# --- means -----------------------------------------------------------------------------------------------------------


def test_complete_rings_of_a_plane_give_the_centre_value() -> None:
    plane = 7.0 + 3e-4 * (EASTING - CENTRE[0]) - 2e-4 * (NORTHING - CENTRE[1])[:, None]
    rings = ring_means(_map(plane), CENTRE, EDGES)
    np.testing.assert_allclose(rings.mean, 7.0, rtol=1e-12)
    np.testing.assert_allclose(rings.coverage, 1.0, rtol=1e-12)
    np.testing.assert_allclose(rings.area_m2, math.pi * np.diff(EDGES**2), rtol=1e-12)
    np.testing.assert_allclose(rings.weights.sum(axis=1), 1.0, rtol=1e-12)


def test_a_cone_is_met_at_the_ring_radius_and_better_on_finer_grids() -> None:
    moment = [integrate.quad(lambda r: 2 * r**2, a, b)[0] / (b**2 - a**2) for a, b in itertools.pairwise(EDGES)]
    np.testing.assert_allclose(ring_radii(EDGES), moment)
    errors = []
    for step in (4_000.0, 2_000.0, 1_000.0):
        axis = step * np.arange(-round(64e3 / step), round(64e3 / step) + 1)
        cone = data_array(
            np.hypot(axis, axis[:, None]) / 1e3,
            ("northing", "easting"),
            {"northing": axis, "easting": axis},
            name="cone",
            units="mGal",
            long_name="cone",
        )
        errors.append(np.abs(ring_means(cone, (0.0, 0.0), EDGES).mean - ring_radii(EDGES) / 1e3).max())
    assert errors[0] < 0.35  # km of 3 and more: the innermost ring is three cells wide
    assert errors[2] < errors[1] < errors[0]
    assert errors[2] < 0.3 * errors[0]


def test_missing_cells_have_no_weight_and_lower_the_coverage() -> None:
    values = np.full((31, 46), 5.0)
    values[:, :20] = np.nan  # all west of the centre's column
    rings = ring_means(_map(values), CENTRE, EDGES)
    np.testing.assert_allclose(rings.mean, 5.0, rtol=1e-12)
    column = 2e3 / (math.pi * EDGES[-1] ** 2)
    assert 0.5 < rings.coverage[-1] < 0.5 + 2 * column * (EDGES[-1] - EDGES[-2]) * 60
    assert rings.coverage[0] == pytest.approx(0.5 + _strip(6e3, 2e3) / (math.pi * 6e3**2), rel=1e-9)
    values[:] = np.nan
    values[0, 0] = 1.0
    sparse_map = ring_means(_map(values), (EASTING[0], NORTHING[0]), EDGES)
    assert np.isnan(sparse_map.mean[-1])
    assert sparse_map.coverage[-1] == 0.0


def _strip(radius: float, width: float) -> float:
    """Area of a disc within 0 < x < width."""
    return width * math.sqrt(radius**2 - width**2) + radius**2 * math.asin(width / radius)


def test_edges_reach_the_largest_circle_inside_the_map() -> None:
    edges = ring_edges(_map(np.zeros((31, 46))), CENTRE)
    assert edges[1] == 5e3
    room = min(CENTRE[0] + 2e3, EASTING[-1] + 2e3 - CENTRE[0], NORTHING[-1] + 2.5e3 - CENTRE[1])
    assert room - 5e3 < edges[-1] <= room
    np.testing.assert_allclose(
        ring_edges(_map(np.zeros((31, 46))), CENTRE, width_m=2e3, radius_m=20e3), np.arange(0, 20.1e3, 2e3)
    )


@pytest.mark.parametrize(
    ("centre", "edges", "message"),
    [
        ((-1e6, 0.0), None, "must lie inside the map, easting 0 to 180000"),
        ((EASTING[1], NORTHING[1]), None, "three needed|of three"),
        ((-1e6, 0.0), EDGES, "has no data within 62000 m"),
        (CENTRE, EDGES[::-1], "must ascend from 0 or more"),
        (CENTRE, [-1.0, 2.0], "must ascend from 0 or more"),
    ],
)
def test_faulty_requests_are_refused(centre: tuple[float, float], edges: object, message: str) -> None:
    with pytest.raises(InputError, match=message):
        radial_profile(_map(_distance()), centre=centre, edges_m=edges, noise=NOISE)


# --- covariance ------------------------------------------------------------------------------------------------------


def test_covariance_equals_dense_algebra_with_gaps_off_centre() -> None:
    values = np.random.default_rng(3).normal(size=(31, 46))
    values[4:9, 12:30] = np.nan
    rings = ring_means(_map(values), (61e3, 12e3), EDGES)
    x, y = (a.ravel() for a in np.meshgrid(EASTING, NORTHING))
    dense = NOISE.covariance(np.hypot(x[:, None] - x, y[:, None] - y)) + NOISE.nugget_mgal**2 * np.eye(x.size)
    weights = rings.weights.toarray()
    np.testing.assert_allclose(rings.covariance(NOISE), weights @ dense @ weights.T, rtol=1e-7, atol=1e-9)


def test_a_constant_field_and_white_noise_are_the_limits() -> None:
    rings = ring_means(_map(_distance()), CENTRE, EDGES)
    common = NoiseModel(sill_mgal=4.0, range_m=1e10, smoothness=0.5)
    np.testing.assert_allclose(rings.covariance(common), 16.0, rtol=1e-4)
    white = NoiseModel(sill_mgal=4.0, range_m=1.0, smoothness=0.5, nugget_mgal=3.0)
    independent = 25.0 * (rings.weights @ rings.weights.T).toarray()
    np.testing.assert_allclose(rings.covariance(white), independent, rtol=1e-10, atol=1e-14)


def test_a_stencil_needs_no_map() -> None:
    spacing = (5_000.0, 4_000.0)
    easting, northing = stencil_axes(EDGES, spacing)
    share = ring_fractions(easting, northing, EDGES).T.tocsr()
    weights = sparse.csr_array(share.multiply(1.0 / share.sum(axis=1)[:, None]))
    np.testing.assert_allclose(share.sum(axis=1) * 2e7, math.pi * np.diff(EDGES**2), rtol=1e-12)
    found = ring_covariance(weights, NOISE, shape=(northing.size, easting.size), spacing_m=spacing)
    on_map = ring_means(_map(_distance()), CENTRE, EDGES).covariance(NOISE)
    np.testing.assert_allclose(found, on_map, rtol=1e-8)
    with pytest.raises(InputError, match="as many cells as the weights"):
        ring_covariance(weights, NOISE, shape=(3, 4), spacing_m=spacing)


def test_thin_rings_have_the_azimuthal_mean_of_the_covariance() -> None:
    """Continuum limit: C0(r, r') is the mean of C over the angle between the two points."""
    noise = NoiseModel(sill_mgal=9.0, range_m=60e3, smoothness=1.5)
    edges = np.array([29e3, 31e3, 49e3, 51e3])
    easting, northing = stencil_axes(edges, (1e3, 1e3))
    share = ring_fractions(easting, northing, edges).T.tocsr()
    weights = sparse.csr_array(share.multiply(1.0 / share.sum(axis=1)[:, None]))
    found = ring_covariance(weights, noise, shape=(northing.size, easting.size), spacing_m=(1e3, 1e3))
    for i, a in ((0, 30e3), (2, 50e3)):
        for j, b in ((0, 30e3), (2, 50e3)):
            expected = integrate.quad(
                lambda t, a=a, b=b: float(noise.covariance(abs(a - b * np.exp(1j * t)))) / math.pi,
                0.0,
                math.pi,
                limit=200,
            )[0]
            assert found[i, j] == pytest.approx(expected, rel=2e-3)


def test_standard_errors_are_those_of_simulated_maps() -> None:
    """3000 maps: every ring's scatter within 4 of its standard errors (1.3 % each); fails for one seed in 2,000."""
    n = 3000
    fields = simulate_noise(NOISE, EASTING, NORTHING, seed=7, n=n).values
    holed = fields[0].copy()
    holed[20:26, 25:40] = np.nan
    rings = ring_means(_map(holed), CENTRE, EDGES)
    sample = fields.reshape(n, -1) @ rings.weights.T.toarray()
    profile = radial_profile(_map(holed), centre=CENTRE, edges_m=EDGES, noise=NOISE)
    ratio = sample.std(axis=0) / profile.standard_error.values
    assert np.abs(ratio - 1.0).max() < 4 / math.sqrt(2 * n)
    expected = rings.covariance(NOISE)
    error = np.sqrt((np.outer(np.diag(expected), np.diag(expected)) + expected**2) / n)
    assert (np.abs(np.cov(sample.T) - expected) / error).max() < 4.5
    squares = rings.weights.multiply(rings.weights).sum(axis=1)
    naive = math.hypot(NOISE.sill_mgal, NOISE.nugget_mgal) * np.sqrt(squares)
    assert (profile.standard_error.values[2:] > 3 * naive[2:]).all()  # what treating cells as independent would claim


# --- profile and regional --------------------------------------------------------------------------------------------


def test_profile_is_labelled_and_estimates_the_noise_outside() -> None:
    field = simulate_noise(NOISE, 4_000.0 * np.arange(70), 5_000.0 * np.arange(60), seed=2)
    profile = radial_profile(field, centre=(140e3, 150e3))
    assert set(profile.data_vars) == {"mean", "standard_error", "coverage", "area"}
    assert profile["mean"].attrs["units"] == "mGal"
    assert profile.area.attrs["units"] == "m2"
    np.testing.assert_allclose(profile.radius, ring_radii(profile.radius_edges))
    facts = read_provenance(profile)
    east, north, radius = facts["noise_estimated_outside"]
    assert (east, north) == (140e3, 150e3)
    away = np.hypot(field.easting - east, field.northing - north)
    assert float((away > radius).mean()) > 0.45
    assert facts["noise"]["n_points"] > 100
    assert float(profile.coverage.min()) > 0.999


def test_regional_is_recovered_across_the_structure() -> None:
    """GLS coefficients of a quadratic surface: errors of 24 maps follow the stated standard error."""
    columns = polynomial_basis(*np.meshgrid(EASTING, NORTHING), 2)
    truth = (columns @ [3.0, 8.0, -5.0, 2.0, 4.0, -6.0]).reshape(31, 46)
    fields = simulate_noise(NOISE, EASTING, NORTHING, seed=9, n=24).values
    bump = np.where(_distance() < 20e3, 400.0, 0.0)
    exclude = (*CENTRE, 20e3)
    scores = []
    for field in fields:
        split = fit_regional(_map(field + truth + bump), NOISE, exclude=exclude, order=2)
        np.testing.assert_allclose(split.regional + split.residual, field + truth + bump, rtol=1e-12, atol=1e-12)
        away = (split.regional - truth) / split.regional_standard_error
        scores.append([float(away[15, 20]), float(away[0, 0]), float(away[30, 45])])
    spread = np.std(scores, axis=0)
    assert np.abs(spread - 1.0).max() < 4 / math.sqrt(48)  # four standard errors: one seed in 5,000 fails
    assert np.abs(np.mean(scores, axis=0)).max() < 4 / math.sqrt(24)


def test_without_noise_a_polynomial_is_fitted_exactly() -> None:
    plane = 3.0 + 1e-3 * EASTING - 2e-3 * NORTHING[:, None]
    split = fit_regional(_map(plane), NOISE)
    assert np.abs(split.residual).max() < 1e-8
    with pytest.raises(InputError, match="of which a regional needs 30"):
        fit_regional(_map(plane), NOISE, exclude=(*CENTRE, 1e6))
    with pytest.raises(InputError, match="must be 0, 1 or 2"):
        polynomial_basis(EASTING, EASTING, 4)
