"""The only file that calls an FFT.

Forward (image to k-space), orthonormal, along each transformed axis of length N:

    centred:     Y[k + N//2] = N**-0.5 * sum_n x[n] exp(-2 pi i k (n - N//2) / N)
    un-centred:  X[k mod N]  = N**-0.5 * sum_n x[n] exp(-2 pi i k n / N)

for k = -(N//2) ... N - N//2 - 1. Stored k-space is centred. Solvers hold k-space un-centred and
images in natural order, so a loop never shifts: :func:`uncentre` moves zero frequency to index 0
and multiplies by exp(-2 pi i k (N//2) / N), which has modulus one and leaves white noise white.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy  # scipy.fft loads on first use: a plan needs none
from numpy.typing import NDArray

from mrics.numerics.threads import threads

Array = NDArray[Any]
_PLANE = (-2, -1)


def centred_fft(image: Array, axes: tuple[int, ...] = _PLANE) -> Array:
    """Centred orthonormal transform of an image to k-space along ``axes``."""
    shifted = scipy.fft.ifftshift(image, axes)
    return scipy.fft.fftshift(
        scipy.fft.fftn(shifted, axes=axes, norm="ortho", workers=threads()), axes
    )


def centred_ifft(kspace: Array, axes: tuple[int, ...] = _PLANE) -> Array:
    """Centred orthonormal transform of k-space to an image along ``axes``."""
    shifted = scipy.fft.ifftshift(kspace, axes)
    return scipy.fft.fftshift(
        scipy.fft.ifftn(shifted, axes=axes, norm="ortho", workers=threads()), axes
    )


def fft_planes(
    image: Array, overwrite: bool = False, workers: int = 1, axes: tuple[int, ...] = _PLANE
) -> Array:
    """Un-centred orthonormal transform of the last two axes; complex ``overwrite`` is in place."""
    return scipy.fft.fftn(image, axes=axes, norm="ortho", overwrite_x=overwrite, workers=workers)


def ifft_planes(
    kspace: Array, overwrite: bool = False, workers: int = 1, axes: tuple[int, ...] = _PLANE
) -> Array:
    """Inverse of :func:`fft_planes`."""
    return scipy.fft.ifftn(kspace, axes=axes, norm="ortho", overwrite_x=overwrite, workers=workers)


def centre_phase(length: int, dtype: Any = np.complex128) -> Array:
    """exp(-2 pi i k (N//2) / N) in un-centred order, exact +-1 for even N."""
    k = np.arange(length)
    k = np.where(k < length - length // 2, k, k - length)
    if length % 2 == 0:
        return np.where(k % 2 == 0, 1.0, -1.0).astype(dtype)
    turns = (k * (length // 2)) % length
    return np.exp(-2j * np.pi * turns / length).astype(dtype)


def uncentre(kspace: Array, axes: tuple[int, ...] = _PLANE) -> Array:
    """Centred k-space as the solvers hold it (see the module's formulas)."""
    out = scipy.fft.ifftshift(kspace, axes)
    return _times_phase(out, axes, conjugate=False)


def recentre(kspace: Array, axes: tuple[int, ...] = _PLANE) -> Array:
    """Inverse of :func:`uncentre`."""
    out = _times_phase(np.array(kspace), axes, conjugate=True)
    return scipy.fft.fftshift(out, axes)


def _times_phase(kspace: Array, axes: tuple[int, ...], conjugate: bool) -> Array:
    for axis in axes:
        phase = centre_phase(kspace.shape[axis], kspace.dtype)
        shape = [1] * kspace.ndim
        shape[axis] = -1
        kspace *= (np.conj(phase) if conjugate else phase).reshape(shape)
    return kspace


def circular_correlation(first: Array, second: Array, axis: int) -> Array:
    """Sum over all lines of first[n] second[n - s] along ``axis``, for s = 0 ... N-1 (real)."""
    others = tuple(a for a in range(first.ndim) if a != axis % first.ndim)
    length = first.shape[axis]
    one = scipy.fft.rfft(first, axis=axis, workers=threads())
    two = scipy.fft.rfft(second, axis=axis, workers=threads())
    return scipy.fft.irfft((one * np.conj(two)).sum(axis=others), length)
