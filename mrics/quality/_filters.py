"""Compiled plane filters: the SSIM map, and sums of separable filters.

Edges are mirrored with the edge sample repeated (d c b a | a b c d | d c b a), as in
``scipy.ndimage``'s "reflect". Each kernel works row by row: one column pass into line buffers, one
row pass out of them, so that a plane is read while its rows are in cache.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.numerics.kernel_cache import numba

Plane = NDArray[np.float64]


@numba.njit(nogil=True, cache=True)
def _mirror(index: int, length: int) -> int:
    while index < 0 or index >= length:
        index = -index - 1 if index < 0 else 2 * length - index - 1
    return index


@numba.njit(nogil=True, cache=True)
def _pad_line(line: Any, length: int, radius: int) -> None:
    for j in range(radius):
        line[radius - 1 - j] = line[radius + _mirror(-1 - j, length)]
        line[radius + length + j] = line[radius + _mirror(length + j, length)]


@numba.njit(nogil=True, cache=True)
def ssim_plane(
    x: Plane, y: Plane, taps: Plane, c1: float, c2: float, out: Plane, contrast: Plane
) -> None:
    """SSIM map of two planes into ``out``, its contrast-structure term into ``contrast``.

    ``taps`` are the 1-D window weights, odd in number.
    """
    rows, columns = x.shape
    radius = taps.size // 2
    lines = np.empty((4, columns + 2 * radius))
    means = np.empty((4, columns))
    for i in range(rows):
        lines[:] = 0.0
        for t in range(taps.size):
            w = taps[t]
            row = _mirror(i + t - radius, rows)
            for j in range(columns):
                a = x[row, j]
                b = y[row, j]
                lines[0, radius + j] += w * a
                lines[1, radius + j] += w * b
                lines[2, radius + j] += w * (a * a + b * b)
                lines[3, radius + j] += w * (a * b)
        means[:] = 0.0
        for q in range(4):
            _pad_line(lines[q], columns, radius)
            for t in range(taps.size):
                w = taps[t]
                for j in range(columns):
                    means[q, j] += w * lines[q, j + t]
        for j in range(columns):
            a = means[0, j]
            b = means[1, j]
            squares = a * a + b * b
            product = a * b
            variances = means[2, j] - squares
            covariance = means[3, j] - product
            contrast[i, j] = (2.0 * covariance + c2) / (variances + c2)
            out[i, j] = (2.0 * product + c1) / (squares + c1) * contrast[i, j]


@numba.njit(nogil=True, cache=True)
def separable_plane(x: Plane, column_taps: Plane, row_taps: Plane, out: Plane) -> None:
    """Sum over q of the separable filters ``column_taps[q]`` x ``row_taps[q]``, into ``out``."""
    rows, columns = x.shape
    count, length = column_taps.shape
    radius = length // 2
    line = np.empty(columns + 2 * radius)
    for i in range(rows):
        for j in range(columns):
            out[i, j] = 0.0
        for q in range(count):
            line[:] = 0.0
            for t in range(length):
                w = column_taps[q, t]
                row = _mirror(i + t - radius, rows)
                for j in range(columns):
                    line[radius + j] += w * x[row, j]
            _pad_line(line, columns, radius)
            for t in range(length):
                w = row_taps[q, t]
                for j in range(columns):
                    out[i, j] += w * line[j + t]
