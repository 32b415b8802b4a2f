"""Reading maps: the same numbers from every format, and one clear line for every fault."""

from __future__ import annotations

import hashlib
import struct
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from gravbasin.errors import InputError
from gravbasin.labels import read_provenance
from gravbasin.observed import read_grid

EASTING = 400_000.0 + 2_000.0 * np.arange(22)
NORTHING = 5_100_000.0 + 3_000.0 * np.arange(17)


@pytest.fixture
def values() -> np.ndarray:
    return np.random.default_rng(5).normal(-40.0, 12.0, (NORTHING.size, EASTING.size)).round(3)


def _dataset(values: np.ndarray, **changes: object) -> xr.Dataset:
    """A good file: northing up, easting right, mGal and metres."""
    dataset = xr.Dataset(
        {"bouguer": (("y", "x"), values, {"units": "mGal", "long_name": "complete Bouguer anomaly"})},
        coords={"x": ("x", EASTING, {"units": "m"}), "y": ("y", NORTHING, {"units": "m"})},
    )
    return dataset.assign(changes)


def _write(path: Path, dataset: xr.Dataset) -> Path:
    dataset.to_netcdf(path, engine="h5netcdf")
    return path


def _check(grid: xr.DataArray, values: np.ndarray) -> None:
    assert grid.dims == ("northing", "easting")
    assert grid.dtype == np.float64
    np.testing.assert_allclose(grid.easting, EASTING, rtol=1e-12)
    np.testing.assert_allclose(grid.northing, NORTHING, rtol=1e-12)
    np.testing.assert_allclose(grid.values, values, rtol=1e-6)
    assert grid.attrs["units"] == "mGal"
    assert grid.easting.attrs["units"] == "m"


def test_netcdf_with_labels_and_provenance(tmp_path: Path, values: np.ndarray) -> None:
    path = _write(tmp_path / "map.nc", _dataset(values))
    grid = read_grid(path)
    _check(grid, values)
    assert grid.attrs["long_name"] == "complete Bouguer anomaly"
    facts = read_provenance(grid)
    assert facts["file"] == "map.nc"
    assert facts["sha256"] == hashlib.sha256(path.read_bytes()).hexdigest()
    assert (facts["variable"], facts["nan_count"], facts["flips"]) == ("bouguer", 0, [])
    again = read_grid(_write(tmp_path / "again.nc", grid.to_dataset()))
    assert again.equals(grid)


def test_netcdf_descending_transposed_kilometres_and_si_units_give_the_same_map(
    tmp_path: Path,
    values: np.ndarray,
) -> None:
    dataset = _dataset(values)
    dataset = dataset.isel(y=slice(None, None, -1), x=slice(None, None, -1)).transpose("x", "y")
    dataset["bouguer"] = (dataset.bouguer * 1e-5).assign_attrs(units="m s-2")
    dataset = dataset.assign_coords(
        x=("x", dataset.x.values / 1e3, {"units": "km"}), y=("y", dataset.y.values / 1e3, {"units": "kilometers"})
    )
    grid = read_grid(_write(tmp_path / "map.nc", dataset))
    _check(grid, values)
    assert read_provenance(grid)["flips"] == ["easting", "northing"]


def test_axes_are_known_by_standard_name_and_old_netcdf_is_read(tmp_path: Path, values: np.ndarray) -> None:
    dataset = _dataset(values).rename(x="column", y="row")
    dataset.column.attrs["standard_name"] = "projection_x_coordinate"
    dataset.row.attrs["axis"] = "Y"
    path = tmp_path / "old.nc"
    dataset.to_netcdf(path, engine="scipy")
    _check(read_grid(path), values)


def test_crs_is_kept(tmp_path: Path, values: np.ndarray) -> None:
    from pyproj import CRS

    dataset = _dataset(values)
    dataset["crs"] = ((), 0, {"crs_wkt": CRS.from_epsg(32633).to_wkt()})
    dataset.bouguer.attrs["grid_mapping"] = "crs"
    grid = read_grid(_write(tmp_path / "map.nc", dataset))
    assert CRS.from_wkt(grid.attrs["crs_wkt"]) == CRS.from_epsg(32633)


