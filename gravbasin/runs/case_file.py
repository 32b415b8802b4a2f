"""The finished sweep as one netCDF dataset over its cases, and as a table of text."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gravbasin import labels
from gravbasin.runs.cases import CaseMaker
from gravbasin.runs.sampling import Axis
from gravbasin.runs.variants import description_of, unit_of

__all__ = ["write_cases", "write_csv"]

Array = NDArray[np.float64]

BLOCK = 4096
"""Cases per chunk of the file, and held in memory at once while it is written."""


def write_cases(path: Path, maker: CaseMaker, rows: Array, failed: Mapping[int, str], *, provenance: str) -> None:
    """Write the dataset whole or not at all.

    Parameters
    ----------
    path : Path
        Netcdf file to write or replace.
    maker : CaseMaker
        Knows the columns.
    rows : (n_case, n_column) array
        All rows; read block by block.
    failed : mapping
        Reasons by number of the case.
    provenance : str
        For the dataset's attribute.
    """
    import h5netcdf

    fresh = path.with_suffix(".partial")
    with h5netcdf.File(fresh, "w") as file:
        sweep = maker.sweep
        file.attrs.update({"title": "what-if cases", "design": sweep.design, "provenance": provenance})
        file.dimensions = {"case": len(rows)}
        columns = _columns(file, maker, len(rows))
        reason = file.create_variable("failure", ("case",), _text(), chunks=(min(BLOCK, len(rows)),))
        reason.attrs.update({"long_name": "why the case failed; empty where it did not", "units": "1"})
        for start in range(0, len(rows), BLOCK):
            stop = min(start + BLOCK, len(rows))
            block = np.asarray(rows[start:stop])
            for variable, place, axis in columns:
                variable[start:stop] = _decoded(block[:, place], axis, variable.shape[1:])
            reason[start:stop] = np.array([failed.get(i, "") for i in range(start, stop)], dtype=object)
    with open(fresh, "rb") as written:
        os.fsync(written.fileno())
    os.replace(fresh, path)


def _columns(file: Any, maker: CaseMaker, cases: int) -> list[tuple[Any, Any, Axis | None]]:
    """Every variable over the cases, with its place in a row."""
    chunk = min(BLOCK, cases)
    found: list[tuple[Any, Any, Axis | None]] = []
    for i, axis in enumerate(maker.axes):
        variable = file.create_variable(axis.field, ("case",), _dtype(axis), chunks=(chunk,))
        attrs = {"long_name": description_of(axis.field), "units": unit_of(axis.field)}
        if axis.words and isinstance(axis.words[0], bool):
            attrs["dtype"] = "bool"
        variable.attrs.update(attrs)
        found.append((variable, i, axis))
    for i, scalar in enumerate(maker.scalars, len(maker.axes)):
        variable = file.create_variable(scalar.name, ("case",), "f8", chunks=(chunk,))
        variable.attrs.update({"units": scalar.units, "long_name": scalar.long_name})
        found.append((variable, i, None))
    place = len(maker.axes) + len(maker.scalars)
    if maker.sweep.profiles:
        radius = maker.bench.radius
        _coordinate(file, "radius", radius)
        found.append(
            (
                _mgal(file, "profile", ("case", "radius"), "anomaly along the radius"),
                slice(place, place + radius.size),
                None,
            )
        )
        place += radius.size
    if maker.sweep.grids:
        for name in ("northing", "easting"):
            _coordinate(file, name, maker.grid_axis)
        size = maker.grid_axis.size**2
        grid = _mgal(file, "grid", ("case", "northing", "easting"), "anomaly about the centre")
        found.append((grid, slice(place, place + size), None))
    return found


def _coordinate(file: Any, name: str, values: Array) -> None:
    file.dimensions[name] = values.size
    variable = file.create_variable(name, (name,), "f8", data=values)
    variable.attrs.update(labels.coordinate(name, values).attrs)


def _mgal(file: Any, name: str, dims: tuple[str, ...], text: str) -> Any:
    sizes = [file.dimensions[d].size for d in dims]
    share = max(1, min(sizes[0], 2**20 // (8 * int(np.prod(sizes[1:])))))
    variable = file.create_variable(name, dims, "f8", chunks=(share, *sizes[1:]))
    variable.attrs.update({"units": "mGal", "long_name": text})
    return variable


def _dtype(axis: Axis) -> Any:
    if not axis.words:
        return "f8"
    return "i1" if isinstance(axis.words[0], bool) else _text()


def _text() -> Any:
    import h5py

    return h5py.string_dtype()


def _decoded(values: Array, axis: Axis | None, shape: tuple[int, ...]) -> Any:
    if axis is None or not axis.words:
        return values.reshape(len(values), *shape)
    words = np.array(axis.words, dtype=object)[values.astype(int)]
    return words.astype("i1") if isinstance(axis.words[0], bool) else words


def write_csv(path: Path, maker: CaseMaker, rows: Array, failed: Mapping[int, str]) -> None:
    """Fields, scalars and reasons of all cases as a table of text, whole or not at all."""
    import csv

    fresh = path.with_suffix(".partial")
    with open(fresh, "w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(["case", *(a.field for a in maker.axes), *(s.name for s in maker.scalars), "failure"])
        writer.writerows(_lines(maker, rows, failed))
        file.flush()
        os.fsync(file.fileno())
    os.replace(fresh, path)


def _lines(maker: CaseMaker, rows: Array, failed: Mapping[int, str]) -> Iterator[list[Any]]:
    k, width = len(maker.axes), len(maker.axes) + len(maker.scalars)
    for start in range(0, len(rows), BLOCK):
        for number, row in enumerate(np.asarray(rows[start : start + BLOCK, :width]).tolist(), start):
            values = [axis.value(code) for axis, code in zip(maker.axes, row, strict=False)]
            yield [number, *values, *("" if v != v else v for v in row[k:]), failed.get(number, "")]
