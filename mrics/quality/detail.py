"""The Laplacian-of-Gaussian filter behind the high-frequency error norm (HFEN)."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

SIGMA = 1.5
RADIUS = 7


def log_kernel() -> NDArray[np.float64]:
    """The 15 x 15 kernel G(r) (r^2 - 2 s^2) / s^4, sum of G one, mean removed (sum zero).

    Its Frobenius norm, 0.118205, is the norm of a filtered unit impulse.
    """
    columns, rows = _log_taps()
    return np.einsum("qa,qb->ab", columns, rows)


def _log_taps() -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    # The kernel is a sum of three separable ones: g2 g + g g2, less its mean everywhere.
    k = np.arange(-RADIUS, RADIUS + 1, dtype=np.float64)
    g = np.exp(-0.5 * (k / SIGMA) ** 2)
    g /= g.sum()
    g2 = g * (k**2 - SIGMA**2) / SIGMA**4
    mean = 2.0 * g2.sum() / k.size**2
    ones = np.ones_like(k)
    return np.stack([g2, g, -mean * ones]), np.stack([g, g2, ones])


def log_filter(plane: NDArray[np.float64]) -> NDArray[np.float64]:
    """A plane filtered by :func:`log_kernel`, edges mirrored.

    References
    ----------
    Ravishankar and Bresler 2011, IEEE Trans Med Imaging 30:1028-1041,
    doi:10.1109/TMI.2010.2090538 (15 x 15, sigma 1.5).
    """
    from mrics.quality._filters import separable_plane

    columns, rows = _log_taps()
    out = np.empty(plane.shape)
    separable_plane(np.ascontiguousarray(plane, dtype=np.float64), columns, rows, out)
    return out