def test_the_variable_with_gravity_units_is_preferred(tmp_path: Path, values: np.ndarray) -> None:
    height = xr.DataArray(values + 300, dims=("y", "x"), attrs={"units": "m"})
    path = _write(tmp_path / "map.nc", _dataset(values, height=height))
    _check(read_grid(path), values)
    with pytest.raises(InputError, match=r"height\.units = m: must be a unit of gravity"):
        read_grid(path, variable="height")
    two = _write(tmp_path / "two.nc", _dataset(values, free_air=height.assign_attrs(units="mGal")))
    with pytest.raises(InputError, match="the file holds several: bouguer, free_air"):
        read_grid(two)
    with pytest.raises(InputError, match="it has: bouguer, free_air"):
        read_grid(two, variable="isostatic")


def _csv(path: Path, values: np.ndarray, header: str = "easting,northing,value", scale: float = 1.0) -> Path:
    x, y = np.meshgrid(EASTING * scale, NORTHING * scale)
    rows = [f"{a:.6f},{b:.6f},{c}" for a, b, c in zip(x.ravel(), y.ravel(), values.ravel(), strict=True)]
    np.random.default_rng(2).shuffle(rows)
    path.write_text("# made for a test\n" + header + "\n" + "\n".join(rows) + "\n")
    return path


def test_csv_in_any_row_order(tmp_path: Path, values: np.ndarray) -> None:
    _check(read_grid(_csv(tmp_path / "map.csv", values)), values)
    _check(read_grid(_csv(tmp_path / "km.csv", values, "x_km,y_km,z", 1e-3)), values)
    _check(read_grid(_csv(tmp_path / "told.csv", values, "x,y,z", 1e-3), coordinate_units="km"), values)


def test_csv_coordinates_rounded_to_the_metre(tmp_path: Path, values: np.ndarray) -> None:
    x, y = np.meshgrid(1000 * np.sqrt(7) * np.arange(22), 1000 * np.sqrt(11) * np.arange(17))
    rows = [f"{a:.0f},{b:.0f},{c}" for a, b, c in zip(x.ravel(), y.ravel(), values.ravel(), strict=True)]
    path = tmp_path / "map.csv"
    path.write_text("x,y,z\n" + "\n".join(rows))
    grid = read_grid(path)
    np.testing.assert_allclose(grid.easting, x[0], atol=1.0)
    np.testing.assert_allclose(np.diff(grid.northing, 2), 0.0, atol=1e-8)
    np.testing.assert_array_equal(grid.values, values)


def _line(path: Path, position: int, new: str | None) -> Path:
    lines = path.read_text().splitlines()
    lines[position : position + 1] = [] if new is None else [new]
    path.write_text("\n".join(lines))
    return path


@pytest.mark.parametrize(
    ("position", "new", "message"),
    [
        (7, None, r"is missing from the lattice \(1 such"),
        (7, "400000,5100000,3.5", r"node = \(400000, 5100000\): is given more than once"),
        (7, "410000,north,3.5", r"northing = north: is not a number, in data row 6"),
        (1, "lon,lat,value", r"columns = lon: must be a length, not degrees"),
        (1, "a,b,value", r"must have one easting column, found none"),
        (1, "x,easting,value", r"must have one easting column, found several"),
    ],
)
def test_csv_faults(tmp_path: Path, values: np.ndarray, position: int, new: str | None, message: str) -> None:
    with pytest.raises(InputError, match=message) as caught:
        read_grid(_line(_csv(tmp_path / "bad.csv", values), position, new))
    assert str(caught.value).startswith("bad.csv: ")
    assert "\n" not in str(caught.value)


