"""Error by spatial frequency: at which detail a recovery goes wrong."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.numerics import centred_fft, map_blocks
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
    fine : ndarray of shape (plane,)
        Norm of the error over the norm of the reference in the outer half of k-space (beyond half
        of the way to the edge), plane by plane; NaN where that is 0.
    """

    frequency: Array
    relative: Array
    share: Array
    fine: Array


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
    edge = [(np.arange(n) - n // 2) / (n / 2) for n in grid]
    outer = (np.hypot(edge[0][:, None], edge[1][None, :]) > 0.5).ravel()

    def one(index: int) -> list[Array]:
        y = ref[index]
        parts = []
        for image in (stack[index] - y, y):
            kspace = centred_fft(image).ravel()
            energy = (kspace.real**2 + kspace.imag**2).astype(np.float64)
            sums = np.bincount(ring, weights=energy, minlength=rings)
            parts.append(np.append(sums, energy[outer].sum()))
        return parts

    sums = np.array(map_blocks(one, range(len(stack)))).reshape(len(stack), 2, rings + 1)
    wrong, known = sums[:, 0, :-1].sum(axis=0), sums[:, 1, :-1].sum(axis=0)
    fine = np.full(len(stack), np.nan)
    np.divide(sums[:, 0, -1], sums[:, 1, -1], out=fine, where=sums[:, 1, -1] > 0.0)
    relative = np.full(rings, np.nan)
    np.divide(wrong, known, out=relative, where=known > 0.0)
    total = float(wrong.sum())
    return SpectralError(
        frequency=(np.arange(rings) + 0.5) * nyquist / rings,
        relative=np.sqrt(relative),
        share=wrong / total if total > 0.0 else wrong,
        fine=np.sqrt(fine),
    )
