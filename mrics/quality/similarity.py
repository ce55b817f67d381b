"""Structural similarity (SSIM) of two planes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

K1 = 0.01
K2 = 0.03
SIGMA = 1.5
RADIUS = 5


def window_taps() -> NDArray[np.float64]:
    """The 11 weights of the 1-D Gaussian window, sum 1 (the 2-D window is their product)."""
    taps = np.exp(-0.5 * (np.arange(-RADIUS, RADIUS + 1) / SIGMA) ** 2)
    return np.asarray(taps / taps.sum())


def ssim_map(
    image: NDArray[np.float64], reference: NDArray[np.float64], data_range: float
) -> NDArray[np.float64]:
    """SSIM at every pixel of a plane.

    Parameters
    ----------
    image, reference : ndarray of shape (u, v), float64
        Magnitudes.
    data_range : float
        L of the constants C1 = (K1 L)^2 and C2 = (K2 L)^2.

    References
    ----------
    Wang, Bovik, Sheikh, Simoncelli 2004, IEEE Trans Image Process 13:600-612,
    doi:10.1109/TIP.2003.819861.
    """
    return ssim_terms(image, reference, data_range)[0]


def ssim_terms(
    image: NDArray[np.float64], reference: NDArray[np.float64], data_range: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """The SSIM map and its contrast-structure term (SSIM without the luminance term)."""
    from mrics.quality._filters import ssim_plane

    out, contrast = np.empty(image.shape), np.empty(image.shape)
    ssim_plane(
        np.ascontiguousarray(image, dtype=np.float64),
        np.ascontiguousarray(reference, dtype=np.float64),
        window_taps(),
        (K1 * data_range) ** 2,
        (K2 * data_range) ** 2,
        out,
        contrast,
    )
    return out, contrast
