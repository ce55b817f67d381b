"""Sparse vectors from few linear measurements, for any operator given as functions or a matrix.

``l1``       min_x 1/2 ||A x - y||^2 + weight ||x||_1, accelerated proximal gradient; certified by
             its duality gap. Small weights are reached through larger ones.
``lca``      the same objective by the locally competitive algorithm (Rozell, Johnson, Baraniuk,
             Olshausen 2008, doi:10.1162/neco.2008.03-07-486): tau du/dt = A^H (y - A a) + a - u,
             a = soft(u, weight).
``omp``      orthogonal matching pursuit (Pati 1993, Tropp 2004, doi:10.1109/TIT.2004.834793): the
             largest correlation joins, all coefficients are fitted anew.
``minimum-norm``  the linear comparison: x of least norm among those that fit best.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import RecoveryError
from mrics.recovery.solvers import (
    Operator,
    conjugate_gradients,
    lasso_gap,
    proximal_gradient,
    shrink,
)

Array = NDArray[Any]
METHODS = ("l1", "lca", "minimum-norm", "omp")
_FALL = 0.3


@dataclass(frozen=True)
class SparseResult:
    """Recovered columns.

    Attributes
    ----------
    x : ndarray of shape (n, columns) or (n,)
        As many axes as the data.
    iterations : int
        Iterations run; for ``omp`` the most coefficients of a column.
    gap : ndarray of shape (columns,)
        Duality gap relative to the objective ("l1", "lca"), or norm of the residual relative to
        the data ("omp", "minimum-norm").
    reached : bool
        True where every column is within the tolerance.
    weight : ndarray of shape (columns,)
        Weights used; zeros where there are none.
    """

    x: Array
    iterations: int
    gap: Array
    reached: bool
    weight: Array


def recover_sparse(
    data: Array,
    forward: Operator | Array,
    adjoint: Operator | None = None,
    *,
    method: str = "l1",
    weight: float | Array = 0.0,
    sparsity: int | None = None,
    bound: float | None = None,
    iterations: int = 5000,
    tolerance: float = 1e-6,
) -> SparseResult:
    """Recover sparse columns x from y = A x (+ noise).

    Parameters
    ----------
    data : ndarray of shape (m,) or (m, columns)
        Measurements, real or complex; one signal or many at once.
    forward : ndarray of shape (m, n) or callable
        A, as a matrix or as a function of an array (n, columns).
    adjoint : callable, optional
        A^H; needed where ``forward`` is a function.
    method : {"l1", "lca", "omp", "minimum-norm"}
        See the module for the objectives.
    weight : float or ndarray of shape (columns,)
        Weight of the L1 norm, in the unit of A^H y; 0 stands for 1e-7 of the weight at which x
        would be zero, which for data without noise gives the vector of least L1 norm.
    sparsity : int, optional
        Most coefficients of ``omp``; default: as many as measurements.
    bound : float, optional
        At least the largest eigenvalue of A^H A; default: estimated by power iteration.
    iterations : int
        Most iterations in all.
    tolerance : float
        Relative duality gap ("l1", "lca") or relative residual to stop at.

    Returns
    -------
    SparseResult

    Raises
    ------
    RecoveryError
        For an unknown method, a missing adjoint, data that are not finite or of another size, and
        values out of range.
    """
    columns = np.atleast_2d(np.asarray(data).T).T
    pair = _operators(forward, adjoint, columns)
    limit = np.broadcast_to(np.asarray(weight, dtype=float), columns.shape[1:]).copy()
    _check(method, columns, limit, sparsity, iterations, tolerance)
    first = pair[1](columns)
    if method == "minimum-norm":
        found = _minimum_norm(pair, columns, iterations, tolerance)
    elif method == "omp":
        found = _matching_pursuit(pair, columns, first, sparsity, tolerance)
    else:
        largest = np.abs(first).max(axis=0, initial=0.0)
        limit = np.where(limit > 0, limit, 1e-7 * largest)
        top = bound if bound is not None else _bound(pair, first)
        problem = _Problem(*pair, columns, limit, largest, top, np.zeros_like(first))
        solve = _l1 if method == "l1" else _lca
        found = solve(problem, iterations, tolerance)
    x = found.x if np.asarray(data).ndim > 1 else found.x[:, 0]
    return SparseResult(x, found.iterations, found.gap, found.reached, found.weight)


Pair = tuple[Operator, Operator]


@dataclass(frozen=True)
class _Problem:
    """The L1 objective of every column, with what its solvers share."""

    forward: Operator
    adjoint: Operator
    data: Array
    weights: Array
    largest: Array
    bound: float
    zero: Array

    def gap(self, x: Array) -> Array:
        return lasso_gap(self.forward, self.adjoint, self.data, x, self.weights)


def _l1(problem: _Problem, iterations: int, tolerance: float) -> SparseResult:
    """Down from the weight that gives zero, each solution the start of the next."""
    weights, x, done = problem.weights, problem.zero, 0
    current = np.maximum(weights, _FALL * problem.largest)
    while True:
        last = bool((current <= weights).all())
        x, ran, gap = proximal_gradient(
            problem.forward,
            problem.adjoint,
            problem.data,
            current,
            problem.bound,
            x,
            iterations - done,
            tolerance if last else 1e-2,
        )
        done += ran
        if last or done >= iterations:
            break
        current = np.maximum(weights, _FALL * current)
    if not last:
        gap = problem.gap(x)
    return SparseResult(x, done, gap, bool((gap <= tolerance).all()), weights)


def _lca(problem: _Problem, iterations: int, tolerance: float) -> SparseResult:
    """Euler steps dt / tau = 1 / bound, at which the dynamics contract."""
    rate = 1.0 / max(1.0, problem.bound)
    state, active = problem.zero.copy(), problem.zero
    gap = np.full(problem.data.shape[1], np.inf)
    done = 0
    while done < iterations:
        done += 1
        drive = problem.adjoint(problem.data - problem.forward(active))
        state += rate * (drive + active - state)
        active = shrink(state, problem.weights)
        if done % 10 == 0 or done == iterations:
            gap = problem.gap(active)
            if (gap <= tolerance).all():
                break
    return SparseResult(active, done, gap, bool((gap <= tolerance).all()), problem.weights)


def _minimum_norm(pair: Pair, data: Array, iterations: int, tolerance: float) -> SparseResult:
    """A^H z with A A^H z = y."""
    forward, adjoint = pair
    x = np.zeros_like(adjoint(data))
    done = 0
    gaps: list[float] = []
    for column in range(data.shape[1]):
        one = data[:, column : column + 1]
        z, ran, _, residual = conjugate_gradients(
            lambda v: forward(adjoint(v)), one, iterations, tolerance
        )
        x[:, column : column + 1] = adjoint(z)
        done, gaps = max(done, ran), [*gaps, residual]
    gap = np.array(gaps)
    return SparseResult(x, done, gap, bool((gap <= tolerance).all()), np.zeros(data.shape[1]))


def _matching_pursuit(
    pair: Pair, data: Array, first: Array, sparsity: int | None, tolerance: float
) -> SparseResult:
    forward, adjoint = pair
    n, columns = first.shape
    most = min(sparsity if sparsity is not None else len(data), n, len(data))
    x = np.zeros((n, columns), np.result_type(first, data))
    gap = np.zeros(columns)
    done = 0
    for column in range(columns):
        y = data[:, column]
        size = float(np.linalg.norm(y))
        residual: Array = y.copy()
        atoms: Array = np.empty((len(y), 0), x.dtype)
        fit: Array = np.empty(0, x.dtype)
        support: list[int] = []
        while size > 0 and np.linalg.norm(residual) > tolerance * size and len(support) < most:
            match = np.abs(adjoint(residual[:, None])[:, 0])
            match[support] = -1.0
            chosen = int(match.argmax())
            unit = np.zeros((n, 1), x.dtype)
            unit[chosen] = 1.0
            support.append(chosen)
            atoms = np.concatenate([atoms, forward(unit)], axis=1)
            fit = np.linalg.lstsq(atoms, y, rcond=None)[0]
            residual = y - atoms @ fit
        x[support, column] = fit
        gap[column] = np.linalg.norm(residual) / size if size > 0 else 0.0
        done = max(done, len(support))
    return SparseResult(x, done, gap, bool((gap <= tolerance).all()), np.zeros(columns))


def _bound(pair: Pair, first: Array) -> float:
    """Largest eigenvalue of A^H A by power iteration, with a margin for what it misses."""
    forward, adjoint = pair
    v = np.random.default_rng(0).standard_normal((len(first), 1)).astype(first.dtype)
    value = 1.0
    for _ in range(60):
        v /= np.linalg.norm(v)
        v = adjoint(forward(v))
        value = float(np.linalg.norm(v))
        if value == 0:
            return 1.0
    return 1.02 * value


def _operators(forward: Operator | Array, adjoint: Operator | None, data: Array) -> Pair:
    if callable(forward):
        if adjoint is None:
            raise RecoveryError(
                "The operator is a function, and its adjoint is missing.",
                "adjoint",
                "Give both functions, or a matrix.",
            )
        return forward, adjoint
    matrix = np.asarray(forward)
    if matrix.ndim != 2 or matrix.shape[0] != len(data):
        raise RecoveryError(
            f"A matrix of shape {matrix.shape} does not give {len(data)} measurements.",
            "forward",
            f"Give a matrix with {len(data)} rows.",
        )
    back = matrix.conj().T
    return (lambda x: matrix @ x), (lambda y: back @ y)


def _check(
    method: str,
    data: Array,
    weights: Array,
    sparsity: int | None,
    iterations: int,
    tolerance: float,
) -> None:
    if method not in METHODS:
        raise RecoveryError(
            f"Method {method!r} is not known.", "method", f"Known: {', '.join(METHODS)}."
        )
    bad = np.argwhere(~np.isfinite(data))
    if len(bad):
        raise RecoveryError(
            f"The data hold {len(bad)} NaN or infinite values.",
            f"data, first at index {tuple(int(i) for i in bad[0])}",
            "Remove or repair them.",
        )
    if not (np.isfinite(weights) & (weights >= 0)).all():
        raise RecoveryError(
            f"Weight {weights.min() if np.isfinite(weights).all() else 'NaN or infinite'} is not "
            "a number from 0 up.",
            "weight",
            "Give a weight in the unit of A^H y, or 0.",
        )
    lowest = 4 * np.finfo(np.asarray(data).real.dtype if data.dtype.kind in "fc" else float).eps
    if not lowest <= tolerance < 1:
        raise RecoveryError(
            f"Tolerance {tolerance:g} is out of reach or no tolerance at all.",
            "tolerance",
            f"Give a number from {lowest:.1g} to below 1.",
        )
    if iterations < 1 or (sparsity is not None and sparsity < 1):
        raise RecoveryError(
            f"iterations = {iterations}, sparsity = {sparsity}: both count from 1.",
            "iterations, sparsity",
            "Give whole numbers from 1.",
        )
