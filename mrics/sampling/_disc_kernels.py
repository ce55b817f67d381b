"""Compiled dart throwing on a grid."""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.numerics.kernel_cache import numba


@numba.njit(nogil=True, cache=True)
def throw(
    candidates: Any, square: Any, band: Any, quota: Any, count: int, taken: Any
) -> int:  # pragma: no cover - compiled
    """Offer candidates in turn; keep one when no kept one is too near and its band is not full.

    Parameters
    ----------
    candidates : ndarray of int64
        Flat positions, in the order they are offered.
    square : ndarray of float64, shape (n_u, n_v)
        Squared radius of every position; two positions conflict when their squared distance is
        less than the smaller of their squared radii. Infinite at positions already taken counts
        for the other's radius alone.
    band : ndarray of int64, shape (n_u * n_v,)
        Band of every position.
    quota : ndarray of int64
        Positions each band may still take; lowered in place.
    count : int
        Positions that may still be taken in all.
    taken : ndarray of bool, shape (n_u, n_v)
        Kept positions; extended in place.

    Returns
    -------
    int
        ``count`` less the positions kept.
    """
    n_u, n_v = square.shape
    for flat in candidates:
        if count == 0:
            break
        if quota[band[flat]] == 0:
            continue
        u = flat // n_v
        v = flat - u * n_v
        if taken[u, v]:
            continue
        own = square[u, v]
        reach = int(np.ceil(np.sqrt(own))) - 1
        while (reach + 1) * (reach + 1) < own:
            reach += 1
        free = True
        for step in range(2 * reach + 1):
            du = (step + 1) // 2 if step % 2 else -(step // 2)
            a = u + du
            if a < 0 or a >= n_u:
                continue
            for b in range(max(0, v - reach), min(n_v, v + reach + 1)):
                if taken[a, b]:
                    distance = du * du + (b - v) * (b - v)
                    if distance < own and distance < square[a, b]:
                        free = False
                        break
            if not free:
                break
        if free:
            taken[u, v] = True
            quota[band[flat]] -= 1
            count -= 1
    return count


@numba.njit(nogil=True, cache=True)
def conflicts(taken: Any, square: Any) -> int:  # pragma: no cover - compiled
    """Number of pairs of taken positions closer than the smaller of their two radii."""
    n_u, n_v = taken.shape
    found = 0
    for u in range(n_u):
        for v in range(n_v):
            if not taken[u, v]:
                continue
            own = square[u, v]
            reach = int(np.ceil(np.sqrt(own)))
            for a in range(u, min(n_u, u + reach + 1)):
                first = v + 1 if a == u else max(0, v - reach)
                for b in range(first, min(n_v, v + reach + 1)):
                    if taken[a, b]:
                        distance = (a - u) * (a - u) + (b - v) * (b - v)
                        if distance < own and distance < square[a, b]:
                            found += 1
    return found
