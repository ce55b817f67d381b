"""Iterative solvers on function pairs, for any linear operator."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[Any]
Operator = Callable[[Array], Array]


def conjugate_gradients(
    normal: Operator, right: Array, iterations: int, tolerance: float
) -> tuple[Array, int, float, float]:
    """Solve ``normal(x) = right`` from zero for a positive semidefinite ``normal``.

    Started from zero the iterates stay in the range of ``normal``, so that for consistent systems
    the limit is the solution of minimum norm (Hestenes & Stiefel 1952).

    Parameters
    ----------
    normal : callable
        Array to a new array of the same shape.
    right : ndarray
        Right side.
    iterations : int
        Most iterations.
    tolerance : float
        Norm of the residual relative to ``right`` to stop at.

    Returns
    -------
    x : ndarray
    iterations : int
        Iterations run.
    change : float
        Relative change of ``x`` in the last one.
    residual : float
        Relative residual reached, recomputed from ``x``.
    """
    x = np.zeros_like(right)
    residual = right.copy()
    direction = right.copy()
    square = start = float(np.vdot(residual, residual).real)
    change = 0.0
    if start == 0:
        return x, 0, 0.0, 0.0
    done = 0
    while done < iterations:
        done += 1
        mapped = normal(direction)
        curvature = float(np.vdot(direction, mapped).real)
        if curvature <= 0:
            break
        step = square / curvature
        x += right.dtype.type(step) * direction
        change = step * float(np.linalg.norm(direction)) / max(float(np.linalg.norm(x)), 1e-300)
        mapped *= right.dtype.type(step)
        residual -= mapped
        following = float(np.vdot(residual, residual).real)
        if following <= tolerance**2 * start:
            break
        direction *= right.dtype.type(following / square)
        direction += residual
        square = following
    true = right - normal(x)
    return x, done, change, float(np.linalg.norm(true)) / start**0.5


def proximal_gradient(
    forward: Operator,
    adjoint: Operator,
    data: Array,
    weights: Array,
    bound: float,
    start: Array,
    iterations: int,
    tolerance: float,
) -> tuple[Array, int, Array]:
    """Minimise 1/2 ||A x - y||^2 + weight ||x||_1 for every column, by FISTA with restart.

    Beck & Teboulle 2009, doi:10.1137/080716542; restart where the step points against the
    momentum, O'Donoghue & Candes 2015, doi:10.1007/s10208-013-9150-3. Columns restart and stop by
    themselves; complex values are shrunk by modulus.

    Parameters
    ----------
    forward, adjoint : callable
        A and A^H on arrays whose last axis numbers columns.
    data : ndarray of shape (m, columns)
    weights : ndarray of shape (columns,)
        Weight of every column, from 0 up.
    bound : float
        At least the largest eigenvalue of A^H A.
    start : ndarray of shape (n, columns)
        First point.
    iterations : int
        Most iterations.
    tolerance : float
        Duality gap relative to the objective to stop at.

    Returns
    -------
    x : ndarray of shape (n, columns)
    iterations : int
        Iterations run.
    gap : ndarray of shape (columns,)
        Relative duality gap of every column at ``x``.
    """
    x, point = start.copy(), start.copy()
    theta = np.ones(data.shape[1])
    gap = lasso_gap(forward, adjoint, data, x, weights)
    done = 0
    while done < iterations and (gap > tolerance).any():
        done += 1
        gradient = adjoint(forward(point) - data)
        following = shrink(point - gradient / bound, weights / bound)
        against = np.sum((np.conj(point - following) * (following - x)).real, axis=0) > 0
        theta[against] = 1.0
        advanced = (1.0 + np.sqrt(1.0 + 4.0 * theta**2)) / 2.0
        point = following + ((theta - 1.0) / advanced) * (following - x)
        theta, x = advanced, following
        if done % 10 == 0 or done == iterations:
            gap = lasso_gap(forward, adjoint, data, x, weights)
    return x, done, gap


def shrink(values: Array, threshold: Array | float) -> Array:
    """Soft threshold by modulus; 0 stays 0 whatever the threshold."""
    modulus = np.abs(values)
    kept = np.maximum(modulus - threshold, 0.0)
    return values * np.divide(kept, modulus, out=np.zeros_like(modulus), where=modulus > 0)


def lasso_gap(forward: Operator, adjoint: Operator, data: Array, x: Array, weights: Array) -> Array:
    """Duality gap of the L1 problem relative to its objective, for every column.

    The dual point is the residual scaled into ||A^H r||_inf <= weight. Where the weight is 0 the
    relative residual of the normal equations stands in for it.
    """
    residual = data - forward(x)
    correlation = adjoint(residual)
    largest = np.abs(correlation).max(axis=0, initial=0.0)
    fit = 0.5 * np.sum(np.abs(residual) ** 2, axis=0)
    primal = fit + weights * np.abs(x).sum(axis=0)
    scale = np.minimum(
        1.0, np.divide(weights, largest, out=np.ones_like(largest), where=largest > 0)
    )
    product = np.sum((np.conj(data) * residual).real, axis=0)
    dual = scale * product - scale**2 * fit
    floor = np.maximum(primal, 1e-300)
    start = np.abs(adjoint(data)).max(axis=0, initial=0.0)
    stationary = np.divide(largest, start, out=np.zeros_like(largest), where=start > 0)
    return np.where(weights > 0, np.maximum(primal - dual, 0.0) / floor, stationary)