def test_csv_of_degrees_by_range(tmp_path: Path, values: np.ndarray) -> None:
    path = tmp_path / "map.csv"
    rows = [f"{10 + 0.1 * i:.1f},{50 + 0.05 * j:.2f},{values[j, i]}" for j in range(17) for i in range(22)]
    path.write_text("x,y,z\n" + "\n".join(rows))
    with pytest.raises(InputError, match="must be metres; these look like degrees"):
        read_grid(path)


def _geotiff(path: Path, values: np.ndarray, *, area: bool, crs: str = "EPSG:32633", units: str = "mGal") -> Path:
    import rasterio

    step_x, step_y = EASTING[1] - EASTING[0], NORTHING[1] - NORTHING[0]
    corner = rasterio.Affine(step_x, 0.0, EASTING[0] - step_x / 2, 0.0, -step_y, NORTHING[-1] + step_y / 2)
    with rasterio.open(
        path,
        "w",
        driver="GTiff",
        height=NORTHING.size,
        width=EASTING.size,
        count=1,
        crs=crs,
        dtype="float64",
        transform=corner,
        nodata=-9999.0,
    ) as target:
        target.write(values[::-1], 1)
        target.units = (units,)
        target.update_tags(AREA_OR_POINT="Area" if area else "Point")
    return path


def _tiepoint(path: Path) -> tuple[float, float]:
    """Map position of raster point (0, 0) as stored: tag 33922 of a little-endian TIFF."""
    data = path.read_bytes()
    assert data[:4] == b"II*\x00"
    start = struct.unpack_from("<I", data, 4)[0]
    for entry in range(struct.unpack_from("<H", data, start)[0]):
        tag, _, _, offset = struct.unpack_from("<HHII", data, start + 2 + 12 * entry)
        if tag == 33922:
            numbers = struct.unpack_from("<6d", data, offset)
            assert numbers[:2] == (0.0, 0.0)
            return numbers[3:5]
    raise AssertionError("no tiepoint")


@pytest.mark.parametrize("area", [True, False])
def test_geotiff_cell_centres_for_area_and_point_rasters(tmp_path: Path, values: np.ndarray, area: bool) -> None:
    path = _geotiff(tmp_path / "map.tif", values, area=area)
    # what the file itself stores: the corner of the first cell for Area, its centre for Point (GeoTIFF, OGC 19-008r4)
    half = (1000.0, 1500.0) if area else (0.0, 0.0)
    assert _tiepoint(path) == (EASTING[0] - half[0], NORTHING[-1] + half[1])
    grid = read_grid(path)
    _check(grid, values)
    assert read_provenance(grid)["pixel"] == ("area" if area else "point")
    assert read_provenance(grid)["flips"] == ["northing"]


def test_geotiff_nodata_units_and_crs(tmp_path: Path, values: np.ndarray) -> None:
    holed = values.copy()
    holed[3, 4] = -9999.0
    path = _geotiff(tmp_path / "holed.tif", holed, area=True)
    with pytest.raises(InputError, match=r"values = 1 of 374 are NaN.*missing at \(408000, 5109000\).*nan=\"skip\""):
        read_grid(path)
    grid = read_grid(path, nan="skip")
    assert int(np.isnan(grid).sum()) == read_provenance(grid)["nan_count"] == 1
    with pytest.raises(InputError, match="must be projected, not degrees"):
        read_grid(_geotiff(tmp_path / "degrees.tif", values, area=True, crs="EPSG:4326"))
    bare = _geotiff(tmp_path / "bare.tif", values, area=True, units="")
    with pytest.raises(InputError, match="does not state the units"):
        read_grid(bare)
    _check(read_grid(bare, units="mGal"), values)


