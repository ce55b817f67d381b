"""Reading a scan: one NIfTI file, or a pair that together is complex."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import ScanError
from mrics.scan.header import Header, read_header
from mrics.scan.phase import phase_scale
from mrics.scan.values import file_hash, read_values
from mrics.scan.volume import Scan, apart_mm

PathLike = str | Path


def read_scan(
    path: PathLike,
    phase: PathLike | None = None,
    *,
    imaginary: PathLike | None = None,
    channel_axis: int | None = None,
) -> Scan:
    """Read a scan from NIfTI-1 or NIfTI-2, plain or gzip-compressed.

    Parameters
    ----------
    path : str or Path
        Magnitude image, complex image, or the real part when ``imaginary`` is given.
    phase : str or Path, optional
        Phase image of the same shape and affine; :func:`mrics.scan.phase.phase_scale` states how
        its numbers become radians.
    imaginary : str or Path, optional
        Imaginary part of the same shape and affine.
    channel_axis : int, optional
        Array axis that holds receive channels, counted from 0: 3 (the fourth axis, which is
        frames otherwise) or 4. Data is then (i, j, k, frame, channel).

    Returns
    -------
    Scan
        float32 for magnitude, complex64 or complex128 else; affine and voxel size in mm.

    Raises
    ------
    ScanError
        For every way in which the files cannot be used; see the message.
    """
    if phase is not None and imaginary is not None:
        raise ScanError(
            "A phase file and an imaginary file are both given.",
            f"{phase}, {imaginary}",
            "Give magnitude with phase, or real with imaginary part.",
        )
    header = read_header(path)
    _check_axes(header, channel_axis)
    if phase is not None:
        data, source, paths = _with_phase(header, read_header(phase))
    elif imaginary is not None:
        data, source, paths = _with_imaginary(header, read_header(imaginary))
    else:
        data, paths = read_values(header), [header.path]
        source = "complex" if header.is_complex else "magnitude"
    return Scan(
        data=_channels_last(data, channel_axis),
        affine=header.affine,
        voxel_mm=header.voxel_mm,
        name=header.name,
        sha256=file_hash(*paths),
        complex_source=source,
        header=header.source,
    )


def _check_axes(header: Header, channel_axis: int | None) -> None:
    shape = header.shape
    text = " x ".join(str(n) for n in shape)
    if channel_axis is None:
        if len(shape) > 4:
            raise ScanError(
                f"The data is {len(shape)}-D (shape {text}); a scan has three axes, or four with "
                "frames.",
                str(header.path),
                "Save one volume or one series of frames, or name the channel axis.",
            )
        return
    if channel_axis not in (3, 4):
        raise ScanError(
            f"Channel axis {channel_axis} is not allowed.",
            str(header.path),
            "Axes count from 0 and the first three are space: give 3 or 4.",
        )
    if len(shape) > 5:
        raise ScanError(
            f"The data is {len(shape)}-D (shape {text}).",
            str(header.path),
            "A scan with channels has four axes, or five with frames.",
        )
    length = shape[channel_axis] if channel_axis < len(shape) else 1
    if length < 2:
        raise ScanError(
            f"Channel axis {channel_axis} has length {length} (shape {text}).",
            str(header.path),
            "Name the axis that holds two or more channels, or leave the channel axis out.",
        )


def _channels_last(data: NDArray[Any], channel_axis: int | None) -> NDArray[Any]:
    if channel_axis is None:
        return data
    if data.ndim == 4:
        return data[:, :, :, None, :]
    return np.moveaxis(data, channel_axis, 4)


def _with_phase(header: Header, other: Header) -> tuple[NDArray[Any], str, list[Path]]:
    _check_pair(header, other, "phase")
    turned = read_values(other, zero_allowed=True)
    scale = phase_scale(turned, str(other.path))
    data = np.empty(header.shape, dtype=np.complex64, order="F")
    magnitude = read_values(header)
    for k in range(header.shape[2]):
        angle = turned[:, :, k] * np.float32(scale)
        data[:, :, k].real = magnitude[:, :, k] * np.cos(angle)
        data[:, :, k].imag = magnitude[:, :, k] * np.sin(angle)
    return data, "magnitude+phase", [header.path, other.path]


def _with_imaginary(header: Header, other: Header) -> tuple[NDArray[Any], str, list[Path]]:
    _check_pair(header, other, "imaginary")
    data = np.empty(header.shape, dtype=np.complex64, order="F")
    data.real = read_values(header)
    data.imag = read_values(other, zero_allowed=True)
    return data, "real+imaginary", [header.path, other.path]


def _check_pair(header: Header, other: Header, kind: str) -> None:
    for one in (header, other):
        if one.is_complex:
            raise ScanError(
                f"The file is complex already; a {kind} file goes with a real one.",
                str(one.path),
                "Give the complex file alone, or two real files.",
            )
    if header.shape != other.shape:
        raise ScanError(
            f"The {kind} file has shape {other.shape}, the scan {header.shape}.",
            f"{other.path}, {header.path}",
            f"Give the {kind} file of the same series.",
        )
    apart = apart_mm(header.shape, header.affine, other.affine)
    if apart > 0.01 * min(header.voxel_mm):
        raise ScanError(
            f"The {kind} file lies elsewhere: its affine puts voxels up to {apart:.3g} mm away.",
            f"{other.path}, {header.path}",
            f"Give the {kind} file of the same series, in the same orientation.",
        )
