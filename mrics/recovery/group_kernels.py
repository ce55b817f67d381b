"""Compiled steps of one row of groups: complex values shrunk by their joint modulus.

A group is the differences at a pixel, or a coefficient's frames. Each step runs over one row of one
member and touches few arrays: with more of them a compiler gives up its checks for overlap, and
with them the vectors.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.recovery.kernels import compiled


@compiled
def add_squares(row: Any, first: Any, out: Any) -> None:
    """Out (+)= |row|^2, set where ``first``."""
    if first:
        for j in range(len(out)):
            out[j] = row[2 * j] * row[2 * j] + row[2 * j + 1] * row[2 * j + 1]
    else:
        for j in range(len(out)):
            out[j] += row[2 * j] * row[2 * j] + row[2 * j + 1] * row[2 * j + 1]


@compiled
def to_factors(squares: Any, cut: Any) -> None:
    """Squared moduli become the part that shrinking takes off: min(1, cut / modulus)."""
    one = squares.dtype.type(1)
    tiny = squares.dtype.type(1e-36)
    for j in range(len(squares)):
        squares[j] = min(one, cut / np.sqrt(squares[j] + tiny))


@compiled
def move_row(v: Any, c: Any, factor: Any, relax: Any, first: Any, q2: Any) -> Any:
    """V += relax * (c - z) for z = v - factor * v; returns the sum of |c - z|^2.

    ``q2`` (+)= |c - h|^2 with h = 2 z - v, set where ``first``.
    """
    change = v.dtype.type(0)
    if first:
        for j in range(len(factor)):
            q2[j] = 0
    for j in range(len(factor)):
        vr, vi = v[2 * j], v[2 * j + 1]
        pr, pi = factor[j] * vr, factor[j] * vi
        dr, di = c[2 * j] - vr + pr, c[2 * j + 1] - vi + pi
        qr, qi = dr + pr, di + pi
        q2[j] += qr * qr + qi * qi
        change += dr * dr + di * di
        v[2 * j] = vr + relax * dr
        v[2 * j + 1] = vi + relax * di
    return change


@compiled
def dual_row(v: Any, factor: Any, rho: Any, out: Any) -> None:
    """Out = rho h of the state v."""
    one = v.dtype.type(1)
    for j in range(len(factor)):
        h = rho * (one - factor[j] - factor[j])
        out[2 * j] = h * v[2 * j]
        out[2 * j + 1] = h * v[2 * j + 1]


@compiled
def sums_of(squares: Any) -> Any:
    """Sum of the square roots, and sum."""
    roots = squares.dtype.type(0)
    total = roots
    for j in range(len(squares)):
        roots += np.sqrt(squares[j])
        total += squares[j]
    return roots, total


@compiled
def raise_top(values: Any, top: Any) -> None:
    """Top = max(top, values)."""
    for j in range(len(top)):
        top[j] = max(top[j], values[j])
