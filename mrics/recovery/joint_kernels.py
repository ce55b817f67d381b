"""Compiled shrinkage of groups over frames; conventions of ``penalty_kernels``."""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.recovery.kernels import compiled


@compiled
def _group_factor(values: Any, i: Any, left: Any, right: Any, cut: Any, out: Any) -> None:
    """Out[j] = the part that shrinking takes off group j of a row: min(1, cut / modulus)."""
    one = values.dtype.type(1)
    tiny = values.dtype.type(1e-36)
    out[:] = tiny
    for frame in range(values.shape[0]):
        row = values[frame, i, left:right]
        for j in range(len(row) // 2):
            out[j] += row[2 * j] * row[2 * j] + row[2 * j + 1] * row[2 * j + 1]
    for j in range(len(out)):
        out[j] = min(one, cut / np.sqrt(out[j]))


@compiled
def shrink_groups(values: Any, bands: Any, thresholds: Any) -> None:
    """Shrink packed coefficients (frame, rows, 2 columns) in place by their modulus over frames."""
    for band in range(bands.shape[0]):
        if thresholds[band] > 0:
            left, right = 2 * bands[band, 2], 2 * bands[band, 3]
            factor = np.empty((right - left) // 2, values.dtype)
            for i in range(bands[band, 0], bands[band, 1]):
                _group_factor(values, i, left, right, thresholds[band], factor)
                for frame in range(values.shape[0]):
                    row = values[frame, i, left:right]
                    for j in range(len(factor)):
                        row[2 * j] -= factor[j] * row[2 * j]
                        row[2 * j + 1] -= factor[j] * row[2 * j + 1]


@compiled
def split_groups(
    state: Any, coefficients: Any, bands: Any, weights: Any, rhos: Any, relax: Any, sums: Any
) -> None:
    """:func:`penalty_kernels.split_bands` for groups: arrays (frame, rows, 2 columns).

    ``rhos``: one for each band. ``sums`` (6,) alike, moduli taken over frames.
    """
    one = weights.dtype.type(1)
    sums[:] = 0
    for band in range(bands.shape[0]):
        weight, rho = weights[band], rhos[band]
        left, right = 2 * bands[band, 2], 2 * bands[band, 3]
        length = (right - left) // 2
        factor, c2, q2, top = (
            np.zeros(length, weights.dtype), np.empty(length, weights.dtype),
            np.empty(length, weights.dtype), np.zeros(length, weights.dtype),
        )  # fmt: skip
        for i in range(bands[band, 0], bands[band, 1]):
            _group_factor(state, i, left, right, weight / rho, factor)
            c2[:] = 0
            q2[:] = 0
            change = c2[0]
            for frame in range(state.shape[0]):
                v, c = state[frame, i, left:right], coefficients[frame, i, left:right]
                for j in range(length):
                    f = factor[j]
                    for part in range(2):
                        at = 2 * j + part
                        d = c[at] - v[at] + f * v[at]
                        q = d + f * v[at]
                        c2[j] += c[at] * c[at]
                        q2[j] += q * q
                        change += d * d
                        v[at] += relax * d
            _group_factor(state, i, left, right, weight / rho, factor)
            for frame in range(state.shape[0]):
                v, c = state[frame, i, left:right], coefficients[frame, i, left:right]
                for j in range(length):
                    h = rho * (one - factor[j] - factor[j])
                    c[2 * j] = h * v[2 * j]
                    c[2 * j + 1] = h * v[2 * j + 1]
            if weight > 0:
                sums[0] += weight * np.sqrt(c2).sum()
                top = np.maximum(top, q2)
            else:
                sums[2] += rho * rho * q2.sum()
                sums[3] += c2.sum()
            sums[4] += change
            sums[5] += c2.sum()
        if weight > 0:
            sums[1] = max(sums[1], rho * np.sqrt(top.max()) / weight)
