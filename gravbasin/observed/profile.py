"""Ring means of a map about a centre, with the covariance that correlated noise gives them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike
from scipy import fft, sparse

from gravbasin.discs import ring_fractions
from gravbasin.errors import InputError
from gravbasin.labels import coordinate, data_array, provenance
from gravbasin.observed._lattice import Array, Disc, Lattice, lattice_of
from gravbasin.observed.estimate import MIN_NODES, estimate_noise
from gravbasin.observed.noise import NoiseModel
from gravbasin.observed.simulate import torus_covariance

__all__ = [
    "RingMeans",
    "radial_profile",
    "ring_covariance",
    "ring_edges",
    "ring_means",
    "ring_radii",
    "stencil_axes",
]


@dataclass(frozen=True, eq=False)
class RingMeans:
    """Area-weighted means of a map over rings.

    Parameters
    ----------
    centre : (easting, northing), m
        Centre of the rings.
    edges_m, radius_m : (n_ring + 1,), (n_ring,) arrays, m
        Edges, and the area-weighted mean radius of each ring.
    weights : (n_ring, n_northing * n_easting) sparse array
        Share of each cell in each mean (C order); rows sum to 1, cells without data have none, a ring without any
        data has an empty row.
    mean : (n_ring,) array, mGal
        Ring means, NaN for a ring without data.
    coverage : (n_ring,) array
        Share of the ring's area that lies in cells with data, 0 to 1.
    area_m2 : (n_ring,) array, m²
        That area.
    shape : (n_northing, n_easting)
        Shape of the map.
    spacing_m : (northing step, easting step), m
        Spacing of the map.
    """

    centre: tuple[float, float]
    edges_m: Array
    radius_m: Array
    weights: sparse.csr_array
    mean: Array
    coverage: Array
    area_m2: Array
    shape: tuple[int, int]
    spacing_m: tuple[float, float]

    def covariance(self, noise: NoiseModel) -> Array:
        """Covariance of the means under the noise, (n_ring, n_ring) mGal²; see `ring_covariance`."""
        return ring_covariance(self.weights, noise, shape=self.shape, spacing_m=self.spacing_m)


def ring_edges(
    observed: xr.DataArray,
    centre: tuple[float, float] = (0.0, 0.0),
    *,
    width_m: float | None = None,
    radius_m: float | None = None,
) -> Array:
    """Edges of rings of equal width from the centre outwards.

    Parameters
    ----------
    observed : DataArray (northing, easting), mGal
        The map.
    centre : (easting, northing), m
        Centre of the rings, inside the map.
    width_m : float, optional
        Width of a ring; default the larger grid step. Narrower rings hold few cells each and gain nothing.
    radius_m : float, optional
        Radius to reach; default that of the largest circle about the centre inside the map.

    Returns
    -------
    (n_ring + 1,) array, m

    Raises
    ------
    InputError
        Centre outside the map, fewer than three rings.
    """
    lattice = lattice_of(observed, where="ring_edges")
    return _default_edges(lattice, centre, width_m, radius_m)


def _default_edges(
    lattice: Lattice,
    centre: tuple[float, float],
    width_m: float | None,
    radius_m: float | None,
) -> Array:
    half_n, half_e = (0.5 * step for step in lattice.spacing)
    easting, northing = (float(c) for c in centre)
    room = min(
        easting - lattice.easting[0] + half_e,
        lattice.easting[-1] + half_e - easting,
        northing - lattice.northing[0] + half_n,
        lattice.northing[-1] + half_n - northing,
    )
    if not room > 0:
        raise InputError(
            "centre",
            centre,
            f"must lie inside the map, {_extent(lattice)}",
            "give (easting, northing) in metres",
            "ring_edges",
        )
    width = max(lattice.spacing) if width_m is None else float(width_m)
    reach = float(room) if radius_m is None else float(radius_m)
    if not (width > 0 and reach >= 3.0 * width * (1 - 1e-9)):
        raise InputError(
            "centre",
            centre,
            f"has room for {reach / width:.2g} rings of {width:g} m, of three needed",
            "move the centre, narrow the rings or use a wider map",
            "ring_edges",
        )
    return width * np.arange(float(int(reach / width * (1 + 1e-12)) + 1))


def _extent(lattice: Lattice) -> str:
    west, east, south, north = (f"{v:g}" for v in (*lattice.easting[[0, -1]], *lattice.northing[[0, -1]]))
    return f"easting {west} to {east}, northing {south} to {north} m"


def ring_radii(edges_m: ArrayLike) -> Array:
    """Area-weighted mean radius of each ring, 2/3 (b³ − a³)/(b² − a²): where a linear profile equals its ring mean."""
    edges = np.asarray(edges_m, dtype=float)
    inner, outer = edges[:-1], edges[1:]
    return 2.0 / 3.0 * (inner**2 + inner * outer + outer**2) / (inner + outer)


def ring_means(observed: xr.DataArray, centre: tuple[float, float], edges_m: ArrayLike) -> RingMeans:
    """Area-weighted means of the map over rings, the cells cut exactly by the circles.

    Parameters
    ----------
    observed : DataArray (northing, easting), mGal
        The map; NaN cells have no weight.
    centre : (easting, northing), m
        Centre of the rings.
    edges_m : (n_ring + 1,) array, m
        Ascending edges, the first 0 or more.

    Returns
    -------
    RingMeans

    Raises
    ------
    InputError
        A bad map, edges that do not ascend from 0 or more, no ring with data.
    """
    lattice = lattice_of(observed, where="ring_means")
    return _ring_means(lattice, centre, edges_m)


def _ring_means(lattice: Lattice, centre: tuple[float, float], edges_m: ArrayLike) -> RingMeans:
    edges = np.asarray(edges_m, dtype=float)
    if edges.ndim != 1 or edges.size < 2 or not (edges[0] >= 0 and (np.diff(edges) > 0).all() and edges[-1] < np.inf):
        raise InputError("edges_m", edges, "must ascend from 0 or more", "give ring edges in metres", "ring_means")
    centre = (float(centre[0]), float(centre[1]))
    step_n, step_e = lattice.spacing
    share = ring_fractions(lattice.easting - centre[0], lattice.northing - centre[1], edges).T.tocsr()
    valid = np.isfinite(lattice.values).ravel()
    share = share @ sparse.dia_array((valid[None].astype(float), [0]), shape=(valid.size, valid.size))
    share.eliminate_zeros()
    cells = np.asarray(share.sum(axis=1)).ravel()
    if not cells.any():
        raise InputError(
            "centre",
            centre,
            f"has no data within {edges[-1]:g} m on a map of {_extent(lattice)}",
            "give (easting, northing) in metres on the map",
            "ring_means",
        )
    scale = np.divide(1.0, cells, out=np.zeros_like(cells), where=cells > 0)
    weights = sparse.csr_array(sparse.dia_array((scale[None], [0]), shape=(cells.size, cells.size)) @ share)
    mean = np.where(cells > 0, weights @ np.where(valid, lattice.values.ravel(), 0.0), np.nan)
    area = cells * step_n * step_e
    coverage = np.minimum(area / (np.pi * np.diff(edges**2)), 1.0)
    return RingMeans(
        centre, edges, ring_radii(edges), weights, mean, coverage, area, lattice.values.shape, lattice.spacing
    )


def stencil_axes(edges_m: ArrayLike, spacing_m: tuple[float, float]) -> tuple[Array, Array]:
    """Easting and northing axes, m, of the smallest lattice about a node that holds all the rings whole.

    With these, ``ring_fractions(easting, northing, edges).T`` divided by its row sums are the weights of complete
    rings, for `ring_covariance` without any map.
    """
    reach = float(np.asarray(edges_m, dtype=float)[-1])
    half = [int(np.ceil(reach / step - 0.5)) for step in spacing_m]
    northing, easting = (step * np.arange(-h, h + 1.0) for step, h in zip(spacing_m, half, strict=True))
    return easting, northing


def ring_covariance(
    weights: sparse.csr_array,
    noise: NoiseModel,
    *,
    shape: tuple[int, int],
    spacing_m: tuple[float, float],
) -> Array:
    """Exact covariance of weighted sums of map cells under the noise.

    Parameters
    ----------
    weights : (n_ring, n_northing * n_easting) sparse array
        Weights in C order: from `ring_means`, or of any stencil on its own lattice.
    noise : NoiseModel
        The noise of the cells.
    shape : (n_northing, n_easting)
        Shape of the lattice.
    spacing_m : (northing step, easting step), m
        Its spacing.

    Returns
    -------
    (n_ring, n_ring) array, mGal²
        W C W' + nugget² W W'.

    Notes
    -----
    C is block-Toeplitz: C w is a convolution, done by FFT on a torus twice as wide as the box that holds the rings,
    where wrap-around cannot reach. Exact to rounding, without ever forming C.
    """
    weights = sparse.csr_array(weights)
    if weights.shape[1] != shape[0] * shape[1]:
        raise InputError(
            "shape",
            shape,
            f"must have as many cells as the weights, {weights.shape[1]}",
            "give (n_northing, n_easting) of the weights' lattice",
            "ring_covariance",
        )
    rows, columns = np.divmod(weights.indices, shape[1])
    if rows.size == 0:
        return np.zeros((weights.shape[0], weights.shape[0]))
    rows, columns = rows - rows.min(), columns - columns.min()
    box = (int(rows.max()) + 1, int(columns.max()) + 1)
    boxed = sparse.csr_array(
        (weights.data, rows * box[1] + columns, weights.indptr), shape=(weights.shape[0], box[0] * box[1])
    )
    torus = (fft.next_fast_len(2 * box[0], real=True), fft.next_fast_len(2 * box[1], real=True))
    kernel = fft.rfft2(torus_covariance(noise, torus, spacing_m)).real
    result = np.empty((weights.shape[0],) * 2)
    for i in range(weights.shape[0]):
        mask = boxed[[i]].toarray().reshape(box)
        spread = fft.irfft2(fft.rfft2(mask, s=torus) * kernel, s=torus)[: box[0], : box[1]]
        result[i] = boxed @ spread.ravel()
    result = 0.5 * (result + result.T)
    return result + noise.nugget_mgal**2 * (weights @ weights.T).toarray()


def radial_profile(
    observed: xr.DataArray,
    *,
    centre: tuple[float, float] = (0.0, 0.0),
    edges_m: ArrayLike | None = None,
    noise: NoiseModel | None = None,
) -> xr.Dataset:
    """Mean of the map over rings, with standard errors that honour the correlation of the noise.

    Parameters
    ----------
    observed : DataArray (northing, easting), mGal
        The map; NaN where there are no data.
    centre : (easting, northing), m
        Centre of the rings.
    edges_m : (n_ring + 1,) array, optional, m
        Edges of the rings; default one grid step wide, out to the largest circle inside the map.
    noise : NoiseModel, optional
        The map's noise; default estimated from the map outside the profile's disc, or outside a smaller one where
        that would leave less than half of the map.

    Returns
    -------
    Dataset (radius)
        mean and standard_error in mGal, coverage (share of the ring with data), area in m²; the ring edges as
        radius_edges; radius is the area-weighted mean radius of a ring. The mean still contains the regional.

    Raises
    ------
    InputError
        A bad map, a centre outside it, bad edges, or too few nodes to estimate the noise from.

    Notes
    -----
    Neighbouring cells, and neighbouring rings, are not independent: a ring of radius r holds only about 2 r/ξ
    independent values where ξ is the distance at which the noise is half correlated. For fits use the full covariance
    (`RingMeans.covariance`), not these standard errors alone.

    Examples
    --------
    >>> from gravbasin.observed import NoiseModel, simulate_noise
    >>> noise = NoiseModel(sill_mgal=8.0, range_m=30e3, smoothness=0.8)
    >>> field = simulate_noise(noise, range(-90_000, 90_001, 5_000), range(-70_000, 70_001, 5_000))
    >>> profile = radial_profile(field, noise=noise)
    >>> profile.sizes["radius"], bool((profile.standard_error < 8.0).all())
    (14, True)
    """
    lattice = lattice_of(observed, where="radial_profile")
    edges = _default_edges(lattice, centre, None, None) if edges_m is None else edges_m
    rings = _ring_means(lattice, centre, edges)
    excluded: Disc | None = None
    if noise is None:
        excluded = (*rings.centre, _excluded_radius(lattice, rings))
        noise = estimate_noise(observed, exclude=excluded)
    variance = np.diag(rings.covariance(noise))
    return _dataset(rings, np.where(rings.area_m2 > 0, np.sqrt(variance), np.nan), noise, excluded)


def _excluded_radius(lattice: Lattice, rings: RingMeans) -> float:
    """Radius of the profile, or the largest that keeps half of the nodes (and enough for an estimate) outside."""
    valid = lattice.valid()
    away = np.hypot(lattice.easting - rings.centre[0], (lattice.northing - rings.centre[1])[:, None])[valid]
    thinned = 4.0  # the estimate uses every other node each way
    share = max(0.5, min(1.0, 1.5 * thinned * MIN_NODES / away.size))
    return float(min(rings.edges_m[-1], max(np.quantile(away, 1.0 - share), 1e-3 * lattice.spacing[0])))


def _dataset(rings: RingMeans, standard_error: Array, noise: NoiseModel, excluded: Disc | None) -> xr.Dataset:
    columns = {
        "mean": (rings.mean, "mGal", "mean anomaly over the ring, regional included"),
        "standard_error": (standard_error, "mGal", "standard error of the ring mean under correlated noise"),
        "coverage": (rings.coverage, "1", "share of the ring's area that has data"),
        "area": (rings.area_m2, "m2", "area of the ring that has data"),
    }
    coords = {"radius": rings.radius_m}
    return xr.Dataset(
        {
            name: data_array(values, ("radius",), coords, name=name, units=units, long_name=text)
            for name, (values, units, text) in columns.items()
        },
        coords={"radius_edges": coordinate("radius_edges", rings.edges_m)},
        attrs={
            "title": "ring means of a gravity map",
            "provenance": provenance(
                centre_m=rings.centre,
                noise=noise.as_dict(),
                noise_estimated_outside=excluded,
                empty_rings=int((rings.area_m2 == 0).sum()),
            ),
        },
    )
