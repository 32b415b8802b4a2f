"""Marks of shape: known bodies give the published signs, errors cover, and what cannot be measured says so."""

import numpy as np
import pytest
from scipy import stats

from gravbasin.forward.rings import ring_table
from gravbasin.inference.bank import Bank
from gravbasin.inference.chance import Stencil
from gravbasin.inference.contrasts import cleaning, derivatives, equal_draws, fieller
from gravbasin.inference.evidence import evidence
from gravbasin.inference.level import Level
from gravbasin.inference.likelihood import ring_likelihood
from gravbasin.inference.marks import DIP, FLOOR, HIGH, RING, STRENGTH, TELLS, shape_marks
from gravbasin.observed import NoiseModel, polynomial_basis, ring_radii
from gravbasin.observed.profile import RingMeans

RIM, DEEP = 20e3, 5e3
STEP = (1800.0, 2000.0)  # northing, easting: not square
EDGES = 2000.0 * np.arange(31.0)
RADIUS = np.linspace(0.0, 90e3, 241)
NOISE = NoiseModel(sill_mgal=2.0, range_m=30e3, smoothness=0.8, nugget_mgal=0.1)
SURE = Level(1.0, 1e6)


TABLE = ring_table(RADIUS, np.linspace(0.0, 30e3, 121), np.linspace(0.0, DEEP, 17))


def _body(widths, contrast=-150.0):
    """Anomaly of coaxial discs on top of each other down to DEEP; `widths` in m from depth in m, rings cut by area."""
    depth = 0.5 * (TABLE.depth_edges[1:] + TABLE.depth_edges[:-1])
    width = np.broadcast_to(widths(depth), depth.shape)[:, None]
    inner, outer = TABLE.radius_edges[:-1] ** 2, TABLE.radius_edges[1:] ** 2
    return TABLE.anomaly(contrast * np.clip((width**2 - inner) / (outer - inner), 0.0, 1.0))


def _frustum(flare):
    """Straight walls about the rim, `flare` metres wider per metre of depth."""
    return _body(lambda depth: RIM + flare * (depth - 0.5 * DEEP))


FRUSTA = {flare: _frustum(flare) for flare in (-1.5, -0.75, 0.0, 0.75, 1.5)}
BOWL = _body(lambda depth: RIM * np.sqrt(1.0 - depth / DEEP))
HIGH_MGAL = 6.0
HIGH_BODY = FRUSTA[-0.75] + HIGH_MGAL * np.exp(-((RADIUS / 4e3) ** 2))


@pytest.fixture(scope="module")
def stencil():
    return Stencil.build(EDGES, STEP, NOISE, radius=RADIUS)


def _bank(name, profile, spread=0.3):
    amplitude = np.linspace(1.0 - spread, 1.0 + spread, 21)
    return Bank(name, {}, RADIUS, np.outer(amplitude, profile), np.zeros(amplitude.size))


def _marks(
    stencil,
    data,
    impact,
    rival=None,
    *,
    likelihoods=None,
    level=SURE,
    rim=RIM,
    noise_alone=False,
    edges=EDGES,
    spacing=STEP,
):
    likelihoods = likelihoods or [stencil.likelihood]
    banks = [_bank("impact", impact)] + ([_bank("granite", rival)] if rival is not None else [])
    if noise_alone:
        banks.append(Bank("noise alone", {}, RADIUS, np.zeros((1, RADIUS.size)), np.zeros(1)))
    posteriors = [evidence(likelihoods, stencil.response @ b.profiles.T, data, b, level) for b in banks]
    rings = RingMeans(
        (0.0, 0.0),
        edges,
        ring_radii(edges),
        stencil.weights,
        data,
        np.ones(data.size),
        stencil.area * spacing[0] * spacing[1],
        stencil.shape,
        spacing,
    )
    found = shape_marks(rings, likelihoods, posteriors, stencil.response, rim_radius_m=rim, level=level)
    return {mark.name: mark for mark in found}


def _noise(stencil, count, seed):
    root = np.linalg.cholesky(stencil.covariance)
    return root @ np.random.default_rng(seed).standard_normal((root.shape[0], count))


# Known bodies


