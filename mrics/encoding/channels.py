"""Channels of an acquisition: whitening, compression, silent channels, combination."""

from __future__ import annotations

import warnings
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding.acquisition import Acquisition
from mrics.encoding.calibration import calibration_box, calibration_samples
from mrics.encoding.noise import relative_covariance, whitening
from mrics.errors import AcquisitionError, MricsWarning

Array = NDArray[Any]


def channel_mixing(acquisition: Acquisition) -> Array | None:
    """Matrices that whiten and compress channels, shape (plane or 1, virtual, channel).

    Whitening is by the covariance scaled to a mean diagonal of 1, so that the noise of every
    virtual channel is white with standard deviation ``acquisition.sigma``. None for no mixing.
    """
    matrix = None
    if acquisition.covariance is not None and acquisition.channels > 1:
        relative = relative_covariance(acquisition.covariance, acquisition.channels)
        matrix = whitening(relative)[None]
    if acquisition.compression is None:
        return matrix
    return acquisition.compression if matrix is None else acquisition.compression @ matrix


def mix(matrix: Array | None, data: Array, planes: slice) -> Array:
    """Channel mixing of (planes, channel, a, b) samples or images; type kept.

    Parameters
    ----------
    matrix : ndarray of shape (plane or 1, virtual, channel) or None
        From :func:`channel_mixing`.
    data : ndarray of shape (planes, channel, a, b)
        Planes ``planes`` of the stack.
    planes : slice
        Which they are.
    """
    if matrix is None:
        return data
    chosen = (matrix if matrix.shape[0] == 1 else matrix[planes]).astype(data.dtype)
    count, channels, a, b = data.shape
    flat = np.ascontiguousarray(data).reshape(count, channels, a * b)
    return np.matmul(chosen, flat).reshape(count, chosen.shape[1], a, b)


def planes_of(maps: Array, planes: slice) -> Array:
    """Sensitivities of some planes; ``maps`` may hold one plane for all, or one frame's planes.

    ``maps`` needs only a shape and slicing along planes, so that it may be computed on demand.
    """
    count, start = len(maps), planes.start
    if count == 1:
        return np.asarray(maps[0:1])
    parts = []
    while start < planes.stop:
        first = start % count
        last = min(first + planes.stop - start, count)
        parts.append(np.asarray(maps[first:last]))
        start += last - first
    return parts[0] if len(parts) == 1 else np.concatenate(parts)


def singular_values(acquisition: Acquisition) -> NDArray[np.float64]:
    """Singular values of the whitened calibration data over all planes, for a report's curve."""
    return np.sqrt(_spectra(acquisition, per_plane=False)[0][0])


def compress(
    acquisition: Acquisition,
    channels: int | None = None,
    *,
    energy: float | None = None,
    per_plane: bool = False,
) -> Acquisition:
    """Fewer, virtual channels that keep most of the calibration region's energy.

    The virtual channels are the leading left singular vectors of the whitened calibration samples,
    orthonormal, so that white noise stays white. Data are not touched: ``blocks`` applies the
    matrix to each block it reads.

    Parameters
    ----------
    acquisition : Acquisition
        Multi-channel data with a calibration region.
    channels : int, optional
        Virtual channels.
    energy : float, optional
        Or: as few as keep this share (0 to 1) of the energy.
    per_plane : bool
        A matrix for every plane (3-D: every readout position), each turned within its own subspace
        to lie closest to its neighbour's, so that virtual sensitivities are smooth along the
        readout.

    Returns
    -------
    Acquisition
        With ``compression`` and a note of the energy kept.

    Raises
    ------
    AcquisitionError
        Where the number of channels or the share is out of range.

    References
    ----------
    Buehrer et al. 2007, Magn Reson Med 57:1131-1139, doi 10.1002/mrm.21237; per readout position
    and alignment: Zhang et al. 2013, Magn Reson Med 69:571-582, doi 10.1002/mrm.24267.
    """
    total = acquisition.channels
    if (channels is None) == (energy is None):
        raise AcquisitionError(
            f"Compression needs either channels or energy, got {channels} and {energy}.",
            "channels, energy",
            "Give one of the two.",
        )
    if channels is not None and not 1 <= channels <= total:
        raise AcquisitionError(
            f"{channels} virtual channels cannot be made of {total}.",
            "channels",
            f"Give a number from 1 to {total}.",
        )
    if energy is not None and not 0 < energy <= 1:
        raise AcquisitionError(
            f"An energy share of {energy} is not above 0 and at most 1.",
            "energy",
            "Give for example 0.99.",
        )
    values, grams = _spectra(acquisition, per_plane)
    if channels is None:
        share = np.cumsum(values.sum(axis=0)) / values.sum()
        channels = int(np.searchsorted(share, float(energy or 1.0) * (1 - 1e-12)) + 1)
        channels = min(channels, total)
    vectors = np.linalg.eigh(grams)[1][:, :, ::-1][:, :, :channels]
    matrices = np.ascontiguousarray(vectors.conj().transpose(0, 2, 1))
    kept = float(values[:, :channels].sum() / values.sum())
    if per_plane:
        _align(matrices, int(np.argmax(values.sum(axis=1))))
    note = f"{total} channels compressed to {channels}, {100 * kept:.2f} % of energy kept"
    return replace(acquisition, compression=matrices, notes=(*acquisition.notes, note))


