"""Areas, files, layouts, station errors and costs: geometry, round trips, refusals."""

import json

import numpy as np
import pytest
from scipy.spatial import cKDTree

from gravbasin.errors import CannotFinish, InputError
from gravbasin.scenario import Costs, Scenario, StationErrors, Survey
from gravbasin.survey.costs import check_budget, effort, travelled
from gravbasin.survey.errors import error_terms, station_error
from gravbasin.survey.layouts import Site, inside, layout_stations, polygon_area, square_area
from gravbasin.survey.prepare import degrees, site_of
from gravbasin.survey.shapes import projected_crs, read_points, read_shapes
from gravbasin.survey.station_files import StationTable, stations_csv, stations_geojson, write_geopackage

UTM = "EPSG:32633"
CENTRE = np.array([500e3, 6.2e6])
OUTLINE = CENTRE + 1e3 * np.array([[-40.0, -20.0], [35.0, -25.0], [50.0, 10.0], [5.0, 30.0], [-30.0, 22.0]])
LAKE = CENTRE + 1e3 * np.array([[5.0, -5.0], [18.0, -5.0], [18.0, 9.0], [5.0, 9.0]])
ROADS = (
    CENTRE + 1e3 * np.array([[-45.0, 0.0], [0.0, 3.0], [48.0, 5.0]]),
    CENTRE + 1e3 * np.array([[0.0, -30.0], [0.0, 40.0]]),
)
SITE = Site(CENTRE, ((OUTLINE,),), ((LAKE,),), ROADS)


def closed(ring):
    return [*ring.tolist(), ring[0].tolist()]


def write(path, kind, coordinates, **extra):
    path.write_text(json.dumps({"type": "Feature", "geometry": {"type": kind, "coordinates": coordinates}, **extra}))
    return path


def test_even_odd_rule_respects_holes_and_counts_area():
    square, hole = (
        np.array(s, dtype=float) for s in ([[0, 0], [4, 0], [4, 3], [0, 3]], [[1, 1], [2, 1], [2, 2], [1, 2]])
    )
    polygon = (square, hole)
    assert polygon_area(polygon) == 11.0
    rng = np.random.default_rng(1)
    points = rng.uniform([-1, -1], [5, 4], (20_000, 2))
    share = inside(polygon, points).mean()
    assert abs(share - 11.0 / 30.0) < 4.5 * np.sqrt(11 / 30 * 19 / 30 / 20_000)  # 1 in 150,000 by chance


@pytest.mark.parametrize("layout", ["square", "staggered", "lines", "radial", "roads"])
def test_every_station_stands_where_it_may_and_none_twice(layout):
    points = layout_stations(SITE, layout, 4e3)
    assert len(points) > 10
    assert inside((OUTLINE,), points).all()
    assert not inside((LAKE,), points).any()
    away, _ = cKDTree(points).query(points, k=2)
    assert away[:, 1].min() > (0.0 if layout == "radial" else 1.9e3)


@pytest.mark.parametrize(("layout", "share", "near"), [("square", 1.0, 1.0), ("staggered", np.sqrt(0.75), 1.0)])
def test_grids_have_their_density_and_spacing_at_any_azimuth(layout, share, near):
    site = Site(CENTRE, square_area(CENTRE, 60e3))
    for azimuth in (90.0, 37.0):
        points = layout_stations(site, layout, 3e3, line_azimuth=azimuth)
        assert len(points) == pytest.approx((120.0 / 3.0) ** 2 / share, rel=0.06)
        away, _ = cKDTree(points).query(points, k=2)
        np.testing.assert_allclose(away[:, 1], near * 3e3, rtol=1e-9)
        assert np.hypot(*(points - CENTRE).T).min() < 1e-6  # one at the centre