def test_the_wall_dip_criterion_parts_basins_from_granites(stencil):
    """Bott (1962): the bends' ratio is above one for inward, below one for outward dipping walls, and falls with flare;
    a vertical wall about a centre stays within a tenth of one."""
    ratio = {flare: _marks(stencil, stencil.response @ p + 40.0, p)[DIP].value for flare, p in FRUSTA.items()}
    values = [ratio[flare] for flare in sorted(ratio)]
    assert values == sorted(values, reverse=True)
    assert ratio[-1.5] > 1.4
    assert ratio[-0.75] > 1.15
    assert ratio[0.75] < 0.95
    assert ratio[1.5] < 0.75
    assert abs(ratio[0.0] - 1.0) < 0.1


@pytest.mark.parametrize(("width", "most"), [(3000.0, 0.16), (2000.0, 0.05)])
def test_where_the_wall_lies_between_two_rings_matters_little(width, most):
    """Vertical walls from 0.9 to 1.1 rim radii: the ratio's half range, the finer the rings the smaller."""
    edges = width * np.arange(60e3 // width + 1.0)
    fine = Stencil.build(edges, (width, width), NOISE, radius=RADIUS)
    found = []
    for wall in np.linspace(18e3, 22e3, 7):
        body = _body(lambda depth, wall=wall: wall)
        found.append(_marks(fine, fine.response @ body, body, edges=edges, spacing=(width, width))[DIP].value)
    assert 0.9 < np.mean(found) < 1.1
    assert 0.5 * np.ptp(found) < most


def test_walls_are_told_apart_even_where_the_family_has_the_wrong_ones(stencil):
    """Where noise is small the edge is looked for on the data: a wrong family does not turn the criterion round."""
    wide = [ring_likelihood(0.01 * stencil.covariance, stencil.likelihood.regional)]
    inward = _marks(stencil, stencil.response @ FRUSTA[-1.5], FRUSTA[0.75], likelihoods=wide)[DIP]
    outward = _marks(stencil, stencil.response @ FRUSTA[1.5], FRUSTA[-0.75], likelihoods=wide)[DIP]
    assert inward.value > 1.1 > 0.9 > outward.value


def test_a_positive_body_has_the_marks_of_its_negative(stencil):
    """Mirror: the sign changes the central high alone."""
    low = _marks(stencil, stencil.response @ HIGH_BODY, HIGH_BODY)
    high = _marks(stencil, -stencil.response @ HIGH_BODY, -HIGH_BODY)
    for name in (DIP, FLOOR, STRENGTH):
        assert high[name].value == pytest.approx(low[name].value, rel=1e-9)
        assert high[name].z == pytest.approx(low[name].z, rel=1e-9)


def test_a_flat_floor_a_bowl_and_a_raised_middle_are_in_order(stencil):
    """A thin paraboloid would give 1 and a thin disc 0; thickness and height blunt both."""
    flat, bowl, raised = (_marks(stencil, stencil.response @ p, p)[FLOOR].value for p in (FRUSTA[0.0], BOWL, HIGH_BODY))
    assert raised < 0.0 < flat < 0.25 < 0.6 < bowl < 1.2


def test_a_thin_sheet_gives_the_limits_of_the_floor_mark(stencil):
    """Analytic: 2 pi G times the thickness, so a paraboloid of any depth has exactly 1, a plateau exactly 0."""
    inside = np.clip(1.0 - (RADIUS / 25e3) ** 2, 0.0, None)
    plate = 1.0 / (1.0 + np.exp((RADIUS - 20e3) / 700.0))
    bowl, flat = (_marks(stencil, stencil.response @ (-20.0 * p), -20.0 * p)[FLOOR] for p in (inside, plate))
    assert bowl.value == pytest.approx((RIM / 25e3) ** 2, rel=0.02)
    assert flat.value == pytest.approx(0.0, abs=1e-3)


def test_the_gradient_ring_lies_where_the_wall_is(stencil):
    """Its radius follows the wall, and a thin sheet's steepest fall is its slope."""
    for wall in (16e3, 22e3):
        profile = _body(lambda depth, wall=wall: wall)
        ring = _marks(stencil, stencil.response @ profile, profile)[RING]
        assert ring.value == pytest.approx(wall / RIM, abs=0.05)
    slope = -np.interp(RADIUS, [0.0, 10e3, 30e3], [20.0, 20.0, 0.0])
    assert _marks(stencil, stencil.response @ slope, slope)[STRENGTH].value == pytest.approx(1.0, rel=0.02)


# Errors


def test_limits_cover_the_truth_as_often_as_they_say(stencil):
    """Nine of ten in 200 simulations of every mark: binomial 0.1 % to 99.9 % band, five marks: fails by chance in
    one seed of a hundred. The bends' radii move a little from fit to fit, so the truth is that of the same radii."""
    noise = _noise(stencil, 200, 11)
    signal = stencil.response @ HIGH_BODY
    truth = {name: mark.value for name, mark in _marks(stencil, signal, HIGH_BODY).items()}
    found = [_marks(stencil, signal + 30.0 + noise[:, i], HIGH_BODY) for i in range(noise.shape[1])]
    lowest, highest = stats.binom(200, 0.9).ppf([0.001, 0.999])
    for name in (DIP, HIGH, FLOOR, STRENGTH):
        covered = sum(f[name].low <= truth[name] <= f[name].high for f in found)
        assert lowest <= covered <= highest, name
        spread = np.std([f[name].value for f in found])
        assert np.median([f[name].standard_error for f in found]) == pytest.approx(spread, rel=0.25), name
    # The radius is the place of a maximum, with simulated limits on a lattice: at least what is promised.
    assert sum(f[RING].low <= truth[RING] <= f[RING].high for f in found) >= lowest


def test_errors_grow_with_the_local_roughness(stencil):
    """Noise three times the model's, a level that may be local: coverage stays within 5 % of nominal or above."""
    noise, signal = 3.0 * _noise(stencil, 100, 12), stencil.response @ HIGH_BODY
    truth = _marks(stencil, signal, HIGH_BODY)[HIGH].value
    loose = Level(1.0, 5.0)
    found = [_marks(stencil, signal + noise[:, i], HIGH_BODY, level=loose)[HIGH] for i in range(100)]
    covered = [f.low <= truth <= f.high for f in found if f.value is not None]
    assert len(covered) == 100
    assert np.mean(covered) > 0.8
    stiff = [_marks(stencil, signal + noise[:, i], HIGH_BODY)[HIGH] for i in range(100)]
    assert np.mean([f.low <= truth <= f.high for f in stiff]) < 0.6  # the same without a local level


def test_p_values_are_uniform_where_there_is_no_central_high(stencil):
    """Null: a profile that is flat in its inner half. Kolmogorov-Smirnov at 0.1 %."""
    plate = -20.0 / (1.0 + np.exp((RADIUS - 20e3) / 700.0))
    noise = _noise(stencil, 200, 13)
    p = [_marks(stencil, stencil.response @ plate + noise[:, i], plate)[HIGH].p_value for i in range(200)]
    assert stats.kstest(p, "uniform").pvalue > 1e-3


def test_a_regional_changes_no_mark(stencil):
    """Rings cut by the map's edge let a quadratic regional through; it is fitted jointly and must not show."""
    half_n, half_e = stencil.half
    east, north = np.meshgrid(STEP[1] * np.arange(-half_e, half_e + 1.0), STEP[0] * np.arange(-half_n, half_n + 1.0))
    basis = stencil.weights @ polynomial_basis(east, north, 2, centre=(7e3, -4e3), scale=6e4)
    likelihood = [ring_likelihood(stencil.covariance, basis)]
    signal = stencil.response @ HIGH_BODY + _noise(stencil, 1, 14)[:, 0]
    plain = _marks(stencil, signal, HIGH_BODY, FRUSTA[0.75], likelihoods=likelihood)
    tilted = _marks(
        stencil,
        signal + basis @ np.array([50.0, -9.0, 4.0, 12.0, 3.0, -20.0]),
        HIGH_BODY,
        FRUSTA[0.75],
        likelihoods=likelihood,
    )
    for name, mark in plain.items():
        assert tilted[name].value == pytest.approx(mark.value, rel=1e-6), name
        assert tilted[name].standard_error == pytest.approx(mark.standard_error, rel=1e-6), name


# Families, and what cannot be measured


def test_families_predict_their_own_marks(stencil):
    """The bank's range holds the mark of its own noise-free profile, and the sentence names who agrees."""
    sharp = [ring_likelihood(1e-3 * stencil.covariance, stencil.likelihood.regional)]
    marks = _marks(
        stencil, stencil.response @ FRUSTA[-1.5], FRUSTA[-1.5], FRUSTA[1.5], likelihoods=sharp, noise_alone=True
    )
    dip = marks[DIP]
    assert dip.expected_impact[1] - 1e-6 <= dip.value <= dip.expected_impact[2] + 1e-6
    assert dip.best_rival == "granite"
    assert dip.expected_best_rival[2] < 0.8 < dip.value
    assert dip.meaning.endswith("as expected of impact but not of granite")


def test_without_a_rival_with_a_body_only_the_impact_family_is_quoted(stencil):
    for mark in _marks(stencil, stencil.response @ BOWL, BOWL, noise_alone=True).values():
        assert mark.best_rival is mark.expected_best_rival is None
        assert mark.expected_impact is not None


def test_below_the_noise_nothing_is_measured(stencil):
    marks = _marks(stencil, _noise(stencil, 1, 15)[:, 0], 0.01 * BOWL)
    assert tuple(marks) == tuple(TELLS)
    for mark in marks.values():
        assert mark.value is mark.z is mark.standard_error is None
        assert mark.meaning.startswith("not measurable: the anomaly stands")


def test_noise_alone_seldom_shows_marks(stencil):
    """An anomaly of the right sign at two standard errors in 2.3 % of fields: at most 12 of 200 (one seed in 1,000)."""
    noise = _noise(stencil, 200, 16)
    shown = sum(_marks(stencil, noise[:, i], BOWL, level=SURE)[STRENGTH].value is not None for i in range(200))
    assert shown <= 12


def test_too_few_rings_are_named(stencil):
    marks = _marks(stencil, stencil.response @ BOWL, BOWL, rim=6e3)
    assert all("rings lie within the rim" in mark.meaning and mark.value is None for mark in marks.values())
    wide = _marks(stencil, stencil.response @ BOWL, BOWL, rim=50e3)
    assert all("rings end at 1.2 rim radii" in mark.meaning for mark in wide.values())
    five = _marks(stencil, stencil.response @ _body(lambda depth: 10e3), _body(lambda depth: 10e3), rim=10e3)
    assert five[DIP].value is None
    assert "6 needed" in five[DIP].meaning
    assert five[STRENGTH].value is not None


# Contrasts


def test_derivatives_are_exact_for_a_parabola():
    radius = ring_radii(1500.0 * np.arange(21.0))
    at = np.linspace(0.0, 25e3, 17)
    first, second = derivatives(radius, at, 4e3)
    profile = 7.0 - 3e-8 * radius**2
    np.testing.assert_allclose(first @ profile, -6e-8 * at, atol=1e-12)
    np.testing.assert_allclose(second @ profile, -6e-8, rtol=1e-6)


def test_cleaning_removes_every_regional_and_keeps_the_templates(stencil):
    rng = np.random.default_rng(17)
    regional = np.column_stack([np.ones(30), np.linspace(0.0, 1.0, 30) ** 2])
    likelihood = ring_likelihood(stencil.covariance, regional)
    templates = stencil.response @ np.stack([BOWL, FRUSTA[0.0]], axis=1)
    clean = cleaning(likelihood, templates)
    np.testing.assert_allclose(clean @ regional, 0.0, atol=1e-7)
    np.testing.assert_allclose(clean @ templates, templates, atol=1e-7)
    data = rng.standard_normal(30)
    full = np.column_stack([templates, regional])
    precision = np.linalg.inv(stencil.covariance)
    fit = np.linalg.solve(full.T @ precision @ full, full.T @ precision @ data)
    np.testing.assert_allclose(clean @ data, data - regional @ fit[2:], atol=1e-6)


def test_limits_of_a_ratio_are_where_its_contrast_is_that_many_errors_from_zero():
    top, bottom, (a, b, c) = 3.0, 5.0, (1.0, 2.0, 0.4)
    for limit in fieller(top, bottom, (a, b, c), 1.645):
        error = np.sqrt(a - 2 * limit * c + limit**2 * b)
        assert abs(top - limit * bottom) == pytest.approx(1.645 * error, rel=1e-10)


def test_equal_draws_take_models_by_weight(stencil):
    data = stencil.response @ BOWL + _noise(stencil, 1, 18)[:, 0]
    bank = _bank("impact", BOWL)
    posterior = evidence([stencil.likelihood], stencil.response @ bank.profiles.T, data, bank, SURE)
    drawn = equal_draws(posterior, stencil.response, 2000)
    mean = stencil.response @ bank.profiles.T @ posterior.weights
    np.testing.assert_allclose(drawn.mean(axis=1), mean, rtol=0.005, atol=1e-3)
