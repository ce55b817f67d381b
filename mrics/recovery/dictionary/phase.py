"""Smooth phase of images, taken out so that real atoms see one real part and a small rest."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.numerics import fft_planes, ifft_planes, map_blocks

Array = NDArray[Any]
#: low frequencies the phase is taken from where no calibration region is stated: n / 4
_SHARE = 4


def smooth_phase(stack: Array, calibration: Sequence[int] = ()) -> Array:
    """Phase factors of the low frequencies, of modulus 1.

    Parameters
    ----------
    stack : ndarray of shape (plane, u, v)
        Complex images.
    calibration : sequence of int
        Low frequencies per axis; a quarter of an axis without one.

    Returns
    -------
    ndarray of shape (plane, u, v)
        ``stack * conj(result)`` has a mostly real body.
    """
    window = np.ones(stack.shape[1:], stack.real.dtype)
    for axis, n in enumerate(stack.shape[1:]):
        size = calibration[axis] if axis < len(calibration) else 0
        half = (min(size, n) or max(2, n // _SHARE)) / 2
        k = (np.arange(n) + n // 2) % n - n // 2
        line = np.where(np.abs(k) <= half, np.cos(np.pi * k / (2 * half + 1)) ** 2, 0)
        window = window * line.astype(window.dtype).reshape((-1, 1) if axis == 0 else (1, -1))
    factors = np.empty_like(stack)

    def one(plane: int) -> None:
        low = ifft_planes(fft_planes(stack[plane]) * window, overwrite=True)
        modulus = np.abs(low)
        factors[plane] = 1
        np.divide(low, modulus, out=factors[plane], where=modulus > 0)

    map_blocks(one, range(len(stack)))
    return factors
