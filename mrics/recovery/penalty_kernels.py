"""Compiled halves of the splitting that belong to a penalty; conventions of ``kernels``.

With the state v, z = shrink(v) and h = 2 z - v, each kernel takes K x, moves the state,
v += relax * (K x - z), and leaves rho h of the new state for the next data half.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.recovery.group_kernels import (
    add_squares,
    dual_row,
    move_row,
    raise_top,
    sums_of,
    to_factors,
)
from mrics.recovery.kernels import compiled


@compiled
def split_bands(
    state: Any, coefficients: Any, bands: Any, weights: Any, rho: Any, relax: Any, sums: Any
) -> float:
    """Packed wavelet bands, shrunk by modulus with thresholds ``weights / rho``.

    ``coefficients`` hold K x on entry, rho h on return. ``sums`` (6,) is filled with the sum of
    weight * |K x|; the largest rho |K x - h| / weight over penalised bands; ||rho (K x - h)||^2
    and ||K x||^2 over the band of weight 0; ||K x - z||^2; ||K x||^2. Returns the sum of
    weight * |z| of the state that is left.
    """
    shrunk = 0.0
    one_norm = 0.0
    excess = 0.0
    free_dual = 0.0
    free_point = 0.0
    change = 0.0
    norm = 0.0
    zero = state.dtype.type(0)
    one = weights.dtype.type(1)
    tiny = weights.dtype.type(1e-36)
    top = np.empty(state.shape[1] // 2, state.dtype)  # running maxima per column vectorise
    for band in range(bands.shape[0]):
        weight = weights[band]
        cut = weight / rho
        top[:] = zero
        left, right = 2 * bands[band, 2], 2 * bands[band, 3]
        for i in range(bands[band, 0], bands[band, 1]):
            v = state[i, left:right]
            c = coefficients[i, left:right]
            row_norm1 = zero
            row_dual = zero
            row_change = zero
            row_norm = zero
            row_shrunk = zero
            for j in range(len(v) // 2):
                vr, vi = v[2 * j], v[2 * j + 1]
                cr, ci = c[2 * j], c[2 * j + 1]
                f = min(one, cut / np.sqrt(vr * vr + vi * vi + tiny))
                zr, zi = vr - f * vr, vi - f * vi
                dr, di = cr - zr, ci - zi
                qr, qi = rho * (dr + f * vr), rho * (di + f * vi)
                q2 = qr * qr + qi * qi
                top[j] = max(top[j], q2)
                c2 = cr * cr + ci * ci
                row_norm1 += np.sqrt(c2)
                row_dual += q2
                row_change += dr * dr + di * di
                row_norm += c2
                vr += relax * dr
                vi += relax * di
                v[2 * j] = vr
                v[2 * j + 1] = vi
                modulus = np.sqrt(vr * vr + vi * vi + tiny)
                f = min(one, cut / modulus)
                row_shrunk += modulus - f * modulus
                h = rho * (one - f - f)
                c[2 * j] = h * vr
                c[2 * j + 1] = h * vi
            if weight > 0:
                one_norm += weight * row_norm1
                shrunk += weight * row_shrunk
            else:
                free_dual += row_dual
                free_point += row_norm
            change += row_change
            norm += row_norm
        if weight > 0:
            excess = max(excess, np.sqrt(top.max()) / weight)
    sums[0] = one_norm
    sums[1] = excess
    sums[2] = free_dual
    sums[3] = free_point
    sums[4] = change
    sums[5] = norm
    return shrunk


@compiled
def split_gradient(state: Any, image: Any, weight: Any, rho: Any, relax: Any, sums: Any) -> None:
    """Periodic forward differences of a complex plane, shrunk together (isotropic).

    ``state`` is (2, rows, 2 columns); ``image`` holds x on entry and rho K^H h on return.
    ``sums`` as for :func:`split_bands`.
    """
    rows, width = image.shape
    sums[:] = 0
    cut = weight / rho
    top = np.zeros(width // 2, image.dtype)
    c2, q2, factor = np.empty_like(top), np.empty_like(top), np.empty_like(top)
    first = image[0].copy()
    down, over, above = np.empty_like(first), np.empty_like(first), np.zeros_like(first)
    right = np.empty(width + 2, image.dtype)
    for i in range(rows):
        x = image[i]
        below = image[i + 1] if i + 1 < rows else first
        v, w = state[0, i], state[1, i]
        for j in range(width):
            down[j] = below[j] - x[j]
        for j in range(width - 2):
            over[j] = x[j + 2] - x[j]
        over[width - 2] = x[0] - x[width - 2]
        over[width - 1] = x[1] - x[width - 1]
        add_squares(down, True, c2)
        add_squares(over, False, c2)
        add_squares(v, True, factor)
        add_squares(w, False, factor)
        to_factors(factor, cut)
        sums[4] += move_row(v, down, factor, relax, True, q2)
        sums[4] += move_row(w, over, factor, relax, False, q2)
        norm1, norm = sums_of(c2)
        sums[0] += weight * norm1
        sums[5] += norm
        raise_top(q2, top)
        add_squares(v, True, factor)
        add_squares(w, False, factor)
        to_factors(factor, cut)
        dual_row(v, factor, rho, down)
        dual_row(w, factor, rho, right[2:])
        right[0], right[1] = right[width], right[width + 1]
        for j in range(width):
            x[j] = above[j] - down[j] + right[j] - right[j + 2]
        above[:] = down
    for j in range(width):
        image[0, j] += above[j]
    sums[1] = rho * np.sqrt(top.max()) / weight