def test_lines_run_along_their_azimuth_and_are_read_to_and_fro():
    site = Site(CENTRE, square_area(CENTRE, 30e3))
    points = layout_stations(site, "lines", 2e3, line_azimuth=0.0, line_ratio=5.0)
    assert set(np.round((points[:, 0] - CENTRE[0]) / 1e3).tolist()) <= {-30.0, -20.0, -10.0, 0.0, 10.0, 20.0, 30.0}
    steps = np.hypot(*np.diff(points, axis=0).T)
    assert np.isin(np.round(steps), [2000.0, 10000.0]).all()


def test_spokes_are_even_and_roads_keep_to_the_roads():
    points = layout_stations(Site(CENTRE, square_area(CENTRE, 30e3)), "radial", 3e3, spokes=7) - CENTRE
    azimuth = np.rad2deg(np.arctan2(*points[1:].T)) % 360.0
    np.testing.assert_allclose(azimuth * 7 / 360, np.round(azimuth * 7 / 360), atol=1e-6)
    along = layout_stations(SITE, "roads", 2.5e3)
    for point in along:
        gaps = []
        for line in ROADS:
            start, step = line[:-1], np.diff(line, axis=0)
            share = np.clip(np.sum((point - start) * step, axis=1) / np.sum(step**2, axis=1), 0, 1)
            gaps.append(np.hypot(*(start + share[:, None] * step - point).T).min())
        assert min(gaps) < 1e-6


def test_existing_stations_are_kept_and_not_repeated():
    kept = CENTRE + np.array([[100.0, -50.0], [8e3, 40.0]])
    site = Site(CENTRE, ((OUTLINE,),), existing=kept)
    points = layout_stations(site, "square", 4e3)
    everywhere = layout_stations(Site(CENTRE, ((OUTLINE,),)), "square", 4e3)
    assert len(points) == len(everywhere) - 2
    assert cKDTree(points).query(kept)[0].min() > 2e3


def test_a_spacing_finer_than_any_survey_is_refused_before_memory_is():
    with pytest.raises(CannotFinish, match="use a wider spacing"):
        layout_stations(SITE, "square", 10.0)


def test_polygons_in_metres_degrees_and_named_systems_agree(tmp_path):
    from pyproj import Transformer

    crs = projected_crs(UTM, where="survey.crs")
    metres = write(tmp_path / "m.geojson", "Polygon", [closed(OUTLINE)])
    degrees_ring = np.stack(Transformer.from_crs(UTM, "OGC:CRS84", always_xy=True).transform(*OUTLINE.T), axis=1)
    in_degrees = write(tmp_path / "d.geojson", "MultiPolygon", [[closed(degrees_ring)]])
    other = np.stack(Transformer.from_crs(UTM, "EPSG:32634", always_xy=True).transform(*OUTLINE.T), axis=1)
    named = {"crs": {"type": "name", "properties": {"name": "urn:ogc:def:crs:EPSG::32634"}}}
    in_other = write(tmp_path / "o.geojson", "Polygon", [closed(other)], **named)
    for path in (metres, in_degrees, in_other):
        found = read_shapes(path, "polygon", crs=crs, what="survey.area").polygons[0][0][:-1]
        np.testing.assert_allclose(found, OUTLINE, atol=1e-3)
    with pytest.raises(InputError, match=r"d\.geojson: survey\.area = .*is in degrees; state survey\.crs"):
        read_shapes(in_degrees, "polygon", crs=None, what="survey.area")


@pytest.mark.parametrize(
    ("content", "hint"),
    [
        ("{", "is not GeoJSON"),
        ("[1]", "is not GeoJSON"),
        ('{"type": "Point", "coordinates": [1, 2]}', "holds no polygon"),
        ('{"type": "Polygon", "coordinates": []}', "holds an empty Polygon"),
        ('{"type": "Polygon", "coordinates": [[["a", 2], [3, 4]]]}', "no numbers"),
        (None, "is not a file"),
    ],
)
def test_files_that_cannot_be_used_are_named_in_one_line(tmp_path, content, hint):
    path = tmp_path / "x.geojson"
    if content is not None:
        path.write_text(content)
    with pytest.raises(InputError, match=hint) as fault:
        read_shapes(path, "polygon", crs=None, what="survey.area")
    assert "\n" not in str(fault.value)
    assert "survey.area" in str(fault.value)


