"""Orthonormal periodized wavelet transform of one complex plane, compiled.

A plane of ``n0 x n1`` complex values is held as a float array ``(n0, 2 n1)`` of alternating real
and imaginary parts. Coefficients are packed as usual: the approximation in the upper left corner,
and at each level, for the half sizes ``a x b``, details at ``[:a, b:2b]`` (high pass along axis 1),
``[a:2a, :b]`` (high pass along axis 0) and ``[a:2a, b:2b]`` (both). Alignment is that of
PyWavelets' mode "periodization", so the coefficients are equal to rounding.

The pass along axis 0 runs over whole rows; the pass along axis 1 first separates even and odd
samples, so that both are unit-stride loops a compiler turns into vector instructions. Filters come
as tuples: their length is then a constant of the compiled kernel and the loop over taps unrolls.
"""

from __future__ import annotations

from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import pywt
from numpy.typing import NDArray

from mrics.numerics.kernel_cache import numba

Array = NDArray[Any]
compiled: Any = numba.njit(
    nogil=True, cache=True, error_model="numpy", fastmath={"contract", "reassoc", "nsz", "arcp"}
)


def kernels_kept() -> bool:
    """Whether kernels compiled by an earlier run are on disk; without them a run compiles first."""
    folder = Path(_split.stats.cache_path)
    return any(folder.glob(f"{Path(__file__).stem}.*.nbi"))


@lru_cache(maxsize=64)
def filters(name: str, dtype: str) -> tuple[tuple[float, ...], tuple[float, ...]]:
    """Low and high pass taps of an orthonormal wavelet, ordered for correlation.

    Parameters
    ----------
    name : str
        A discrete orthogonal wavelet known to PyWavelets (``haar``, ``db2`` ... ``sym8``).
    dtype : str
        Real type of the taps, ``float32`` or ``float64``.
    """
    wavelet = pywt.Wavelet(name)
    real = np.dtype(dtype).type
    low = tuple(real(value) for value in reversed(wavelet.dec_lo))
    high = tuple(real(value) for value in reversed(wavelet.dec_hi))
    return low, high


