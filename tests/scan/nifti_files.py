"""NIfTI files written byte by byte for the tests, from the offsets of ``nifti1.h``."""

from __future__ import annotations

import gzip
import struct
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np


def nifti_bytes(
    data: np.ndarray,
    code: int,
    *,
    order: str = "<",
    slope: float = 0.0,
    inter: float = 0.0,
    units: int = 2,
    voxel: tuple[float, float, float] = (1.0, 2.0, 3.0),
    quaternion: tuple[float, float, float] | None = None,
    dims: tuple[int, ...] | None = None,
    descrip: bytes = b"",
) -> bytes:
    """A NIfTI-1 file built with ``struct`` at the byte offsets of ``nifti1.h``."""
    header = bytearray(352)
    put = lambda fmt, at, *values: struct.pack_into(order + fmt, header, at, *values)  # noqa: E731
    dims = dims if dims is not None else data.shape
    put("i", 0, 348)
    put("8h", 40, len(dims), *dims, *([1] * (7 - len(dims))))
    put("2h", 70, code, data.dtype.itemsize * 8)
    put("8f", 76, 1.0, *voxel, 1.0, 1.0, 1.0, 1.0)
    put("f", 108, 352.0)
    put("2f", 112, slope, inter)
    put("B", 123, units)
    header[148 : 148 + len(descrip)] = descrip
    if quaternion is not None:
        put("h", 252, 1)
        put("3f", 256, *quaternion)
    header[344:348] = b"n+1\0"
    return bytes(header) + data.astype(data.dtype.newbyteorder(order)).tobytes(order="F")


def write(path: Path, content: bytes) -> Path:
    path.write_bytes(gzip.compress(content) if path.name.endswith(".gz") else content)
    return path


def save(path: Path, data: Any, affine: np.ndarray | None = None) -> Path:
    """A file written by nibabel, as users have them."""
    nib.save(nib.Nifti1Image(data, np.eye(4) if affine is None else affine), path)
    return path


def blob(shape: tuple[int, ...] = (24, 20, 18)) -> np.ndarray:
    """A smooth bright ellipsoid in air, 0 ... 1000."""
    grids = np.meshgrid(*(np.linspace(-1, 1, n) for n in shape), indexing="ij")
    radius = np.sqrt(sum((g / 0.7) ** 2 for g in grids))
    return 1000.0 / (1 + np.exp(20 * (radius - 1)))