def _faulty(values: np.ndarray, fault: str) -> xr.Dataset:
    dataset = _dataset(values.copy())
    x = dataset.x.values.copy()
    if fault == "degrees":
        dataset.x.attrs["units"] = "degrees_east"
    elif fault == "longitude":
        dataset = dataset.rename(x="lon", y="lat")
    elif fault == "swapped":
        dataset.x.attrs["standard_name"] = "projection_y_coordinate"
    elif fault == "nameless":
        dataset = dataset.rename(x="column")
    elif fault == "uneven":
        x[9:] += 500.0
        dataset = dataset.assign_coords(x=("x", x, {"units": "m"}))
    elif fault == "no lengths":
        del dataset.y.attrs["units"]
    elif fault == "no units":
        del dataset.bouguer.attrs["units"]
    elif fault == "wrong units":
        dataset.bouguer.attrs["units"] = "K"
    elif fault == "constant":
        dataset.bouguer[:] = 7.0
    elif fault == "infinite":
        dataset.bouguer[2, 3] = np.inf
    elif fault == "fill":
        dataset.bouguer[2, 3] = 99999.0
    elif fault == "nan":
        dataset.bouguer[2, 3] = np.nan
    elif fault == "narrow":
        dataset = dataset.isel(x=slice(15))
    elif fault == "no grid":
        dataset = dataset.isel(x=0)
    elif fault == "geographic":
        dataset["crs"] = (
            (),
            0,
            {
                "grid_mapping_name": "latitude_longitude",
                "semi_major_axis": 6378137.0,
                "inverse_flattening": 298.257223563,
            },
        )
        dataset.bouguer.attrs["grid_mapping"] = "crs"
    return dataset


@pytest.mark.parametrize(
    ("fault", "message"),
    [
        ("degrees", "x = degrees_east: must be a length, not degrees"),
        ("longitude", "must be a length, not degrees"),
        ("swapped", "x = projection_y_coordinate: is called both easting and northing"),
        ("nameless", "column = column: is neither easting nor northing"),
        ("uneven", r"easting = 416000 to 418500: must be evenly spaced: a step of 2500 meets steps of 2000"),
        ("no lengths", "northing.units = missing"),
        ("no units", r'bouguer.units = missing.*units="mGal"'),
        ("wrong units", "bouguer.units = K: must be a unit of gravity"),
        ("constant", "values = 7 everywhere: must vary"),
        ("infinite", "must be finite"),
        ("fill", r"values = 99999 mGal: must be within ±2000 mGal"),
        ("nan", r"values = 1 of 374 are NaN.*\(406000, 5106000\)"),
        ("narrow", "easting = 15 nodes: must have 16 or more"),
        ("no grid", "holds no two-dimensional variable"),
        ("geographic", "must be projected, not degrees"),
    ],
)
def test_netcdf_faults(tmp_path: Path, values: np.ndarray, fault: str, message: str) -> None:
    path = _write(tmp_path / "bad.nc", _faulty(values, fault))
    with pytest.raises(InputError, match=message) as caught:
        read_grid(path)
    assert str(caught.value).startswith("bad.nc: ")
    assert "\n" not in str(caught.value)


def test_path_faults_and_contradictions(tmp_path: Path, values: np.ndarray) -> None:
    with pytest.raises(InputError, match="is not a file"):
        read_grid(tmp_path / "none.nc")
    (tmp_path / "map.dat").write_text("")
    with pytest.raises(InputError, match=r"map\.dat: must end in one of \.nc"):
        read_grid(tmp_path / "map.dat")
    (tmp_path / "text.nc").write_text("not a grid")
    with pytest.raises(InputError, match="is not netCDF"):
        read_grid(tmp_path / "text.nc")
    (tmp_path / "cut.nc").write_bytes(_write(tmp_path / "whole.nc", _dataset(values)).read_bytes()[:900])
    with pytest.raises(InputError, match="cannot be read as netCDF"):
        read_grid(tmp_path / "cut.nc")
    (tmp_path / "empty.csv").write_text("")
    with pytest.raises(InputError, match="cannot be read as comma-separated text"):
        read_grid(tmp_path / "empty.csv")
    with pytest.raises(InputError, match="contradicts the file"):
        read_grid(tmp_path / "whole.nc", units="m s-2")
    with pytest.raises(InputError, match='must be "refuse" or "skip"'):
        read_grid(tmp_path / "whole.nc", nan="fill")  # type: ignore[arg-type] - what is wrong is what is tested
