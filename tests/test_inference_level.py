"""Roughness from place to place: recovered from places, foretold by texture, never made up."""

import numpy as np
import pytest
from scipy import stats

from gravbasin.inference.harmonics import Harmonics
from gravbasin.inference.level import Level, Roughness, fit_roughness
from gravbasin.observed import NoiseModel, simulate_noise

NOISE = NoiseModel(sill_mgal=5.0, range_m=30e3, smoothness=0.8, nugget_mgal=0.3)
SPACING = (4000.0, 4500.0)  # northing, easting: not square
EDGES = 4500.0 * np.arange(12.0)
UNKNOWN = np.full(400, np.nan)
EASTING, NORTHING = SPACING[1] * np.arange(45), SPACING[0] * np.arange(40)


@pytest.mark.parametrize(("scale", "dof"), [(1.0, 6.0), (1.7, 12.0), (0.6, 40.0)])
def test_roughness_from_place_to_place_is_recovered(scale, dof):
    """400 independent places: scale within 25 %, dof within a factor 2.5 (weakly known when large)."""
    rng = np.random.default_rng(7)
    misfits = scale * dof / rng.chisquare(dof, 400) * rng.chisquare(18, 400)
    found = fit_roughness(misfits, 18, UNKNOWN, 400.0)
    assert found.scale == pytest.approx(scale, rel=0.25)
    assert dof / 2.5 < found.dof < dof * 2.5


def test_few_places_leave_the_prior_level():
    assert fit_roughness(np.full(5, 20.0), 18, np.ones(5), 5.0).anywhere == Level()


def texture(field, **more):
    return Harmonics.build(EDGES, SPACING, NOISE, **more).texture(field)


def _places(rng, count, *, scale=1.3, dof=4.0, weight=30.0, rings=18):
    """Misfits and textures of independent places as `Roughness` takes them to be, and their true variances."""
    variance = scale * dof / rng.chisquare(dof, count)
    return variance * rng.chisquare(rings, count), variance * rng.chisquare(weight, count) / weight, variance


@pytest.mark.parametrize("weight", [12.0, 40.0])
def test_what_texture_is_worth_is_recovered(weight):
    """2,000 independent places: each parameter within a factor 1.5."""
    misfits, texture, _ = _places(np.random.default_rng(3), 2000, weight=weight)
    found = fit_roughness(misfits, 18, texture, 2000.0)
    assert weight / 1.5 < found.weight < 1.5 * weight
    assert 4.0 / 1.5 < found.dof < 4.0 * 1.5
    # scale is about the median texture: that of the variance it is the texture of
    assert found.scale / found.typical == pytest.approx(1.0, rel=0.5)


def test_texture_that_foretells_nothing_is_worth_little():
    rng = np.random.default_rng(4)
    misfits, _, _ = _places(rng, 1000)
    found = fit_roughness(misfits, 18, rng.chisquare(30, 1000) / 30, 1000.0)
    assert found.weight < 3.0


def test_levels_foretold_are_calibrated():
    """Fitted on 2,000 places, tried on 2,000 others: chi-square over the foretold scale follows its F distribution,
    Kolmogorov-Smirnov at 0.1 %, and is less spread than without texture."""
    rng = np.random.default_rng(5)
    misfits, texture, _ = _places(rng, 2000)
    found = fit_roughness(misfits, 18, texture, 2000.0)
    misfits, texture, _ = _places(rng, 2000)
    level = found.at(texture)
    ratio = misfits / 18 / level.scale
    assert stats.kstest(ratio, stats.f(18, level.dof).cdf).pvalue > 1e-3
    assert np.std(np.log(ratio)) < 0.75 * np.std(np.log(misfits))


def test_levels_drawn_follow_the_law_they_are_drawn_from():
    """Kolmogorov-Smirnov at 0.1 %, 4,000 draws: variance over the told scale is an inverse gamma again."""
    law = Roughness(1.2, 5.0, 25.0, 0.8)
    variance, level = law.draw(np.random.default_rng(6), 4000)
    assert stats.kstest(variance / 1.2, stats.invgamma(2.5, scale=2.5).cdf).pvalue > 1e-3
    told = level.dof * level.scale / variance
    assert stats.kstest(told, stats.chi2(30.0).cdf).pvalue > 1e-3


def test_a_place_of_unknown_texture_has_the_level_of_any_place():
    law = Roughness(1.2, 5.0, 25.0, 0.8)
    assert law.at_one(float("nan")) == Level(1.2, 5.0)
    assert law.at_one(1.6).scale > law.at_one(0.8).scale
    few = fit_roughness(np.full(5, 20.0), 18, np.ones(5), 5.0)
    assert few.at_one(3.0) == Level()
    unknown = fit_roughness(_places(np.random.default_rng(7), 300)[0], 18, np.full(300, np.nan), 300.0)
    assert unknown.weight == 0.0
    np.testing.assert_array_equal(unknown.at(np.array([np.nan, 2.0])).scale, unknown.anywhere.scale)


def test_texture_is_the_whitened_power_about_every_node():
    """By FFT as by the harmonics' own product, on a map with a gap; NaN where rings leave the map."""
    field = simulate_noise(NOISE, EASTING, NORTHING, seed=8).values
    field[0, 3] = np.nan
    found = texture(field)
    harmonics = Harmonics.build(EDGES, SPACING, NOISE)
    height, width = harmonics.shape
    for row, column in ((20, 22), (height // 2 + 1, width // 2 + 12), (39 - height // 2, 44 - width // 2)):
        window = field[row - height // 2 : row + height // 2 + 1, column - width // 2 : column + width // 2 + 1]
        power, dof = harmonics.powers(window.reshape(-1, 1), (3, 4, 5, 6))
        assert found[row, column] == pytest.approx(power.sum() / dof.sum(), rel=1e-9)
    assert np.isnan(found[height // 2 - 1]).all()
    assert np.isfinite(found[height // 2, width // 2 : -(width // 2)]).all()


def test_texture_is_one_on_average_and_blind_to_round_bodies():
    """120 maps: the mean within 4 standard errors of 1; a round body adds less than 1 % to it."""
    fields = simulate_noise(NOISE, EASTING, NORTHING, seed=9, n=120).values
    found = np.array([texture(f)[20, 22] for f in fields])
    assert abs(found.mean() - 1.0) < 4 * found.std() / np.sqrt(120)
    distance = np.hypot(EASTING - EASTING[22], NORTHING[:, None] - NORTHING[20])
    body = -20.0 / (1.0 + np.exp((distance - 20e3) / 3.5e3))
    assert texture(body)[20, 22] < 0.01


def test_a_map_too_small_or_too_coarse_has_no_texture():
    field = np.random.default_rng(10).standard_normal((8, 8))
    assert np.isnan(texture(field)).all()
    field = np.random.default_rng(11).standard_normal((40, 45))
    assert np.isnan(texture(field, resolution=40e3)).all()
