"""Compiled shrinkage of groups over frames; conventions of ``penalty_kernels``."""

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
def _group_factor(values: Any, i: Any, left: Any, right: Any, cut: Any, out: Any) -> None:
    """Out[j] = the part that shrinking takes off group j of a row."""
    for frame in range(values.shape[0]):
        add_squares(values[frame, i, left:right], frame == 0, out)
    to_factors(out, cut)


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
    sums[:] = 0
    for band in range(bands.shape[0]):
        weight, rho = weights[band], rhos[band]
        left, right = 2 * bands[band, 2], 2 * bands[band, 3]
        top = np.zeros((right - left) // 2, weights.dtype)
        factor, c2, q2 = np.empty_like(top), np.empty_like(top), np.empty_like(top)
        for i in range(bands[band, 0], bands[band, 1]):
            _group_factor(state, i, left, right, weight / rho, factor)
            for frame in range(state.shape[0]):
                v, c = state[frame, i, left:right], coefficients[frame, i, left:right]
                add_squares(c, frame == 0, c2)
                sums[4] += move_row(v, c, factor, relax, frame == 0, q2)
            _group_factor(state, i, left, right, weight / rho, factor)
            for frame in range(state.shape[0]):
                v, c = state[frame, i, left:right], coefficients[frame, i, left:right]
                dual_row(v, factor, rho, c)
            norm1, norm = sums_of(c2)
            sums[5] += norm
            if weight > 0:
                sums[0] += weight * norm1
                raise_top(q2, top)
            else:
                sums[2] += rho * rho * q2.sum()
                sums[3] += norm
        if weight > 0:
            sums[1] = max(sums[1], rho * np.sqrt(top.max()) / weight)
