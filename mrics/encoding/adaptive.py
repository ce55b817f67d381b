"""Sensitivities as eigenvectors of the local channel covariance of a low-resolution image.

Source: Walsh, Gmitro, Marcellin 2000, Magn Reson Med 43:682-690,
doi 10.1002/(SICI)1522-2594(200005)43:5<682::AID-MRM10>3.0.CO;2-G.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import uniform_filter

from mrics.numerics import centred_ifft

Array = NDArray[Any]
#: side of the averaging square, as a share of the calibration's own resolution
_CELLS = 0.5


def adaptive_maps(
    calibration: Array, grid: tuple[int, int], reference: Array
) -> tuple[Array, Array]:
    """Unit-norm sensitivities of one plane, and the share of energy the leading vector holds.

    Parameters
    ----------
    calibration : ndarray of shape (channel, a, b)
        Whitened centred calibration samples.
    grid : tuple of int
        (u, v) of the plane.
    reference : ndarray of shape (channel,)
        Channel combination whose product with the maps is made real and positive.

    Returns
    -------
    maps : ndarray of shape (1, channel, u, v), complex128
    values : ndarray of shape (1, u, v), float64
        Largest eigenvalue of the local covariance over its trace.
    """
    from mrics.encoding._eigen import dominant

    channels, *size = calibration.shape
    images = centred_ifft(_padded(calibration, grid))
    box = tuple(max(1, round(_CELLS * n / s)) for n, s in zip(grid, size, strict=True))
    packed = np.empty((grid[0], channels * (channels + 1) // 2, grid[1]), np.complex128)
    trace = np.zeros(grid)
    for pair, (c, d) in enumerate(zip(*np.triu_indices(channels), strict=True)):
        product = images[c] * images[d].conj()
        packed[:, pair].real = uniform_filter(product.real, box, mode="nearest")
        packed[:, pair].imag = uniform_filter(product.imag, box, mode="nearest")
        if c == d:
            trace += packed[:, pair].real
    maps = np.empty((1, channels, *grid), np.complex128)
    values = np.empty((1, *grid))
    dominant(packed, np.ascontiguousarray(reference, np.complex128), maps, values)
    np.divide(values[0], trace, out=values[0], where=trace > 0)
    return maps, values


def _padded(calibration: Array, grid: tuple[int, int]) -> Array:
    """Calibration samples under a raised cosine, on the whole centred grid."""
    channels, *size = calibration.shape
    whole = np.zeros((channels, *grid), np.complex128)
    place: list[slice] = []
    window = np.ones(tuple(size))
    for axis, (n, s) in enumerate(zip(grid, size, strict=True)):
        place.append(slice(n // 2 - s // 2, n // 2 - s // 2 + s))
        if s < n:
            taper = np.cos(np.pi * (np.arange(s) - s // 2) / (s + 1)) ** 2
            window *= taper.reshape(-1, 1) if axis == 0 else taper.reshape(1, -1)
    whole[:, place[0], place[1]] = calibration * window
    return whole
