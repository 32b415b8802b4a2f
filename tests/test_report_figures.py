"""Identities between what figures draw and what they were given; properties of the SVG they become."""

from __future__ import annotations

import re
from concurrent.futures import ThreadPoolExecutor
from itertools import combinations
from xml.etree import ElementTree

import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from matplotlib.collections import PathCollection
from matplotlib.colors import to_rgb
from scipy.interpolate import RegularGridInterpolator

from gravbasin.crater import PARTS, UNITS, Range, density_section
from gravbasin.inference.bank import Bank
from gravbasin.inference.evidence import Posterior
from gravbasin.report import profile_figures, section_figure
from gravbasin.report.canvas import blank_figure, round_limit, spread, svg
from gravbasin.report.map_figure import map_figure
from gravbasin.report.odds_figures import chance_figure, detectability_figure
from gravbasin.report.odds_map_figure import odds_figure
from gravbasin.report.posterior_figure import FEW, highest_levels, joint_density, posterior_figure
from gravbasin.scenario import Scenario

RIM = 20e3


@pytest.fixture(scope="module")
def section() -> xr.Dataset:
    return density_section(
        Scenario(
            crater={"rim_diameter_km": 40.0},
            history={"erosion_km": 0.3, "burial_km": 0.4},
            model={"layers": 20, "rings": 40},
        )
    )


@pytest.fixture(scope="module")
def profile() -> xr.Dataset:
    radius = np.linspace(0.0, 90e3, 61)
    rings = np.linspace(2e3, 58e3, 12)
    parts = -np.exp(-((radius / 12e3) ** 2)) * np.array([3.0, 0.0, 1.0, 4.0, 6.0, -5.0, 0.0])[:, None]
    total = parts.sum(axis=0)
    return xr.Dataset(
        {
            "modelled": ("radius", total),
            "modelled_low": ("radius", total - 2),
            "modelled_high": ("radius", total + 1),
            "parts": (("part", "radius"), parts),
            "observed": ("ring_radius", np.sin(rings / 7e3) - 30.0),
            "regional": ("ring_radius", -30.0 + rings / 50e3),
            "modelled_rings": ("ring_radius", np.interp(rings, radius, total)),
            "fitted": ("ring_radius", np.interp(rings, radius, total) + 0.5),
            "fitted_low": ("ring_radius", np.interp(rings, radius, total) - 1.0),
            "fitted_high": ("ring_radius", np.interp(rings, radius, total) + 3.0),
            "standard_error": ("ring_radius", np.full(12, 1.5)),
        },
        coords={"radius": radius, "ring_radius": rings, "part": list(PARTS)},
    )


@pytest.fixture(scope="module")
def maps() -> xr.Dataset:
    east, north = 400e3 + 5e3 * np.arange(37.0), 900e3 + 4e3 * np.arange(52.0)
    field = np.sin(east / 21e3) * np.cos(north / 33e3)[:, None]
    names = {"observed": field * 9 - 50, "regional": 0 * field - 50, "residual": field * 9, "modelled": field - 2}
    names["observed"] = names["observed"].copy()
    names["observed"][3, 5] = np.nan
    return xr.Dataset(
        {name: (("northing", "easting"), values) for name, values in names.items()},
        coords={"easting": east, "northing": north},
    )


def titled(figure, start: str):
    return next(axes for axes in figure.axes if axes.get_title("left").startswith(start))


def test_stated_exaggeration_is_the_drawn_one(section, profile) -> None:
    figure = section_figure.section_figure(section, profile, rim_radius_m=RIM)
    axes = titled(figure, "Density contrast")
    stated = re.search(r"exaggeration ([\d.]+)", axes.get_title("left"))
    box, (wide, tall) = axes.get_position(), figure.get_size_inches()
    km_across = np.ptp(axes.get_xlim())
    km_down = abs(np.diff(axes.get_ylim()).item())
    drawn = (box.height * tall / km_down) / (box.width * wide / km_across)
    assert drawn == pytest.approx(float(stated[1]) if stated else 1.0, rel=1e-6)
    units = titled(figure, "Units")
    assert units.get_position().height == pytest.approx(box.height)
    assert units.get_xlim() == axes.get_xlim() == titled(figure, "Modelled").get_xlim()


