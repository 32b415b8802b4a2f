"""The erosion chart: cuts that agree with eroded scenarios, volumes that add up, times at the stated rates."""

import numpy as np
import pytest

from gravbasin.crater import EROSION_RATES, PARTS, Mesh, contrast_parts, crater_model, erosion_chart
from gravbasin.forward.rings import ring_table
from gravbasin.scenario import Scenario

CASE = Scenario(crater={"rim_diameter_km": 36.0}, history={"erosion_km": 1.7, "burial_km": 0.4},
                model={"layers": 60, "rings": 80})  # fmt: skip


@pytest.fixture(scope="module")
def chart():
    return erosion_chart(CASE)


def test_a_cut_is_the_eroded_scenario(chart) -> None:
    mesh = Mesh(chart.depth_edges.values, chart.radius_edges.values)
    for depth_km in (0.0, 2.0, 5.0):
        eroded = crater_model(Scenario(crater={"rim_diameter_km": 36.0}, history={"erosion_km": depth_km}))
        cut = chart.density_contrast.sel(erosion=1000.0 * depth_km)
        np.testing.assert_allclose(cut, contrast_parts(eroded, mesh), atol=1e-9)
    assert list(chart.part.values) == list(PARTS)
    assert not chart.density_contrast.isel(erosion=-1).any()


def test_what_slices_carried_adds_up_to_the_fresh_anomaly(chart) -> None:
    stations = np.array([0.0, 6e3, 14e3])
    table = ring_table(stations, chart.radius_edges, chart.depth_edges, height_m=1.0)
    cells = chart.density_contrast.values
    anomaly = table.anomaly(cells.reshape(-1, *cells.shape[2:])).reshape(*cells.shape[:2], -1).sum(axis=1)
    carried = anomaly[:-1] - anomaly[1:]
    np.testing.assert_allclose(carried.sum(axis=0), anomaly[0], atol=1e-9)
    share = carried[:, 1] / anomaly[0, 1]
    assert share[0] > 0.4  # the first kilometre holds the fill
    assert np.all(np.diff(share) < 0)


def test_volumes_of_the_fill_are_those_of_the_structure(chart) -> None:
    model = crater_model(Scenario(crater={"rim_diameter_km": 36.0}))
    total = chart.stripped_volume.sum("slice")
    assert float(total.sel(stripped_unit="melt rock")) == pytest.approx(model.dimensions.melt_volume_km3, rel=5e-3)
    r = np.linspace(0, model.fill.rim_radius, 20001)
    hollow = 2 * np.pi * np.trapezoid(model.fill.interfaces(r).hollow * r, r) / 1e9
    assert float(total.sel(stripped_unit="hollow")) == pytest.approx(hollow, rel=5e-3)
    # Every slice is full: the units add up to a slab out to the rim.
    slab = chart.stripped_volume.sum("stripped_unit")
    radius = chart.radius_edges.values[1:][chart.radius.values <= 18e3][-1]
    np.testing.assert_allclose(slab, np.pi * radius**2 * 1e3 / 1e9, rtol=1e-9)


def test_fill_goes_before_fractures_and_fractures_before_sound_rock(chart) -> None:
    share = chart.stripped_volume / chart.stripped_volume.sum("slice")
    middle = (share * chart.slice).sum("slice")
    order = [float(middle.sel(stripped_unit=u)) for u in ("hollow", "breccia", "fractured rock", "other rock")]
    assert order == sorted(order)


def test_times_are_thickness_over_rate(chart) -> None:
    for name, rate in EROSION_RATES.items():
        np.testing.assert_allclose(chart.time.sel(rate=name), 1000.0 / rate)
    assert min(EROSION_RATES.values()) == 1.0
    assert max(EROSION_RATES.values()) == 50.0


def test_a_chart_survives_netcdf(chart, tmp_path) -> None:
    import xarray as xr

    chart.to_netcdf(tmp_path / "chart.nc", engine="h5netcdf")
    with xr.open_dataset(tmp_path / "chart.nc", engine="h5netcdf", decode_times=False) as back:
        xr.testing.assert_equal(back.load(), chart)
