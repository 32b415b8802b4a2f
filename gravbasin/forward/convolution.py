"""Sums of exact two-dimensional convolutions with even kernels."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from types import TracebackType

import numpy as np
from numpy.typing import NDArray
from scipy import fft

__all__ = ["EvenConvolution"]

Array = NDArray[np.float64]

_WORKERS = 2
_BLOCK = 51_200  # complex numbers transformed at a time: they stay in the processor's second cache


class EvenConvolution:
    """Σ kernel * source over many pairs, zero-padded so that nothing wraps around; sums live in the spectrum.

    The kernels are even in both directions, so the cosine transform of one quadrant is their whole spectrum, and it is
    real. Everything is held with easting first, so that the second transform runs along memory, and in buffers that
    are used over and over: on large grids memory, not arithmetic, sets the pace.

    Parameters
    ----------
    shape : (n_northing, n_easting)
        Shape of the sources and of the result.
    half_period : (northing, easting)
        Half the padded lengths, each at least the grid's own.

    Examples
    --------
    >>> quadrant = np.zeros((4, 3))
    >>> quadrant[:, 0] = [5.0, 3.0, 1.0, 0.0]  # at offsets 0, 1, 2, 3 of easting
    >>> with EvenConvolution((1, 3), (2, 3)) as convolution:
    ...     convolution.add(np.array([[1.0, 0.0, 0.0]]), quadrant)
    ...     np.round(convolution.result(), 12)
    array([[5., 3., 1.]])
    """

    def __init__(self, shape: tuple[int, int], half_period: tuple[int, int]) -> None:
        self._rows, self._columns = shape
        self._m_n, self._m_e = half_period
        self._half = np.empty((self._m_e + 1, self._rows), dtype=complex)
        self._total = np.zeros((self._m_e + 1, 2 * self._m_n), dtype=complex)
        self._pool = ThreadPoolExecutor(_WORKERS)

    def __enter__(self) -> EvenConvolution:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._pool.shutdown()

    def add(self, source: Array, quadrant: Array) -> None:
        """Add one convolution.

        Parameters
        ----------
        source : (n_northing, n_easting) array
        quadrant : (half period of easting + 1, half period of northing + 1) array
            The kernel at offsets from 0 upwards, easting first. Its memory is used for the spectrum: contents are lost.
        """
        kernel = fft.dctn(quadrant, type=1, overwrite_x=True, workers=_WORKERS)
        m_n, m_e = self._m_n, self._m_e

        def along_easting(some: slice) -> None:
            self._half[:, some] = fft.rfft(source[some], 2 * m_e, axis=1).T

        def along_northing(some: slice) -> None:
            spectrum = fft.fft(self._half[some], 2 * m_n, axis=1)
            spectrum[:, : m_n + 1] *= kernel[some]
            spectrum[:, m_n + 1 :] *= kernel[some, m_n - 1 : 0 : -1]
            self._total[some] += spectrum

        for work, length, width in ((along_easting, self._rows, 2 * m_e), (along_northing, m_e + 1, 2 * m_n)):
            list(self._pool.map(work, _slices(length, width)))

    def result(self) -> Array:
        """The sum so far; nothing may be added afterwards."""
        half = fft.ifft(self._total, axis=1, overwrite_x=True, workers=_WORKERS)[:, : self._rows]
        return np.ascontiguousarray(fft.irfft(half.T, 2 * self._m_e, axis=1, workers=_WORKERS)[:, : self._columns])


def _slices(length: int, width: int) -> Iterator[slice]:
    step = max(1, _BLOCK // width)
    return (slice(start, min(start + step, length)) for start in range(0, length, step))
