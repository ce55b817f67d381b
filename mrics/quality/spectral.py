"""Error by spatial frequency: at which detail a recovery goes wrong."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.numerics import centred_fft
from mrics.quality._inputs import as_stack

Array = NDArray[Any]


@dataclass(frozen=True)
class SpectralError:
    """Error and reference in rings of k-space.

    Attributes
    ----------
    frequency : ndarray of shape (ring,)
        Middle of each ring in cycles per mm.
    relative : ndarray of shape (ring,)
        Norm of the error over the norm of the reference in the ring; NaN where that is 0.
    share : ndarray of shape (ring,)
        Share of the whole squared error; the rings cover all of k-space, corners in the last.
    """

    frequency: Array
    relative: Array
    share: Array


def spectral_error(
    image: Array, reference: Array, voxel_mm: tuple[float, float], *, rings: int = 24
) -> SpectralError:
    """Error of a stack by radius in k-space.

    Parameters
    ----------
    image, reference : ndarray of shape (u, v) or (plane, u, v)
        The complex error where both are complex, else that of magnitudes.
    voxel_mm : tuple of float
        Voxel size along u and v.
    rings : int
        Rings of equal width up to the larger of the two Nyquist frequencies; fewer where a plane
        has not that many samples to its edge.

    Raises
    ------
    QualityError
        For shapes that differ and values that are not finite.
    """
    stack, ref, _ = as_stack(image, reference, None)
    if not (np.iscomplexobj(stack) and np.iscomplexobj(ref)):
        stack, ref = np.abs(stack), np.abs(ref)
    grid = stack.shape[1:]
    rings = max(1, min(rings, max(grid) // 2))
    axes = [(np.arange(n) - n // 2) / (n * step) for n, step in zip(grid, voxel_mm, strict=True)]
    radius = np.hypot(axes[0][:, None], axes[1][None, :])
    nyquist = 0.5 / min(voxel_mm)
    ring = np.minimum((radius / nyquist * rings).astype(np.intp), rings - 1).ravel()
    wrong, known = np.zeros(rings), np.zeros(rings)
    for x, y in zip(stack, ref, strict=True):
        error = centred_fft(x.astype(np.complex128) - y)
        own = centred_fft(y.astype(np.complex128))
        wrong += np.bincount(ring, weights=(np.abs(error) ** 2).ravel(), minlength=rings)
        known += np.bincount(ring, weights=(np.abs(own) ** 2).ravel(), minlength=rings)
    relative = np.full(rings, np.nan)
    np.divide(wrong, known, out=relative, where=known > 0.0)
    total = float(wrong.sum())
    return SpectralError(
        frequency=(np.arange(rings) + 0.5) * nyquist / rings,
        relative=np.sqrt(relative),
        share=wrong / total if total > 0.0 else wrong,
    )
