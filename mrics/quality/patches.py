"""The worst patch: a small region that a mean over the body would hide."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Plane = NDArray[np.float64]
SIZE = 16


class Worst(NamedTuple):
    """Value of the worst patch and the voxel (u, v) at its middle."""

    value: float
    where: tuple[int, int]


def worst_patch(
    values: Plane, mask: NDArray[np.bool_] | None, *, lowest: bool, size: int = SIZE
) -> Worst | None:
    """Extreme mean of a map over square patches.

    Parameters
    ----------
    values : ndarray of shape (u, v)
        Squared error, or a similarity map.
    mask : ndarray of bool, shape (u, v), optional
        Means are taken over its voxels; a patch counts where at least half of it is inside.
    lowest : bool
        True for the lowest mean, False for the highest.
    size : int
        Side of a patch in voxels, at most the plane's.

    Returns
    -------
    Worst or None
        None where no patch is half inside the mask.
    """
    from scipy.ndimage import uniform_filter

    sides = tuple(min(size, n) for n in values.shape)
    inside = np.ones(values.shape) if mask is None else mask.astype(np.float64)
    share = uniform_filter(inside, sides, mode="constant")
    total = uniform_filter(values * inside, sides, mode="constant")
    means = np.divide(total, share, out=np.zeros_like(total), where=share >= 0.5 - 1e-9)
    means[share < 0.5 - 1e-9] = np.inf if lowest else -np.inf
    at = int(means.argmin() if lowest else means.argmax())
    where = np.unravel_index(at, means.shape)
    value = float(means[where])
    return Worst(value, (int(where[0]), int(where[1]))) if np.isfinite(value) else None