class PlaneWavelet:
    """Transform of one plane with its scratch memory: make one per thread.

    Parameters
    ----------
    shape : tuple of int
        Plane size; both lengths must be multiples of ``2**levels``.
    wavelet : str
        Name of the orthogonal wavelet.
    levels : int
        Number of levels, at least 1.
    dtype : complex64 or complex128
    """

    def __init__(self, shape: tuple[int, int], wavelet: str, levels: int, dtype: Any) -> None:
        real = np.dtype(dtype).type(0).real.dtype
        self.shape, self.levels = shape, levels
        self.low, self.high = filters(wavelet, real.name)
        taps = len(self.low)
        n0, n1 = shape
        self._rows = np.empty((taps, 2 * n1), real)
        self._lines = np.empty((4, 2 * n1 + 4 * taps), real)
        # What one loop reads and writes must not lie in one array: it would not become vectors.
        self._even, self._odd = np.empty(2 * n1, real), np.empty(2 * n1, real)
        self._near = np.empty((n0 // 2, n1), real)
        self._far = np.empty((max(1, n0 // 4), max(2, n1 // 2)), real)
        self._plane = np.empty((n0, 2 * n1), real)

    def analyse(self, image: Array, coefficients: Array) -> None:
        """Coefficients of ``image``; both are float arrays ``(n0, 2 n1)``, C-contiguous."""
        _analyse(
            image, coefficients, *self.shape, self.levels, self.low, self.high,
            self._near, self._far, self._rows, self._lines,
        )  # fmt: skip

    def synthesise(self, coefficients: Array, image: Array) -> None:
        """Image of ``coefficients``, the inverse and the adjoint of :meth:`analyse`."""
        _synthesise(
            coefficients, image, *self.shape, self.levels, self.low, self.high,
            self._near, self._far, self._plane, self._rows, self._lines, self._even, self._odd,
        )  # fmt: skip


@compiled
def _split(row: Any, length: Any, before: Any, taps: Any, even: Any, odd: Any) -> None:
    """Even and odd samples of ``row`` extended periodically, starting ``before`` samples early."""
    for k in range(length // 2 + taps // 2):
        first = 2 * k - before
        second = first + 1
        if first < 0 or second >= length:
            first %= length
            second %= length
        even[2 * k] = row[2 * first]
        even[2 * k + 1] = row[2 * first + 1]
        odd[2 * k] = row[2 * second]
        odd[2 * k + 1] = row[2 * second + 1]


@compiled
def _row_analyse(
    row: Any,
    length: Any,
    low: Any,
    high: Any,
    even: Any,
    odd: Any,
    out_low: Any,
    out_high: Any,
    at: Any,
) -> None:
    """One level along a row: low pass to ``out_low[:]``, high pass to ``out_high[at:]``."""
    half = len(low) // 2
    _split(row, length, half - 1, len(low), even, odd)
    for j in range(length):
        a = even[j] * low[0] + odd[j] * low[1]
        b = even[j] * high[0] + odd[j] * high[1]
        for t in range(1, half):
            e = even[j + 2 * t]
            o = odd[j + 2 * t]
            a += e * low[2 * t] + o * low[2 * t + 1]
            b += e * high[2 * t] + o * high[2 * t + 1]
        out_low[j] = a
        out_high[at + j] = b


@compiled
def _column_analyse(
    rows: Any, first: Any, width: Any, low: Any, high: Any, out_low: Any, out_high: Any
) -> None:
    """Low and high pass over ``len(low)`` successive rows starting at ``first``."""
    for j in range(width):
        v = rows[first, j]
        a = v * low[0]
        b = v * high[0]
        for t in range(1, len(low)):
            v = rows[first + t, j]
            a += v * low[t]
            b += v * high[t]
        out_low[j] = a
        out_high[j] = b


@compiled
def _analyse(
    image: Any,
    out: Any,
    n0: Any,
    n1: Any,
    levels: Any,
    low: Any,
    high: Any,
    near: Any,
    far: Any,
    rows: Any,
    lines: Any,
) -> None:
    taps = len(low)
    before = taps // 2 - 1
    source = image
    for level in range(levels):
        half0, width = n0 // 2, 2 * n1
        approximation = near if level % 2 == 0 else far
        if level == levels - 1:
            approximation = out
        for k in range(half0):
            first = 2 * k - before
            if first >= 0 and first + taps <= n0:
                _column_analyse(source, first, width, low, high, lines[0], lines[1])
            else:
                for t in range(taps):
                    index = (first + t) % n0
                    for j in range(width):
                        rows[t, j] = source[index, j]
                _column_analyse(rows, 0, width, low, high, lines[0], lines[1])
            _row_analyse(lines[0], n1, low, high, lines[2], lines[3], approximation[k], out[k], n1)
            _row_analyse(
                lines[1], n1, low, high, lines[2], lines[3], out[half0 + k], out[half0 + k], n1
            )
        source = approximation
        n0 //= 2
        n1 //= 2


@compiled
def _row_synthesise(
    row_low: Any,
    row_high: Any,
    at: Any,
    length: Any,
    low: Any,
    high: Any,
    lines: Any,
    even: Any,
    odd: Any,
    out: Any,
) -> None:
    """Inverse of :func:`_row_analyse` for one row of ``length`` complex samples."""
    half = len(low) // 2
    count = length // 2
    before = half - 1
    ext_low, ext_high = lines[0], lines[1]
    for k in range(before):
        index = (k - before) % count
        ext_low[2 * k] = row_low[2 * index]
        ext_low[2 * k + 1] = row_low[2 * index + 1]
        ext_high[2 * k] = row_high[at + 2 * index]
        ext_high[2 * k + 1] = row_high[at + 2 * index + 1]
    for j in range(length):
        ext_low[2 * before + j] = row_low[j]
        ext_high[2 * before + j] = row_high[at + j]
    for j in range(length):
        a = ext_low[2 * before + j]
        b = ext_high[2 * before + j]
        e = a * low[0] + b * high[0]
        o = a * low[1] + b * high[1]
        for s in range(1, half):
            a = ext_low[2 * (before - s) + j]
            b = ext_high[2 * (before - s) + j]
            e += a * low[2 * s] + b * high[2 * s]
            o += a * low[2 * s + 1] + b * high[2 * s + 1]
        even[j] = e
        odd[j] = o
    for q in range(count):
        first = 2 * q - before
        second = first + 1
        if first < 0:
            first %= length
            second %= length
        out[2 * first] = even[2 * q]
        out[2 * first + 1] = even[2 * q + 1]
        out[2 * second] = odd[2 * q]
        out[2 * second + 1] = odd[2 * q + 1]


@compiled
def _column_synthesise(
    lows: Any,
    highs: Any,
    at_low: Any,
    at_high: Any,
    width: Any,
    low: Any,
    high: Any,
    even: Any,
    odd: Any,
) -> None:
    """Two output rows from rows ``at, at - 1, ...`` of the low and high halves."""
    half = len(low) // 2
    for j in range(width):
        a = lows[at_low, j]
        b = highs[at_high, j]
        e = a * low[0] + b * high[0]
        o = a * low[1] + b * high[1]
        for s in range(1, half):
            a = lows[at_low - s, j]
            b = highs[at_high - s, j]
            e += a * low[2 * s] + b * high[2 * s]
            o += a * low[2 * s + 1] + b * high[2 * s + 1]
        even[j] = e
        odd[j] = o


@compiled
def _synthesise(
    coefficients: Any,
    image: Any,
    size0: Any,
    size1: Any,
    levels: Any,
    low: Any,
    high: Any,
    near: Any,
    far: Any,
    plane: Any,
    rows: Any,
    lines: Any,
    even: Any,
    odd: Any,
) -> None:
    half = len(low) // 2
    before = half - 1
    for level in range(levels - 1, -1, -1):
        n0 = size0 >> level
        n1 = size1 >> level
        half0, width = n0 // 2, 2 * n1
        approximation = near if level % 2 == 0 else far
        if level == levels - 1:
            approximation = coefficients
        target = image
        if level > 0:
            target = near if level % 2 == 1 else far
        for k in range(half0):
            _row_synthesise(
                approximation[k], coefficients[k], n1, n1, low, high, lines, even, odd, plane[k]
            )
            _row_synthesise(
                coefficients[half0 + k], coefficients[half0 + k], n1, n1, low, high, lines, even,
                odd, plane[half0 + k],
            )  # fmt: skip
        for q in range(min(before, half0)):
            for s in range(half):
                index = (q - s) % half0
                for j in range(width):
                    rows[half - 1 - s, j] = plane[index, j]
                    rows[2 * half - 1 - s, j] = plane[half0 + index, j]
            first, second = (2 * q - before) % n0, (2 * q - before + 1) % n0
            _column_synthesise(
                rows, rows, half - 1, 2 * half - 1, width, low, high, target[first], target[second]
            )
        for q in range(before, half0):
            first = 2 * q - before
            _column_synthesise(
                plane, plane, q, half0 + q, width, low, high, target[first], target[first + 1]
            )
