"""Sensitivities as eigenvectors of the calibration data's local structure (ESPIRiT).

Every window of k samples of noise-free multi-channel k-space lies in a small subspace, found from
all windows of the calibration region. That k-space is unchanged by projecting its windows on the
subspace and averaging; in image space the average is one small matrix per pixel,

    G(r) = 1/K sum_d D(d) exp(-2 pi i d.r),    D(d) = sum over window pairs of offset d of P,

with P the projector and K the window's size. The channels of a pixel are an eigenvector of G of
eigenvalue 1.

Source: Uecker et al. 2014, Magn Reson Med 71:990-1001, doi 10.1002/mrm.24751.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from mrics.errors import AcquisitionError

Array = NDArray[Any]
_RELATIVE_CUT = 0.003
_NOISE_CUT = 1.1


def window_matrix(calibration: Array, kernel: tuple[int, ...]) -> Array:
    """All windows of the calibration region as rows of (channel, offset).

    24 x 24 samples of 8 channels and a 6 x 6 window give 361 x 288.

    Raises
    ------
    AcquisitionError
        Where the region is smaller than the window, or has fewer windows than channels.
    """
    channels, *size = calibration.shape
    if (
        any(n < k for n, k in zip(size, kernel, strict=True))
        or np.prod([n - k + 1 for n, k in zip(size, kernel, strict=True)]) < channels
    ):
        least = " x ".join(str(k + int(np.ceil(channels ** (1 / len(size)))) - 1) for k in kernel)
        raise AcquisitionError(
            f"A calibration region of {' x '.join(map(str, size))} samples is too small for a "
            f"{' x '.join(map(str, kernel))} kernel and {channels} channels.",
            "calibration",
            f"Acquire at least {least} samples, or take a smaller kernel.",
        )
    axes = tuple(range(1, calibration.ndim))
    windows = sliding_window_view(calibration, kernel, axis=axes)
    count = len(kernel)
    order = (*range(1, 1 + count), 0, *range(1 + count, 1 + 2 * count))
    return windows.transpose(order).reshape(-1, channels * int(np.prod(kernel)))


def window_correlations(calibration: Array, kernel: tuple[int, ...], sigma: float = 0.0) -> Array:
    """D(d) of the module's formula, from the calibration samples.

    Parameters
    ----------
    calibration : ndarray of shape (channel, a, b) or (channel, r, a, b)
        Whitened centred calibration samples.
    kernel : tuple of int
        Window along each axis.
    sigma : float
        Noise of the samples; singular values that noise alone reaches are dropped.

    Returns
    -------
    ndarray of shape (channel, channel, 2 k - 1, ...), complex128
    """
    matrix = window_matrix(calibration.astype(np.complex128), kernel)
    gram = matrix.conj().T @ matrix
    values, vectors = np.linalg.eigh(gram)
    singular = np.sqrt(np.maximum(values, 0.0))
    # Largest singular value of a noise matrix of this size: sigma sqrt 2 (sqrt m + sqrt n).
    edge = sigma * np.sqrt(2.0) * (np.sqrt(matrix.shape[0]) + np.sqrt(matrix.shape[1]))
    keep = singular > max(_RELATIVE_CUT * singular[-1], _NOISE_CUT * edge)
    keep[-1] = True
    basis = vectors[:, keep].conj()
    channels, size = calibration.shape[0], int(np.prod(kernel))
    basis = basis.reshape(channels, *kernel, -1)
    spread = np.zeros((channels, channels, *(2 * k - 1 for k in kernel)), np.complex128)
    flat = basis.reshape(channels * size, -1)
    for offset in np.ndindex(*kernel):
        rows = basis[(slice(None), *offset)]
        block = (rows @ flat.conj().T).reshape(channels, channels, *kernel)
        window = tuple(slice(k - 1 - o, 2 * k - 1 - o) for k, o in zip(kernel, offset, strict=True))
        spread[(slice(None), slice(None), *window)] += block
    return spread / size


def waves(count: int, size: int, positions: Array | None = None) -> Array:
    """exp(-2 pi i d (n - N//2)/N) for offsets d = 1-k ... k-1, shape (positions, 2 k - 1)."""
    n = (np.arange(count) if positions is None else positions) - count // 2
    d = np.arange(1 - size, size)
    return np.exp(-2j * np.pi * n[:, None] * d[None] / count)


def eigen_maps(
    correlations: Array, grid: tuple[int, int], sets: int, reference: Array
) -> tuple[Array, Array]:
    """Unit-norm sensitivities and their eigenvalues of one plane.

    Parameters
    ----------
    correlations : ndarray of shape (channel, channel, 2 k1 - 1, 2 k2 - 1)
        D(d), with a readout axis already transformed to one position.
    grid : tuple of int
        (u, v) of the plane.
    sets : int
        Map sets, by falling eigenvalue.
    reference : ndarray of shape (channel,)
        Channel combination whose product with the maps is made real and positive.

    Returns
    -------
    maps : ndarray of shape (sets, channel, u, v), complex128
    values : ndarray of shape (sets, u, v), float64
    """
    from mrics.encoding._eigen import dominant

    channels = correlations.shape[0]
    sizes = [(n + 1) // 2 for n in correlations.shape[2:]]
    upper = np.triu_indices(channels)
    rows = waves(grid[0], sizes[0]) @ correlations[upper]
    packed = rows.transpose(1, 0, 2) @ waves(grid[1], sizes[1]).T
    maps = np.empty((sets, channels, *grid), np.complex128)
    values = np.empty((sets, *grid))
    dominant(packed, np.ascontiguousarray(reference, np.complex128), maps, values)
    return maps, values
