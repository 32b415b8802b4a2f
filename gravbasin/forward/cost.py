"""What a grid of prisms will cost, said before the work starts."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import fft

from gravbasin.errors import CannotFinish

__all__ = ["MEMORY_LIMIT_GIB", "GridCost", "refuse_above"]

MEMORY_LIMIT_GIB = 2.0
"""Default limit on what one grid computation may hold, GiB."""

_SECONDS_PER_POINT = 6e-10  # per layer edge, padded grid point and doubling of it; measured on two cores
_GIB = 2.0**30


@dataclass(frozen=True)
class GridCost:
    """Size, memory and time of layered prisms and their anomaly.

    Attributes
    ----------
    layers, northing, easting : int
        Shape of the prisms; there is one station on every column of them.

    Examples
    --------
    >>> cost = GridCost(60, 400, 400)
    >>> cost.prisms, cost.pairs
    (9600000, 1536000000000)
    """

    layers: int
    northing: int
    easting: int

    @property
    def prisms(self) -> int:
        """Number of prisms."""
        return self.layers * self.northing * self.easting

    @property
    def pairs(self) -> int:
        """Prism-station pairs a direct sum would visit."""
        return self.prisms * self.northing * self.easting

    @property
    def padded(self) -> tuple[int, int]:
        """Half periods of the padded grid: lengths the FFT likes, at least the grid's own."""
        return fft.next_fast_len(self.northing), fft.next_fast_len(self.easting)

    @property
    def prism_bytes(self) -> int:
        """Bytes of the density contrast itself."""
        return 8 * self.prisms

    @property
    def convolution_bytes(self) -> int:
        """Bytes in flight while one layer edge is convolved, beside the prisms."""
        m_n, m_e = self.padded
        spectra = 16 * (m_e + 1) * (2 * m_n + self.northing)  # the sum, and one edge's first transform
        quadrant = 8 * (m_n + 1) * (m_e + 1)
        maps = (
            6 * 8 * self.northing * self.easting
        )  # a density step and, at the end, the padded and the cropped anomaly
        return spectra + quadrant + maps

    @property
    def seconds(self) -> float:
        """Rough time of the convolution, s."""
        points = 4.0 * np.prod(self.padded)
        return float(_SECONDS_PER_POINT * (self.layers + 1) * points * np.log2(points))


def refuse_above(bytes_needed: float, limit_gib: float, where: str) -> None:
    """Raise CannotFinish when the work would hold more than the limit."""
    if bytes_needed > limit_gib * _GIB:
        raise CannotFinish(
            f"{where}: needs {bytes_needed / _GIB:.2g} GiB, above the limit of {limit_gib:g} GiB; "
            "use a coarser or smaller grid, fewer layers, or raise memory_limit_gib"
        )