def test_stations_from_a_table_and_its_faults(tmp_path):
    path = tmp_path / "stations.csv"
    path.write_text("name,Easting,northing\na,500000,6200000\nb,501000.5,6200100\n")
    np.testing.assert_array_equal(
        read_points(path, crs=None, what="survey.existing"), [[500000, 6200000], [501000.5, 6200100]]
    )
    for text, hint in (("x,z\n1,2\n", "column northing"), ("x,y\n1,\n", "line 2"), ("", "column easting")):
        path.write_text(text)
        with pytest.raises(InputError, match=hint):
            read_points(path, crs=None, what="survey.existing")


def test_systems_that_are_no_map_in_metres_are_refused():
    for name, hint in (
        ("EPSG:4326", "projection in metres"),
        ("EPSG:2263", "projection in metres"),
        ("moon", "not a known"),
    ):
        with pytest.raises(InputError, match=hint):
            projected_crs(name, where="survey.crs")


def test_a_site_needs_a_centre_with_an_area_and_one_system(tmp_path):
    area = write(tmp_path / "m.geojson", "Polygon", [closed(OUTLINE)])
    scenario = Scenario(crater={"rim_diameter_km": 20.0})
    with pytest.raises(InputError, match=r"survey\.centre_easting_km"):
        site_of(scenario, Survey(area=area), None)
    with pytest.raises(InputError, match="differs from that of the observed map"):
        site_of(scenario, Survey(crs="EPSG:32633"), "EPSG:32634")
    assert site_of(scenario, Survey(), None).size == pytest.approx(60e3**2)


def station_table():
    site = Site(CENTRE, ((OUTLINE,),), existing=CENTRE[None, :] + 10.0, crs=projected_crs(UTM, where=""))
    new = layout_stations(site, "square", 15e3)
    best = CENTRE + np.array([[1e3, 2e3]])
    return site, StationTable.of(site, new, best, np.array([0.5]), np.array([0.0, 60e3]), np.array([-10.0, 0.0]))


def test_station_files_read_back_the_same_in_a_gis(tmp_path):
    """GeoJSON in degrees and GeoPackage in metres, read with pyogrio, against the table itself."""
    import pyogrio

    site, table = station_table()
    (tmp_path / "s.geojson").write_text(stations_geojson(table))
    write_geopackage(table, site.crs, tmp_path / "s.gpkg")
    for name, coordinates, system in (("s.geojson", table.degrees, "EPSG:4326"), ("s.gpkg", table.place, UTM)):
        meta, _, geometry, fields = pyogrio.raw.read(tmp_path / name)
        assert meta["crs"] == system
        points = np.array([np.frombuffer(blob[-16:], dtype="<f8") for blob in geometry])
        np.testing.assert_allclose(points, coordinates, atol=1e-6)
        columns = dict(zip(meta["fields"].tolist(), fields, strict=True))
        assert columns["kind"].tolist() == list(table.kind)
        np.testing.assert_allclose(columns["easting_m"], table.place[:, 0], atol=0.01)
        assert columns["gain"][-1] == 0.5
    again = read_shapes(tmp_path / "s.gpkg", "point", crs=site.crs, what="survey.existing").points
    np.testing.assert_allclose(again, table.place, atol=1e-6)
    back = read_points(tmp_path / "s.geojson", crs=site.crs, what="survey.existing")
    np.testing.assert_allclose(back, table.place, atol=0.02)


