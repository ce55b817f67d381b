"""Retrospective undersampling: what the scanner would have handed over with fewer lines."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding.acquisition import Acquisition
from mrics.encoding.channels import drop_silent, planes_of
from mrics.encoding.noise import relative_covariance
from mrics.encoding.source import Source, by_frame, pattern_masks
from mrics.errors import AcquisitionError
from mrics.numerics import centred_fft, stream
from mrics.sampling.pattern import Pattern
from mrics.scan.volume import Axes, Scan

Array = NDArray[Any]


def undersample(
    scan_or_array: Scan | Array,
    pattern: Pattern,
    sigma: float = 0.0,
    seed: int = 0,
    *,
    axes: Axes | None = None,
    sensitivities: Array | None = None,
    covariance: Array | None = None,
    sigma_scan: float | None = None,
    echo_weights: Array | None = None,
) -> Acquisition:
    """Undersampled k-space of a fully sampled image.

    Parameters
    ----------
    scan_or_array : Scan or ndarray of shape (plane, u, v)
        The fully sampled image. float32 and complex64 give complex64 k-space, float64 and
        complex128 give complex128.
    pattern : Pattern
        A 1-D pattern acts along u, with v the readout. A pattern with frames needs a scan with as
        many frames, or an array whose planes are frame by frame (frame f of plane p at
        ``f * n_planes + p``).
    sigma : float
        Noise *added*: standard deviation of the real part, and of the imaginary part, of one
        k-space sample.
    seed : int
        Seed of the added noise. Every plane has a stream of its own and noise is drawn on the
        whole grid, so a sample's noise depends neither on the pattern nor on block sizes.
    axes : Axes, optional
        How a scan's axes are encoded; default readout i, phase j, and k as partition for a 2-D
        pattern, as slice for a 1-D one.
    sensitivities : array of shape (plane or 1, channel, u, v), optional
        Receive sensitivities, natural order, for one-channel images; planes of all frames, or of
        one frame for all. Anything that has a shape and gives ndarrays for slices of planes, such
        as ``Coils.sensitivities``, will do.
    covariance : ndarray of shape (channel, channel), optional
        Noise covariance between channels, Psi = E[n n^H]/2 up to a factor: it is scaled to a mean
        diagonal of ``sigma**2``. Default: no correlation.
    sigma_scan : float, optional
        Noise the scan already holds, in the unit of ``sigma``; default: estimated for scans, 0
        for arrays.
    echo_weights : ndarray, shape of ``pattern.mask``, optional
        Signal weight of every position, from :func:`mrics.encoding.echo_weights`; noise is not
        weighted.

    Returns
    -------
    Acquisition
        Centred k-space, zero where nothing is acquired.

    Raises
    ------
    AcquisitionError
        Where grid, frames, channels or noise do not fit; the message names the axis.
    """
    if not np.isfinite(sigma) or sigma < 0:
        raise AcquisitionError(
            f"Noise level {sigma} is not a number from 0 up.",
            "sigma",
            "Give the standard deviation of the real part of one k-space sample.",
        )
    source = Source(scan_or_array, pattern, axes)
    mask, index = pattern_masks(source, pattern)
    decay = _decay(source, pattern, echo_weights)
    maps = _fit_sensitivities(source, sensitivities)
    channels = source.channels if maps is None else int(maps.shape[1])
    relative = None
    if covariance is not None:
        relative = relative_covariance(covariance, channels)
    if sigma_scan is None:
        sigma_scan = _estimate_scan_noise(scan_or_array)
    kspace = np.empty((source.planes, channels, *source.grid), dtype=source.dtype)
    root = None if relative is None else np.linalg.cholesky(relative)
    for planes, images in source.blocks(channels):
        if maps is not None:
            images = images * planes_of(maps, planes)
        block = centred_fft(np.ascontiguousarray(images, dtype=source.dtype))
        if decay is not None:
            block *= decay[index[planes]][:, None]
        if sigma > 0:
            for row, plane in enumerate(range(planes.start, planes.stop)):
                block[row] += _noise(sigma, seed, plane, block[row], root)
        block *= mask[index[planes]][:, None]
        kspace[planes] = block
    total = float(np.hypot(sigma, sigma_scan))
    acquisition = Acquisition(
        kspace=kspace,
        mask=mask,
        pattern_index=index,
        pattern=pattern,
        sigma_scan=float(sigma_scan),
        sigma_added=float(sigma),
        sensitivities=maps,
        covariance=None if relative is None else relative * (total**2 if total > 0 else 1.0),
        axes=source.axes,
        volume_shape=source.volume_shape,
        calibration=pattern.calibration,
    )
    return drop_silent(acquisition) if source.channels > 1 else acquisition


def _decay(source: Source, pattern: Pattern, weights: Array | None) -> Array | None:
    if weights is None:
        return None
    if weights.shape != pattern.mask.shape:
        raise AcquisitionError(
            f"Echo weights of shape {weights.shape} do not fit the pattern of shape "
            f"{pattern.mask.shape}.",
            "echo_weights",
            "Make them of this pattern.",
        )
    return by_frame(source, pattern, weights.astype(source.dtype))


def _fit_sensitivities(source: Source, maps: Array | None) -> Array | None:
    if maps is None:
        return None
    if source.channels > 1:
        raise AcquisitionError(
            f"The scan has {source.channels} channels of its own, so sensitivities cannot be "
            "multiplied in.",
            "channel axis",
            "Leave the sensitivities out, or combine the channels first.",
        )
    allowed = (1, source.frame_planes, source.planes)
    if maps.ndim != 4 or maps.shape[0] not in allowed or maps.shape[2:] != source.grid:
        raise AcquisitionError(
            f"Sensitivities of shape {maps.shape} are of another grid than the planes of shape "
            f"{(source.planes, *source.grid)}.",
            "sensitivities, axes (plane, channel, u, v)",
            f"Give sensitivities of shape ({source.planes} or 1, channels, "
            f"{source.grid[0]}, {source.grid[1]}).",
        )
    return maps


def _noise(sigma: float, seed: int, plane: int, like: Array, root: Array | None) -> Array:
    """Complex white noise of one plane, correlated over channels by the Cholesky factor."""
    real = like.real.dtype
    generator = stream(seed, "noise", plane)
    parts = generator.standard_normal((*like.shape, 2), dtype=real.type)
    noise = parts.view(like.dtype)[..., 0]
    if root is not None:
        noise = np.einsum("cd,duv->cuv", root.astype(like.dtype), noise, optimize=True)
    noise *= real.type(sigma)
    return noise


def _estimate_scan_noise(given: Scan | Array) -> float:
    if not isinstance(given, Scan):
        return 0.0
    from mrics.scan import scan_sigma

    return float(scan_sigma(given))
