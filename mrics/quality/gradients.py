"""Gradient-magnitude similarity of two planes, and its deviation."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from mrics.quality.multiscale import halved

Plane = NDArray[np.float64]
#: stabilising constant over the square of the data range: 170 for 8-bit images
CONSTANT = 170.0 / 255.0**2


def gradient_similarity(image: Plane, reference: Plane, data_range: float) -> Plane:
    """Similarity (2 g h + c) / (g^2 + h^2 + c) of the gradient magnitudes, at half resolution.

    Planes are halved by means of 2 x 2 pixels, gradients are Prewitt's (divided by 3), edges
    mirrored, c = 170 / 255^2 L^2.

    Parameters
    ----------
    image, reference : ndarray of shape (u, v), float64
        Magnitudes; a plane of one line is not halved.
    data_range : float
        L.

    References
    ----------
    Xue, Zhang, Mou, Bovik 2014, IEEE Trans Image Process 23:684-695 (constants from memory).
    """
    first, second = (_gradient(_coarse(plane)) for plane in (image, reference))
    c = CONSTANT * data_range**2
    return (2.0 * first * second + c) / (first**2 + second**2 + c)


def gradient_deviation(
    image: Plane, reference: Plane, data_range: float, mask: NDArray[np.bool_] | None = None
) -> float:
    """Standard deviation of the similarity over the mask (GMSD); 0 for equal planes."""
    similarity = gradient_similarity(image, reference, data_range)
    if mask is None:
        return float(similarity.std())
    share = _coarse(mask.astype(np.float64))
    inside = share >= 0.5 if (share >= 0.5).any() else share > 0.0
    return float(similarity[inside].std()) if inside.any() else 0.0


def _coarse(plane: Plane) -> Plane:
    """At half resolution; a plane of one line as it is."""
    return halved(plane) if min(plane.shape) > 1 else plane


def _gradient(plane: Plane) -> Plane:
    from scipy.ndimage import prewitt

    along = [prewitt(plane, axis=axis, mode="reflect") / 3.0 for axis in (0, 1)]
    return np.hypot(*along)
