"""Measured k-space as an acquisition: the first prospectively accelerated scans."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding.acquisition import Acquisition
from mrics.encoding.channels import drop_silent
from mrics.encoding.noise import border_noise, estimate_sigma, noise_covariance
from mrics.encoding.source import Source, pattern_masks
from mrics.errors import AcquisitionError
from mrics.numerics import centred_ifft
from mrics.numerics.arrays import open_array
from mrics.sampling.pattern import Pattern
from mrics.scan.volume import Axes, Scan

Array = NDArray[Any]
PathLike = str | Path


def acquisition_from_kspace(
    source: PathLike | Array | Scan,
    pattern: Pattern,
    noise: PathLike | Array | None = None,
    *,
    channel_axis: int | None = None,
    axes: Axes | None = None,
    readout_transformed: bool = False,
    scratch: PathLike | None = None,
) -> Acquisition:
    """Undersampled complex k-space as the recoveries take it.

    Parameters
    ----------
    source : path, ndarray or Scan
        A .npy file (read memory-mapped), a complex NIfTI file, or either in memory. Zero frequency
        at N//2, zero where nothing was acquired. Arrays are (plane, u, v) with a channel axis
        anywhere, or (u, v) for one plane; a plane is a slice, or a readout position in 3-D.
    pattern : Pattern
        What was acquired.
    noise : path (.npy) or ndarray of shape (channel, ...), optional
        Complex noise samples. Without them the covariance is that of the image border along the
        readout; where that holds signal, sigma is estimated from the outer k-space and channels
        are taken to be uncorrelated. The acquisition's notes say which.
    channel_axis : int, optional
        Axis that holds receive channels, counted from 0; none for one channel.
    axes : Axes, optional
        For NIfTI: which axes are readout, phase and partition.
    readout_transformed : bool
        True where a 3-D acquisition's readout is in image space already; otherwise it is
        transformed here.
    scratch : path, optional
        A .npy file for the transformed data of a 3-D acquisition, memory-mapped; in memory if left
        out.

    Returns
    -------
    Acquisition
        ``kspace`` stays memory-mapped where no transform is needed.

    Raises
    ------
    AcquisitionError
        Where the data are real, do not fit the pattern's grid, hold samples the pattern leaves out
        or only zeros where it acquires; where the channel axis is missing or of length 1; where
        the noise does not fit.
    """
    given, label = _open(source, channel_axis)
    if isinstance(given, np.ndarray) and given.ndim - (channel_axis is not None) == 2:
        given, channel_axis = _one_plane(given, channel_axis)
    planes = Source(given, pattern, axes, channel_axis)
    if planes.stack.dtype.kind != "c":
        raise AcquisitionError(
            f"K-space must be complex, got {planes.stack.dtype}.",
            label,
            "Save real and imaginary part as complex64.",
        )
    masks, index = pattern_masks(planes, pattern)
    count = planes.planes
    kspace = planes.stack.reshape(count, planes.channels, *planes.grid)
    _compare(kspace, masks, index, label)
    if planes.two_d and not readout_transformed:
        kspace = _along_readout(planes, scratch)
    acquisition = Acquisition(
        kspace=kspace,
        mask=masks,
        pattern_index=index,
        pattern=pattern,
        covariance=_covariance(noise, planes.channels),
        axes=planes.axes,
        volume_shape=planes.volume_shape,
        calibration=pattern.calibration,
    )
    if planes.channels > 1:
        acquisition = _described(drop_silent(acquisition))
    psi = acquisition.covariance
    if psi is None:
        sigma = estimate_sigma(acquisition)
    else:
        sigma = float(np.sqrt(np.trace(psi).real / len(psi)))
    return replace(acquisition, sigma_scan=sigma)


def _described(acquisition: Acquisition) -> Acquisition:
    """With a noise covariance from the image border where none was measured, and notes on both."""
    psi, text = acquisition.covariance, "noise covariance from noise samples"
    if psi is None and acquisition.channels > 1:
        # Planes of a 2-D pattern are readout positions, whether or not a file names the axes.
        named = acquisition.axes or (
            Axes("i", "j", "k") if len(acquisition.pattern.grid) == 2 else None
        )
        psi, text = border_noise(replace(acquisition, axes=named))
    notes = (*acquisition.notes, text)
    if acquisition.channels > 1:
        notes = (*notes, "sensitivities estimated from the calibration region of each plane")
    return replace(acquisition, covariance=psi, notes=notes)


def _open(source: PathLike | Array | Scan, channel_axis: int | None) -> tuple[Array | Scan, str]:
    if not isinstance(source, str | Path):
        return source, "k-space"
    path = Path(source)
    if path.suffix == ".npy":
        return _load(path), str(path)
    from mrics.scan import read_scan

    return read_scan(path, channel_axis=channel_axis), str(path)


def _load(path: Path) -> Array:
    try:
        return open_array(path)
    except FileNotFoundError:
        raise AcquisitionError(
            f"There is no file {path}.", str(path), "Check the name and folder."
        ) from None
    except (OSError, ValueError) as error:
        raise AcquisitionError(
            f"{path.name} cannot be read as a NumPy array: {error}.",
            str(path),
            "Write it with numpy.save as complex64.",
        ) from error


def _one_plane(array: Array, channel_axis: int | None) -> tuple[Array, int | None]:
    if channel_axis is None:
        return array[None], None
    return array[None], channel_axis % array.ndim + 1


def _compare(kspace: Array, masks: NDArray[np.bool_], index: NDArray[np.intp], label: str) -> None:
    """One pass over the data: nothing outside the pattern, something at every position of it."""
    seen = np.zeros(masks.shape, bool)
    for plane in range(kspace.shape[0]):
        own = int(index[plane])
        filled: NDArray[np.bool_] = np.asarray(np.asarray(kspace[plane]).any(axis=0))
        outside = filled & ~masks[own]
        if outside.any():
            first = tuple(int(i) for i in np.argwhere(outside)[0])
            raise AcquisitionError(
                f"Plane {plane} holds {int(outside.sum())} samples that the pattern leaves out, "
                f"the first at index {first}.",
                label,
                "Check that this is the pattern that was played out, with zero frequency at N//2.",
            )
        seen[own] |= filled.any(axis=1, keepdims=True) if masks.shape[2] == 1 else filled
    missing = masks & ~seen
    if missing.any():
        first = tuple(int(i) for i in np.argwhere(missing)[0][1:])
        raise AcquisitionError(
            f"{int(missing.sum())} of {int(masks.sum())} acquired positions hold only zeros, the "
            f"first at index {first[0] if masks.shape[2] == 1 else first}.",
            label,
            "Check that this is the pattern that was played out, with zero frequency at N//2.",
        )


def _along_readout(planes: Source, scratch: PathLike | None) -> Array:
    """K-space along the plane axis brought to image space, a few lines at a time."""
    shape = (planes.planes, planes.channels, *planes.grid)
    if scratch is None:
        out = np.empty(shape, planes.dtype)
    else:
        out = np.lib.format.open_memmap(scratch, mode="w+", dtype=planes.dtype, shape=shape)
    count = planes.frame_planes
    step = max(1, 2**22 // (count * planes.grid[1]))
    for frame in range(planes.frames):
        target = out[frame * count : (frame + 1) * count]
        for channel in range(planes.channels):
            for first in range(0, planes.grid[0], step):
                lines = slice(first, first + step)
                block = np.asarray(planes.stack[frame, :, channel, lines])
                target[:, channel, lines] = centred_ifft(block, axes=(0,))
    return out


def _covariance(noise: PathLike | Array | None, channels: int) -> Array | None:
    if noise is None:
        return None
    samples = _load(Path(noise)) if isinstance(noise, str | Path) else noise
    if samples.ndim == 1:
        samples = samples[None]
    if samples.shape[0] != channels:
        raise AcquisitionError(
            f"Noise samples of shape {samples.shape} do not fit {channels} channels.",
            "noise, axes (channel, samples)",
            "Give channels first.",
        )
    return noise_covariance(samples)
