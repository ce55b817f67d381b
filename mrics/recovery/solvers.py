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
