"""Magnetic field of a circular current loop, closed form, stable on the axis and far away."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[Any]

MU0 = 4e-7 * np.pi  # T m / A
_SERIES_BELOW = 0.05
_TERMS = 10


def _series() -> list[float]:
    """Coefficients of m^2, m^3, ... of g(m) = (1 - m/2) E(m) - (1 - m) K(m)."""
    k_terms, e_terms = [1.0], [1.0]
    for n in range(1, _TERMS + 2):
        k_terms.append(k_terms[-1] * ((2 * n - 1) / (2 * n)) ** 2)
        e_terms.append(-k_terms[-1] / (2 * n - 1))
    return [
        np.pi / 2 * (e_terms[n] - e_terms[n - 1] / 2 - k_terms[n] + k_terms[n - 1])
        for n in range(2, _TERMS + 2)
    ]


_COEFFICIENTS = _series()


def _difference(m: Array, first: Array, second: Array) -> Array:
    """g(m) without the cancellation of its two terms at small m."""
    small = m < _SERIES_BELOW
    value = (1.0 - m / 2.0) * second - (1.0 - m) * first
    if small.any():
        part = m[small]
        series = np.zeros_like(part)
        for coefficient in reversed(_COEFFICIENTS):
            series = series * part + coefficient
        value[small] = series * part**2
    return value


def loop_field(
    r_mm: ArrayLike,
    z_mm: ArrayLike,
    radius_mm: float,
    *,
    current_a: float = 1.0,
    conductor_mm: float = 0.0,
) -> tuple[Array, Array]:
    """Radial and axial field of a loop at distance r from its axis and height z over its plane.

    With al^2 = (a - r)^2 + z^2, be^2 = (a + r)^2 + z^2, m = 4 a r / be^2 and the complete elliptic
    integrals K(m), E(m),

        Bz = mu0 I / (2 pi al^2 be) [(a^2 - r^2 - z^2) E + al^2 K]
        Br = mu0 I z / (2 pi al^2 be r) [(a^2 + r^2 + z^2) E - al^2 K]

    rewritten with g(m) = (1 - m/2) E - (1 - m) K, which has a series for small m, so that nothing
    cancels near the axis or far from the loop.

    Parameters
    ----------
    r_mm, z_mm : array_like
        Cylinder coordinates of the points, r from 0 up.
    radius_mm : float
        Loop radius a.
    current_a : float
        Current in ampere.
    conductor_mm : float
        Rounds the singularity at the wire off: z^2 counts as z^2 + conductor_mm^2 in the
        distances.

    Returns
    -------
    radial, axial : ndarray of float64
        In tesla.

    References
    ----------
    Simpson, Lane, Immer, Youngquist 2001 (the loop in elliptic integrals); Ortner, Leitner,
    Slanovc 2023, Magnetism 3:11-31 (where the usual form cancels).
    """
    from scipy.special import ellipe, ellipk

    r, z = np.broadcast_arrays(
        np.asarray(r_mm, dtype=np.float64) * 1e-3, np.asarray(z_mm, dtype=np.float64) * 1e-3
    )
    a = radius_mm * 1e-3
    height = z**2 + (conductor_mm * 1e-3) ** 2
    near, far = (a - r) ** 2 + height, (a + r) ** 2 + height
    m = np.atleast_1d(4.0 * a * r / far)
    first, second = ellipk(m), ellipe(m)
    g = _difference(m, first, second).reshape(r.shape)
    second = second.reshape(r.shape)
    scale = MU0 * current_a / (2.0 * np.pi * near * np.sqrt(far))
    axial = scale * (2.0 * a**2 * second - far * g)
    # g ~ m^2 near the axis, so Br ~ r there: divide g by m before r can vanish.
    safe = np.where(r > 1e-9 * a, r, 1.0)
    radial = np.where(r > 1e-9 * a, scale * z * far * g / safe, 0.0)
    return radial, axial