def test_polygons_and_lines_survive_a_geopackage(tmp_path):
    import struct

    from pyogrio import raw

    def ring(points):
        return struct.pack("<I", len(points)) + np.asarray(points, dtype="<f8").tobytes()

    blob = struct.pack("<BII", 1, 3, 2) + ring(closed(OUTLINE)) + ring(closed(LAKE))
    crs = projected_crs(UTM, where="")
    raw.write(
        tmp_path / "a.gpkg",
        np.array([blob], dtype=object),
        [],
        [],
        driver="GPKG",
        geometry_type="Polygon",
        crs=crs.to_wkt(),
    )
    outer, hole = read_shapes(tmp_path / "a.gpkg", "polygon", crs=crs, what="survey.area").polygons[0]
    np.testing.assert_array_equal(outer[:-1], OUTLINE)
    np.testing.assert_array_equal(hole[:-1], LAKE)
    line = struct.pack("<BI", 1, 2) + ring(ROADS[0])
    raw.write(
        tmp_path / "l.gpkg",
        np.array([line], dtype=object),
        [],
        [],
        driver="GPKG",
        geometry_type="LineString",
        crs=crs.to_wkt(),
    )
    np.testing.assert_array_equal(read_shapes(tmp_path / "l.gpkg", "line", crs=crs, what="x").lines[0], ROADS[0])


def test_without_a_system_there_are_no_degrees_and_no_geojson():
    _, table = station_table()
    bare = StationTable(table.kind, table.place, table.distance_km, table.modelled_mgal, table.gain, None)
    assert stations_geojson(bare) is None
    assert "longitude" not in stations_csv(bare).splitlines()[0]
    assert degrees(table.place, None) is None


def test_degrees_are_those_of_the_projection():
    """The central meridian of UTM zone 33 is 15° east, at easting 500 km."""
    found = degrees(CENTRE[None, :], projected_crs(UTM, where=""))[0]
    assert found[0] == pytest.approx(15.0, abs=1e-9)
    assert 55.0 < found[1] < 57.0


def test_station_errors_add_in_squares_and_follow_their_formulas():
    """0.3086 − 0.0419 ρ per metre, 0.812 sin 2φ per kilometre (common practice)."""
    terms = {
        t.name: t.error_mgal
        for t in error_terms(StationErrors(height_m=0.5, position_m=100.0, relief_m=50.0, latitude_degrees=45.0))
    }
    assert terms["height"] == pytest.approx((0.3086 - 0.0419 * 2.67) * 0.5)
    assert terms["northing"] == pytest.approx(0.0812)
    assert terms["slab density"] == pytest.approx(0.0419 * 50 * 0.1)
    assert station_error(error_terms(StationErrors())) < station_error(error_terms(StationErrors(height_m=1.0)))
    barometric = StationErrors(meter_mgal=0.05, height_m=5.0, terrain_mgal=0.3, tie_mgal=0.2, relief_m=0.0)
    assert 0.9 < station_error(error_terms(barometric)) < 1.5  # old national surveys: 1-2 mGal (common practice)
    assert error_terms(StationErrors(), latitude=0.0)[5].error_mgal == 0.0


def test_costs_come_from_the_rates_alone():
    line = np.stack([np.arange(0.0, 40e3, 1e3), np.zeros(40)], axis=1)
    bare = effort(line, Costs())
    assert bare.stations == 40
    assert travelled(line) == pytest.approx(39.0)
    assert np.isnan([bare.days, bare.cost]).all()
    rates = Costs(
        stations_per_day=10,
        travel_km_per_day=5.0,
        repeat_share=0.05,
        day_rate=100.0,
        station_cost=3.0,
        mobilisation=50.0,
    )
    assert effort(line, rates).days == 8  # 39 km at 5 km a day outlasts 42 readings at 10 a day
    assert effort(line, rates).cost == 50 + 800 + 120
    assert effort(line[:0], rates).cost == 0


@pytest.mark.parametrize(
    ("costs", "hint"),
    [
        ({"budget": 900.0, "mobilisation": 500.0, "day_rate": 450.0, "stations_per_day": 20}, "must reach for one day"),
        ({"most_days": 0.5, "stations_per_day": 20}, "at least one whole day"),
    ],
)
def test_a_budget_below_one_day_is_told_so(costs, hint):
    with pytest.raises(InputError, match=hint):
        check_budget(Costs(**costs))
