"""Closed-form recovery of patches from linear measurements on a dictionary, without iteration.

With atoms d_k (rows of D), squared size e_k of their coefficients, measurements y = x Phi^T + noise
of variance weight, the codes that minimise ||y - a D Phi^T||^2 / weight + sum_k |a_k|^2 / e_k give

    x = y (Phi C Phi^H + weight I)^-1 Phi C,   C = D^T diag(e) conj(D)    (rows)

(ridge regression, Hoerl & Kennard 1970, in its dual form). With C = I and weight -> 0 it is the
solution of minimum norm, which knows no dictionary.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import RecoveryError

Array = NDArray[Any]


def recover_ridge(
    measured: Array, operator: Array, atoms: Array, weight: float, energies: Array | None = None
) -> Array:
    """Patches from linear measurements.

    Parameters
    ----------
    measured : ndarray of shape (patch, m)
        Measurements, one row for each patch.
    operator : ndarray of shape (m, n)
        What every patch was measured with.
    atoms : ndarray of shape (atom, n)
        Dictionary.
    weight : float
        Noise variance of a measurement, above 0, in the unit of ``energies``.
    energies : ndarray of shape (atom,), optional
        Mean squared coefficient of every atom; default 1 for all.

    Returns
    -------
    ndarray of shape (patch, n)

    Raises
    ------
    RecoveryError
        Where shapes do not fit or the weight is not positive.
    """
    fits = measured.ndim == operator.ndim == atoms.ndim == 2
    if not fits or measured.shape[1] != len(operator) or operator.shape[1] != atoms.shape[1]:
        raise RecoveryError(
            f"Measurements {measured.shape}, operator {operator.shape} and atoms {atoms.shape} do "
            "not fit.",
            "measured (patch, m), operator (m, n), atoms (atom, n)",
            "Give as many measurements as operator rows, and operator columns as atom samples.",
        )
    if not weight > 0:
        raise RecoveryError(
            f"A weight of {weight} is not above 0.", "weight", "Give the noise variance."
        )
    scaled = atoms if energies is None else atoms * np.sqrt(energies)[:, None]
    seen = operator @ scaled.T
    inner = seen @ np.conj(seen.T) + weight * np.eye(len(operator))
    dual = np.linalg.solve(inner, measured.T)
    result: Array = (scaled.T @ (np.conj(seen.T) @ dual)).T
    return result
