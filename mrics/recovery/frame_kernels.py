"""Compiled halves of the splitting for undecimated wavelet bands; conventions of ``kernels``.

One level takes the approximation of the level before, with filters spread by ``gap`` samples,
periodic on a plane of any size. Filters are scaled so that low and high pass together keep energy
(a Parseval frame). Bands of a level: high pass along axis 1, along axis 0, both.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.recovery.kernels import compiled


@compiled
def _spread(row: Any, length: Any, start: Any, count: Any, out: Any) -> None:
    """``count`` complex samples of a periodic row from ``start`` (which may be negative)."""
    at = 0
    index = start % length
    while at < count:
        part = min(length - index, count - at)
        source = row[2 * index : 2 * (index + part)]
        target = out[2 * at : 2 * (at + part)]
        for j in range(len(target)):
            target[j] = source[j]
        at += part
        index = 0


@compiled
def _rows_forward(
    source: Any, i: Any, gap: Any, rows: Any, width: Any, low: Any, high: Any, taps: Any,
    out_low: Any, out_high: Any,
) -> None:  # fmt: skip
    """Filter along axis 0 at row i; ``taps`` is scratch for wrapped rows."""
    count = len(low)
    if i + (count - 1) * gap < rows:
        for j in range(width):
            value = source[i, j]
            a = value * low[0]
            b = value * high[0]
            for t in range(1, count):
                value = source[i + t * gap, j]
                a += value * low[t]
                b += value * high[t]
            out_low[j] = a
            out_high[j] = b
    else:
        for t in range(count):
            taps[t, :width] = source[(i + t * gap) % rows]
        for j in range(width):
            value = taps[0, j]
            a = value * low[0]
            b = value * high[0]
            for t in range(1, count):
                value = taps[t, j]
                a += value * low[t]
                b += value * high[t]
            out_low[j] = a
            out_high[j] = b


@compiled
def _add_taps(row: Any, near: Any, far: Any, one: Any, two: Any, first: Any, out: Any) -> None:
    """Out (+)= one * row[near:] + two * row[far:], set where ``first``.

    Two taps a pass on slices: a loop over all taps at run-time offsets does not become vectors.
    """
    a, b = row[near:], row[far:]
    if first:
        for j in range(len(out)):
            out[j] = one * a[j] + two * b[j]
    else:
        for j in range(len(out)):
            out[j] += one * a[j] + two * b[j]


@compiled
def _columns_forward(row: Any, gap: Any, low: Any, high: Any, out_low: Any, out_high: Any) -> None:
    """Filter along an extended row; filters of orthogonal wavelets have an even length."""
    step = 2 * gap
    for t in range(0, len(low), 2):
        near, far = t * step, (t + 1) * step
        _add_taps(row, near, far, low[t], low[t + 1], t == 0, out_low)
        _add_taps(row, near, far, high[t], high[t + 1], t == 0, out_high)


@compiled
def _update(
    v: Any, c: Any, cut: Any, rho: Any, relax: Any, one: Any, tiny: Any, zero: Any, top: Any
) -> Any:
    """One row of one band: the state moves; sums of |c|, |c - z|^2, |c|^2."""
    norm1 = zero
    change = zero
    norm = zero
    for j in range(len(v) // 2):
        vr, vi = v[2 * j], v[2 * j + 1]
        cr, ci = c[2 * j], c[2 * j + 1]
        f = min(one, cut / np.sqrt(vr * vr + vi * vi + tiny))
        pr, pi = f * vr, f * vi
        dr, di = cr - vr + pr, ci - vi + pi
        qr, qi = dr + pr, di + pi
        top[j] = max(top[j], qr * qr + qi * qi)
        c2 = cr * cr + ci * ci
        norm1 += np.sqrt(c2)
        change += dr * dr + di * di
        norm += c2
        v[2 * j] = vr + relax * dr
        v[2 * j + 1] = vi + relax * di
    return norm1, change, norm


@compiled
def frame_push(
    source: Any, state: Any, gap: Any, low: Any, high: Any, weight: Any, rho: Any, relax: Any,
    approximation: Any, taps: Any, lines: Any, sums: Any,
) -> None:  # fmt: skip
    """One level of K x with its half of the splitting.

    ``source`` is the approximation before, ``approximation`` the one after; ``state``
    (3, rows, 2 columns). ``sums`` (6,) gains as in ``split_bands`` (the second is a maximum).
    """
    rows, width = source.shape
    length = width // 2
    reach = length + (len(low) - 1) * gap
    zero = source.dtype.type(0)
    one = source.dtype.type(1)
    tiny = source.dtype.type(1e-36)
    cut = weight / rho
    top = np.zeros(length, source.dtype)
    low_row, high_row = lines[0][:width], lines[1][:width]
    extended, detail, other = lines[2], lines[3][:width], lines[4][:width]
    for i in range(rows):
        _rows_forward(source, i, gap, rows, width, low, high, taps, low_row, high_row)
        _spread(low_row, length, 0, reach, extended)
        _columns_forward(extended, gap, low, high, approximation[i], detail)
        a1, b1, c1 = _update(state[0, i], detail, cut, rho, relax, one, tiny, zero, top)
        _spread(high_row, length, 0, reach, extended)
        _columns_forward(extended, gap, low, high, other, detail)
        a2, b2, c2 = _update(state[1, i], other, cut, rho, relax, one, tiny, zero, top)
        a3, b3, c3 = _update(state[2, i], detail, cut, rho, relax, one, tiny, zero, top)
        sums[0] += weight * (a1 + a2 + a3)
        sums[4] += b1 + b2 + b3
        sums[5] += c1 + c2 + c3
    sums[1] = max(sums[1], rho * np.sqrt(top.max()) / weight)


@compiled
def _dual_row(v: Any, cut: Any, rho: Any, one: Any, tiny: Any, out: Any) -> None:
    """Out = rho h = rho (2 shrink(v) - v)."""
    for j in range(len(v) // 2):
        vr, vi = v[2 * j], v[2 * j + 1]
        f = min(one, cut / np.sqrt(vr * vr + vi * vi + tiny))
        h = rho * (one - f - f)
        out[2 * j] = h * vr
        out[2 * j + 1] = h * vi


@compiled
def _columns_adjoint(row_low: Any, row_high: Any, gap: Any, low: Any, high: Any, out: Any) -> None:
    """out[j] = sum_t low[t] row_low[j - t gap] + high[t] row_high[...], rows extended before."""
    step = 2 * gap
    before = (len(low) - 1) * step
    for t in range(0, len(low), 2):
        near, far = before - t * step, before - (t + 1) * step
        _add_taps(row_low, near, far, low[t], low[t + 1], t == 0, out)
        _add_taps(row_high, near, far, high[t], high[t + 1], False, out)


@compiled
def frame_pull(
    approximation: Any, state: Any, gap: Any, low: Any, high: Any, weight: Any, rho: Any,
    plane_low: Any, plane_high: Any, taps: Any, lines: Any, out: Any, empty: Any,
) -> None:  # fmt: skip
    """One level of rho K^H h: ``out`` is the approximation of the level before.

    ``empty``: the approximation after is zero (coarsest level, not penalised) and is not read.
    """
    rows, width = out.shape
    length = width // 2
    reach = length + (len(low) - 1) * gap
    start = -(len(low) - 1) * gap
    one = out.dtype.type(1)
    tiny = out.dtype.type(1e-36)
    cut = weight / rho
    dual, first, second = lines[0][:width], lines[1], lines[2]
    for i in range(rows):
        if empty:
            first[:] = 0
        else:
            _spread(approximation[i], length, start, reach, first)
        _dual_row(state[0, i], cut, rho, one, tiny, dual)
        _spread(dual, length, start, reach, second)
        _columns_adjoint(first, second, gap, low, high, plane_low[i])
        _dual_row(state[1, i], cut, rho, one, tiny, dual)
        _spread(dual, length, start, reach, first)
        _dual_row(state[2, i], cut, rho, one, tiny, dual)
        _spread(dual, length, start, reach, second)
        _columns_adjoint(first, second, gap, low, high, plane_high[i])
    count = len(low)
    for i in range(rows):
        if i - (count - 1) * gap >= 0:
            for j in range(width):
                a = plane_low[i, j] * low[0] + plane_high[i, j] * high[0]
                for t in range(1, count):
                    a += plane_low[i - t * gap, j] * low[t]
                    a += plane_high[i - t * gap, j] * high[t]
                out[i, j] = a
        else:
            for t in range(count):
                index = (i - t * gap) % rows
                taps[t, :width] = plane_low[index]
                taps[count + t, :width] = plane_high[index]
            for j in range(width):
                a = taps[0, j] * low[0] + taps[count, j] * high[0]
                for t in range(1, count):
                    a += taps[t, j] * low[t] + taps[count + t, j] * high[t]
                out[i, j] = a
