"""Sparse vectors from few measurements."""

import numpy as np
import pytest
import scipy.fft
from scipy.optimize import brentq
from scipy.stats import norm
from sklearn.linear_model import Lasso, OrthogonalMatchingPursuit

from mrics.errors import RecoveryError
from mrics.recovery.sparse import recover_sparse


def sparse_signals(n: int, k: int, columns: int, seed: int, complex_values: bool = False):
    rng = np.random.default_rng(seed)
    x = np.zeros((n, columns), complex if complex_values else float)
    for column in range(columns):
        values = rng.choice([-1.0, 1.0], k) * rng.uniform(0.5, 2.0, k)
        turn = np.exp(2j * np.pi * rng.random(k)) if complex_values else 1.0
        x[rng.choice(n, k, replace=False), column] = values * turn
    return x


# Common practice, no source: a vector of 1000 with a handful of non-zeros is recovered exactly from
# 100 random measurements by L1, and not at all by the solution of minimum norm.
@pytest.mark.parametrize("columns", [1, 100])
@pytest.mark.parametrize("complex_values", [False, True])
def test_a_handful_of_a_thousand_from_a_hundred(columns: int, complex_values: bool) -> None:
    rng = np.random.default_rng(1)
    matrix = rng.standard_normal((100, 1000)) / 10.0
    if complex_values:
        matrix = (matrix + 1j * rng.standard_normal((100, 1000)) / 10.0) / 2**0.5
    x = sparse_signals(1000, 8, columns, 2, complex_values)
    data = matrix @ x
    found = recover_sparse(data, matrix, method="l1", weight=1e-5, tolerance=1e-3)
    errors = np.linalg.norm(found.x - x, axis=0) / np.linalg.norm(x, axis=0)
    assert errors.max() < 1e-4
    linear = recover_sparse(data, matrix, method="minimum-norm")
    missed = np.linalg.norm(linear.x - x, axis=0) / np.linalg.norm(x, axis=0)
    assert missed.min() > 0.8
    np.testing.assert_allclose(linear.x, np.linalg.pinv(matrix) @ data, atol=1e-5)


def test_matching_pursuit_finds_the_same() -> None:
    seed = 3
    rng = np.random.default_rng(seed)
    matrix = rng.standard_normal((100, 1000)) / 10.0
    x = sparse_signals(1000, 8, 5, seed)
    found = recover_sparse(matrix @ x, matrix, method="omp")
    np.testing.assert_allclose(found.x, x, atol=1e-8)
    assert found.iterations == 8
    # scikit-learn's pursuit stopped at the same count gives the same coefficients.
    theirs = OrthogonalMatchingPursuit(n_nonzero_coefs=8, fit_intercept=False)
    theirs.fit(matrix, (matrix @ x)[:, 0])
    np.testing.assert_allclose(found.x[:, 0], theirs.coef_, atol=1e-8)


# Worked by hand from the 2 x 2 Gram system: atoms (1, 0) and (1/2, sqrt(3)/2), y = (2, 0.4/sqrt 3).
WORKED = [
    (0.3, (5 / 3, 1 / 15), 0.58),
    (0.4, (1.6, 0.0), None),
    (0.5, (1.5, 0.0), 0.9016667),
    (2.0, (0.0, 0.0), 2.0266667),
]


@pytest.mark.parametrize("method", ["l1", "lca"])
@pytest.mark.parametrize(("weight", "solution", "objective"), WORKED)
def test_two_atoms_worked_by_hand(method, weight, solution, objective) -> None:
    atoms = np.array([[1.0, 0.5], [0.0, 0.75**0.5]])
    y = np.array([2.0, 0.4 / 3**0.5])
    found = recover_sparse(y, atoms, method=method, weight=weight, tolerance=1e-12)
    np.testing.assert_allclose(found.x, solution, atol=1e-5)
    if objective is not None:
        value = 0.5 * np.sum((y - atoms @ found.x) ** 2) + weight * np.abs(found.x).sum()
        assert value == pytest.approx(objective, abs=1e-7)


def test_l1_equals_scikit_learns_lasso() -> None:
    rng = np.random.default_rng(4)
    matrix = rng.standard_normal((40, 90))
    y = matrix @ sparse_signals(90, 5, 1, 5)[:, 0] + 0.1 * rng.standard_normal(40)
    weight = 3.0
    # scikit-learn divides the squared error by the number of samples.
    lasso = Lasso(alpha=weight / 40, fit_intercept=False, tol=1e-12, max_iter=100_000)
    lasso.fit(matrix, y)
    for method in ("l1", "lca"):
        found = recover_sparse(
            y, matrix, method=method, weight=weight, tolerance=1e-10, iterations=50_000
        )
        assert found.reached
        np.testing.assert_allclose(found.x, lasso.coef_, atol=1e-5)


