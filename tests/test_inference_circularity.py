"""Roundness: blind to round anomalies and to small shifts, honest on noise, alive to elongation."""

import numpy as np
import pytest
from scipy import stats

from gravbasin.inference.circularity import circularity_test
from gravbasin.inference.harmonics import FINE_ORDERS, SHAPE_ORDERS, Harmonics
from gravbasin.inference.level import Level
from gravbasin.labels import data_array
from gravbasin.observed import NoiseModel, simulate_noise

NOISE = NoiseModel(sill_mgal=5.0, range_m=30e3, smoothness=0.8, nugget_mgal=0.3)
SQUARE, OBLONG = (4500.0, 4500.0), (4000.0, 4500.0)  # northing, easting
EDGES = 4500.0 * np.arange(14.0)
EVERY = SHAPE_ORDERS + FINE_ORDERS
NOWHERE = (np.zeros(0, dtype=int), np.zeros(0, dtype=int))


@pytest.fixture(scope="module")
def harmonics():
    return {spacing: Harmonics.build(EDGES, spacing, NOISE) for spacing in (SQUARE, OBLONG)}


def _axes(h, spacing):
    return tuple(step * np.arange(-(n // 2), n // 2 + 1.0) for step, n in zip(spacing, h.shape, strict=True))


def _edge(distance, width=3.5e3):
    """A low of 20 mGal and 20 km radius whose edge is about as wide as a body a few km thick makes it."""
    return -20.0 / (1.0 + np.exp((distance - 20e3) / width))


PROFILE = (np.linspace(0.0, 1e5, 401), _edge(np.linspace(0.0, 1e5, 401)))


def _fields(h, spacing, count, seed):
    north, east = _axes(h, spacing)
    return simulate_noise(NOISE, east, north, seed=seed, n=count).values


def _test(field, h, spacing, level=None, others=NOWHERE, profile=None):
    north, east = _axes(h, spacing)
    field = data_array(
        field, ("northing", "easting"), {"northing": north, "easting": east}, name="map", units="mGal", long_name="map"
    )
    return circularity_test(
        field, h, (north.size // 2, east.size // 2), others, level=level or Level(1.0, 1e6), profile=profile
    )


@pytest.mark.parametrize("spacing", [SQUARE, OBLONG])
def test_a_round_anomaly_has_no_power_of_its_own(harmonics, spacing):
    """Square cells would give it a fourth order, oblong ones a second, the cell at the centre all cosines."""
    h = harmonics[spacing]
    north, east = _axes(h, spacing)
    power, dof = h.powers(_edge(np.hypot(east, north[:, None])).reshape(-1, 1), EVERY)
    assert (power[:, 0] < 0.01 * dof).all()


@pytest.mark.parametrize("spacing", [SQUARE, OBLONG])
def test_half_a_cell_off_the_centre_is_still_round(harmonics, spacing):
    """The worst a nearest node can do; without the shift the first order alone would have some 30."""
    h = harmonics[spacing]
    north, east = _axes(h, spacing)
    shifted = _edge(np.hypot(east - 0.5 * spacing[1], north[:, None] - 0.5 * spacing[0])).reshape(-1, 1)
    power, dof = h.powers(shifted, EVERY)
    assert (power[:, 0] < 0.1 * dof).all()


@pytest.mark.parametrize("order", [1, 2])
def test_a_regional_has_no_power(order):
    noise = NoiseModel(sill_mgal=5.0, range_m=30e3, smoothness=0.8, nugget_mgal=0.3, regional_order=order)
    h = Harmonics.build(EDGES, OBLONG, noise)
    north, east = (axis / 50e3 for axis in _axes(h, OBLONG))
    field = 300.0 + 80.0 * east - 30.0 * north[:, None]
    if order == 2:
        field = field + 40.0 * east * north[:, None] - 25.0 * east**2 + 10.0 * north[:, None] ** 2
    assert np.abs(h.powers(field.reshape(-1, 1), EVERY)[0]).max() < 1e-6


@pytest.mark.parametrize("spacing", [SQUARE, OBLONG])
def test_noise_has_the_power_expected_of_it_in_every_order(harmonics, spacing):
    """Chi-square of 600 fields: the mean of each order within four of its errors."""
    h = harmonics[spacing]
    power, dof = h.powers(_fields(h, spacing, 600, 3).reshape(600, -1).T, EVERY)
    error = np.sqrt(2.0 / (600 * dof))
    assert (np.abs(power.mean(axis=1) / dof - 1.0) < 4.0 * error).all()


def test_p_values_are_uniform_on_noise_with_a_round_structure(harmonics):
    """400 fields, a structure half a cell off the node: Kolmogorov-Smirnov at 0.1 %."""
    h = harmonics[OBLONG]
    north, east = _axes(h, OBLONG)
    structure = _edge(np.hypot(east - 1500.0, north[:, None] + 1900.0))
    p = [_test(field + structure, h, OBLONG).p_value for field in _fields(h, OBLONG, 400, 4)]
    assert stats.kstest(p, "uniform").pvalue > 1e-3


def test_rough_ground_is_no_lack_of_roundness(harmonics):
    """Noise of 2.25 times the model's variance: judged by the local level at most one in five falls below 5 %, where
    a level that may not vary calls nearly all of them (both with 100 fields)."""
    h = harmonics[SQUARE]
    fields = 1.5 * _fields(h, SQUARE, 100, 5)
    local = [_test(field, h, SQUARE, Level(1.0, 5.0)) for field in fields]
    assert np.mean([c.p_value < 0.05 for c in local]) < 0.2
    assert np.median([c.local_level for c in local]) == pytest.approx(2.1, abs=0.3)
    assert np.mean([_test(field, h, SQUARE).p_value < 0.05 for field in fields]) > 0.9


def _long(h, spacing, elongation, azimuth_deg):
    """Axes 20 km times 1 ± the elongation, the long one along the azimuth."""
    north, east = _axes(h, spacing)
    turn = np.radians(azimuth_deg)
    along = east * np.sin(turn) + north[:, None] * np.cos(turn)
    across = east * np.cos(turn) - north[:, None] * np.sin(turn)
    return _edge(np.hypot(along / (1.0 + elongation), across / (1.0 - elongation)))


@pytest.mark.parametrize("azimuth", [20.0, 135.0])
@pytest.mark.parametrize("spacing", [SQUARE, OBLONG])
def test_a_stretched_anomaly_gives_its_axes_back(harmonics, spacing, azimuth):
    """Noise-free; first order in the elongation, so to a twentieth of it at 0.1."""
    h = harmonics[spacing]
    found = _test(_long(h, spacing, 0.1, azimuth), h, spacing, profile=PROFILE)
    assert found.elongation == pytest.approx(0.1, rel=0.05)
    assert found.elongation_azimuth_deg == pytest.approx(azimuth, abs=1.0)


def test_an_elongated_anomaly_is_seen_in_the_second_order(harmonics):
    """Axes 25 by 15 km in noise of 5 mGal, 40 fields: the elongation is seen at 1 % in nine of ten, all orders and
    rings together see less; the error is the scatter of each component, 40 values to 25 %."""
    h = harmonics[SQUARE]
    long = _long(h, SQUARE, 0.25, 45.0)
    found = [_test(field + long, h, SQUARE, profile=PROFILE) for field in _fields(h, SQUARE, 40, 6)]
    assert np.mean([c.elongation_p_value < 0.01 for c in found]) >= 0.9
    assert np.mean([c.p_value < 0.01 for c in found]) > 0.3
    # The long axis lies along 45 degrees: the scatter of the length is that of one component.
    assert np.mean([c.elongation_error for c in found]) == pytest.approx(
        np.std([c.elongation for c in found]), rel=0.35
    )


def test_elongation_of_a_round_structure_has_uniform_p_values(harmonics):
    """400 fields: Kolmogorov-Smirnov at 0.1 %."""
    h = harmonics[OBLONG]
    north, east = _axes(h, OBLONG)
    structure = _edge(np.hypot(east - 1500.0, north[:, None] + 1900.0))
    p = [_test(field + structure, h, OBLONG).elongation_p_value for field in _fields(h, OBLONG, 400, 10)]
    assert stats.kstest(p, "uniform").pvalue > 1e-3


def test_a_turn_by_a_right_angle_changes_nothing(harmonics):
    """Symmetry of the square lattice."""
    h = harmonics[SQUARE]
    field = _fields(h, SQUARE, 1, 7)
    straight, turned = _test(field, h, SQUARE), _test(np.rot90(field), h, SQUARE)
    assert turned.order_power == pytest.approx(straight.order_power, rel=1e-9)


def test_a_coarse_map_counts_fewer_rings():
    """Three nodes a wave, of the resolution rather than of the grid."""
    fine, coarse = (Harmonics.build(EDGES, SQUARE, NOISE, resolution=r) for r in (None, 9000.0))
    window = np.zeros((fine.shape[0] * fine.shape[1], 1))
    assert (coarse.powers(window, (4, 6))[1] < fine.powers(window, (4, 6))[1]).all()
    assert coarse.powers(window, (1,))[1] <= fine.powers(window, (1,))[1]


def test_many_other_places_replace_the_distribution_and_agree_with_it(harmonics):
    """On stationary noise the rank and the F tail are the same up to the places' overlap; NaN gives no result."""
    h = harmonics[SQUARE]
    east, north = 4500.0 * np.arange(90.0), 4500.0 * np.arange(80.0)
    field = simulate_noise(NOISE, east, north, seed=8)
    half = h.shape[0] // 2
    rng = np.random.default_rng(9)
    others = rng.integers(half, 80 - half, 300), rng.integers(half, 90 - half, 300)
    ranked = circularity_test(field, h, (40, 45), others, level=Level(1.0, 1e6))
    alone = circularity_test(field, h, (40, 45), NOWHERE, level=Level(1.0, 1e6))
    assert (ranked.source, alone.source) == ("map", "F distribution")
    assert ranked.ratio == alone.ratio
    assert ranked.p_value == pytest.approx(alone.p_value, abs=0.25)
    assert circularity_test(field, h, (2, 45), others) is None
    holed = field.copy()
    holed[40, 45] = np.nan
    assert circularity_test(holed, h, (40, 47), others) is None
