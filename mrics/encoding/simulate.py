"""Retrospective undersampling: what the scanner would have handed over with fewer lines."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding.acquisition import Acquisition
from mrics.encoding.noise import relative_covariance
from mrics.errors import AcquisitionError
from mrics.numerics import centred_fft, stream
from mrics.sampling.pattern import Pattern
from mrics.scan.volume import Axes, Scan

Array = NDArray[Any]
_BLOCK_BYTES = 32 * 2**20


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
    sensitivities : ndarray of shape (plane or 1, channel, u, v), optional
        Receive sensitivities, natural order, for one-channel images; planes of all frames, or of
        one frame for all.
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
    source = _Source(scan_or_array, pattern, axes)
    mask, index = _masks(source, pattern)
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
            images = images * _planes_of(maps, planes, source.planes)
        block = centred_fft(np.ascontiguousarray(images, dtype=source.dtype))
        if decay is not None:
            block *= decay[index[planes]][:, None]
        if sigma > 0:
            for row, plane in enumerate(range(planes.start, planes.stop)):
                block[row] += _noise(sigma, seed, plane, block[row], root)
        block *= mask[index[planes]][:, None]
        kspace[planes] = block
    total = float(np.hypot(sigma, sigma_scan))
    return Acquisition(
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


class _Source:
    """A scan or array as planes, read block by block so that nothing is held twice."""

    def __init__(self, given: Scan | Array, pattern: Pattern, axes: Axes | None) -> None:
        self.two_d = len(pattern.grid) == 2
        self.axes = axes
        if isinstance(given, Scan):
            self._from_scan(given)
        else:
            self._from_array(np.asarray(given), pattern)
        kind = self._stack.dtype
        double = kind in (np.dtype(np.float64), np.dtype(np.complex128))
        self.dtype = np.dtype(np.complex128 if double else np.complex64)

    def _from_scan(self, scan: Scan) -> None:
        axes = self.axes or Axes("i", "j", "k" if self.two_d else None)
        if self.two_d and axes.partition is None:
            raise AcquisitionError(
                f"A 2-D pattern needs a partition axis; readout is {axes.readout}, phase is "
                f"{axes.phase} and there is no partition axis.",
                "partition_axis",
                "Name the partition axis, or draw a 1-D pattern for 2-D multi-slice.",
            )
        self.axes = axes
        self.frames, self.channels = scan.frames, scan.channels
        self.volume_shape = scan.shape[:4]
        # A view (frame, plane, channel, u, v), whatever axes the file has.
        whole = scan.data.reshape(*scan.shape[:3], self.frames, self.channels)
        plane, u, v = axes.order
        self._stack = whole.transpose(3, plane, 4, u, v)
        kind = "partition" if axes.partition is not None else "readout"
        self.names = (f"phase axis {axes.u}", f"{kind} axis {axes.v}")

    def _from_array(self, array: Array, pattern: Pattern) -> None:
        if array.ndim != 3:
            raise AcquisitionError(
                f"An array must be a stack (plane, u, v); got {array.ndim} axes, shape "
                f"{array.shape}.",
                "axes (plane, u, v)",
                "Add a leading plane axis to a single image, or pass a scan.",
            )
        self.frames, self.channels = max(1, pattern.frames), 1
        self.volume_shape = array.shape
        if array.shape[0] % self.frames:
            raise AcquisitionError(
                f"{array.shape[0]} planes do not divide into the pattern's {self.frames} frames.",
                "axis plane",
                "Give as many planes for every frame, frame by frame.",
            )
        self._stack = array.reshape(self.frames, -1, 1, *array.shape[1:])
        self.names = ("axis u", "axis v")

    @property
    def frame_planes(self) -> int:
        """Planes of one frame."""
        return int(self._stack.shape[1])

    @property
    def planes(self) -> int:
        """Planes of all frames."""
        return self.frames * self.frame_planes

    @property
    def grid(self) -> tuple[int, int]:
        """(u, v) of a plane."""
        return (int(self._stack.shape[3]), int(self._stack.shape[4]))

    def blocks(self, channels: int) -> Iterator[tuple[slice, Array]]:
        """Slices of planes with images of shape (planes, channels of the file, u, v)."""
        u, v = self.grid
        step = max(1, _BLOCK_BYTES // (channels * u * v * self.dtype.itemsize))
        for frame in range(self.frames):
            first = frame * self.frame_planes
            for start in range(0, self.frame_planes, step):
                stop = min(start + step, self.frame_planes)
                yield slice(first + start, first + stop), self._stack[frame, start:stop]


def _masks(source: _Source, pattern: Pattern) -> tuple[NDArray[np.bool_], NDArray[np.intp]]:
    """Mask of shape (pattern, u, v or 1) and which of them each plane has."""
    for axis, count in enumerate(pattern.grid):
        if count != source.grid[axis]:
            raise AcquisitionError(
                f"The pattern has {count} positions along {source.names[axis]}, which has "
                f"{source.grid[axis]}.",
                source.names[axis],
                "Draw the pattern for the scan's grid.",
            )
    masks = _by_frame(source, pattern, pattern.mask)
    frames = np.repeat(np.arange(source.frames), source.frame_planes)
    if not pattern.frames:
        return masks, np.zeros(source.planes, dtype=np.intp)
    if pattern.frames != source.frames:
        raise AcquisitionError(
            f"The pattern has {pattern.frames} frames, the scan has {source.frames}.",
            "frame axis",
            "Draw the pattern with the scan's number of frames.",
        )
    return masks, frames.astype(np.intp)


def _by_frame(source: _Source, pattern: Pattern, values: Array) -> Array:
    """Values of the pattern's positions as (pattern, u, v or 1)."""
    framed = values if pattern.frames else values[None]
    return framed if source.two_d else framed[:, :, None]


def _decay(source: _Source, pattern: Pattern, weights: Array | None) -> Array | None:
    if weights is None:
        return None
    if weights.shape != pattern.mask.shape:
        raise AcquisitionError(
            f"Echo weights of shape {weights.shape} do not fit the pattern of shape "
            f"{pattern.mask.shape}.",
            "echo_weights",
            "Make them of this pattern.",
        )
    return _by_frame(source, pattern, weights.astype(source.dtype))


def _fit_sensitivities(source: _Source, maps: Array | None) -> Array | None:
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
    if source.frames > 1 and maps.shape[0] == source.frame_planes > 1:
        return np.concatenate([maps] * source.frames)
    return maps


def _planes_of(maps: Array, planes: slice, count: int) -> Array:
    return maps[planes] if maps.shape[0] == count else maps


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