def test_optimality_conditions_hold_for_complex_data() -> None:
    # Tibshirani 1996: a_j^H r = weight x_j / |x_j| on the support, |a_j^H r| <= weight elsewhere.
    rng = np.random.default_rng(6)
    matrix = rng.standard_normal((30, 60)) + 1j * rng.standard_normal((30, 60))
    y = rng.standard_normal(30) + 1j * rng.standard_normal(30)
    x = recover_sparse(y, matrix, weight=4.0, tolerance=1e-12, iterations=50_000).x
    match = matrix.conj().T @ (y - matrix @ x)
    on = np.abs(x) > 1e-8
    np.testing.assert_allclose(match[on], 4.0 * x[on] / np.abs(x[on]), atol=1e-4)
    assert np.abs(match[~on]).max() <= 4.0 + 1e-4
    largest = np.abs(matrix.conj().T @ y).max()
    assert not recover_sparse(y, matrix, weight=1.0001 * largest).x.any()


def test_an_orthonormal_transform_is_one_soft_threshold() -> None:
    y = np.random.default_rng(7).standard_normal((64, 3))
    found = recover_sparse(
        y,
        lambda x: scipy.fft.idct(x, axis=0, norm="ortho"),
        lambda v: scipy.fft.dct(v, axis=0, norm="ortho"),
        weight=0.7,
        tolerance=1e-12,
    )
    c = scipy.fft.dct(y, axis=0, norm="ortho")
    np.testing.assert_allclose(found.x, np.sign(c) * np.maximum(np.abs(c) - 0.7, 0), atol=1e-9)


def test_pursuit_and_l1_within_the_coherence_bound() -> None:
    # Tropp 2004; Donoho & Elad 2003: spikes and sines of 64, coherence 1/8, every k <= 4.
    n = 64
    dft = np.fft.fft(np.eye(n), norm="ortho")
    matrix = np.hstack([np.eye(n), dft.conj().T])
    for trial in range(10):
        x = sparse_signals(2 * n, 4, 1, 100 + trial, complex_values=True)
        for method in ("omp", "l1"):
            found = recover_sparse(matrix @ x, matrix, method=method, tolerance=1e-6)
            np.testing.assert_allclose(found.x, x, atol=1e-4)


def weak_threshold(delta: float) -> float:
    """Donoho & Tanner's weak threshold for real signed vectors (formula from memory)."""

    def ratio(z: float) -> float:
        risk = (1 + z * z) * norm.cdf(-z) - z * norm.pdf(z)
        return (1 - (2 / delta) * risk) / (1 + z * z - 2 * risk)

    grid = np.linspace(0.01, 5, 2000)
    return max(ratio(z) for z in grid)


def crossing(trials: int, n: int = 200, delta: float = 0.5) -> float:
    """Share of non-zeros at which half of the problems are solved, by a fit through the counts."""
    m = int(delta * n)
    rhos = np.array([0.28, 0.34, 0.38, 0.42, 0.48])
    success = []
    for rho in rhos:
        wins = 0
        for trial in range(trials):
            rng = np.random.default_rng(int(1000 * rho) * 100 + trial)
            matrix = rng.standard_normal((m, n)) / m**0.5
            x = np.zeros(n)
            k = round(rho * m)
            x[rng.choice(n, k, replace=False)] = rng.standard_normal(k)
            found = recover_sparse(matrix @ x, matrix, tolerance=1e-6, iterations=20_000).x
            wins += np.linalg.norm(found - x) < 1e-2 * np.linalg.norm(x)
        success.append(wins / trials)
    line = np.polyfit(rhos, success, 1)
    return float(brentq(lambda r: np.polyval(line, r) - 0.5, 0, 1))


def test_phase_transition_lies_where_theory_puts_it() -> None:
    # Donoho & Tanner 2005-09: rho(0.5) = 0.38569; at n = 200 within 0.04 (judgement).
    assert weak_threshold(0.5) == pytest.approx(0.38569, abs=1e-4)
    assert crossing(trials=4) == pytest.approx(0.38569, abs=0.06)


REFUSED = [
    ({"method": "lasso"}, "'lasso' is not known"),
    ({"weight": -1.0}, "-1.0 is not a number from 0 up"),
    ({"weight": float("nan")}, "NaN or infinite is not a number"),
    ({"tolerance": 1e-20}, "out of reach"),
    ({"iterations": 0}, "iterations = 0"),
]


@pytest.mark.parametrize(("settings", "says"), REFUSED)
def test_bad_settings_are_refused(settings, says) -> None:
    with pytest.raises(RecoveryError, match=says):
        recover_sparse(np.ones(4), np.eye(4), **settings)


def test_bad_operators_and_data_are_refused() -> None:
    with pytest.raises(RecoveryError, match="adjoint is missing"):
        recover_sparse(np.ones(4), lambda x: x)
    with pytest.raises(RecoveryError, match=r"shape \(3, 5\) does not give 4"):
        recover_sparse(np.ones(4), np.ones((3, 5)))
    with pytest.raises(RecoveryError, match="1 NaN or infinite"):
        recover_sparse(np.array([1.0, np.inf, 0.0, 0.0]), np.eye(4))