def test_section_is_mirrored_with_symmetric_colours_and_depth_down(section, profile) -> None:
    axes = titled(section_figure.section_figure(section, profile, rim_radius_m=RIM), "Density contrast")
    mesh = axes.collections[0]
    values = np.asarray(mesh.get_array()).reshape(section.sizes["depth"], -1)
    np.testing.assert_array_equal(values, values[:, ::-1])
    np.testing.assert_array_equal(values[:, values.shape[1] // 2 :], section.density_contrast.values)
    low, high = mesh.get_clim()
    assert low == -high
    assert high >= np.abs(values).max()
    assert axes.get_ylim()[0] > axes.get_ylim()[1]


def test_residual_and_modelled_share_limits_and_observed_has_its_own(maps) -> None:
    figure = map_figure(maps, centre_m=(480e3, 1000e3), rim_radius_m=RIM, disc_radius_m=60e3)
    limits = {title: titled(figure, title).collections[0].get_clim() for title in ("Observed minus", "Modelled")}
    assert limits["Observed minus"] == limits["Modelled"]
    assert limits["Modelled"][0] == -limits["Modelled"][1]
    observed = figure.axes[0].collections[0].get_clim()
    assert observed == (pytest.approx(-59, abs=0.3), pytest.approx(-41, abs=0.3))
    for axes in (a for a in figure.axes if a.get_title("left")):
        assert axes.get_aspect() == 1.0
        assert axes.get_xlim() == (-82.5, 102.5)  # 400 to 580 km about 480, half a cell beyond
        assert axes.get_ylim() == (-102.0, 106.0)
        circles = {round(patch.get_radius(), 6) for patch in axes.patches}
        assert circles == {20.0, 60.0}


def test_profile_draws_observed_less_regional(profile) -> None:
    figure = profile_figures.profile_figure(profile, rim_radius_m=RIM)
    points = next(c for c in figure.axes[0].containers if "observed" in c.get_label())
    np.testing.assert_allclose(
        np.asarray(points.lines[0].get_ydata(), dtype=float), (profile.observed - profile.regional).values
    )
    ends = np.array([segment[:, 1] for segment in points.lines[2][0].get_segments()])
    np.testing.assert_allclose(np.diff(ends, axis=1).ravel(), 2 * profile.standard_error.values)


def test_profile_bands_what_fits_and_lines_the_scenario(profile) -> None:
    axes = profile_figures.profile_figure(profile, rim_radius_m=RIM).axes[0]
    band = axes.collections[0].get_paths()[0].vertices
    for name in ("fitted_low", "fitted_high"):
        ring = np.stack([profile.ring_radius.values / 1e3, profile[name].values], axis=1)
        assert all(np.isclose(band, point).all(axis=1).any() for point in ring)
    lines = {line.get_label(): np.asarray(line.get_ydata(), dtype=float) for line in axes.lines}
    np.testing.assert_allclose(lines["their median"], profile.fitted.values)
    np.testing.assert_allclose(lines["the scenario's own structure"], profile.modelled_rings.values)


def test_profile_without_a_map_draws_the_model_alone(profile) -> None:
    alone = profile[["modelled", "modelled_low", "modelled_high"]]
    figure = profile_figures.profile_figure(alone, rim_radius_m=RIM)
    assert not figure.axes[0].containers
    assert figure.axes[0].get_xlim() == (0.0, 60.0)


def test_drawn_parts_add_up_to_the_heavy_line_and_empty_ones_are_left_out(profile) -> None:
    axes = profile_figures.parts_figure(profile, rim_radius_m=RIM).axes[0]
    curves = [line for line in axes.lines if len(line.get_xdata()) > 3]
    assert len(curves) == 6  # five causes with contrast, and the sum
    np.testing.assert_allclose(sum(c.get_ydata() for c in curves[:-1]), curves[-1].get_ydata())
    labels = " ".join(text.get_text() for text in axes.texts)
    assert "suevite" not in labels
    assert "crustal uplift +5.0" in labels
    assert "all together −9.0" in labels


def cloud(count: int, seed: int = 4, spread: float = 1.0) -> Posterior:
    """A correlated cloud within the prior, with uneven weights."""
    rng = np.random.default_rng(seed)
    u, v = rng.normal(size=(2, count)) * spread
    parameters = {"rim_diameter_km": 40.0 + 2.0 * u, "erosion_km": 2.0 + 0.4 * u + 0.1 * v}
    weights = rng.uniform(0.2, 1.0, count)
    weights /= weights.sum()
    bank = Bank("impact", parameters, np.zeros(1), np.zeros((count, 1)), np.zeros(count))
    return Posterior("impact", 0.0, 0.0, 1.0 / float(np.sum(weights**2)), weights, bank)


PRIOR = {"rim_diameter_km": Range(20.0, 60.0, logarithmic=True), "erosion_km": Range(0.0, 5.0)}


def test_contours_hold_the_share_of_weight_they_claim() -> None:
    """400 points: a share of 0.9 has a sampling error of 0.015, and smoothing widens the contour, so 0.88 to 0.99."""
    posterior = cloud(400)
    values = np.stack(list(posterior.bank.parameters.values()))
    x, y = np.linspace(30, 50, 80), np.linspace(0.3, 3.7, 90)
    density = joint_density(values, posterior.weights, x, y, bounds=list(PRIOR.values()))
    outer, inner = highest_levels(density, [0.9, 0.5])
    assert outer < inner
    at_points = RegularGridInterpolator((y, x), density)(values[::-1].T)
    assert 0.88 < posterior.weights @ (at_points >= outer) < 0.99
    assert 0.46 < posterior.weights @ (at_points >= inner) < 0.70


def test_density_spilled_over_a_bound_comes_back() -> None:
    """A prior that is all one block stays flat up to its edges, within 15 % of its mean at 4000 points."""
    rng = np.random.default_rng(2)
    bounds = [Range(0.0, 1.0), Range(2.0, 5.0)]
    values = np.stack([bound.draw(rng, 4000) for bound in bounds])
    edges = np.array([0.0, 0.5, 1.0]), np.array([2.0, 3.5, 5.0])
    density = joint_density(values, np.full(4000, 1 / 4000), *edges, bounds=bounds)
    edge_middles = density[[0, 1, 1, 2], [1, 0, 2, 1]]
    np.testing.assert_allclose(edge_middles, density[1, 1], rtol=0.15)


@pytest.mark.parametrize("count", [1, 2, 40, 400])
def test_few_models_are_drawn_themselves_and_any_number_makes_a_picture(count) -> None:
    posterior = cloud(count)
    figure = posterior_figure(posterior, PRIOR, {"rim_diameter_km": 43.0, "erosion_km": 5.6})
    joint = figure.axes[0]
    points = [c for c in joint.collections if isinstance(c, PathCollection)]
    assert bool(points) == (posterior.effective_size < FEW)
    assert sum(len(c.get_offsets()) for c in points) in (0, count)
    marker = joint.lines[0]
    assert (marker.get_xdata()[0], marker.get_ydata()[0]) == (43.0, 5.6)
    (left, right), (bottom, top) = joint.get_xlim(), joint.get_ylim()
    assert left < 43.0 < right
    assert bottom < 5.6 < top  # beyond the prior, yet in the picture
    heights = [bar.get_height() for bar in figure.axes[1].patches]
    assert sum(heights) == pytest.approx(1.0, abs=0.02)


def test_odds_map_is_blank_where_rings_leave_the_map_and_its_steps_hold_everything(maps) -> None:
    odds = (maps.residual - 5.0) * 3.0
    odds[:, :4] = np.nan
    figure = odds_figure(odds, centre_m=(480e3, 1000e3), rim_radius_m=RIM)
    axes = figure.axes[0]
    mesh = axes.collections[0]
    drawn = np.ma.masked_invalid(np.asarray(mesh.get_array(), dtype=float).reshape(odds.shape))
    np.testing.assert_array_equal(drawn.mask, np.isnan(odds.values))
    steps = mesh.norm.boundaries
    assert steps[0] == 0.0
    assert steps[-1] >= float(odds.max())
    colours = mesh.cmap(mesh.norm(np.array([-4.0, 0.5, 2.0, 8.0])))
    lightness = colours[:, :3] @ [0.299, 0.587, 0.114]
    assert np.all(np.diff(lightness) < -0.04)  # darker with better odds, so grey keeps the order
    assert axes.get_xlim() == (-82.5, 102.5)


def test_every_place_is_counted_once_and_those_beyond_are_marked() -> None:
    null = np.random.default_rng(5).standard_t(4, 300)
    figure = chance_figure(null, 1.1, p_value=0.15, standard_error=0.04, source="map")
    below, beyond = figure.axes[0].containers
    assert sum(bar.get_height() for bar in below) == 300
    assert sum(bar.get_height() for bar in beyond) == np.sum(null >= 1.1)
    # No bar mixes both kinds: a marked bar is marked whole.
    assert all(b.get_height() in (0, a.get_height()) for a, b in zip(below, beyond, strict=True))


@pytest.mark.parametrize("snr", [-1.0, 0.2, 3.1, 12.0])
def test_detection_curves_are_unit_normals_and_the_filled_part_is_beyond_the_threshold(snr) -> None:
    figure = detectability_figure(
        snr=snr, snr_low=snr - 1, snr_high=snr + 2, threshold=3.09, false_alarm=0.001, detected=0.5
    )
    axes = figure.axes[0]
    noise, signal = axes.lines[:2]
    for line, centre in ((noise, 0.0), (signal, snr)):
        x, y = line.get_data()
        assert np.trapezoid(y, x) == pytest.approx(1.0, abs=2e-3)
        assert np.trapezoid(x * y, x) == pytest.approx(centre, abs=1e-2)
    filled = axes.collections[0].get_paths()[0].vertices[:, 0]
    assert filled.min() >= 3.09
    low, high = axes.get_xlim()
    assert low < snr - 1 < snr + 2 < high


@given(st.lists(st.floats(-50, 50), max_size=9), st.floats(0.1, 5))
@settings(deadline=None)
def test_labels_keep_order_and_distance_and_stay_put_when_there_is_room(wanted, gap) -> None:
    positions = np.array(wanted)
    placed = spread(positions, gap)
    order = np.argsort(positions, kind="stable")
    assert np.all(np.diff(placed[order]) >= gap * (1 - 1e-9))
    if positions.size:
        assert placed.mean() == pytest.approx(positions.mean(), abs=1e-9)
    if positions.size and np.all(np.diff(positions[order]) > gap * 1.001):
        np.testing.assert_allclose(placed, positions)


@given(st.lists(st.floats(-1e6, 1e6), min_size=1))
def test_colour_limit_holds_everything_and_wastes_little(values) -> None:
    largest, limit = np.abs(values).max(), round_limit(values)
    assert limit >= largest * (1 - 1e-8)
    assert largest < 1e-300 or limit <= 1.55 * largest


def test_looks_differ_without_colour() -> None:
    assert set(section_figure.UNIT_LOOK) == set(UNITS)
    assert set(profile_figures._LOOK) == set(PARTS)
    for (_, (a, hatch_a)), (_, (b, hatch_b)) in combinations(section_figure.UNIT_LOOK.items(), 2):
        lightness = [np.dot(to_rgb(c), (0.299, 0.587, 0.114)) for c in (a, b)]
        assert hatch_a != hatch_b or abs(lightness[0] - lightness[1]) > 0.04
    dashes = [dash for _, dash in profile_figures._LOOK.values()]
    assert all(a != b for a, b in combinations(dashes, 2))


def small_figure():
    figure = blank_figure(2.0)
    axes = figure.add_axes((0.2, 0.2, 0.7, 0.7))
    axes.pcolormesh(np.arange(6.0).reshape(2, 3), rasterized=True)
    axes.bar([0, 1], [1, 2], hatch="//")
    return figure


def test_svg_is_the_same_in_every_thread_and_leaves_no_settings_behind() -> None:
    from matplotlib import rcParams

    before = dict(rcParams)
    with ThreadPoolExecutor(4) as pool:
        texts = list(pool.map(lambda _: svg(small_figure(), name="a"), range(8)))
    assert len(set(texts)) == 1
    assert dict(rcParams) == before


def test_svg_is_well_formed_named_and_described() -> None:
    text = svg(small_figure(), name="a", title="x < y & z", description='"quoted"')
    root = ElementTree.fromstring(text)
    names = {"{http://www.w3.org/2000/svg}title": "x < y & z", "{http://www.w3.org/2000/svg}desc": '"quoted"'}
    assert {child.tag: child.text for child in root[:2]} == names
    assert root.get("role") == "img"
    ids = re.findall(r'\bid="([^"]+)"', text)
    assert len(ids) == len(set(ids)) > 5
    assert all(name == "a" or name.startswith("a-") for name in ids)
    assert set(re.findall(r'(?:href="#|url\(#)([^")]+)', text)) <= set(ids)
    assert "*{" not in text.replace("#a *{", "")  # its style reaches no other figure
    assert "metadata" not in text


def test_no_figure_is_registered_with_a_window_system(section, profile) -> None:
    from matplotlib import _pylab_helpers

    svg(section_figure.section_figure(section, profile, rim_radius_m=RIM))
    assert not _pylab_helpers.Gcf.figs
