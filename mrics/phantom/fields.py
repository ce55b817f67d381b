"""Smooth random fields on regular grids: textures, warps and shading of the invented objects."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import scipy
from numpy.typing import NDArray

from mrics.errors import MricsError
from mrics.numerics import stream

Array = NDArray[Any]

# Mean over position of the sum of squared cubic B-spline weights: the variance of one axis.
_SPLINE_VARIANCE = 151.0 / 315.0


class RandomField:
    """A cubic B-spline through independent normal numbers: zero mean, unit variance, C2 smooth.

    Parameters
    ----------
    seed : int
        Seed of the object.
    name : str
        What the field is for; with the seed it fixes the field.
    spacing : sequence of 3 float
        Distance of lattice points along the three axes in mm: the field varies over about twice
        that distance.
    reach : sequence of 3 float
        The field is defined for coordinates of modulus up to this many mm.
    """

    def __init__(
        self, seed: int, name: str, spacing: Sequence[float], reach: Sequence[float]
    ) -> None:
        self._spacing = np.asarray(spacing, dtype=np.float64)
        self._reach = tuple(float(limit) for limit in reach)
        self._half = np.ceil(np.asarray(reach) / self._spacing).astype(int) + 2
        lattice = stream(seed, "field", name).standard_normal(tuple(2 * self._half + 1))
        self._lattice = (lattice / _SPLINE_VARIANCE**1.5).astype(np.float32)

    def on(self, z: Array, y: Array, x: Array) -> Array:
        """Values on the grid spanned by three coordinate vectors in mm, float32 (z, y, x)."""
        for axis, (coordinate, limit) in enumerate(zip((z, y, x), self._reach, strict=True)):
            if np.max(np.abs(coordinate)) > limit + 1e-6:
                raise MricsError(
                    f"Points reach {np.max(np.abs(coordinate)):g} mm, the object {limit:g} mm.",
                    f"axis {'zyx'[axis]}",
                    "Choose a field of view within the object.",
                )
        places = [
            np.ravel(coordinate) / step + half
            for coordinate, step, half in zip((z, y, x), self._spacing, self._half, strict=True)
        ]
        (down, rows_z), (along, rows_y), (across, rows_x) = map(spline_weights, places)
        part = self._lattice[rows_z, rows_y, rows_x]
        n_z, n_y, n_x = part.shape
        # Smallest products first; each sparse product keeps its long axes contiguous.
        part = down @ part.reshape(n_z, -1)
        n_z = part.shape[0]
        part = across @ np.ascontiguousarray(part.reshape(n_z * n_y, n_x).T)
        n_x = part.shape[0]
        part = part.reshape(n_x, n_z, n_y).transpose(2, 1, 0).reshape(n_y, -1)
        return (along @ part).reshape(-1, n_z, n_x).transpose(1, 0, 2)


def spline_weights(place: Array) -> tuple[scipy.sparse.csr_array, slice]:
    """Weights of a uniform cubic B-spline.

    Parameters
    ----------
    place : ndarray, 1-D
        Where to evaluate, in units of the lattice step (coefficient n is at n).

    Returns
    -------
    weights : csr_array of shape (place, rows), float32
        Four weights a row, summing to 1.
    rows : slice
        Coefficients that the columns stand for.
    """
    first = np.floor(place).astype(int) - 1
    low, high = int(first.min()), int(first.max()) + 4
    columns = first[:, None] + np.arange(4)
    away = np.abs(place[:, None] - columns)
    inner = 2.0 / 3.0 - away**2 * (1.0 - away / 2.0)
    outer = np.clip(2.0 - away, 0.0, None) ** 3 / 6.0
    weights = np.where(away < 1.0, inner, outer).astype(np.float32)
    starts = np.arange(0, weights.size + 1, 4)
    shape = (len(place), high - low)
    return scipy.sparse.csr_array(
        (weights.ravel(), (columns - low).ravel(), starts), shape=shape
    ), slice(low, high)
