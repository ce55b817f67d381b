"""Leading eigenvectors of one small Hermitian matrix per pixel, compiled."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.numerics.kernel_cache import numba

Array = NDArray[Any]


@numba.njit(nogil=True, cache=True, error_model="numpy", fastmath={"contract", "reassoc", "nsz"})
def dominant(packed: Array, reference: Array, maps: Array, values: Array) -> None:
    """Fill ``maps`` and ``values`` with leading eigenvectors of non-negative matrices.

    Repeated squaring separates the leading eigenvector; power steps with the last square follow
    until it stands still; further sets come from the matrix less what was found.

    Parameters
    ----------
    packed : complex128 array (u, pairs, v)
        Upper triangles, row by row.
    reference : complex128 array (channel,)
        conj(reference) . vector is made real and positive.
    maps : complex128 array (sets, channel, u, v)
        Unit vectors out.
    values : float64 array (sets, u, v)
        Eigenvalues out.
    """
    sets, channels, height, width = maps.shape
    squarings = 6 if channels <= 12 else 2
    h = np.empty((channels, channels), np.complex128)
    a = np.empty((channels, channels), np.complex128)
    b = np.empty((channels, channels), np.complex128)
    x = np.empty(channels, np.complex128)
    y = np.empty(channels, np.complex128)
    for i in range(height):
        for j in range(width):
            k = 0
            for c in range(channels):
                for d in range(c, channels):
                    h[c, d] = packed[i, k, j]
                    h[d, c] = np.conj(h[c, d])
                    k += 1
            for s in range(sets):
                trace = 0.0
                for c in range(channels):
                    trace += h[c, c].real
                if trace <= 1e-300:
                    values[s, i, j] = 0.0
                    for c in range(channels):
                        maps[s, c, i, j] = 0.0
                    continue
                for c in range(channels):
                    for d in range(channels):
                        a[c, d] = h[c, d] / trace
                for _ in range(squarings):
                    trace = 0.0
                    for c in range(channels):
                        for d in range(c, channels):
                            total = 0.0 + 0.0j
                            for e in range(channels):
                                total += a[c, e] * np.conj(a[d, e])
                            b[c, d] = total
                        trace += b[c, c].real
                    for c in range(channels):
                        for d in range(c, channels):
                            a[c, d] = b[c, d] / trace
                            a[d, c] = np.conj(a[c, d])
                best = 0
                for c in range(1, channels):
                    if a[c, c].real > a[best, best].real:
                        best = c
                norm = 0.0
                for c in range(channels):
                    x[c] = a[c, best]
                    norm += x[c].real ** 2 + x[c].imag ** 2
                norm = np.sqrt(norm)
                for c in range(channels):
                    x[c] /= norm
                for _ in range(60):
                    norm = 0.0
                    for c in range(channels):
                        total = 0.0 + 0.0j
                        for d in range(channels):
                            total += a[c, d] * x[d]
                        y[c] = total
                        norm += total.real**2 + total.imag**2
                    norm = np.sqrt(norm)
                    change = 0.0
                    for c in range(channels):
                        y[c] /= norm
                        step = y[c] - x[c]
                        change += step.real**2 + step.imag**2
                        x[c] = y[c]
                    if change < 1e-16:
                        break
                value = 0.0
                turn = 0.0 + 0.0j
                for c in range(channels):
                    total = 0.0 + 0.0j
                    for d in range(channels):
                        total += h[c, d] * x[d]
                    value += x[c].real * total.real + x[c].imag * total.imag
                    turn += np.conj(reference[c]) * x[c]
                size = np.abs(turn)
                turn = np.conj(turn) / size if size > 0.0 else 1.0 + 0.0j
                values[s, i, j] = value
                for c in range(channels):
                    maps[s, c, i, j] = x[c] * turn
                for c in range(channels):
                    for d in range(channels):
                        h[c, d] -= value * x[c] * np.conj(x[d])
