"""Multi-scale structural similarity (MS-SSIM) of two planes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from mrics.quality.similarity import RADIUS, ssim_terms

Plane = NDArray[np.float64]
#: exponents of scales 1 to 5, fine to coarse
WEIGHTS = (0.0448, 0.2856, 0.3001, 0.2363, 0.1333)


def ms_ssim(
    image: Plane, reference: Plane, data_range: float, mask: NDArray[np.bool_] | None = None
) -> float:
    """Product over scales of the mean contrast-structure term, and SSIM at the coarsest.

    Each scale halves the plane by the mean of 2 x 2 pixels. Five scales are used where the coarsest
    still holds a window of 11 pixels; else fewer, with the weights rescaled to sum 1. A negative
    mean counts as 0.

    Parameters
    ----------
    image, reference : ndarray of shape (u, v), float64
        Magnitudes.
    data_range : float
        L, as for SSIM.
    mask : ndarray of bool, shape (u, v), optional
        Means are taken over it; at coarser scales over pixels at least half inside.

    References
    ----------
    Wang, Simoncelli, Bovik 2003, 37th Asilomar Conference on Signals, Systems and Computers
    (weights as published, from memory).
    """
    scales = scale_count(image.shape)
    weights = np.array(WEIGHTS[:scales]) / sum(WEIGHTS[:scales])
    share = np.ones(image.shape) if mask is None else mask.astype(np.float64)
    product = 1.0
    for scale, weight in enumerate(weights):
        whole, contrast = ssim_terms(image, reference, data_range)
        inside = share >= 0.5 if (share >= 0.5).any() else share > 0.0
        term = (whole if scale == scales - 1 else contrast).mean(where=inside)
        product *= max(0.0, float(term)) ** weight
        if scale < scales - 1:
            image, reference, share = (halved(plane) for plane in (image, reference, share))
    return float(product)


def scale_count(shape: tuple[int, ...]) -> int:
    """Scales that leave at least one window of 11 pixels, at most 5."""
    room = int(np.log2(max(1.0, min(shape) / (2 * RADIUS + 1))))
    return min(len(WEIGHTS), 1 + room)


def halved(plane: Plane) -> Plane:
    """Means of 2 x 2 pixels; a last odd row or column is left out."""
    u, v = (n // 2 for n in plane.shape)
    return plane[: 2 * u, : 2 * v].reshape(u, 2, v, 2).mean(axis=(1, 3))