def _spectra(acquisition: Acquisition, per_plane: bool) -> tuple[Array, Array]:
    """Falling energies (plane or 1, channel) of the calibration samples, and Gram matrices."""
    grams = _grams(acquisition)
    if not per_plane:
        grams = grams.sum(axis=0, keepdims=True)
    return np.maximum(np.linalg.eigvalsh(grams)[:, ::-1], 0.0), grams


def _grams(acquisition: Acquisition) -> Array:
    """Gram matrices of the whitened calibration samples, (plane, channel, channel)."""
    plain = replace(acquisition, compression=None)
    matrix = channel_mixing(plain)
    box = calibration_box(plain)
    grams = np.empty((plain.shape[0], plain.channels, plain.channels), np.complex128)
    for plane in range(plain.shape[0]):
        part = slice(plane, plane + 1)
        samples = mix(matrix, calibration_samples(plain, part, box=box), part)[0]
        flat = samples.reshape(plain.channels, -1).astype(np.complex128)
        grams[plane] = flat @ flat.conj().T
    return grams


def _align(matrices: Array, start: int) -> None:
    """Turn each plane's matrix towards its neighbour's, outwards from ``start``, in place."""
    for order in (range(start + 1, len(matrices)), range(start - 1, -1, -1)):
        step = order.step
        for plane in order:
            left, _, right = np.linalg.svd(matrices[plane - step] @ matrices[plane].conj().T)
            matrices[plane] = left @ right @ matrices[plane]


def drop_silent(acquisition: Acquisition) -> Acquisition:
    """The acquisition without channels that hold only zeros; a warning and a note name them.

    Raises
    ------
    AcquisitionError
        Where every channel holds only zeros.
    """
    kspace = acquisition.kspace
    loud = np.zeros(acquisition.channels, bool)
    for plane in range(kspace.shape[0]):
        loud |= np.asarray(kspace[plane]).any(axis=(-2, -1))
        if loud.all():
            return acquisition
    if not loud.any():
        raise AcquisitionError(
            f"All {acquisition.channels} channels hold only zeros.",
            "k-space, channel axis",
            "Check the file and the type it was written with.",
        )
    note = silent_note(loud)
    warnings.warn(note, MricsWarning, stacklevel=3)
    maps, psi = acquisition.sensitivities, acquisition.covariance
    return replace(
        acquisition,
        kspace=kspace[:, loud],
        sensitivities=None if maps is None else maps[:, loud],
        covariance=None if psi is None else psi[np.ix_(loud, loud)],
        notes=(*acquisition.notes, note),
    )


def silent_note(loud: NDArray[np.bool_]) -> str:
    """Names the channels that are left out because they hold only zeros."""
    silent = ", ".join(str(int(c)) for c in np.flatnonzero(~loud))
    return f"channels without signal left out: {silent} (counted from 0)"


def root_sum_of_squares(images: Array, axis: int = 1) -> Array:
    """Root of the sum over channels of |image|^2, real; not linear, and biased by noise."""
    return np.sqrt((images.real**2 + images.imag**2).sum(axis=axis))


def combine_channels(images: Array, sensitivities: Array, covariance: Array | None = None) -> Array:
    """Channel images as one image of the highest SNR: S^H Psi^-1 m / (S^H Psi^-1 S).

    Parameters
    ----------
    images : ndarray of shape (plane, channel, u, v)
        Channel images.
    sensitivities : ndarray of shape (plane or 1, channel, u, v)
        Receive sensitivities.
    covariance : ndarray of shape (channel, channel), optional
        Psi; identity if left out.

    Returns
    -------
    ndarray of shape (plane, u, v)
        0 where no channel sees the pixel.

    References
    ----------
    Roemer et al. 1990, Magn Reson Med 16:192-225, doi 10.1002/mrm.1910160203.
    """
    if sensitivities.shape[1:] != images.shape[1:]:
        raise AcquisitionError(
            f"Sensitivities of shape {sensitivities.shape} are of another grid than channel images "
            f"of shape {images.shape}.",
            "sensitivities, axes (plane, channel, u, v)",
            "Give both on one grid, with the same channels.",
        )
    if covariance is not None:
        matrix = whitening(relative_covariance(covariance, images.shape[1]))[None]
        kind = np.result_type(images.dtype, np.complex64)
        images = mix(matrix, images.astype(kind), slice(None))
        sensitivities = mix(matrix, sensitivities.astype(kind), slice(None))
    top = (np.conj(sensitivities) * images).sum(axis=1)
    energy = (sensitivities.real**2 + sensitivities.imag**2).sum(axis=1)
    energy = np.broadcast_to(energy, top.shape)
    return np.divide(top, energy, out=np.zeros_like(top), where=energy > 0)
