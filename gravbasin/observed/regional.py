"""The smooth regional under a map, as a low polynomial. For pictures and profiles only."""

from __future__ import annotations

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike
from scipy import linalg

from gravbasin.errors import InputError
from gravbasin.labels import data_array, provenance
from gravbasin.observed._gls import covariance_of, whiten
from gravbasin.observed._lattice import Array, Disc, Lattice, lattice_of, thin
from gravbasin.observed.noise import NoiseModel

__all__ = ["fit_regional", "polynomial_basis"]

_POWERS = ((0, 0), (1, 0), (0, 1), (2, 0), (1, 1), (0, 2))  # of easting and northing, by total order
MAX_NODES = 1500  # dense solve: 0.1 s and 20 MB; more nodes of a correlated field hardly sharpen six coefficients


def polynomial_basis(
    easting: ArrayLike,
    northing: ArrayLike,
    order: int,
    *,
    centre: tuple[float, float] | None = None,
    scale: float | None = None,
) -> Array:
    """Columns of a polynomial regional at scattered positions.

    Parameters
    ----------
    easting, northing : (n,) arrays, m
        Positions.
    order : int
        0 constant, 1 plane, 2 quadratic surface.
    centre : (easting, northing), m, optional
        Origin of the columns; default the middle of the positions.
    scale : float, m, optional
        Distance at which a column reaches 1; default half the larger extent of the positions.

    Returns
    -------
    (n, 1 | 3 | 6) array, dimensionless
        1, x, y, x², xy, y² with x and y scaled; of order one, so that normal equations stay well conditioned.
    """
    if order not in (0, 1, 2):
        raise InputError("regional_order", order, "must be 0, 1 or 2", "1 is a tilted plane", "polynomial_basis")
    x, y = (np.asarray(a, dtype=float).ravel() for a in (easting, northing))
    if centre is None:
        centre = (0.5 * (x.min() + x.max()), 0.5 * (y.min() + y.max()))
    if scale is None:
        scale = 0.5 * max(float(np.ptp(x)), float(np.ptp(y))) or 1.0
    x, y = (x - centre[0]) / scale, (y - centre[1]) / scale
    return np.column_stack([x**i * y**j for i, j in _POWERS if i + j <= order])


def fit_regional(
    observed: xr.DataArray,
    noise: NoiseModel,
    *,
    exclude: Disc | None = None,
    order: int | None = None,
) -> xr.Dataset:
    """Regional and residual of a map by generalised least squares under its noise.

    For pictures and profiles. Inference never subtracts this: it estimates the regional jointly with the structure,
    because a regional fitted first swallows part of a wide anomaly and leaves false rims.

    Parameters
    ----------
    observed : DataArray (northing, easting), mGal
        The map; NaN where there are no data.
    noise : NoiseModel
        Its noise.
    exclude : (easting, northing, radius), m, optional
        Disc left out of the fit (the regional is drawn across it).
    order : int, optional
        0, 1 or 2; default the noise model's.

    Returns
    -------
    Dataset (northing, easting)
        regional, residual = observed − regional, regional_standard_error, all mGal.

    Raises
    ------
    InputError
        A map that is not (northing, easting) in mGal, a bad disc, fewer than 30 nodes left to fit.
    """
    where = "fit_regional"
    lattice = lattice_of(observed, where=where)
    order = noise.regional_order if order is None else order
    nodes = thin(
        lattice,
        lattice.valid(exclude, where=where),
        separation_m=noise.resolution_m or 0.0,
        max_points=MAX_NODES,
        rng=np.random.default_rng(0),
    )
    if nodes.values.size < 30:
        raise InputError(
            "exclude",
            exclude,
            f"leaves {nodes.values.size} nodes, of which a regional needs 30",
            "make the disc smaller or the map wider",
            where,
        )
    frame = _frame(lattice)
    design = polynomial_basis(nodes.easting, nodes.northing, order, **frame)
    fit = whiten(covariance_of(nodes, noise), design, nodes.values)
    columns = polynomial_basis(*np.meshgrid(lattice.easting, lattice.northing), order, **frame)
    spread = linalg.solve_triangular(fit.coefficient_factor, columns.T, trans="T", check_finite=False)
    shape = lattice.values.shape
    regional = (columns @ fit.coefficients).reshape(shape)
    facts = provenance(
        noise=noise.as_dict(),
        order=order,
        exclude=exclude,
        nodes=nodes.values.size,
        coefficients_mgal=fit.coefficients,
        **frame,
    )
    maps = {
        "regional": (regional, "polynomial regional, for display only"),
        "residual": (lattice.values - regional, "anomaly less the polynomial regional, for display only"),
        "regional_standard_error": (np.sqrt((spread**2).sum(axis=0)).reshape(shape), "standard error of the regional"),
    }
    coords = {"northing": lattice.northing, "easting": lattice.easting}
    return xr.Dataset(
        {
            name: data_array(values, ("northing", "easting"), coords, name=name, units="mGal", long_name=text)
            for name, (values, text) in maps.items()
        },
        attrs={"title": "regional and residual of a gravity map", "provenance": facts},
    )


def _frame(lattice: Lattice) -> dict:
    """Origin and scale of the polynomial: the middle of the map and half its longer side."""
    (west, east), (south, north) = ((axis[0], axis[-1]) for axis in (lattice.easting, lattice.northing))
    return {
        "centre": (0.5 * float(west + east), 0.5 * float(south + north)),
        "scale": 0.5 * float(max(east - west, north - south)),
    }
