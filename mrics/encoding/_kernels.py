"""Compiled loops over channels; serial, without the interpreter lock."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.numerics.kernel_cache import numba

Array = NDArray[Any]


@numba.njit(nogil=True, cache=True)
def combine_one(images: Array, maps: Array, out: Array) -> None:
    """Out = sum over channels of conj(maps) * images, one plane: (channels, u, v) to (u, v)."""
    channels, rows, columns = images.shape
    for i in range(rows):
        for j in range(columns):
            out[i, j] = np.conj(maps[0, i, j]) * images[0, i, j]
        for c in range(1, channels):
            for j in range(columns):
                out[i, j] += np.conj(maps[c, i, j]) * images[c, i, j]


def combine(images: Array, maps: Array, out: Array) -> None:
    """:func:`combine_one` for every plane; ``maps`` may hold one plane for all."""
    for plane in range(images.shape[0]):
        combine_one(images[plane], maps[plane if maps.shape[0] > 1 else 0], out[plane])
